"""Sort rows that come in chunks by unit, and by period within, in temporary files."""

from __future__ import annotations

from contextlib import closing
from typing import Any

import numpy as np
import numpy.typing as npt
import pandas as pd

from mixbridge.errors import DataError
from mixbridge.panel.streaming_learn import Lesson
from mixbridge.panel.streaming_passes import Passes
from mixbridge.panel.streaming_values import Distinct
from mixbridge.panel.streaming_walk import Plan, Step
from mixbridge.sources.spill_files import PART, Pile, SortedFiles

__all__ = ["hash_of_keys", "spill_by_unit"]

CodeArray = npt.NDArray[np.intp]


def spill_by_unit(plan: Plan, passes: Passes, lesson: Lesson) -> SortedFiles:
    """Write the rows used to temporary files in which those of a unit lie together, in the order of periods.

    Rows are dealt to files by a hash of their unit, and each file is sorted in memory.

    Parameters
    ----------
    plan : Plan
    passes : Passes
    lesson : Lesson
        Says which rows are used, and which order periods have.

    Returns
    -------
    SortedFiles
        Removes the files when it is no longer in use.
    """
    options, unit = passes.options, plan.keys[0]
    part = max(2**16, min(PART, options.memory_limit // 4))
    expected = 8 * len(plan.wanted) * lesson.account.rows_used
    before = "" if passes.source.note is None else f"{passes.source.note}; "
    folder = None if isinstance(options.spill, bool) else options.spill
    source = SortedFiles(folder, expected, f"{before}rows were sorted by unit in temporary files")
    try:
        pile = Pile(source.folder, expected, part, lambda frame, n, depth: _dealt(frame[unit], n, depth))
        what = "sorting in temporary files"
        with closing(passes.over(plan, lesson.stages, lambda step: _rows_of(plan, step), what)) as frames:
            for frame in frames:
                if len(frame):
                    pile.deal(frame)
        source.fill(pile, lambda pieces: _sorted(plan, lesson, pieces), options.rows)
    except BaseException:
        source.remove()
        raise
    return source


def _rows_of(plan: Plan, step: Step) -> pd.DataFrame:
    """Return the columns needed on the rows used of a chunk, unit keys in a type that holds for all chunks."""
    if not step.used:
        return step.frame.iloc[:0]
    frame = step.frame[plan.wanted]
    frame = (frame if step.rows is None else frame.iloc[step.rows]).reset_index(drop=True)
    unit = plan.keys[0]
    key = Distinct(unit, whole=True).plain(frame[unit]).reset_index(drop=True)
    if key.dtype == object and pd.api.types.infer_dtype(key, skipna=False) in ("integer", "mixed-integer"):
        raise DataError(
            f"{step.place}: the keys in {unit!r} go beyond 64 bits with a sign, which temporary files cannot hold. "
            "Store them as text."
        )
    return frame.assign(**{unit: key})


def _dealt(keys: pd.Series[Any], files: int, depth: int) -> CodeArray:
    """Return the file of each row; rows that were dealt together once are dealt by other digits of the hash."""
    hashes = hash_of_keys(keys) >> np.uint64(20 * depth)
    return (hashes % np.uint64(files)).astype(np.intp)


def hash_of_keys(keys: pd.Series[Any]) -> npt.NDArray[np.uint64]:
    """Return a number for each key that depends on the key only, not on the type of the column.

    Parameters
    ----------
    keys : pandas.Series
        64-bit integers, or anything else without missing values, by its text.
    """
    if keys.dtype == np.int64:
        return np.asarray(pd.util.hash_array(keys.to_numpy()))
    codes, distinct = pd.factorize(keys)
    texts = np.array([str(key) for key in distinct], dtype=object)
    return np.asarray(pd.util.hash_array(texts, categorize=False))[codes]


def _sorted(
    plan: Plan, lesson: Lesson, pieces: list[pd.DataFrame]
) -> tuple[pd.DataFrame, npt.NDArray[np.intp]]:
    """Return rows as one frame, and their order by unit and period."""
    frame = pd.concat(pieces, ignore_index=True) if len(pieces) > 1 else pieces[0]
    pieces.clear()
    keys = Distinct(plan.keys[0], whole=True).plain(frame[plan.keys[0]])
    codes, _ = pd.factorize(keys, sort=keys.dtype == np.int64)
    by = [codes]
    if lesson.periods is not None and len(lesson.order.positions):
        by.insert(0, lesson.order.positions[lesson.periods.find(frame[plan.keys[1]])])
    return frame, np.lexsort(by).astype(np.intp, copy=False)
