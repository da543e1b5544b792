"""Hypotheses of a slip in copying: one reading of a figure that a candidate would need to reproduce the whole set.

They are hypotheses and labelled so. A replaced digit fits easily by chance; the number of readings tried stands beside
each.
"""

from __future__ import annotations

import itertools
from collections.abc import Iterator, Sequence

from mixbridge.errors import DataError
from mixbridge.reconcile.match_parts import Candidate, Fault
from mixbridge.reconcile.printed import PrintedFigure, parse_figure

__all__ = ["faults_of"]

MOST_FAILURES = 2
Edit = tuple[str, str]


def faults_of(
    candidates: Sequence[Candidate], values: Sequence[tuple[float, ...]], figures: tuple[PrintedFigure, ...]
) -> tuple[Fault, ...]:
    """Find slips that would complete a candidate.

    Parameters
    ----------
    candidates : sequence of Candidate
        Best first; those that miss one or two figures are looked at.
    values : sequence of tuple of float
        Computed values of each, by figure.
    figures : tuple of PrintedFigure
    """
    found: dict[tuple[str, str, str, str, int, bool], list[str]] = {}
    for candidate, computed in zip(candidates, values, strict=True):
        # with fewer figures left than explained away, nothing stands behind the hypothesis
        if not 1 <= len(candidate.failures) <= MOST_FAILURES or candidate.matched <= len(candidate.failures):
            continue
        places = [
            i
            for i, figure in enumerate(figures)
            if figure.quantity in {f.quantity for f in candidate.failures}
        ]
        for key in _explained(places, computed, figures):
            found.setdefault(key, []).append(candidate.label)
    faults = [Fault(*key[:4], tuple(labels), key[4], key[5]) for key, labels in found.items()]
    return tuple(sorted(faults, key=lambda fault: fault.weak))


def _explained(
    places: list[int], computed: tuple[float, ...], figures: tuple[PrintedFigure, ...]
) -> Iterator[tuple[str, str, str, str, int, bool]]:
    if len(places) == 2:
        left, right = (figures[place] for place in places)
        if _can(left.interval, computed[places[1]]) and _can(right.interval, computed[places[0]]):
            names = f"{left.quantity} and {right.quantity}"
            yield (
                "the two figures swapped",
                names,
                f"{left.text}, {right.text}",
                f"{right.text}, {left.text}",
                1,
                False,
            )
        return
    place = places[0]
    figure, value = figures[place], computed[place]
    other = _measure(figure.quantity)
    if other is not None and _can(
        figure.interval, value**2 if other == "variance" else max(value, 0.0) ** 0.5
    ):
        yield f"a {other} printed under this name", figure.quantity, figure.text, f"{value:.6g}", 1, False
    for kind, edits in _edits(figure.text).items():
        for text in edits:
            try:
                edited = parse_figure(figure.quantity, text)
            except DataError:
                continue
            if _can(edited.interval, value):
                weak = kind == "one digit replaced"
                yield kind, figure.quantity, figure.text, text, len(edits), weak


def _can(interval: tuple[float, float], value: float) -> bool:
    slack = 1e-9 * abs(value)
    return interval[0] - slack <= value <= interval[1] + slack


def _measure(quantity: str) -> str | None:
    if quantity.endswith("_sd"):
        return "variance"
    return "standard deviation" if quantity.endswith("_variance") else None


def _edits(text: str) -> dict[str, list[str]]:
    """Return other readings of a printed text, by kind of slip."""
    bare = text.strip().rstrip("*").replace("−", "-")
    signed = bare.lstrip("+-")
    sign = "" if bare.startswith("-") else "-"
    head = "-" if bare.startswith("-") else ""
    digits = [at for at, letter in enumerate(signed) if letter.isdigit()]
    shown = {
        "a minus dropped" if sign else "a minus added": [sign + signed],
        "two neighbouring digits exchanged": [
            head + _exchanged(signed, a, b) for a, b in itertools.pairwise(digits) if signed[a] != signed[b]
        ],
        "the decimal point moved by one place": [head + moved for moved in _moved(signed)],
    }
    significant = len(signed.replace(".", "").replace(",", "").lstrip("0"))
    if significant >= 3:
        shown["one digit replaced"] = [
            head + signed[:at] + new + signed[at + 1 :]
            for at in digits
            for new in "0123456789"
            if new != signed[at]
        ]
    return shown


def _exchanged(text: str, a: int, b: int) -> str:
    letters = list(text)
    letters[a], letters[b] = letters[b], letters[a]
    return "".join(letters)


def _moved(text: str) -> list[str]:
    """Return a plain decimal with its point one place to the left and to the right."""
    plain = text.replace(",", "")
    if not plain.replace(".", "", 1).isdigit():
        return []
    whole, _, rest = plain.partition(".")
    found = [f"{whole[:-1] or '0'}.{whole[-1:]}{rest}"] if whole else [f"0.0{rest}"]
    if rest:
        found.append(f"{whole}{rest[0]}.{rest[1:]}".removesuffix("."))
    return found
