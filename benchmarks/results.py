"""What a benchmark returns: tables, ratios with their targets, and comparisons of the numbers computed."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Literal


@dataclass(frozen=True, slots=True)
class Ratio:
    """A measured figure beside the figure aimed at; a figure that is only shown has no target."""

    name: str
    value: float
    target: float | None = None
    sense: Literal["at most", "at least"] = "at most"
    unit: str = ""

    @property
    def met(self) -> bool:
        if self.target is None:
            return True
        return self.value <= self.target if self.sense == "at most" else self.value >= self.target


@dataclass(frozen=True, slots=True)
class Agreement:
    """Our number beside the rival's: the benchmark compares the same computation."""

    what: str
    difference: float
    allowed: float
    reason: str

    @property
    def holds(self) -> bool:
        return bool(self.difference <= self.allowed)


@dataclass(frozen=True, slots=True)
class Table:
    columns: tuple[str, ...]
    rows: tuple[tuple[str, ...], ...]


@dataclass(frozen=True, slots=True)
class Result:
    """Outcome of one problem."""

    problem: str
    method: str
    table: Table
    ratios: tuple[Ratio, ...]
    agreements: tuple[Agreement, ...]
    notes: Sequence[str] = ()
