"""What travels to the place of a part of the rows, and how it is made ready there.

Neither patsy's objects nor the caller's names can be sent to another process. What is sent is the text of the
formula, the names of the columns, and what transforms have learned; the rest is made anew from these. A formula is
therefore limited to what the names of this package and of patsy suffice for.
"""

from __future__ import annotations

from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass, replace
from functools import lru_cache
from typing import Any

import numpy as np
import numpy.typing as npt
import pandas as pd
from patsy import EvalEnvironment, EvalFactor

from mixbridge.errors import DataError, FormulaError
from mixbridge.panel.design import Design
from mixbridge.panel.formula import names_of, parse_formula
from mixbridge.panel.readings import _BASE, factor_columns, make_environment
from mixbridge.panel.streaming_learn import Levels
from mixbridge.panel.streaming_rows import z_of
from mixbridge.panel.streaming_walk import Labels, Plan, Stage, Step, walk
from mixbridge.panel.syntax import prepare
from mixbridge.sources.chunks import CHUNK_ROWS, Chunk, ChunkedSource

__all__ = [
    "PartRows",
    "Recipe",
    "Taught",
    "Told",
    "changed",
    "part_source",
    "plan_of",
    "portable",
    "read_rows",
    "refuse_foreign",
    "stage_of",
    "told_of",
    "walk_part",
]

FloatArray = npt.NDArray[np.float64]


@dataclass(frozen=True, slots=True)
class Recipe:
    """Where a plan comes from.

    Parameters
    ----------
    formula : str
    names : tuple
        Names of all columns.
    keys : tuple of str
        Column of the units and, if given, of the periods.
    trusted : bool
    """

    formula: str
    names: tuple[object, ...]
    keys: tuple[str, ...]
    trusted: bool


@dataclass(frozen=True, slots=True)
class Told:
    """A stage in a form that can be sent.

    Parameters
    ----------
    states : dict
        By place of the factor and name of the transform: its attributes.
    spoiled : tuple of int
        Places of the factors that learn nothing at this stage.
    """

    states: dict[int, dict[str, dict[str, Any]]]
    spoiled: tuple[int, ...] = ()


@dataclass(frozen=True, slots=True, eq=False)
class Taught:
    """All that is needed to lay out the rows of a part.

    Parameters
    ----------
    recipe : Recipe
    told : tuple of Told
    levels : dict of int to Levels
        Of each categorical factor, by place.
    design : Design
        Without factors: those of the part are put in.
    """

    recipe: Recipe
    told: tuple[Told, ...]
    levels: dict[int, Levels]
    design: Design


@dataclass(frozen=True, slots=True, eq=False)
class _Part:
    """One part of the rows as a source."""

    frame: pd.DataFrame
    place: str
    note: str | None = None

    @property
    def names(self) -> tuple[object, ...]:
        return tuple(self.frame.columns)

    def chunks(self, columns: Sequence[str], keys: Sequence[str] = ()) -> Iterator[Chunk]:
        same = list(self.frame.columns) == list(columns)
        frame = self.frame if same else self.frame[list(columns)]  # which would be a copy
        for start in range(0, len(frame), CHUNK_ROWS):
            where = self.place if len(frame) <= CHUNK_ROWS else f"{self.place} from row {start} on"
            yield Chunk(frame.iloc[start : start + CHUNK_ROWS], where)


def plan_of(recipe: Recipe, environment: EvalEnvironment | None = None) -> Plan:
    """Make the plan of a recipe.

    Parameters
    ----------
    recipe : Recipe
    environment : patsy.EvalEnvironment, optional
        Where names are looked up; this package's and patsy's own unless given.
    """
    if environment is None:
        return replace(_plain_plan(recipe), kinds={})
    return _plan(recipe, environment)


@lru_cache(maxsize=16)
def _plain_plan(recipe: Recipe) -> Plan:
    return _plan(recipe, make_environment(None, reference=0))


def _plan(recipe: Recipe, environment: EvalEnvironment) -> Plan:
    parsed = parse_formula(recipe.formula)
    reads = factor_columns(parsed, recipe.names, environment, trusted=recipe.trusted)
    return Plan(parsed, reads, recipe.keys, environment, recipe.trusted)


def refuse_foreign(plan: Plan) -> None:
    """Refuse names that mean something else, or nothing, where the parts are."""
    for factor, columns in plan.reads.items():
        for name in names_of(factor.code):
            if name not in columns and plan.environment.namespace.get(name) is not _BASE.get(name):
                raise FormulaError(
                    f"{factor.code} names {name!r}, which is defined in this program only; the parts of the data "
                    "are worked on elsewhere. Write its value out, or compute a column first."
                )


def stage_of(plan: Plan, told: Told) -> Stage:
    """Give the transforms what they have learned."""
    factors = list(plan.reads)
    states: dict[EvalFactor, dict[str, Any]] = {}
    for place, learned in told.states.items():
        state: dict[str, Any] = {}
        prepare(factors[place], state, plan.environment)
        for name, attributes in learned.items():
            vars(state["transforms"][name]).update(attributes)
        states[factors[place]] = state
    return Stage(states, frozenset(factors[place] for place in told.spoiled))


def told_of(plan: Plan, stage: Stage) -> Told:
    """Take what the transforms have learned."""
    places = {factor: place for place, factor in enumerate(plan.reads)}
    states = {
        places[factor]: {name: dict(vars(transform)) for name, transform in state["transforms"].items()}
        for factor, state in stage.states.items()
    }
    return Told(states, tuple(sorted(places[factor] for factor in stage.spoiled)))


def walk_part(plan: Plan, told: Sequence[Told], place: str, frame: object) -> Iterator[Step]:
    """Walk over one part, some rows at a time."""
    return walk(plan, part_source(place, frame), [stage_of(plan, stage) for stage in told])


def part_source(place: str, frame: object) -> ChunkedSource:
    """Return one part as a source of chunks."""
    if not isinstance(frame, pd.DataFrame):
        raise DataError(f"{place} is a {type(frame).__name__}; needed are pandas DataFrames.")
    return _Part(frame, place)


@dataclass(frozen=True, slots=True, eq=False)
class PartRows:
    """Some rows used of a part.

    Parameters
    ----------
    key : pandas.Series
        The unit of each row.
    period : pandas.Series or None
        The period of each row.
    z : numpy.ndarray of shape (rows, k + 1)
        Design columns but the explicit constant, the outcome, and one.
    place : str
    """

    key: pd.Series[Any]
    period: pd.Series[Any] | None
    z: FloatArray
    place: str


def read_rows(taught: Taught, place: str, frame: object) -> Iterator[PartRows]:
    """Lay out the rows used of a part, some at a time.

    Parameters
    ----------
    taught : Taught
    place : str
        Name of the part, for messages.
    frame : pandas.DataFrame
        Its rows.
    """
    plan = plan_of(taught.recipe)
    for step in walk_part(plan, taught.told, place, frame):
        if not step.used:
            continue
        learned: dict[EvalFactor, Any] = {}
        for number, (reading, value) in enumerate(zip(step.readings, step.values, strict=True)):
            learned[reading.factor] = (
                taught.levels[number].block(value) if isinstance(value, Labels) else value
            )
        factors = [learned[factor] for factor in plan.formula.factors]
        yield PartRows(
            step.key(plan.keys[0]),
            step.key(plan.keys[1]) if len(plan.keys) > 1 else None,
            z_of(taught.design, factors, learned[plan.formula.outcome], step.used),
            step.place,
        )


def changed(place: str) -> DataError:
    """Make the error for rows that differ from what they were when they were first read."""
    return DataError(
        f"{place} is not what it was when the data were first read: the number of rows differs. Do not change the "
        "data while they are in use; what is computed at random needs a fixed seed."
    )


def portable(levels: Mapping[int, Levels]) -> dict[int, Levels]:
    """Leave out of levels what cannot be sent: the coding asked for, which the design holds already."""
    return {place: Levels(each.values, replace(each.coded, contrast=None)) for place, each in levels.items()}
