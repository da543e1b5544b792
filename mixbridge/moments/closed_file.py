"""Closed moments as a record of plain numbers, and as one JSON file.

``format`` is ``mixbridge-moments``, ``version`` 1; every attribute of `Moments` stands by its name, arrays as lists row
by row, numbers in the shortest decimal form that gives back the same double. ``checksum`` is the SHA-256 of the JSON
of all that with keys sorted and the separators ``", "`` and ``": "``.
"""

from __future__ import annotations

import hashlib
import json
from collections.abc import Mapping
from pathlib import Path
from typing import Any

import numpy as np

from mixbridge.errors import DataError
from mixbridge.moments.files import replace_file

__all__ = ["attributes_of", "read_record", "record_of", "write_record"]

FORMAT = "mixbridge-moments"
VERSION = 1
FLOATS = ("shift", "scale", "magnitude", "within", "between")
WHOLE = ("sizes", "counts")


def record_of(attributes: Mapping[str, Any]) -> dict[str, Any]:
    """Return attributes as a record.

    Parameters
    ----------
    attributes : mapping
        Those of `Moments` by name.

    Returns
    -------
    dict
        JSON-ready, with its checksum.
    """
    body: dict[str, Any] = {"format": FORMAT, "version": VERSION}
    for name, value in attributes.items():
        body[name] = value.tolist() if isinstance(value, np.ndarray) else value
    body["design"] = list(attributes["design"])
    return {**body, "checksum": _checksum(body)}


def attributes_of(record: Mapping[str, Any], where: str) -> dict[str, Any]:
    """Return the attributes of `Moments` from a record.

    Parameters
    ----------
    record : mapping
    where : str
        What is read, for messages.

    Returns
    -------
    dict

    Raises
    ------
    DataError
        If it is of another kind or version, or was changed.
    """
    body = {key: value for key, value in record.items() if key != "checksum"}
    if body.get("format") != FORMAT:
        raise DataError(f"{where} is not a record of moments: its format is {body.get('format')!r}.")
    if body.get("version") != VERSION:
        raise DataError(
            f"{where} is not a record of moments of version {VERSION}: its version is {body.get('version')!r}."
        )
    if _checksum(body) != record.get("checksum"):
        raise DataError(
            f"the checksum of the moments in {where} does not fit their content: the record was changed or damaged."
        )
    try:
        arrays = {name: np.array(body[name], dtype=float) for name in FLOATS}
        arrays |= {name: np.array(body[name], dtype=np.int64) for name in WHOLE}
        k, sizes = len(arrays["shift"]), len(arrays["sizes"])
        rows = {
            name: arrays[name].shape[-2:-1] for name in ("within", "between")
        }  # a factor may have any number
        shapes = {"scale": (k,), "magnitude": (k,), "within": (*rows["within"], k), "counts": (sizes,)}
        shapes["between"] = (sizes, *rows["between"], k + 1)
        fits = all(arrays[name].shape == shape for name, shape in shapes.items())
        words = {name: body[name] for name in ("constant", "outcome", "note")}
        design = tuple(body["design"])
    except (KeyError, TypeError, ValueError) as error:
        raise DataError(f"{where} is not a whole record of moments: {error}.") from error
    if not fits or len(design) + 1 != k + (words["constant"] is not None):
        raise DataError(f"{where} is not a whole record of moments: its arrays do not fit together.")
    return {**arrays, **words, "design": design, "coding": body.get("coding")}


def write_record(path: str | Path, record: Mapping[str, Any]) -> None:
    """Write a record as one JSON file."""
    text = json.dumps(record)
    replace_file(path, lambda target: target.write_text(text, encoding="utf-8"))


def read_record(path: str | Path) -> dict[str, Any]:
    """Read a JSON file that should hold a record.

    Raises
    ------
    DataError
        If it cannot be read, or holds something else.
    """
    try:
        record = json.loads(Path(path).read_text(encoding="utf-8"))
    except OSError as error:
        raise DataError(f"{path} cannot be read: {error.strerror}.") from error
    except (ValueError, RecursionError) as error:
        raise DataError(f"{path} is not a file of closed moments, or it is damaged.") from error
    if not isinstance(record, dict):
        raise DataError(f"{path} is not a file of closed moments.")
    return record


def _checksum(body: Mapping[str, Any]) -> str:
    return hashlib.sha256(json.dumps(body, sort_keys=True).encode()).hexdigest()
