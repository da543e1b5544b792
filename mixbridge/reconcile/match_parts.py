"""The records that a match consists of."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from types import MappingProxyType

__all__ = ["Candidate", "Chance", "Consistency", "Failure", "Fault", "FigureChance", "Separator", "TieClass"]


@dataclass(frozen=True, slots=True)
class Failure:
    """A figure that a candidate does not reproduce.

    Attributes
    ----------
    quantity, printed : str
    computed : float
        NaN where the route has no such figure.
    units_off : float
        ``computed - printed``, in units of the last printed digit.
    """

    quantity: str
    printed: str
    computed: float
    units_off: float


@dataclass(frozen=True, slots=True)
class Candidate:
    """One route under its conventions, set against the printed figures.

    Attributes
    ----------
    label : str
        Route and the conventions that differ from the defaults.
    route : str
    conventions : mapping
        Those that differ from the defaults.
    naming : tuple of str
        What ambiguous names have to mean; alternatives that do equally well are joined by "or".
    rounding : str
        ``nearest``, or ``cut`` where cutting digits off reproduces more.
    matched, figures : int
        Figures reproduced, and given.
    failures : tuple of Failure
        In the order of the figures.
    ratio : float
        The variance ratio of the fit; NaN off the curve.
    status : str
    same : tuple of str
        Conventions of the route that make no difference on these data.
    """

    label: str
    route: str
    conventions: Mapping[str, object]
    naming: tuple[str, ...]
    rounding: str
    matched: int
    figures: int
    failures: tuple[Failure, ...]
    ratio: float
    status: str
    same: tuple[str, ...]

    def __post_init__(self) -> None:
        """Make the conventions read-only."""
        object.__setattr__(self, "conventions", MappingProxyType(dict(self.conventions)))

    @property
    def first_failure(self) -> Failure | None:
        """The first figure that is not reproduced, or None."""
        return self.failures[0] if self.failures else None


@dataclass(frozen=True, slots=True)
class TieClass:
    """Candidates among the best that agree in every figure: no further figure separates them on these data.

    Attributes
    ----------
    candidates : tuple of Candidate
    only_cut : bool
        Whether they reproduce as much only if digits were cut off, not rounded.
    """

    candidates: tuple[Candidate, ...]
    only_cut: bool

    @property
    def label(self) -> str:
        """The plainest of the candidates."""
        return self.candidates[0].label


@dataclass(frozen=True, slots=True)
class Separator:
    """A further figure that would tell tied classes apart.

    Attributes
    ----------
    quantity : str
    digits : int
        Significant digits needed.
    parts : int
        Into how many groups the classes would fall.
    values : tuple of str
        What each class would print, in the order of the classes.
    """

    quantity: str
    digits: int
    parts: int
    values: tuple[str, ...]


@dataclass(frozen=True, slots=True)
class FigureChance:
    """How telling one figure is.

    Attributes
    ----------
    quantity : str
    width : float
        Width of what the printed text stands for.
    low, high : float
        Range of the computed values over the searched space.
    probability : float
        ``width / (range + width)``: that a value drawn evenly from the range would print as the same text.
    """

    quantity: str
    width: float
    low: float
    high: float
    probability: float


@dataclass(frozen=True, slots=True)
class Chance:
    """How probable a match by chance is, between two models of how figures go together.

    Attributes
    ----------
    figures : tuple of FigureChance
    distinct : int
        Printouts that differ in some of the given quantities.
    independent : float
        Probability that one wrong printout matches every figure if its figures were independent.
    dependent : float
        The same if all its figures moved together: the least of the single probabilities.
    any_independent, any_dependent : float
        That at least one of the distinct printouts does.
    """

    figures: tuple[FigureChance, ...]
    distinct: int
    independent: float
    dependent: float
    any_independent: float
    any_dependent: float


@dataclass(frozen=True, slots=True)
class Consistency:
    """A relation that the printed figures must satisfy whatever the route.

    Attributes
    ----------
    relation : str
        In words.
    quantity, printed : str
        The figure that is tested.
    low, high : float
        What the other figures imply for it, rounding allowed for.
    holds : bool
    units_off : float
        Distance of the nearest implied value from the printed one in units of its last digit; 0 where it holds.
    naming : tuple of str
        Readings of ambiguous names under which it holds, or all that were tried.
    """

    relation: str
    quantity: str
    printed: str
    low: float
    high: float
    holds: bool
    units_off: float
    naming: tuple[str, ...]


@dataclass(frozen=True, slots=True)
class Fault:
    """A hypothesis: with this slip of copying, a candidate would reproduce every figure.

    Attributes
    ----------
    hypothesis : str
        In words.
    quantity, printed, corrected : str
    labels : tuple of str
        Candidates that it would complete.
    tried : int
        Readings of this kind that were tried for this figure: the more, the less one that fits says.
    weak : bool
        Whether readings of this kind fit easily by chance.
    """

    hypothesis: str
    quantity: str
    printed: str
    corrected: str
    labels: tuple[str, ...]
    tried: int
    weak: bool
