"""The state of a pass over rows, saved now and then, so that an interrupted run can go on from there."""

from __future__ import annotations

import hashlib
import json
import os
import time
import zipfile
from collections.abc import Callable, Mapping
from pathlib import Path
from typing import Any

import numpy as np
import numpy.typing as npt
import pandas as pd

from mixbridge.errors import DataError, OptionError

__all__ = ["Checkpoint", "State", "restored_series", "series_state"]

State = dict[str, Any]
"""Arrays, JSON values, and states by name."""

SHARE = 20.0
"""Saving takes at most one part in so many of the time."""


class Checkpoint:
    """States in a folder.

    Parameters
    ----------
    folder : path
    facts : mapping
        What the results depend on: the source, the formula, the options. Goes into a fingerprint; a state saved under
        another one is refused.
    seconds : float
        Least time between two saves.
    clock : callable
        Seconds that never go back.
    """

    def __init__(
        self,
        folder: str | os.PathLike[str],
        facts: Mapping[str, object],
        seconds: float,
        clock: Callable[[], float] = time.monotonic,
    ) -> None:
        self.folder = Path(folder)
        self.fingerprint = hashlib.sha256(json.dumps(facts, sort_keys=True, default=str).encode()).hexdigest()
        self._seconds, self._clock = seconds, clock
        self._wait, self._last = seconds, clock()
        try:
            self.folder.mkdir(parents=True, exist_ok=True)
        except OSError as error:
            raise OptionError(
                f"checkpoint={str(folder)!r} is not a folder that can be made: {error}."
            ) from error

    def load(self, stage: str) -> tuple[int, State] | None:
        """Return how many chunks were done and the state after them, or None if nothing was saved.

        Parameters
        ----------
        stage : str
            Which pass.

        Raises
        ------
        DataError
            If what is there was saved under another fingerprint, or is damaged.
        """
        path = self._path(stage)
        if not path.exists():
            return None
        try:
            with path.open("rb") as content, np.load(content, allow_pickle=False) as file:
                meta = json.loads(str(file["meta"]))
                arrays = {name: file[name] for name in file.files if name != "meta"}
        except (KeyError, ValueError, EOFError, OSError, zipfile.BadZipFile) as error:
            raise DataError(f"The checkpoint {path} is damaged. Remove it to start anew.") from error
        checksum = meta.pop("checksum", None)
        if checksum != _checksum(meta, arrays):
            raise DataError(f"The checkpoint {path} is damaged. Remove it to start anew.")
        if meta["fingerprint"] != self.fingerprint:
            raise DataError(
                f"The checkpoint {path} was saved for other data, another formula, other options or another version: "
                "the files may have changed since. Remove it to start anew, or name another folder."
            )
        return int(meta["chunks"]), _joined(meta["state"], arrays)

    def due(self) -> bool:
        """Whether it is time to save."""
        return self._clock() - self._last >= self._wait

    def save(self, stage: str, chunks: int, state: State) -> None:
        """Save the state after so many chunks; what was saved before stays until this is complete."""
        start = self._clock()
        arrays: dict[str, npt.NDArray[Any]] = {}
        meta = {"fingerprint": self.fingerprint, "chunks": chunks, "state": _split(state, "", arrays)}
        meta["checksum"] = _checksum(meta, arrays)
        path = self._path(stage)
        partial = path.with_suffix(".partial")
        try:
            with partial.open("wb") as file:
                np.savez(file, allow_pickle=False, meta=np.array(json.dumps(meta)), **arrays)
            os.replace(partial, path)
        except BaseException:
            partial.unlink(missing_ok=True)
            raise
        self._last = self._clock()
        self._wait = max(self._seconds, SHARE * (self._last - start))

    def clear(self) -> None:
        """Remove what was saved: the run is complete."""
        for path in self.folder.glob("mixbridge-*.npz"):
            path.unlink()

    def _path(self, stage: str) -> Path:
        return self.folder / f"mixbridge-{stage}.npz"


def _split(state: State, prefix: str, arrays: dict[str, npt.NDArray[Any]]) -> dict[str, Any]:
    """Return the part of a state that JSON holds, arrays put aside under their names."""
    plain: dict[str, Any] = {}
    for name, value in state.items():
        key = f"{prefix}{name}"
        if isinstance(value, np.ndarray):
            arrays[key] = value
            plain[name] = {"array": key}
        elif isinstance(value, dict):
            plain[name] = {"state": _split(value, f"{key}.", arrays)}
        else:
            plain[name] = {"value": value}
    return plain


def _joined(plain: Mapping[str, Mapping[str, Any]], arrays: Mapping[str, npt.NDArray[Any]]) -> State:
    state: State = {}
    for name, entry in plain.items():
        [(kind, value)] = entry.items()
        state[name] = (
            arrays[value] if kind == "array" else _joined(value, arrays) if kind == "state" else value
        )
    return state


def _checksum(meta: Mapping[str, Any], arrays: Mapping[str, npt.NDArray[Any]]) -> str:
    digest = hashlib.sha256(json.dumps(meta, sort_keys=True).encode())
    for name in sorted(arrays):
        array = np.ascontiguousarray(arrays[name])
        digest.update(f"{name} {array.dtype.str} {array.shape}".encode())
        digest.update(array.reshape(-1).view(np.uint8).data)
    return digest.hexdigest()


def series_state(series: pd.Series[Any]) -> State:
    """Return distinct values as a state.

    Raises
    ------
    OptionError
        If they are neither numbers, truth values, dates nor text.
    """
    values = series.to_numpy()
    if values.dtype.kind in "iufbM":
        kept = values.view(np.int64) if values.dtype.kind == "M" else values
        return {"values": kept, "dtype": str(series.dtype)}
    texts = series.tolist()
    if not all(isinstance(text, str) for text in texts):
        raise OptionError(
            f"A checkpoint holds keys that are numbers of 64 bits, dates without a time zone or text, not "
            f"{series.dtype}. Leave checkpoint out, or change the column."
        )
    return {"texts": texts, "dtype": str(series.dtype)}


def restored_series(state: State) -> pd.Series[Any]:
    """Return distinct values from their state."""
    if "texts" in state:
        return pd.Series(state["texts"], dtype=state["dtype"])
    values = state["values"]
    return pd.Series(values.view(state["dtype"]) if state["dtype"].startswith("datetime64") else values)
