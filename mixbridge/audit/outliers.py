"""Outlying rows and units: the largest residual of each kind against the largest of as many normal ones.

Rows: ``e_it / sqrt(s^2 (1 - 1/T_i - h_it))`` with h the leverage on QX, turned into an externally studentised residual,
t with ``n - N - K_w - 1`` degrees of freedom. Units: standardised remainders, normal. p-values are those of the largest
one, times the number of rows or units (Bonferroni), at most one.
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from scipy import stats

from mixbridge.audit.bench import Bench
from mixbridge.audit.normality import standardised_remainders
from mixbridge.audit.record import Finding
from mixbridge.errors import IdentificationError

__all__ = ["outlying_rows", "outlying_units"]

SHOWN = 3


def outlying_rows(bench: Bench) -> Sequence[Finding]:
    """Find rows far from the rest of their unit."""
    rows, df = bench.rows, bench.curve.df_within - 1
    if df < 2:
        raise IdentificationError("fewer than three degrees of freedom within units")
    room = (
        1.0 - 1.0 / rows.groups.spread(rows.groups.sizes.astype(float)) - (bench.within_basis**2).sum(axis=1)
    )
    usable = room > 1e-8
    e, square = bench.within_residual, float(bench.within_residual @ bench.within_residual)
    inner = np.where(usable, e**2 / np.where(usable, room, 1.0), 0.0)
    outer = np.sign(e) * np.sqrt(inner * df / np.maximum(square - inner, 1e-300))
    at = np.argsort(-np.abs(outer))[:SHOWN]
    p = min(1.0, 2.0 * float(usable.sum()) * float(stats.t.sf(abs(outer[at[0]]), df)))
    beyond = int((np.abs(outer) > 3.0).sum())
    expected = 2.0 * float(usable.sum()) * float(stats.t.sf(3.0, df))
    labels = bench.study.panel.row_labels
    named = (
        ", ".join(f"{labels[rows.order[k]]} ({outer[k]:.1f})" for k in at) if bench.show_units else "hidden"
    )
    return [
        Finding(
            key="outlying_rows",
            evidence="externally studentised within residuals of rows, the largest",
            statistic=float(abs(outer[at[0]])),
            reference=f"t({df}), times {int(usable.sum())} rows",
            p_value=p,
            departure=f"{beyond} rows beyond 3, {expected:.1f} expected; largest (row label, value): {named}",
            consequence="within, first_difference and the curve lean on such rows; between leans on them "
            "through the unit mean only",
            conclusion=bench.verdict(
                p,
                "a row is further out than normal errors of equal variance give. That is no reason to drop it.",
                "Rows that pull the fit to themselves have small residuals; leaving out one unit at a "
                "time shows them.",
            ),
            numbers={
                "beyond_3": float(beyond),
                "expected_beyond_3": expected,
                "largest": float(abs(outer[at[0]])),
            },
        )
    ]


def outlying_units(bench: Bench) -> Sequence[Finding]:
    """Find units far from the rest."""
    z = standardised_remainders(bench)
    at = np.argsort(-np.abs(z))[:SHOWN]
    p = min(1.0, 2.0 * z.size * float(stats.norm.sf(abs(z[at[0]]))))
    keys = bench.study.panel.unit_keys
    codes = bench.rows.codes[bench.rows.groups.starts]
    named = ", ".join(f"{keys[codes[k]]} ({z[k]:.1f})" for k in at) if bench.show_units else "hidden"
    beyond, expected = int((np.abs(z) > 3.0).sum()), 2.0 * z.size * float(stats.norm.sf(3.0))
    return [
        Finding(
            key="outlying_units",
            evidence=f"unit remainders of {bench.primary.route} over their standard deviation, the largest",
            statistic=float(abs(z[at[0]])),
            reference=f"N(0, 1), times {z.size} units",
            p_value=p,
            departure=f"{beyond} units beyond 3, {expected:.1f} expected; largest (unit, value): {named}",
            consequence="between, pooled and the unit variance lean on such units; within does not",
            conclusion=bench.verdict(
                p,
                "a unit is further out than normal effects give. That is no reason to drop it.",
                "A unit that pulls the fit to itself, or the unit variance up, looks ordinary here; "
                "leaving out one unit at a time "
                "shows it.",
            ),
            numbers={
                "beyond_3": float(beyond),
                "expected_beyond_3": expected,
                "largest": float(abs(z[at[0]])),
            },
        )
    ]
