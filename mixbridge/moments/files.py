"""Arrays with names and keys in one open file: an uncompressed npz with a JSON head and a checksum, no pickle.

An npz file is a zip of npy files, a format that numpy documents and many programs read. The entry ``meta`` holds JSON:
``format``, ``version``, names, keys as numbers or text with their type, and ``checksum``, the SHA-256 of the rest of
the JSON (keys sorted) and of name, type, shape and bytes of every array in the order of their names.
"""

from __future__ import annotations

import hashlib
import json
import zipfile
from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from mixbridge.errors import DataError

__all__ = ["keys_from", "plain_keys", "read_arrays", "same_coding", "write_arrays"]

Arrays = Mapping[str, NDArray[Any]]


def write_arrays(path: str | Path, meta: Mapping[str, Any], arrays: Arrays) -> None:
    """Write arrays and their head.

    Parameters
    ----------
    path : str or Path
    meta : mapping
        JSON-ready, with ``format`` and ``version``.
    arrays : mapping of str to ndarray

    Raises
    ------
    DataError
        If the file cannot be written.
    """
    head = {**meta, "checksum": _checksum(meta, arrays)}
    try:
        with Path(path).open("wb") as file:
            np.savez(file, allow_pickle=False, meta=np.array(json.dumps(head)), **arrays)
    except OSError as error:
        raise DataError(f"{path} cannot be written: {error.strerror}.") from error


def read_arrays(
    path: str | Path, kind: str, version: int, names: Sequence[str], optional: Sequence[str] = ()
) -> tuple[dict[str, Any], dict[str, NDArray[Any]]]:
    """Read what `write_arrays` wrote.

    Parameters
    ----------
    path : str or Path
    kind : str
        The ``format`` that is wanted.
    version : int
    names, optional : sequence of str
        Arrays, and those among them that need not be there.

    Returns
    -------
    dict, dict
        Head without its checksum, arrays.

    Raises
    ------
    DataError
        If there is no such file, or it is of another kind or version, damaged or changed.
    """
    words = kind.removeprefix("mixbridge-").replace("-", " ")
    try:
        with Path(path).open("rb") as raw, np.load(raw, allow_pickle=False) as file:
            meta = json.loads(str(file["meta"]))
            arrays = {name: file[name] for name in names if name in file}
    except FileNotFoundError as error:
        raise DataError(f"{path} cannot be read: there is no such file.") from error
    except (KeyError, ValueError, EOFError, OSError, zipfile.BadZipFile) as error:
        raise DataError(f"{path} is not a file of {words}, or it is damaged.") from error
    if not isinstance(meta, dict) or meta.get("format") != kind:
        found = meta.get("format") if isinstance(meta, dict) else None
        raise DataError(f"{path} holds {found!r}, not {words}.")
    if meta.get("version") != version:
        raise DataError(
            f"{path} has version {meta.get('version')!r} of {words}; needed is version {version}."
        )
    checksum = meta.pop("checksum", None)
    missing = [name for name in names if name not in arrays and name not in optional]
    if missing or checksum != _checksum(meta, arrays):
        raise DataError(f"the checksum of {path} does not fit its content: the file was changed or damaged.")
    return meta, arrays


def plain_keys(keys: pd.Index) -> dict[str, Any]:
    """Return keys as JSON values and the name of their type."""
    values = keys.astype(str).tolist() if keys.dtype.kind in "mM" else keys.tolist()
    if not all(isinstance(value, (str, int, float)) for value in values):
        raise DataError(
            "only units keyed by numbers, texts or dates can be saved; use such a column as the unit."
        )
    return {"dtype": str(keys.dtype) if keys.dtype.name != "category" else "object", "values": values}


def keys_from(plain: Mapping[str, Any]) -> pd.Index:
    """Return keys from what `plain_keys` made."""
    index: pd.Index = pd.Index(plain["values"])
    return index if plain["dtype"] == str(index.dtype) else index.astype(plain["dtype"])


def same_coding(one: str | None, two: str | None) -> str | None:
    """Return the coding of a merger; what is not known fits everything.

    Raises
    ------
    DataError
        If both are known and differ.
    """
    if one is not None and two is not None and one != two:
        raise DataError(
            "the parts were coded differently: levels of categories, reference levels, or what transforms such as "
            "center learned differ, although the columns have the same names. Fix levels and constants in the formula "
            f"of all parts. Codings: {one} against {two}."
        )
    return one if one is not None else two


def _checksum(meta: Mapping[str, Any], arrays: Arrays) -> str:
    digest = hashlib.sha256(json.dumps(dict(meta), sort_keys=True).encode())
    for name in sorted(arrays):
        array = np.ascontiguousarray(arrays[name])
        digest.update(f"{name} {array.dtype.str} {array.shape}".encode())
        digest.update(array.tobytes())
    return digest.hexdigest()
