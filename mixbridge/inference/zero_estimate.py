"""The probability that a route estimates the unit variance as zero, under zero and under the fitted model.

*Quadratic routes* are truncated where ``y'Hy < 0``, H the combination of the route's two forms that estimates
``sigma_a^2``. Under normal errors ``y'Hy`` is a weighted sum of chi-squares. Its weights, the eigenvalues of
``V^(1/2) H V^(1/2)``, come from the size classes like those of `spectrum`: directions orthogonal to X inside
the within space and inside each class have known weights; the rest is a symmetric matrix of order ``K_w``
plus the sum of ranks. The probability is exact (`signed_sum`).

*ML and REML* can be zero only where the profile deviance does not fall at 0, ``g'(0) r(0) + m r'(0) >= 0``,
again the sign of a sum of chi-squares: an exact upper bound. It is attained when the deviance has one minimum
(always in balanced panels with ``cl(X)``: one eigenvalue); otherwise the estimate is zero less often, by the
chance of a lower minimum elsewhere, and the probability itself is simulated from the spectrum (Crainiceanu &
Ruppert 2004 give both).
"""

from __future__ import annotations

from collections.abc import Iterator, Mapping

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from mixbridge.errors import DataError
from mixbridge.inference.likelihood_ratio import draw_squares, suprema
from mixbridge.inference.pivot import no_pivot
from mixbridge.inference.signed_sum import probability_negative
from mixbridge.inference.spectrum import Spectrum, class_factors, spectrum_of
from mixbridge.ratio import Curve
from mixbridge.routes import Fit
from mixbridge.routes.fitting import named_route
from mixbridge.routes.forms import Form
from mixbridge.routes.likelihood import Kind
from mixbridge.routes.quadratic import QUADRATIC

__all__ = ["form_weights", "slope_weights", "zero_probabilities"]

FloatArray = NDArray[np.float64]
COLUMNS = ["route", "under", "ratio", "probability", "error", "exact", "method"]
SIGNED = "sign of a quadratic form, numerical inversion"


def zero_probabilities(
    curve: Curve, fits: Mapping[str, Fit], *, draws: int = 20_000, seed: int = 20_041
) -> pd.DataFrame:
    """Tabulate the probability of a zero estimate for each route that can give one.

    Parameters
    ----------
    curve : Curve
    fits : mapping of str to Fit
        Fits of this panel, one-row units as in the curve.
    draws, seed : int
        For ML and REML where the bound is not attained; no simulation if `draws` is 0.

    Returns
    -------
    DataFrame
        Columns route, under (``zero``: ψ = 0; ``fitted``: the route's own ψ), ratio, probability, error (of
        the inversion, or one Monte Carlo standard error), exact (False for a bound), method (or the reason
        why there is no figure).
    """
    rows: list[tuple[str, str, float, float, float, bool, str]] = []
    for key, fit in fits.items():
        route = named_route(key)[0]
        if route not in QUADRATIC and route not in ("ml", "reml"):
            continue
        if not np.isfinite(fit.ratio):
            rows.append((key, "fitted", np.nan, np.nan, np.nan, False, f"not computed: {fit.status}"))
            continue
        for under, psi in (("zero", 0.0), ("fitted", fit.ratio)):
            try:
                found = list(_probabilities(curve, route, fit, psi, draws=draws, seed=seed))
            except DataError as reason:
                found = [(np.nan, np.nan, False, f"not computed: {reason}")]
            rows += [(key, under, psi, *each) for each in found]
    return pd.DataFrame(rows, columns=COLUMNS)


def _probabilities(
    curve: Curve, route: str, fit: Fit, psi: float, *, draws: int, seed: int
) -> Iterator[tuple[float, float, bool, str]]:
    if fit.rows != curve.n:
        raise DataError("the fit leaves out one-row units that the panel has")
    if route in QUADRATIC:
        pair = QUADRATIC[route](curve, fit.conventions)
        solve = np.linalg.inv(pair.system)[1]
        yield *probability_negative(*form_weights(curve, pair.forms, solve, psi)), True, SIGNED
        return
    why = no_pivot(curve)
    if why is not None:
        raise DataError(why)
    spectrum = spectrum_of(curve)
    kind: Kind = "ml" if route == "ml" else "reml"
    apart = abs(spectrum.values[0] - spectrum.sizes[0]) if kind == "ml" else 0.0
    single = spectrum.values.size == 1 and bool(apart <= 1e-9 * spectrum.sizes[0])
    p, error = probability_negative(*slope_weights(spectrum, kind, psi))
    if single:
        yield p, error, True, SIGNED
        return
    yield p, error, False, f"upper bound: the deviance does not fall at 0; {SIGNED}"
    if draws > 0:
        zeros = sum(
            int((suprema(spectrum, between, within, kind).psi == 0.0).sum())
            for between, within in draw_squares(spectrum, draws, np.random.default_rng(seed), psi)
        )
        share = zeros / draws
        error = max(float(np.sqrt(share * (1.0 - share) / draws)), 1.0 / draws)
        yield share, error, True, f"simulated from the spectrum, {draws} draws, seed {seed}"


def slope_weights(spectrum: Spectrum, kind: Kind, psi: float) -> tuple[FloatArray, FloatArray]:
    """Return weights and degrees of freedom of ``-r(0) D'(0) / sigma_u^2`` at ψ as a sum of chi-squares."""
    m = spectrum.n - (spectrum.rank if kind == "reml" else 0)
    g1 = spectrum.trace if kind == "reml" else float(spectrum.counts @ spectrum.sizes)
    between = (m * spectrum.values - g1) * (1.0 + spectrum.values * psi)
    # a difference of rounding size is no difference: it would decide the sign where all weights vanish
    # together
    between = np.where(np.abs(m * spectrum.values - g1) > 1e-10 * m * spectrum.values, between, 0.0)
    return np.append(between, -g1), np.append(spectrum.multiplicities, float(spectrum.zeros))


def form_weights(
    curve: Curve, forms: tuple[Form, ...], solve: FloatArray, psi: float
) -> tuple[FloatArray, FloatArray]:
    """Return weights and degrees of freedom of ``sum_j solve_j q_j / sigma_u^2`` at ψ as chi-squares.

    Parameters
    ----------
    curve : Curve
    forms : tuple of Form
    solve : ndarray of shape (len(forms),)
    psi : float

    Returns
    -------
    ndarray, ndarray
    """
    p, constants = curve.rank, curve.rank_constant
    inside = np.zeros((curve.rank_within, p))
    inside[:, constants:] = np.linalg.qr(curve.within[:, constants:p], mode="r")[: curve.rank_within]
    factors = class_factors(curve)
    ranks = np.array([factor.shape[0] for factor in factors])
    block = np.repeat(np.arange(len(ranks)), ranks)
    means = np.sqrt(curve.sizes[block])[:, None] * np.vstack(factors)
    x = np.vstack([inside, means])
    order, split = x.shape[0], inside.shape[0]
    dense = np.zeros((order, order))
    left_within, left_means = 0.0, np.zeros(len(ranks))
    for share, form in zip(solve, forms, strict=True):
        slope = np.hstack(
            [form.slope_within @ inside.T, form.slope_between @ (means * form.on_between[block, None]).T]
        )
        residual = np.eye(order) - (x @ form.basis) @ slope
        weight = np.concatenate([np.full(split, form.on_within), form.on_means[block]])
        dense += share * (residual.T * weight) @ residual
        left_within += share * form.on_within
        left_means += share * form.on_means
    root = np.concatenate([np.ones(split), np.sqrt(1.0 + curve.sizes[block] * psi)])
    values = np.linalg.eigvalsh(root[:, None] * dense * root)
    # K of these are zero (the form does not see X beta) and must not leave rounding of either sign behind
    values = np.where(np.abs(values) > 1e-11 * np.abs(values).max(initial=0.0), values, 0.0)
    weights = np.concatenate([values, left_means * (1.0 + curve.sizes * psi), [left_within]])
    return weights, np.concatenate([np.ones(order), curve.counts - ranks, [float(curve.df_within)]])
