"""The design: names and columns as patsy lays them out, built block by block."""

from __future__ import annotations

import itertools
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from types import MappingProxyType
from typing import Any

import numpy as np
import numpy.typing as npt
from patsy import DesignInfo, EvalEnvironment, EvalFactor, PatsyError, Term, design_matrix_builders
from patsy.builtins import C

from mixbridge.errors import FormulaError
from mixbridge.panel.categories import Coded
from mixbridge.panel.factors import Numeric

__all__ = ["Design", "lay_out"]

Learned = Numeric | Coded


class _Known:
    """A factor, in the protocol that patsy documents, whose levels or width are known already."""

    def __init__(self, name: str, learned: Learned) -> None:
        self._name = name
        self.learned = learned
        self.origin = None

    def name(self) -> str:
        return self._name

    def memorize_passes_needed(self, state: dict[str, Any], eval_env: EvalEnvironment) -> int:
        return 0

    def eval(self, state: dict[str, Any], data: Any) -> Any:
        if isinstance(self.learned, Coded):
            return C([self.learned.levels[0]], self.learned.contrast, levels=list(self.learned.levels))
        return np.zeros((1, self.learned.width))


@dataclass(frozen=True, slots=True, eq=False)
class _Piece:
    """A factor's part in a column: one of its columns, or a value for each of its levels."""

    place: int
    column: int
    values: npt.NDArray[np.float64] | None


@dataclass(frozen=True, slots=True, eq=False)
class Design:
    """The right side, ready to be built.

    Parameters
    ----------
    names : tuple of str
        Column names.
    terms : mapping of str to slice
        Columns of each term.
    constant : int or None
        The intercept column.
    factors : tuple
        The distinct factors.
    recipe : tuple of tuple
        For each column the pieces whose product it is; an empty product is 1.
    """

    names: tuple[str, ...]
    terms: Mapping[str, slice]
    constant: int | None
    factors: tuple[Learned, ...]
    recipe: tuple[tuple[_Piece, ...], ...]

    def block(self, start: int, stop: int) -> npt.NDArray[np.float64]:
        """Return the columns for used rows from start to stop, C-contiguous."""
        out = np.empty((stop - start, len(self.recipe)))
        values = [factor.block(start, stop) for factor in self.factors]
        for j, pieces in enumerate(self.recipe):
            column = out[:, j]
            if not pieces:
                column.fill(1.0)
            for i, piece in enumerate(pieces):
                value = values[piece.place]
                part = value[:, piece.column] if piece.values is None else piece.values[value]
                if i:
                    column *= part
                else:
                    column[:] = part
        return out


def lay_out(terms: Sequence[Term], learned: Mapping[EvalFactor, Learned], text: str) -> Design:
    """Let patsy choose codings, names and order of the columns, and turn that into a recipe.

    Parameters
    ----------
    terms : sequence of patsy.Term
        The right side.
    learned : mapping
        What is known of each factor.
    text : str
        The formula, for messages.
    """
    known = {factor: _Known(factor.name(), value) for factor, value in learned.items()}
    termlist = [Term([known[factor] for factor in term.factors]) for term in terms]
    try:
        info: DesignInfo = design_matrix_builders([termlist], lambda: iter([{}]), EvalEnvironment([{}]))[0]
    except (
        PatsyError,
        ValueError,
        TypeError,
        LookupError,
        AttributeError,
    ) as error:  # a coding can be any object
        raise FormulaError(f"The design of {text!r} cannot be laid out: {error}") from error
    places = {factor: i for i, factor in enumerate(known.values())}
    recipe: list[tuple[_Piece, ...]] = []
    for subterms in info.term_codings.values():
        for subterm in subterms:
            choices = [
                _pieces(factor, places[factor], subterm.contrast_matrices) for factor in subterm.factors
            ]
            # patsy lets the first factor run fastest.
            recipe += [combination[::-1] for combination in itertools.product(*reversed(choices))]
    constant = next((info.term_slices[term].start for term in info.terms if not term.factors), None)
    if not recipe:
        raise FormulaError(
            f"The formula {text!r} leaves no column: a category with one level adds none beside the constant."
        )
    return Design(
        tuple(info.column_names),
        MappingProxyType(dict(info.term_name_slices)),
        constant,
        tuple(learned.values()),
        tuple(recipe),
    )


def _pieces(factor: _Known, place: int, contrasts: Mapping[Any, Any]) -> list[_Piece]:
    """Return the pieces that a factor offers to a term."""
    if factor in contrasts:
        matrix = np.asarray(contrasts[factor].matrix, dtype=np.float64)
        return [_Piece(place, j, np.ascontiguousarray(matrix[:, j])) for j in range(matrix.shape[1])]
    assert not isinstance(factor.learned, Coded), "a categorical factor comes with a contrast"
    return [_Piece(place, j, None) for j in range(factor.learned.width)]
