"""Arrays with names and keys in one open file: an uncompressed npz with a JSON head and a checksum, no pickle.

An npz file is a zip of npy files, a format that numpy documents and many programs read. The entry ``meta`` holds JSON:
``format``, ``version``, names, what the keys are, and ``checksum``, the SHA-256 of the rest of the JSON (keys sorted)
and of name, type, shape and bytes of every array in the order of their names. The keys themselves are the array
``keys``: see `mixbridge.moments.key_arrays`.
"""

from __future__ import annotations

import hashlib
import json
import struct
import zipfile
import zlib
from collections.abc import Callable, Mapping, Sequence
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from mixbridge.errors import DataError
from mixbridge.moments.key_arrays import keys_as_array, keys_from_array

__all__ = ["keyed_arrays", "read_arrays", "replace_file", "same_coding", "write_arrays"]

Arrays = Mapping[str, NDArray[Any]]
DAMAGE = (
    ValueError,
    TypeError,
    LookupError,
    EOFError,
    OSError,
    SyntaxError,
    MemoryError,
    OverflowError,
    RuntimeError,
    struct.error,
    zipfile.BadZipFile,
    zlib.error,
)
"""What reading a zip, an npy header or JSON raises where bytes are not what they were."""


def write_arrays(path: str | Path, meta: Mapping[str, Any], arrays: Arrays, keys: pd.Index) -> None:
    """Write arrays, their head and the keys of units.

    Parameters
    ----------
    path : str or Path
    meta : mapping
        JSON-ready, with ``format`` and ``version``.
    arrays : mapping of str to ndarray
    keys : pandas.Index

    Raises
    ------
    DataError
        If the keys cannot be kept, or the file cannot be written.
    """
    words, listed = keys_as_array(keys)
    whole = {**arrays, "keys": listed}
    body = {**meta, "keys": words}
    head = {**body, "checksum": _checksum(body, whole)}

    def write(target: Path) -> None:
        with target.open("wb") as file:
            np.savez(file, allow_pickle=False, meta=np.array(json.dumps(head)), **whole)

    replace_file(path, write)


def replace_file(path: str | Path, write: Callable[[Path], object]) -> None:
    """Write a file under another name and move it to its place, so that there is never half a file.

    Parameters
    ----------
    path : str or Path
    write : callable
        Takes the path to write to.

    Raises
    ------
    DataError
        If the file cannot be written.
    """
    target = Path(path)
    part = target.with_name(f"{target.name}.part")
    try:
        write(part)
        part.replace(target)
    except OSError as error:
        raise DataError(f"{path} cannot be written: {error.strerror or error}.") from error
    finally:
        if part.exists():
            part.unlink()


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
        Head without its checksum, arrays; ``keys`` is the index of units.

    Raises
    ------
    DataError
        If there is no such file, or it is of another kind or version, damaged or changed.
    """
    words = kind.removeprefix("mixbridge-").replace("-", " ")
    try:
        with Path(path).open("rb") as raw, np.load(raw, allow_pickle=False) as file:
            meta = json.loads(str(file["meta"]))
            arrays = {name: file[name] for name in (*names, "keys") if name in file}
    except FileNotFoundError as error:
        raise DataError(f"{path} cannot be read: there is no such file.") from error
    except (IsADirectoryError, PermissionError) as error:
        raise DataError(f"{path} cannot be read: {error.strerror}.") from error
    except DAMAGE as error:
        raise DataError(f"{path} is not a file of {words}, or it is damaged.") from error
    if not isinstance(meta, dict) or meta.get("format") != kind:
        found = meta.get("format") if isinstance(meta, dict) else None
        raise DataError(f"{path} holds {found!r}, not {words}.")
    if meta.get("version") != version:
        raise DataError(
            f"{path} has version {meta.get('version')!r} of {words}; needed is version {version}."
        )
    checksum = meta.pop("checksum", None)
    missing = [name for name in (*names, "keys") if name not in arrays and name not in optional]
    if missing or checksum != _checksum(meta, arrays):
        raise DataError(f"the checksum of {path} does not fit its content: the file was changed or damaged.")
    return meta, arrays


def keyed_arrays(
    path: str | Path, meta: Mapping[str, Any], arrays: dict[str, NDArray[Any]], rows: str
) -> pd.Index:
    """Take the keys out of arrays that were read, and check that there is one per unit.

    Parameters
    ----------
    path : str or Path
        For messages.
    meta : mapping
    arrays : dict
        Loses ``keys``.
    rows : str
        Name of an array with one entry per unit.

    Returns
    -------
    pandas.Index

    Raises
    ------
    DataError
        If keys and units do not fit together.
    """
    try:
        keys = keys_from_array(meta["keys"], arrays.pop("keys"))
        fits = len(keys) == len(arrays[rows]) and keys.is_unique
    except (ValueError, TypeError, KeyError) as error:
        raise DataError(f"the keys of units in {path} cannot be read: {error}.") from error
    if not fits:
        raise DataError(f"{path} does not hold one key for each unit.")
    return keys


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
        digest.update(array.data if array.size else b"")
    return digest.hexdigest()
