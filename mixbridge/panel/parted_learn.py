"""Learn from parts of the rows that stay where they are: each tells what it saw, and the answers are merged.

The order of merging is that of the parts, whatever order they are worked on in.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from functools import partial, reduce
from typing import Any, Literal

import numpy as np
import numpy.typing as npt
import pandas as pd
from patsy import EvalFactor
from patsy.state import Center

from mixbridge.errors import DataError, FormulaError
from mixbridge.panel.attempt import Reading
from mixbridge.panel.build import _MOST_ROUNDS, _check_left
from mixbridge.panel.columns import read_column
from mixbridge.panel.keys import encode
from mixbridge.panel.parted import Recipe, Told, part_source, plan_of, stage_of, told_of, walk_part
from mixbridge.panel.readings import read_factors
from mixbridge.panel.standardize import _Standardize
from mixbridge.panel.streaming_book import _Book, _Numbers
from mixbridge.panel.streaming_learn import Lesson, _any_stateful, _learn_states, _lesson
from mixbridge.panel.streaming_values import Distinct, sort_of
from mixbridge.panel.streaming_walk import Labels, Plan, Stage, Step, _evaluated
from mixbridge.panel.syntax import prepare

__all__ = ["Each", "PartBook", "ReadAll", "learn_parts", "read_part"]

Each = Callable[..., list[Any]]
"""Calls a function on every part, the further arguments first, and returns the answers in order."""
Take = Callable[[Step, "npt.NDArray[np.intp]"], None]
ReadAll = Callable[[Recipe, tuple[Told, ...], Sequence[str]], "list[PartBook]"]
"""Reads the columns given of every part once, and returns what each tells."""


@dataclass(frozen=True, slots=True, eq=False)
class PartBook:
    """What one part of the rows tells.

    Parameters
    ----------
    place : str
        Its name.
    given, used : int
        Rows.
    missing, dropped, bad, notes : dict
        As the streaming learner keeps them.
    kinds : dict
        What each column holds, and where.
    numbers : dict of int to tuple
        Width, least and greatest values, and the first infinite one of each numeric factor.
    labels : dict of int to Distinct
        Distinct values of each categorical factor.
    units : int
        Number of units.
    key : tuple of (str, str) or None
        What the unit keys are, in a word, and their type; None without rows.
    sample : pandas.DataFrame or None
        The first row used.
    unsettled : bool
        Whether the last stage dropped a row.
    """

    place: str
    given: int = 0
    used: int = 0
    missing: dict[str, int] | None = None
    dropped: dict[tuple[str, str], int] | None = None
    bad: dict[str, tuple[int, int]] | None = None
    notes: dict[str, str] | None = None
    kinds: dict[str, tuple[str, str]] | None = None
    numbers: dict[int, tuple[int, list[float], list[float], str | None]] | None = None
    labels: dict[int, Distinct] | None = None
    units: int = 0
    key: tuple[str, str] | None = None
    sample: pd.DataFrame | None = None
    unsettled: bool = False


def learn_parts(
    plan: Plan,
    recipe: Recipe,
    each: Each,
    incomplete_rows: Literal["drop", "refuse"],
    read: ReadAll | None = None,
) -> tuple[Lesson, tuple[Told, ...], list[PartBook]]:
    """Pass over the parts until every factor is learned and yields a number on every row left.

    The same passes as for rows in chunks: one, one more where a transform learns, more where it then yields
    something that is not a number.

    Parameters
    ----------
    plan : Plan
        Made from `recipe`.
    recipe : Recipe
    each : callable
    incomplete_rows : {"drop", "refuse"}
    read : callable, optional
        Reads the parts where nothing has to be learned before, and may take more than the books from them.

    Returns
    -------
    lesson : Lesson
        Without the units, which are not fetched.
    told : tuple of Told
    books : list of PartBook
        One per part.
    """
    told: tuple[Told, ...] = ()
    bad: dict[str, tuple[int, int]] = {}
    for _ in range(_MOST_ROUNDS):
        stage, complaint = _states_of_all(plan, recipe, told, each)
        told = (*told, stage)
        if stage.spoiled:
            if complaint is not None and not any(each(_unsettled, recipe, told)):
                raise complaint
            continue
        books: list[PartBook]
        if read is None or stage.states or len(told) > 1:
            books = each(_read, recipe, told)
        else:
            books = read(recipe, told, plan.wanted)
        book = _merged_books(plan, books)
        if not book.given:
            raise DataError("The data have no rows.")
        account = book.account()
        _check_left(account, incomplete_rows)
        if not (stage.states and any(part.unsettled for part in books)):
            stages = tuple(stage_of(plan, each_stage) for each_stage in told)
            _add_labels(plan, book, books, stages)
            return _lesson(plan, book, stages, account), told, books
        bad = book.bad
    raise DataError(
        f"After {_MOST_ROUNDS} rounds a term still yields values that are not numbers each time it is learned "
        "on the rows left: " + ", ".join(bad) + ". Compute it as a column of the data first."
    )


def _states_of_all(
    plan: Plan, recipe: Recipe, told: tuple[Told, ...], each: Each
) -> tuple[Told, DataError | None]:
    """Let the transforms of every part learn, and merge what they learned."""
    if not _any_stateful(plan):
        return Told({}), None
    answers: list[tuple[Told, DataError | None]] = each(_states, recipe, told)
    spoiled = {place for answer, _ in answers for place in answer.spoiled}
    states: dict[int, dict[str, dict[str, Any]]] = {}
    for number, factor in enumerate(plan.reads):
        parts = [answer.states[number] for answer, _ in answers if number in answer.states]
        if not parts or number in spoiled:
            continue
        blank: dict[str, Any] = {}
        prepare(factor, blank, plan.environment)
        states[number] = {
            name: reduce(partial(_joined, factor, type(transform)), [part[name] for part in parts])
            for name, transform in blank["transforms"].items()
        }
    complaint = next((complaint for _, complaint in answers if complaint is not None), None)
    return Told(states, tuple(sorted(spoiled))), complaint


def _joined(factor: EvalFactor, kind: type, one: dict[str, Any], two: dict[str, Any]) -> dict[str, Any]:
    """Merge what a transform has learned from two sets of rows."""
    if kind is Center:
        return {name: one[name] + two[name] for name in ("_sum", "_count")}
    if kind is _Standardize:
        merged = _Standardize()
        for part in (one, two):
            merged._merge(part["_count"], part["_mean"], part["_squares"])
        return vars(merged)
    raise FormulaError(
        f"{factor.code} learns with {kind.__name__}, which cannot be merged from parts of the data. Compute it as "
        "a column first."
    )


def _states(
    recipe: Recipe, told: tuple[Told, ...], place: str, frame: object
) -> tuple[Told, DataError | None]:
    """Learn from one part."""
    plan = plan_of(recipe)
    stages = [stage_of(plan, each) for each in told]
    stage, complaint = _learn_states(plan, part_source(place, frame), stages)
    return told_of(plan, stage), complaint


def _unsettled(recipe: Recipe, told: tuple[Told, ...], place: str, frame: object) -> bool:
    """Whether the last stage drops a row of one part."""
    return any(step.unsettled for step in walk_part(plan_of(recipe), told, place, frame))


def read_part(
    recipe: Recipe, told: tuple[Told, ...], place: str, frame: object, take: Take | None = None
) -> tuple[PartBook, pd.Series[Any]]:
    """Tell what one part holds.

    Parameters
    ----------
    recipe : Recipe
    told : tuple of Told
    place : str
    frame : pandas.DataFrame
    take : callable, optional
        Gets each step, and the unit of each row used, numbered by order of first appearance.

    Returns
    -------
    book : PartBook
    keys : pandas.Series
        Keys of its units in that order, in a type that does not depend on the other rows.
    """
    plan = plan_of(recipe)
    units = Distinct(plan.keys[0], whole=True)
    book = _Book(plan, np.inf, units, None)
    sample, unsettled = None, False
    for step in walk_part(plan, told, place, frame):
        codes = book.take(step)
        unsettled |= step.unsettled
        if step.used and sample is None:
            first = 0 if step.rows is None else int(step.rows[0])
            sample = step.frame.iloc[[first]].reset_index(drop=True)
        if step.used and take is not None:
            take(step, codes)
    keys = units.plain(units.series())
    if keys.dtype == object:
        encode(plan.keys[0], units.series())  # refuses keys that cannot be told apart
    places = {factor: number for number, factor in enumerate(plan.reads)}
    told_of_part = PartBook(
        place,
        book.given,
        book.used,
        book.missing,
        book.dropped,
        book.bad,
        book.notes,
        plan.kinds,
        {
            places[factor]: (found.width, found.least, found.greatest, found.infinite)
            for factor, found in book.numbers.items()
        },
        {places[factor]: values for factor, (values, _) in book.labels.items()},
        len(units),
        (sort_of(keys), str(keys.dtype)) if book.used else None,
        sample,
        unsettled,
    )
    return told_of_part, keys


def _read(recipe: Recipe, told: tuple[Told, ...], place: str, frame: object) -> PartBook:
    return read_part(recipe, told, place, frame)[0]


def _merged_books(plan: Plan, parts: Sequence[PartBook]) -> _Book:
    """Put together what the parts tell, in their order."""
    merged = _Book(plan, np.inf, Distinct(plan.keys[0], whole=True), None)
    key: tuple[str, str] | None = None
    for part in parts:
        merged.given += part.given
        merged.used += part.used
        for name, count in (part.missing or {}).items():
            merged.missing[name] = merged.missing.get(name, 0) + count
        for cause, count in (part.dropped or {}).items():
            merged.dropped[cause] = merged.dropped.get(cause, 0) + count
        for name, (stage, count) in (part.bad or {}).items():
            before, so_far = merged.bad.get(name, (stage, 0))
            merged.bad[name] = min(stage, before), so_far + count
        for name, note in (part.notes or {}).items():
            merged.notes.setdefault(name, note)
        for name, (kind, where) in (part.kinds or {}).items():
            known, first = plan.kinds.setdefault(name, (kind, where))
            if known != kind:
                raise _other_kind(name, kind, part.place, known, first)
        if part.key is not None:
            if key is not None and key[0] != part.key[0]:
                raise _other_kind(plan.keys[0], part.key[0], part.place, key[0], "parts before it")
            key = key or part.key
        _merge_numbers(plan, merged, part)
    return merged


def _merge_numbers(plan: Plan, merged: _Book, part: PartBook) -> None:
    """Take the extremes of the numeric factors of a part into those of all."""
    factors = list(plan.reads)
    for number, (width, least, greatest, infinite) in (part.numbers or {}).items():
        reading = Reading(factors[number], {}, None, False, True)
        known = merged.numbers.get(reading.factor)
        if known is None:
            merged.numbers[reading.factor] = _Numbers(reading, width, least, greatest, infinite)
            continue
        if known.width != width:
            raise FormulaError(
                f"{reading.factor.code} yields {width} columns in {part.place} and {known.width} before."
            )
        known.least = [min(pair) for pair in zip(known.least, least, strict=True)]
        known.greatest = [max(pair) for pair in zip(known.greatest, greatest, strict=True)]
        known.infinite = known.infinite or infinite


def _add_labels(plan: Plan, merged: _Book, parts: Sequence[PartBook], stages: tuple[Stage, ...]) -> None:
    """Merge the levels; how they are coded is read off the first row used."""
    factors = list(plan.reads)
    sample = next(part.sample for part in parts if part.sample is not None)
    columns = {name: read_column(name, sample[name]) for names in plan.reads.values() for name in names}
    readings = read_factors(plan.reads, columns, plan.environment, trusted=plan.trusted)
    for number in sorted({number for part in parts for number in part.labels or {}}):
        factor = factors[number]
        if factor in merged.numbers:
            raise DataError(f"{factor.code} holds categories in a part of the data and numbers in another.")
        asked = _evaluated(plan, readings[number], None, 1, stages[-1].states.get(factor))
        assert isinstance(asked, Labels), "the factor had labels where it was read"
        values = Distinct(factor.code, whole=False)
        for part in parts:
            if part.labels and number in part.labels:
                values.add(part.labels[number].series(), part.place)
        merged.labels[factor] = values, asked


def _other_kind(name: str, kind: str, place: str, known: str, first: str) -> DataError:
    return DataError(
        f"In {place} the column {name!r} holds values of the kind {kind}; in {first} they were of the kind {known}. "
        "Give the column one type in all parts of the data."
    )
