"""A match as one screen. Nothing is computed here but the rounding of what is shown."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np

from mixbridge.display.text import WIDTH, columns, wrapped
from mixbridge.reconcile.match_parts import Candidate
from mixbridge.reconcile.match_record import MatchRecord

__all__ = ["MATCH_LIMIT", "match_screen"]

MATCH_LIMIT = (
    "A match shows compatibility: these figures can come from this route on these rows. It does not show that "
    "they did, nor what anybody meant by them; where none matches, other rows, another model or a slip of copying "
    "are open too."
)
"""Below every match."""
SHOWN = 10


def match_screen(record: MatchRecord) -> str:
    """Return a match as text of at most 100 columns.

    Parameters
    ----------
    record : MatchRecord
    """
    parts = [
        _verdict(record),
        _candidates(record),
        _ties(record),
        _ratios(record),
        _consistency(record),
        _faults(record),
        _chance(record),
        _searched(record),
        _wrapped(MATCH_LIMIT),
    ]
    return "\n\n".join("\n".join(part) for part in parts if part)


def _verdict(record: MatchRecord) -> list[str]:
    given = ", ".join(f"{figure.quantity} {figure.text}" for figure in record.figures)
    count, best = len(record.figures), record.best
    if record.all_matched:
        many = len(record.classes)
        within = "" if record.complete else " among those searched"
        what = (
            f"one candidate is compatible with all {count} figures{within}: {record.classes[0].label}"
            if many == 1
            else f"{many} candidates that print differently in full are compatible with all {count} figures{within}"
        )
    else:
        what = f"no candidate is compatible with all {count} figures; the nearest reproduce {best} of {count}"
    return [*_wrapped(f"Printed: {given}"), *_wrapped(what[0].upper() + what[1:] + ".")]


def _candidates(record: MatchRecord) -> list[str]:
    rows = [("candidate", "matched", "first figure it fails", "computed", "off by")]
    shown = _distinct(record.candidates)
    for one in shown[:SHOWN]:
        first = one.first_failure
        if first is None:
            rows.append((_cut(_name(one), 38), f"{one.matched}/{one.figures}", "none", "", ""))
            continue
        rows.append(
            (
                _cut(_name(one), 38),
                f"{one.matched}/{one.figures}",
                _cut(f"{first.quantity} {first.printed}", 24),
                _number(first.computed),
                _off(first.units_off),
            )
        )
    lines = [
        "Candidates; the distance is in units of the last printed digit",
        *(line[:WIDTH] for line in columns(rows)),
    ]
    if len(shown) > SHOWN:
        lines.append(f"  and {len(shown) - SHOWN} more in table()")
    for name in dict.fromkeys(
        name for one in record.candidates if one.matched == record.best for name in one.naming
    ):
        lines += _wrapped(f"Reading of the names: {name}.")
    return lines


def _name(one: Candidate) -> str:
    return one.label + (" (digits cut off)" if one.rounding != "nearest" else "")


def _distinct(candidates: Sequence[Candidate]) -> list[Candidate]:
    """Return candidates with the first of each route and count of figures, then the rest of the best."""
    best = candidates[0].matched if candidates else 0
    seen: set[tuple[str, int]] = set()
    found = []
    for one in candidates:
        key = (one.route, one.matched)
        if one.matched == best or key not in seen:
            found.append(one)
        seen.add(key)
    return found


def _ties(record: MatchRecord) -> list[str]:
    if not record.all_matched:
        return []
    lines: list[str] = []
    for place, tied in enumerate(record.classes[:SHOWN], start=1):
        same = [*(one.label for one in tied.candidates[1:]), *tied.candidates[0].same]
        if same:
            lines += _wrapped(f"{tied.label} cannot be told on these data from {'; '.join(same)}.", "  ")
        if tied.only_cut and len(record.classes) > 1:
            lines += _wrapped(f"{tied.label} only if digits were cut off, not rounded (class {place}).", "  ")
    for one in record.separators:
        apart = "all of them" if one.parts == len(record.classes) else f"{one.parts} groups of them"
        listed = _listed(record, one.values)
        lines += _wrapped(f"{one.quantity} to {one.digits} digits would separate {apart}: {listed}", "  ")
    if len(record.classes) > 1 and not record.separators:
        lines.append("  no further figure of ten digits separates them")
    return ["Ties", *lines] if lines else []


def _listed(record: MatchRecord, values: tuple[str, ...]) -> str:
    shown = [f"{tied.label} {value}" for tied, value in zip(record.classes, values, strict=False)]
    return "; ".join(shown[:6]) + (f"; and {len(shown) - 6} more." if len(shown) > 6 else ".")


def _ratios(record: MatchRecord) -> list[str]:
    if not record.ratios:
        return []
    lines = ["Variance ratios that the printed coefficients allow"]
    for union in record.ratios:
        rows = f" (one-row units {union.one_row_units})" if len(record.ratios) > 1 else ""
        if not union.intervals:
            alone = [term for term, intervals in union.by_term if not intervals]
            why = (
                f"{', '.join(alone)} alone rules out every ratio"
                if alone
                else "no ratio suits all of them at once"
            )
            lines += _wrapped(
                f"none{rows}: {why}; a coefficient is misprinted, or they are not on the curve of this model.",
                "  ",
            )
            continue
        ends = "; ".join(f"{_number(low)} to {_number(high)}" for low, high in union.intervals[:6])
        names = [label for label, kept, _ in record.inside if kept == union.one_row_units]
        lines += _wrapped(f"{ends}{rows}", "  ")
        lines += _wrapped(f"inside: {', '.join(names) if names else 'no route searched'}", "  ")
        if not union.complete:
            lines.append("  parts of the curve were judged by their ends only: too many turns")
    return lines


def _consistency(record: MatchRecord) -> list[str]:
    if not record.consistency:
        return []
    lines = ["Inside the printed set, whatever the route"]
    for one in record.consistency:
        naming = f" (if {' or '.join(one.naming[:3])})" if one.naming and len(one.naming) <= 3 else ""
        ends = f"{_number(one.low)} to {_number(one.high)}"
        if one.holds:
            lines += _wrapped(f"consistent: {one.relation}: {one.printed}, implied {ends}{naming}", "  ")
        else:
            off = f"off by {_off(one.units_off)} in the last digit"
            lines += _wrapped(
                f"CONTRADICTION: {one.relation}: printed {one.printed}, implied {ends}, {off}", "  "
            )
    return lines


def _faults(record: MatchRecord) -> list[str]:
    if not record.faults or record.all_matched:
        return []
    lines = [
        "Hypotheses of a slip in copying (each would complete a candidate; none is shown to have happened)"
    ]
    for one in record.faults[:SHOWN]:
        names = ", ".join(one.labels[:3]) + (
            f" and {len(one.labels) - 3} more" if len(one.labels) > 3 else ""
        )
        weak = f", weak: one of {one.tried} readings tried" if one.weak else f" ({one.tried} tried)"
        lines += _wrapped(
            f"{one.quantity} {one.printed}: {one.hypothesis}, {one.corrected}: {names}{weak}", "  "
        )
    if len(record.faults) > SHOWN:
        lines.append(f"  and {len(record.faults) - SHOWN} more in faults_table()")
    return lines


def _chance(record: MatchRecord) -> list[str]:
    chance = record.chance
    least = min(chance.figures, key=lambda one: one.probability)
    text = (
        f"Chance: the most telling figure, {least.quantity}, is matched by a value drawn evenly from the range "
        f"searched with probability {_share(least.probability)}. All figures of one wrong printout: between "
        f"{_share(chance.independent)} (independent) and {_share(chance.dependent)} (moving together); of at least "
        f"one among {chance.distinct} distinct printouts: between {_share(chance.any_independent)} and "
        f"{_share(chance.any_dependent)}."
    )
    return _wrapped(text)


def _searched(record: MatchRecord) -> list[str]:
    account = record.account
    text = (
        f"Searched: {account.fits} distinct fits, {account.printouts} printouts, {account.namings} joint readings of "
        f"the names. Standard errors: {'; '.join(account.stages) or 'not needed'}."
    )
    if account.bounded:
        text += f" {account.bounded} further parts could not have reached the best and were not computed."
    if account.skipped:
        text += f" Not searched: {'; '.join(account.skipped)} (robust='always' does); ties may be missing."
    if account.absent:
        shown = "; ".join(f"{label}: {why}" for label, why in account.absent[:4])
        text += f" Without figures here: {shown}" + (
            f" and {len(account.absent) - 4} more." if len(account.absent) > 4 else "."
        )
    return _wrapped(text)


def _share(value: float) -> str:
    return f"{value:.2g}"


def _off(value: float) -> str:
    if np.isnan(value):
        return "no such figure"
    return f"{value:+.1f}" if abs(value) < 1e5 else f"{value:+.1e}"


def _number(value: float) -> str:
    if np.isnan(value):
        return "-"
    return "infinity" if np.isposinf(value) else f"{value:.6g}"


def _cut(text: str, width: int) -> str:
    return text if len(text) <= width else text[: width - 1] + "…"


def _wrapped(text: str, indent: str = "") -> list[str]:
    return wrapped([text], indent, f"{indent}  ")
