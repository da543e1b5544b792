"""Rows as moments take them: design columns without the constant, the outcome, and a one, in one array."""

from __future__ import annotations

from collections.abc import Callable, Iterable, Mapping, Sequence
from dataclasses import replace
from typing import Protocol, TypeVar

import numpy as np
import numpy.typing as npt
from patsy import EvalFactor

from mixbridge.errors import FormulaError
from mixbridge.panel.design import Design, Learned, lay_out
from mixbridge.panel.factors import Plain, Stored
from mixbridge.panel.streaming_walk import Labels, Plan, Step, Value
from mixbridge.sources.checkpoint import State

__all__ = ["Gather", "OnePass", "pieces", "values_of", "z_of", "z_pieces"]

FloatArray = npt.NDArray[np.float64]
CodeArray = npt.NDArray[np.intp]
Made = TypeVar("Made")
CELLS = 2**22
"""Values of rows that are laid out at once."""
_ROWS = 16384
"""Rows laid out at once: they stay in the cache while one column after the other is written."""


class Gather(Protocol):
    """What takes moments while the rows are read for the first time."""

    def begin(self, *, sorted_units: bool) -> None:
        """Start, or start anew; units come one after the other, or in any order."""
        ...

    def add(self, codes: CodeArray, z: FloatArray) -> None:
        """Take in rows; units are numbered by order of first appearance."""
        ...

    def state(self) -> State:
        """Return what was taken, to be saved."""
        ...

    def restore(self, state: State) -> None:
        """Go on from a state, after `begin`."""
        ...


def pieces(
    lay_out_rows: Callable[[int, int], Made], rows: int, columns: int, most: int | None = None
) -> Iterable[Made]:
    """Lay out rows in pieces: at once if they are not large, else each when it is asked for.

    Parameters
    ----------
    lay_out_rows : callable
        Takes the first row and the one after the last.
    rows, columns : int
    most : int, optional
        Most rows of a piece; as many as make a piece of `CELLS` values unless given.
    """
    step = max(1, CELLS // columns)
    step = step if most is None else min(step, most)
    bounds = [(start, min(start + step, rows)) for start in range(0, rows, step)]
    if rows * columns <= CELLS:
        return [lay_out_rows(*each) for each in bounds]
    return (lay_out_rows(*each) for each in bounds)


def z_of(design: Design, factors: Sequence[Learned], response: Learned, rows: int) -> FloatArray:
    """Lay out rows.

    Parameters
    ----------
    design : Design
        The recipe.
    factors : sequence
        Its factors, on these rows.
    response : object
        The outcome, on these rows.
    rows : int

    Returns
    -------
    numpy.ndarray of shape (rows, k + 1)
        Design columns but the explicit constant, the outcome, and one.
    """
    return z_between(design, factors, response, 0, rows)


def z_pieces(
    design: Design, factors: Sequence[Learned], response: Learned, rows: int
) -> Iterable[FloatArray]:
    """Lay out rows as `z_of`, in pieces that are not large."""
    return pieces(
        lambda start, stop: z_between(design, factors, response, start, stop), rows, len(design.recipe) + 2
    )


def z_in_turn(
    design: Design, factors: Sequence[Learned], response: Learned, rows: int
) -> Iterable[FloatArray]:
    """Lay out rows as `z_of`, in pieces that stay in the cache; each takes the place of the one before."""
    room = np.empty((min(rows, _ROWS), len(design.recipe) - (design.constant is not None) + 2))
    for begin in range(0, rows, _ROWS):
        end = min(begin + _ROWS, rows)
        yield z_between(design, factors, response, begin, end, room[: end - begin])


def z_between(  # noqa: PLR0917  (rows from and to, as in a range)
    design: Design,
    factors: Sequence[Learned],
    response: Learned,
    begin: int,
    end: int,
    room: FloatArray | None = None,
) -> FloatArray:
    """Lay out the rows between two as `z_of`, in an array at hand if there is one."""
    recipe = [parts for j, parts in enumerate(design.recipe) if j != design.constant]
    z = np.empty((end - begin, len(recipe) + 2)) if room is None else room
    for start in range(begin, end, _ROWS):
        stop = min(start + _ROWS, end)
        values = [factor.block(start, stop) for factor in factors]
        out = z[start - begin : stop - begin]
        for j, parts in enumerate(recipe):
            column = out[:, j]
            if not parts:
                column.fill(1.0)
            for i, piece in enumerate(parts):
                value = values[piece.place]
                part = value[:, piece.column] if piece.values is None else piece.values[value]
                if i:
                    column *= part
                else:
                    column[:] = part
        out[:, -2] = response.block(start, stop)[:, 0]
    z[:, -1] = 1.0
    return z


def values_of(step: Step) -> dict[EvalFactor, Value]:
    """Return the value of each factor of a step."""
    return {reading.factor: value for reading, value in zip(step.readings, step.values, strict=True)}


class OnePass:
    """Lays out rows while they are read for the first time, where the formula allows.

    It does if all factors are numbers: then every column is known as soon as the first row is. Levels are known only
    when all rows were read.

    Parameters
    ----------
    plan : Plan
    in_turn : bool
        Whether a piece is done with before the next one is asked for.
    """

    def __init__(self, plan: Plan, *, in_turn: bool = False) -> None:
        self._plan, self._lay_out = plan, z_in_turn if in_turn else z_pieces
        self._design: Design | None = None
        self.possible = True

    def __call__(self, step: Step) -> tuple[Step, Iterable[FloatArray] | None]:
        """Return the step, and its rows laid out in pieces or None."""
        if not (self.possible and step.used):
            return step, None
        values = values_of(step)
        if self._design is None:  # at the first rows used, before other threads begin
            self._design = self._laid_out(values)
            self.possible = self._design is not None
            if self._design is None:
                return step, None
        learned = _numeric(values)
        if learned is None:
            return step, None
        factors = [learned[factor] for factor in self._plan.formula.factors]
        return step, self._lay_out(self._design, factors, learned[self._plan.formula.outcome], step.used)

    def __str__(self) -> str:
        """Return what the pass turns out to be for."""
        return "account of rows, and moments" if self.possible else "account of rows, levels and units"

    def _laid_out(self, values: Mapping[EvalFactor, Value]) -> Design | None:
        learned = _numeric(values)
        if learned is None or learned[self._plan.formula.outcome].width != 1:
            return None
        blanks = {
            factor: Stored(np.empty((0, learned[factor].width))) for factor in self._plan.formula.factors
        }
        try:
            return replace(lay_out(self._plan.formula.terms, blanks, self._plan.formula.text), factors=())
        except FormulaError:
            return None  # said when the design is laid out for good


def _numeric(values: Mapping[EvalFactor, Value]) -> dict[EvalFactor, Plain | Stored] | None:
    """Return the values if all are finite numbers."""
    learned: dict[EvalFactor, Plain | Stored] = {}
    for factor, value in values.items():
        if isinstance(value, Labels) or (isinstance(value, Stored) and not np.isfinite(value.values).all()):
            return None
        learned[factor] = value
    return learned
