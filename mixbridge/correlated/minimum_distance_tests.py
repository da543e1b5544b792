"""Tests inside minimum distance: overidentification, no correlation, the restriction to unit means."""

from __future__ import annotations

from collections.abc import Mapping
from itertools import pairwise

import numpy as np
import pandas as pd
import scipy
from numpy.typing import NDArray

from mixbridge.correlated.minimum_distance import Distance
from mixbridge.correlated.projection_columns import Origin
from mixbridge.correlated.reduced_form import ReducedForm

__all__ = ["MEANING", "tests_of"]

FloatArray = NDArray[np.float64]

MEANING: Mapping[str, str] = {
    "overidentification": (
        "all that the model says of the reduced form: covariates of other periods matter through the unit effect "
        "only, and one slope holds in all periods"
    ),
    "no correlation": "the unit effect is unrelated to the covariates of all periods",
    "equal over periods": "coefficients of the projection do not differ by period: unit means suffice (Mundlak 1978)",
}
SINGULAR = 1e-12
"""Smallest over largest eigenvalue of a correlation matrix below which it is singular: about four digits are left."""
HEADER = [
    "tested",
    "weights",
    "kind",
    "statistic",
    "df",
    "p_value",
    "p_few_units",
    "reference",
    "meaning",
]


def tests_of(
    form: ReducedForm, distances: tuple[Distance, ...], origins: Mapping[str, Origin]
) -> pd.DataFrame:
    """Test the restrictions of the model on the reduced form, and those inside its projection.

    With optimal weights the Wald statistic of linear restrictions is the difference of the distances with and without
    them, one number. For few units, with c and d the factor of the covariance and the degrees of freedom of
    `Distance`, ``W/c (d - k + 1)/(d k)`` is compared with F(k, d - k + 1): Hotelling's form, and with optimal weights
    Rao's test of additional information (1948, from memory).

    Returns
    -------
    DataFrame
        ``tested, weights, kind, statistic, df, p_value, p_few_units, reference, meaning``.
    """
    rows: list[tuple[object, ...]] = []
    restrictions = _restrictions(form, origins)
    for found in distances:
        name = "overidentification"
        law = (found.distance, found.df, found.p_value, found.p_few_units)
        why = found.reference if found.estimated else found.status
        rows.append((name, found.weights, "distance", *law, why, MEANING[name]))
        if not found.estimated:
            continue
        kind = "difference of distances" if found.weights == "optimal" else "Wald"
        for tested, matrix in restrictions.items():
            rows.append((tested, found.weights, kind, *_wald(found, matrix), MEANING[tested]))
    return pd.DataFrame(rows, columns=HEADER)


def _restrictions(form: ReducedForm, origins: Mapping[str, Origin]) -> dict[str, FloatArray]:
    """Return restriction matrices on the identified parameters of the projection."""
    names, kept = form.names, set(form.kept.tolist())
    places = [j for j, name in enumerate(names) if name in origins and j in kept]
    series: dict[str, list[int]] = {}
    for j in places:
        series.setdefault(origins[names[j]].column, []).append(j)
    equal = []
    for own in series.values():
        for a, b in pairwise(own):
            row = np.zeros(len(names))
            row[a], row[b] = 1.0, -1.0
            equal.append(row)
    found = {"no correlation": np.eye(len(names))[places]}
    if equal:
        found["equal over periods"] = np.array(equal)
    return {name: matrix for name, matrix in found.items() if len(matrix)}


def _wald(found: Distance, matrix: FloatArray) -> tuple[float, int, float, float, str]:
    """Return the Wald statistic of ``matrix @ theta = 0``, degrees of freedom, two p values and their reference."""
    kept = np.isfinite(found.beta)
    rows = matrix[:, kept]
    gap, spread = rows @ found.beta[kept], rows @ found.covariance[np.ix_(kept, kept)] @ rows.T
    k, d = matrix.shape[0], found.residual_df
    nothing = np.nan, k, np.nan, np.nan
    if not d >= k:
        shown = 0 if not np.isfinite(d) else int(d)
        return (
            *nothing,
            f"not estimable: {k} restrictions, {shown} residual degrees of freedom of their covariance",
        )
    length = np.sqrt(np.diag(spread))
    if not (length > 0.0).all():
        return *nothing, "not estimable: some standard error is zero"
    values, vectors = np.linalg.eigh(spread / np.outer(length, length))
    if values[0] < SINGULAR * values[-1]:
        return *nothing, "not estimable: the covariance of the restrictions is singular"
    statistic = float(((vectors.T @ (gap / length)) ** 2 / values).sum())
    few = statistic / found.inflation * (d - k + 1) / (d * k)
    return (
        statistic,
        k,
        float(scipy.stats.chi2.sf(statistic, k)),
        float(scipy.stats.f.sf(few, k, d - k + 1)),
        f"chi-square; for few units F({k}, {d - k + 1:.0f})",
    )
