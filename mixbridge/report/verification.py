"""Two records of one study, figure by figure: the one that was printed and the one made anew from its moments."""

from __future__ import annotations

import math
import re
from collections import Counter
from collections.abc import Iterator, Mapping
from dataclasses import dataclass, field
from textwrap import wrap
from typing import Any

import pandas as pd

from mixbridge.display import Printed
from mixbridge.display.text import WIDTH, columns, shorten

__all__ = ["DIFFERS", "NEEDS_ROWS", "SAME", "STATED", "Checked", "Verification", "compare_records"]

SAME = "same"
DIFFERS = "differs"
NEEDS_ROWS = "needs rows"
STATED = "stated"
"""Verdicts. What is stated (names, the account of dropped rows) does not follow from moments and is not checked."""

HONEST = (
    "This shows that the figures follow from the moments in the record. It does not show that the",
    "moments are those of the data, nor that the data are what they are said to be.",
)
"""What a verification does not show, as lines."""

_AWAY = ("not at hand", "never held together", "not kept", "do not hold the order", "needs rows")
_TOLD = ("status", "status_of_row", "reason", "condition", "note")
"""Keys whose text is the program's own: names that a user chose are never read for it."""
_NUMBER = re.compile(r"-?\d+(?:[.,]\d+)*(?:e[+-]?\d+)?")
_NUMBER_FREE = 1e-13
"""Share of the largest neighbour in a list or table below which a number is rounding."""
_SHOWN = 12


@dataclass(frozen=True, slots=True)
class Checked:
    """One figure of a record.

    Attributes
    ----------
    place : str
        Where it stands in the record, ``fits.reml.coefficients.forage``.
    printed, recomputed : number, str or None
        In the record, and from its moments.
    verdict : str
        ``same``, ``differs``, ``needs rows`` or ``stated``.
    """

    place: str
    printed: float | int | str | bool | None
    recomputed: float | int | str | bool | None
    verdict: str


@dataclass(frozen=True, slots=True, eq=False)
class Verification(Printed):
    """What came of checking a record.

    Attributes
    ----------
    checked : tuple of Checked
        Every figure, in the order of the record.
    tolerance : float
        Relative difference up to which numbers are the same: rounding times condition, at least 1e-9.
    """

    checked: tuple[Checked, ...] = field(repr=False)
    tolerance: float

    @property
    def counts(self) -> dict[str, int]:
        """Number of figures by verdict."""
        found = Counter(item.verdict for item in self.checked)
        return {verdict: found[verdict] for verdict in (SAME, DIFFERS, NEEDS_ROWS, STATED)}

    @property
    def passed(self) -> bool:
        """Whether no figure differs."""
        return not self.counts[DIFFERS]

    @property
    def table(self) -> pd.DataFrame:
        """Columns ``place, printed, recomputed, verdict``."""
        rows = [(item.place, item.printed, item.recomputed, item.verdict) for item in self.checked]
        return pd.DataFrame(rows, columns=["place", "printed", "recomputed", "verdict"], dtype=object)

    def __str__(self) -> str:
        """Return counts, the figures that differ, and what this does not show."""
        counts = self.counts
        lines = [
            f"{counts[SAME]:,} figures follow from the moments in the record, {counts[DIFFERS]:,} differ; "
            f"{counts[NEEDS_ROWS]:,} need rows,",
            f"{counts[STATED]:,} are statements that no moments can check. Numbers are the same up to a relative "
            f"{self.tolerance:.0e}.",
        ]
        wrong = [item for item in self.checked if item.verdict == DIFFERS]
        if wrong:
            cells = [("figure", "in the record", "from its moments")]
            cells += [
                (shorten(item.place, 46), _shown(item.printed), _shown(item.recomputed))
                for item in wrong[:_SHOWN]
            ]
            lines += ["", *columns(cells)]
            if len(wrong) > _SHOWN:
                lines.append(f"  and {len(wrong) - _SHOWN} more, see the table of the verification")
        away = sorted(
            {".".join(item.place.split(".")[:2]) for item in self.checked if item.verdict == NEEDS_ROWS}
        )
        if away:
            lines += ["", *wrap(f"Needs rows: {', '.join(away)}", WIDTH)]
        return "\n".join([*lines, "", *HONEST])


def compare_records(
    printed: Mapping[str, Any], again: Mapping[str, Any], *, tolerance: float, stated: tuple[str, ...]
) -> Verification:
    """Set a record beside the one made anew from its moments.

    Parameters
    ----------
    printed, again : mapping
        As `mixbridge.report.record.study_record` makes them.
    tolerance : float
        Relative difference up to which two numbers are the same.
    stated : tuple of str
        Places, with all below them, that do not follow from moments.

    Returns
    -------
    Verification
        Numbers below 1e-13 of their largest neighbour are rounding and the same. Numbers inside text may differ by one
        unit of their last digit.
    """
    found = tuple(_walk(printed, again, "", tolerance, stated, away=False))
    return Verification(found, tolerance)


_MISSING = "(not there)"
_ROWS_OF_THE_AUDIT = "audit.rows"
"""Where rows of the data add further rows, one per covariate."""


def _walk(
    printed: Any,
    again: Any,
    place: str,
    tolerance: float,
    stated: tuple[str, ...],
    *,
    away: bool,
    scale: float = 0.0,
) -> Iterator[Checked]:
    told = any(place == name or place.startswith(f"{name}.") for name in stated)
    if isinstance(printed, Mapping) and isinstance(again, Mapping):
        away = away or any(isinstance(again.get(key), str) and _is_away(again[key]) for key in _TOLD)
        scale = _largest(again.values())
        for key in dict.fromkeys([*printed, *again]):
            below = f"{place}.{key}" if place else str(key)
            left, right = printed.get(key, _MISSING), again.get(key, _MISSING)
            gone = away or (place == _ROWS_OF_THE_AUDIT and key not in again)
            yield from _walk(left, right, below, tolerance, stated, away=gone, scale=scale)
        return
    if isinstance(printed, list) and isinstance(again, list) and len(printed) == len(again):
        scale = max(_largest(again), *(_largest(row) for row in again if isinstance(row, list)), 0.0)
        for number, (left, right) in enumerate(zip(printed, again, strict=True)):
            yield from _walk(left, right, f"{place}.{number}", tolerance, stated, away=away, scale=scale)
        return
    if told:
        yield Checked(place, _leaf(printed), _leaf(again), STATED)
    elif away:
        yield Checked(place, _leaf(printed), _leaf(again), NEEDS_ROWS)
    else:
        same = _same(printed, again, tolerance, scale)
        yield Checked(place, _leaf(printed), _leaf(again), SAME if same else DIFFERS)


def _is_away(text: str) -> bool:
    return any(phrase in text for phrase in _AWAY)


def _largest(values: Any) -> float:
    sizes = [
        abs(v) for v in values if isinstance(v, int | float) and not isinstance(v, bool) and math.isfinite(v)
    ]
    return float(max(sizes, default=0.0))


def _same(printed: Any, again: Any, tolerance: float, scale: float) -> bool:
    if isinstance(printed, bool) or isinstance(again, bool) or printed is None or again is None:
        return type(printed) is type(again) and printed == again
    if isinstance(printed, int | float) and isinstance(again, int | float):
        room = tolerance * max(abs(printed), abs(again)) + _NUMBER_FREE * scale
        return printed == again or abs(printed - again) <= room
    if isinstance(printed, str) and isinstance(again, str):
        return printed == again or _same_text(printed, again)
    return bool(printed == again)


def _same_text(printed: str, again: str) -> bool:
    """Whether two texts differ only in the last digit of numbers that carry decimals."""
    if _NUMBER.sub("#", printed) != _NUMBER.sub("#", again):
        return False
    for left, right in zip(_NUMBER.findall(printed), _NUMBER.findall(again), strict=True):
        if left != right and not _one_unit_apart(left, right):
            return False
    return True


def _one_unit_apart(left: str, right: str) -> bool:
    try:
        a, b = float(left.replace(",", "")), float(right.replace(",", ""))
    except ValueError:
        return False
    mantissa, _, power = left.partition("e")
    if "." not in mantissa and not power:
        return False  # a count
    places = len(mantissa.partition(".")[2])
    return abs(a - b) <= 1.01 * 10.0 ** (int(power or 0) - places)


def _leaf(value: Any) -> float | int | str | bool | None:
    if isinstance(value, Mapping | list):
        return f"({len(value)} entries)"
    return value if value is None or isinstance(value, bool | int | float) else str(value)


def _shown(value: float | int | str | bool | None) -> str:
    return shorten("none" if value is None else str(value), 24)
