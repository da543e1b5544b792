"""Relations inside the printed set that hold for every route: no estimate is made here.

Each figure stands for an interval, under rounding or cutting; the others imply an interval for it by monotone interval
arithmetic. If the two do not meet, the set cannot come from one printout, whatever the route.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Iterator

import numpy as np

from mixbridge.ratio import Curve
from mixbridge.reconcile.match_parts import Consistency
from mixbridge.reconcile.match_values import weight_summary
from mixbridge.reconcile.printed import PrintedFigure
from mixbridge.reconcile.printed_quantities import BY_SIZE, Group, Naming, groups_of

__all__ = ["consistency_of"]

Interval = tuple[float, float]
Known = dict[str, Interval]


def consistency_of(figures: tuple[PrintedFigure, ...], curve: Curve) -> tuple[Consistency, ...]:
    """Check every relation for which the figures are there.

    Parameters
    ----------
    figures : tuple of PrintedFigure
    curve : Curve
        Only sizes, rows and numbers of units and columns are used.
    """
    by_name = {figure.quantity: figure for figure in figures}
    return (
        *_ratios_to_error(by_name),
        *_criteria(by_name, curve),
        *_score(by_name),
        *_components(figures, curve),
    )


def _made(
    relation: str, figure: PrintedFigure, implied: list[tuple[str, Interval]], every: bool = False
) -> Consistency:
    """Compare the printed figure with what is implied under each reading; it holds if one reading does."""
    low, high = figure.widest
    slack = 1e-9 * abs(figure.value)  # ends computed from other ends carry rounding
    met = [(name, ends) for name, ends in implied if ends[0] <= high + slack and ends[1] >= low - slack]
    names = tuple(name for name, _ in (met or implied) if name)

    def distance(ends: Interval) -> float:
        nearest = min(max(figure.value, ends[0]), ends[1])
        return figure.units_off(nearest)

    best = min(met or implied, key=lambda item: abs(distance(item[1])))[1]
    all_met = len(met) == len(implied)
    return Consistency(
        relation,
        figure.quantity,
        figure.text,
        best[0],
        best[1],
        bool(met),
        0.0 if met else distance(best),
        () if all_met and not every else names,
    )


def _ratios_to_error(by_name: dict[str, PrintedFigure]) -> Iterator[Consistency]:
    for name, figure in by_name.items():
        kind, _, term = name.partition(":")
        if kind not in ("z", "t") or not {f"b:{term}", f"se:{term}"} <= set(by_name):
            continue
        (b_low, b_high), (s_low, s_high) = by_name[f"b:{term}"].widest, by_name[f"se:{term}"].widest
        ends = [
            b / s if s > 0.0 else math.copysign(math.inf, b) for b in (b_low, b_high) for s in (s_low, s_high)
        ]
        yield _made(f"{kind} = b / se of {term}", figure, [("", (min(ends), max(ends)))])


def _criteria(by_name: dict[str, PrintedFigure], curve: Curve) -> Iterator[Consistency]:
    if "log_likelihood" in by_name:
        low, high = by_name["log_likelihood"].widest
        twice = (-2.0 * high, -2.0 * low)
        if "minus_2_log_likelihood" in by_name:
            yield _made("minus twice the log-likelihood", by_name["minus_2_log_likelihood"], [("", twice)])
    elif "minus_2_log_likelihood" in by_name:
        twice = by_name["minus_2_log_likelihood"].widest
    else:
        return
    most = curve.rank + curve.units + 2
    counts = range(most + 1) if most <= 10_000 else range(curve.rank + 3)
    for name, prices in (
        ("aic", {"": 2.0}),
        ("bic", {"log n": np.log(curve.n), "log N": np.log(curve.units)}),
    ):
        if name not in by_name:
            continue
        figure, implied = by_name[name], []
        for said, price in prices.items():
            for count in counts:
                label = f"{count} parameters" + (f", {said}" if said else "")
                implied.append((label, (twice[0] + price * count, twice[1] + price * count)))
        made = _made(
            f"{name} = minus twice the log-likelihood + a price for whole parameters", figure, implied
        )
        yield made


def _score(by_name: dict[str, PrintedFigure]) -> Iterator[Consistency]:
    if {"lagrange_multiplier", "lagrange_multiplier_one_sided"} <= set(by_name):
        low, high = by_name["lagrange_multiplier_one_sided"].widest
        ends = (0.0 if low <= 0.0 <= high else min(low**2, high**2), max(low**2, high**2))
        yield _made("square of the one-sided score statistic", by_name["lagrange_multiplier"], [("", ends)])


def _components(figures: tuple[PrintedFigure, ...], curve: Curve) -> Iterator[Consistency]:
    names = [figure.quantity for figure in figures]
    groups = groups_of(names, len(curve.sizes) == 1)
    readings = [(naming, known) for naming, known in _component_readings(figures, groups)]
    for name, relation, rule in RELATIONS:
        figure = next((each for each in figures if each.quantity == name), None)
        if figure is None:
            continue
        implied = [(_said(naming), ends) for naming, known in readings if (ends := rule(known)) is not None]
        if implied:
            yield _made(relation, figure, implied)
    for group in groups:
        for place in group.places:
            figure = figures[place]
            if figure.quantity.partition(":")[0] not in BY_SIZE:
                continue
            implied = []
            for naming, known in readings:
                ratio = _ratio(known)
                if ratio is None:
                    continue
                for own, keys in group.readings:
                    meaning, _, summary = keys[group.places.index(place)].partition(":")
                    weights = sorted(weight_summary(curve, end, meaning, summary) for end in ratio)
                    implied.append((_said((*naming, *own)), (weights[0], weights[1])))
            if implied:
                yield _made(
                    f"{figure.quantity} from the printed components and the unit sizes", figure, implied
                )


def _component_readings(
    figures: tuple[PrintedFigure, ...], groups: tuple[Group, ...]
) -> Iterator[tuple[Naming, Known]]:
    """Yield each reading of the sigma with what is known of variances, ICC and ratio."""
    fixed: Known = {}
    sigma = next((g for g in groups if figures[g.places[0]].quantity.startswith("sigma")), None)
    for figure in figures:
        _enter(fixed, figure.quantity, figure)
    if sigma is None:
        yield (), fixed
        return
    for naming, keys in sigma.readings:
        known = dict(fixed)
        for place, key in zip(sigma.places, keys, strict=True):
            _enter(known, key, figures[place])
        yield naming, known


def _enter(known: Known, key: str, figure: PrintedFigure) -> None:
    low, high = figure.widest
    if key in ("unit_variance", "idiosyncratic_variance", "icc", "ratio"):
        known[key] = (max(low, 0.0), high)
    elif key in ("unit_sd", "idiosyncratic_sd"):
        known.setdefault(key.replace("_sd", "_variance"), (max(low, 0.0) ** 2, max(high, 0.0) ** 2))


def _from_variances(known: Known) -> Interval | None:
    if not {"unit_variance", "idiosyncratic_variance"} <= set(known):
        return None
    (u_low, u_high), (e_low, e_high) = known["unit_variance"], known["idiosyncratic_variance"]
    return (u_low / e_high if e_high > 0.0 else math.inf), (u_high / e_low if e_low > 0.0 else math.inf)


def _from_icc(known: Known) -> Interval | None:
    if "icc" not in known:
        return None
    low, high = known["icc"]
    return low / (1.0 - low) if low < 1.0 else math.inf, high / (1.0 - high) if high < 1.0 else math.inf


def _ratio(known: Known) -> Interval | None:
    """Return what is known of the ratio: the intersection of all that says something about it."""
    found = [
        ends for ends in (_from_variances(known), _from_icc(known), known.get("ratio")) if ends is not None
    ]
    if not found:
        return None
    low, high = max(ends[0] for ends in found), min(ends[1] for ends in found)
    return (low, high) if low <= high else found[0]  # a contradiction among them is a line of its own


def _icc(known: Known) -> Interval | None:
    ratio = _from_variances(known)
    if ratio is None:
        ratio = known.get("ratio")
    if ratio is None:
        return None
    low, high = (end / (1.0 + end) if math.isfinite(end) else 1.0 for end in ratio)
    return low, high


RELATIONS: tuple[tuple[str, str, Callable[[Known], Interval | None]], ...] = (
    ("icc", "icc from the printed variances or ratio", _icc),
    ("ratio", "ratio of the printed variances", _from_variances),
)


def _said(naming: Naming) -> str:
    return "; ".join(f"{axis} {choice}" for axis, choice in naming)
