"""Where the gap between two routes comes from: coefficient, variance ratio, interval.

On given data two routes on the curve differ in a coefficient only through the ratio: ``beta_a - beta_b = beta(psi_a)
- beta(psi_b)``. The ratio itself is taken from b to a through a chain of estimators that exist, one change at a
time (`attribution_changes`); each link moves the ratio, and with it the coefficient, by a number of its own, and
the links add up to the gap. Ratios are shown as ``lambda = 1 - (1 + T psi)^(-1/2)`` at the median unit size T, which
is finite for `within`.

Truncation is a link of its own: a route with a negative unit variance is passed through at its ratio before
truncation as long as all weights ``1 / (1 + T psi)`` stay positive, and the step to zero is shown apart.

Where several legal chains exist, a cause's share is its average over them, with the range; a chain without that
cause counts as zero, so that the averages add up too.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np
import pandas as pd

from mixbridge.display import Printed
from mixbridge.errors import OptionError
from mixbridge.inference.contrasts import Contrast
from mixbridge.inference.references import row_of
from mixbridge.ratio import Curve
from mixbridge.reconcile.agreement import Interval
from mixbridge.reconcile.attribution_chains import Link, links_between, median_size
from mixbridge.reconcile.attribution_contrast import GapPart, joint_contrasts, off_curve_parts
from mixbridge.reconcile.attribution_node import CAUSES, label_of
from mixbridge.reconcile.attribution_positions import Positions
from mixbridge.reconcile.attribution_text import Gap, attribution_sentences
from mixbridge.reconcile.attribution_width import StandardErrors, WidthFactor, width_factors
from mixbridge.routes import Fit, fit_route

__all__ = ["Attribution", "attribute", "attribute_all"]

OFF_CURVE = ("between", "first_difference")


@dataclass(frozen=True, slots=True, eq=False)
class Attribution(Printed):
    """One gap, split.

    Attributes
    ----------
    gap : Gap
        Term, both routes, both estimates, their difference and the standard error it is measured in.
    chains : tuple of tuple of Link
        Legal chains from b to a, shortest first; empty where a route is off the curve, or both are one point.
    factors : tuple of WidthFactor
        Of the quotient of half-widths; empty where no intervals were given.
    parts : tuple of GapPart
        Where a route is off the curve: the gap as contrasts.
    joint : tuple of Contrast
        With them: the joint test over all coefficients that both sides determine.
    base : str
        With them: the route whose ratio and variance their standard errors take.
    notes : tuple of str
        What could not be used, and why.
    """

    gap: Gap
    chains: tuple[tuple[Link, ...], ...]
    factors: tuple[WidthFactor, ...]
    parts: tuple[GapPart, ...]
    joint: tuple[Contrast, ...]
    base: str
    notes: tuple[str, ...]

    @property
    def causes(self) -> pd.DataFrame:
        """Average share of each cause over the legal chains, with its range; largest first.

        Columns ``cause``, ``meaning``, then for the weight lambda, the coefficient, and the coefficient in standard
        errors of b: average, ``_lowest``, ``_highest``; and ``chains``, how many of them have the cause.
        """
        found: dict[str, list[dict[str, float]]] = {}
        for cause in dict.fromkeys(link.cause for chain in self.chains for link in chain):
            found[cause] = [
                {
                    "weight": sum((link.weight_change for link in chain if link.cause == cause), 0.0),
                    "coefficient": sum(
                        (link.coefficient_change for link in chain if link.cause == cause), 0.0
                    ),
                    "has": float(any(link.cause == cause for link in chain)),
                }
                for chain in self.chains
            ]
        rows = []
        for cause, shares in found.items():
            row: dict[str, object] = {"cause": cause, "meaning": CAUSES[cause]}
            for name, unit in (("weight", 1.0), ("coefficient", 1.0), ("in_se", self.gap.standard_error)):
                key = "coefficient" if name == "in_se" else name
                values = np.array([share[key] for share in shares]) / unit
                row |= {name: values.mean(), f"{name}_lowest": values.min(), f"{name}_highest": values.max()}
            row["chains"] = int(sum(share["has"] for share in shares))
            rows.append(row)
        columns = ["cause", "meaning"]
        for name in ("weight", "coefficient", "in_se"):
            columns += [name, f"{name}_lowest", f"{name}_highest"]
        table = pd.DataFrame(rows, columns=[*columns, "chains"])
        return table.sort_values("weight", key=abs, ascending=False, kind="stable", ignore_index=True)

    @property
    def links(self) -> pd.DataFrame:
        """Every link of every legal chain from b to a."""
        rows = [
            [
                number,
                step,
                link.move.start,
                link.move.end,
                link.cause,
                link.move.sentence,
                link.move.ratio_from,
                link.move.ratio_to,
                link.weight_from,
                link.weight_to,
                link.weight_change,
                link.coefficient_change,
                link.coefficient_change / self.gap.standard_error,
            ]
            for number, chain in enumerate(self.chains, start=1)
            for step, link in enumerate(chain, start=1)
        ]
        columns = [
            "chain",
            "step",
            "from",
            "to",
            "cause",
            "change",
            "ratio_from",
            "ratio_to",
            "weight_from",
            "weight_to",
            "weight_change",
            "coefficient_change",
            "in_se",
        ]
        return pd.DataFrame(rows, columns=columns)

    @property
    def half_width(self) -> pd.DataFrame:
        """Factors of (half-width of a) / (half-width of b): ``log`` adds up to the logarithm of the quotient.

        Columns ``factor, log, log_lowest, log_highest, relative`` (the factor minus one), and what each route uses:
        ``a``, ``b``.
        """
        rows = [
            [item.name, item.log, item.lowest, item.highest, np.expm1(item.log), item.a, item.b]
            for item in self.factors
        ]
        columns = ["factor", "log", "log_lowest", "log_highest", "relative", "a", "b"]
        return pd.DataFrame(rows, columns=columns)

    @property
    def contrast(self) -> pd.DataFrame:
        """Parts of a gap to a route off the curve: ``part, difference, standard_error, z``."""
        rows = [[item.name, item.value, item.standard_error, item.z] for item in self.parts]
        return pd.DataFrame(rows, columns=["part", "difference", "standard_error", "z"])

    @property
    def sentences(self) -> tuple[str, ...]:
        """The gap in plain words, every number from the tables."""
        return attribution_sentences(
            self.gap,
            chains=self.chains,
            causes=self.causes,
            factors=self.factors,
            parts=self.parts,
            joint=self.joint,
            base=self.base,
            notes=self.notes,
        )

    def __str__(self) -> str:
        """Return the sentences, one per line."""
        return "\n".join(self.sentences)


def attribute(
    curve: Curve,
    fits: Mapping[str, Fit],
    term: str,
    a: Fit,
    b: Fit,
    *,
    intervals: tuple[Mapping[str, Interval], Mapping[str, Interval]] | None = None,
    errors: StandardErrors | None = None,
    longer: int = 1,
    positions: Positions | None = None,
) -> Attribution:
    """Split the gap between two routes in one coefficient, and the quotient of their half-widths.

    Parameters
    ----------
    curve : Curve
    fits : mapping of str to Fit
        Fits of this panel; what a chain needs beyond them is fitted.
    term : str
    a, b : Fit
        The gap is a - b, and chains run from b to a. Both were fitted on `curve`.
    intervals : pair of mapping of str to Interval, optional
        By term, of a and of b, at one level.
    errors : callable, optional
        As in `attribution_width.width_factors`.
    longer : int
        How many more changes than the fewest a legal chain may have.
    positions : Positions, optional
        Of this panel, to share work between calls.

    Returns
    -------
    Attribution

    Raises
    ------
    OptionError
        If there is no such term, or the two used other rows than the curve.
    IdentificationError
        If a route does not estimate the term.
    """
    for fit in (a, b):
        row_of(fit, term)
        if (fit.rows, fit.terms) != (curve.n, curve.names):
            raise OptionError(
                f"route {fit.route!r} used {fit.rows} rows, the panel has {curve.n}: a gap is split on the same "
                "rows only; compare both without one-row units, or both with them."
            )
    where = Positions(curve, fits) if positions is None else positions
    at = curve.names.index(term)
    pair = None if intervals is None else (intervals[0][term], intervals[1][term])
    size = median_size(curve)
    gap = Gap(
        term=term,
        a=label_of(a),
        b=label_of(b),
        estimate_a=float(a.beta[at]),
        estimate_b=float(b.beta[at]),
        standard_error=float(b.standard_errors.iloc[at]) if pair is None else pair[1].standard_error,
        ratio_a=a.ratio,
        ratio_b=b.ratio,
        size=size,
        quotient=np.nan if pair is None else pair[0].half_width / pair[1].half_width,
    )
    factors = () if pair is None else width_factors(a, b, term, pair, errors)
    if a.route in OFF_CURVE or b.route in OFF_CURVE:
        base = _base(curve, fits, a, b)
        within = fits.get("within") or fit_route(curve, "within", {}, "not asked for")
        return Attribution(
            gap=gap,
            chains=(),
            factors=(),
            parts=off_curve_parts(curve, a, b, term, within=within, base=base),
            joint=joint_contrasts(curve, a, b, base),
            base=base.route,
            notes=(),
        )
    chains, notes = links_between(where, a, b, term, longer)
    return Attribution(gap, chains, factors, (), (), "", notes)


def attribute_all(
    curve: Curve,
    fits: Mapping[str, Fit],
    primary: str,
    intervals: Mapping[str, Mapping[str, Interval]],
    terms: Sequence[str] | None = None,
) -> tuple[Attribution, ...]:
    """Split the gap of every route to the primary one, for every term that both estimate.

    Parameters
    ----------
    curve : Curve
    fits : mapping of str to Fit
    primary : str
        Key of the route that gaps are measured from.
    intervals : mapping of str to mapping of str to Interval
        By route and term, at one level.
    terms : sequence of str, optional
        All unless given.

    Returns
    -------
    tuple of Attribution
        By term, then by route.
    """
    positions = Positions(curve, fits)
    base = fits[primary]
    found = []
    for term in curve.names if terms is None else terms:
        at = curve.names.index(term)
        for key, fit in fits.items():
            same_rows = fit.rows == base.rows == curve.n
            if key == primary or not same_rows or not np.isfinite([fit.beta[at], base.beta[at]]).all():
                continue
            found.append(
                attribute(
                    curve,
                    fits,
                    term,
                    fit,
                    base,
                    intervals=(intervals[key], intervals[primary]),
                    positions=positions,
                )
            )
    return tuple(found)


def _base(curve: Curve, fits: Mapping[str, Fit], a: Fit, b: Fit) -> Fit:
    """Return the curve fit whose ratio the contrasts take: one of the two, else REML."""
    for fit in (b, a):
        if np.isfinite(fit.ratio) and fit.idiosyncratic_variance > 0.0:
            return fit
    return fits.get("reml") or fit_route(curve, "reml", {}, "not asked for")
