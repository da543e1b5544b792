"""Wild cluster bootstrap of one linear hypothesis on the coefficients, at the ψ of a route, from unit products.

Each unit's residuals are multiplied by one random weight of mean zero and variance one, under the hypothesis
``a'beta = v`` (restricted residuals: the null imposed), and the statistic is studentised by CR1 each time (Cameron,
Gelbach & Miller 2008). In the coordinates of `mixbridge.inference.robust_regression`, where ``sum X_i'X_i = I``, let
``u`` be the direction of a, ``s_i`` the score of unit i, ``g_i = X_i'X_i u`` and ``t = (a'beta_hat - v)/|a|``. Then

    restricted scores     s_i + g_i t
    replicate             delta = sum v_i (s_i + g_i t),      numerator u'delta
    its CR1 scores        v_i (s_i'u + g_i'u t) - g_i'delta

so that N x r numbers, the scores and the g_i, are all it takes; the rows are not read again, and another value v of the
hypothesis changes t only. ψ counts as known: what estimating it adds is in no replicate. With few units Rademacher
weights (+1 and -1) give few distinct values; the six-point weights of Webb (2014) give more. Where all weights can be
listed within the number of replicates they are listed, and nothing is random.
"""

from __future__ import annotations

from collections.abc import Mapping
from concurrent.futures import ThreadPoolExecutor

import numpy as np
from numpy.typing import NDArray

from mixbridge.errors import IdentificationError, OptionError
from mixbridge.inference.robust import multiplier_value
from mixbridge.inference.robust_regression import Regression, regression_of
from mixbridge.moments.products import UnitProducts
from mixbridge.ratio import Curve
from mixbridge.resample.wild_record import Parts, WildBootstrap
from mixbridge.routes import Fit, fit_route

__all__ = ["WEIGHTS", "unit_weights", "wild_bootstrap"]

FloatArray = NDArray[np.float64]

WEIGHTS: Mapping[str, FloatArray] = {
    "rademacher": np.array([-1.0, 1.0]),
    "webb": np.array([-np.sqrt(1.5), -1.0, -np.sqrt(0.5), np.sqrt(0.5), 1.0, np.sqrt(1.5)]),
}
"""Values of the weights, all equally likely."""

BLOCK = 16
"""Replicates that share one random stream."""
FEW = 10
"""Units up to which Webb's weights are taken unless others are named, and all weights cannot be listed."""


def wild_bootstrap(
    curve: Curve,
    products: UnitProducts,
    point: float | str | Fit,
    hypothesis: str | Mapping[str, float],
    value: float = 0.0,
    *,
    replicates: int = 9_999,
    seed: int = 20_050,
    weights: str | None = None,
    restricted: bool = True,
    multiplier: str = "units",
    between: str = "size_weighted",
    workers: int = 1,
) -> WildBootstrap:
    """Test one linear hypothesis by the wild cluster bootstrap.

    Parameters
    ----------
    curve : Curve
    products : UnitProducts
        Of the same rows.
    point : float, str or Fit
        Variance ratio (0: pooled; infinite: within), ``"between"``, or a fit of any route but `first_difference`.
    hypothesis : str or mapping
        A term, or weights of terms: the combination a.
    value : float
        What the combination is under the hypothesis.
    replicates : int
    seed : int
        Equal seeds give equal replicates by number, whatever the number of workers.
    weights : {'rademacher', 'webb'}, optional
        Webb's six points where there are ten units or fewer and not all signs can be listed, else Rademacher's.
    restricted : bool
        Whether residuals are those under the hypothesis.
    multiplier : str
        Of CR1, as in `mixbridge.inference.robust`; it scales all statistics alike.
    between : {'size_weighted', 'unweighted'}
        Weights of unit means for ``"between"``.
    workers : int
        Threads.

    Returns
    -------
    WildBootstrap
    """
    for name, given, least in (("replicates", replicates, 1), ("workers", workers, 1), ("seed", seed, 0)):
        if isinstance(given, bool) or not isinstance(given, int) or given < least:
            raise OptionError(f"{name}={given!r} is not allowed; allowed: an integer, at least {least}.")
    if not np.isfinite(value):
        raise OptionError(f"value={value!r} is not allowed; allowed: a finite number.")
    units = products.units
    if units < 2:
        raise IdentificationError("a bootstrap by unit needs at least two units.")
    kind = weights or ("webb" if units <= FEW and 2**units > replicates else "rademacher")
    if kind not in WEIGHTS:
        raise OptionError.not_among("weights", kind, WEIGHTS)
    regression = regression_of(curve, products, point, between)
    combination = _combination(curve, regression, hypothesis)
    direction = regression.root.T @ combination
    length = float(np.sqrt(direction @ direction))
    if not length > 0.0:
        raise IdentificationError("the combination has no variance in this regression.")
    factor = multiplier_value(multiplier, regression.side, units, regression.rows, regression.rank)
    scores, pulls = regression.scores(), _pulls(regression, direction / length)
    tables = _tables(scores, pulls, direction / length)
    listed = len(WEIGHTS[kind]) ** units <= replicates
    count = len(WEIGHTS[kind]) ** units if listed else replicates
    estimate = float(combination @ _coefficients(curve, regression, point, between))
    return WildBootstrap(
        hypothesis=hypothesis if isinstance(hypothesis, str) else _text(hypothesis),
        estimate=estimate,
        value=float(value),
        length=length,
        factor=factor,
        direction=direction / length,
        gram=pulls.T @ pulls,
        energy=_energy(regression),
        observed=_parts(tables, np.ones((1, units)), scores.shape[1]),
        drawn=_draw(tables, scores.shape[1], kind, count, seed, listed=listed, workers=workers),
        weights=kind,
        listed=listed,
        restricted=restricted,
        units=units,
        psi=regression.psi,
        notes=_notes(kind, units, count, listed=listed, restricted=restricted, regression=regression),
    )


def unit_weights(kind: str, units: int, start: int, stop: int, *, seed: int, listed: bool) -> FloatArray:
    """Return the weights of replicates ``start .. stop - 1``.

    Parameters
    ----------
    kind : {'rademacher', 'webb'}
    units : int
        Number of units N.
    start, stop : int
        Where weights are drawn, the first is a multiple of `BLOCK`.
    seed : int
    listed : bool
        Whether all weights are gone through in turn, replicate number and weights being digits of one number.

    Returns
    -------
    ndarray of shape (stop - start, N)
    """
    values = WEIGHTS[kind]
    if listed:
        base = len(values)
        digits = np.arange(start, stop)[:, None] // base ** np.arange(units)[None, :] % base
        return np.asarray(values[digits])
    parts = []
    for first in range(start, stop, BLOCK):
        sequence = np.random.SeedSequence(seed, spawn_key=(first // BLOCK,))
        stream = np.random.Generator(np.random.PCG64(sequence))
        parts.append(values[stream.integers(0, len(values), (BLOCK, units), dtype=np.uint8)])
    return np.concatenate(parts)[: stop - start]


def _tables(scores: FloatArray, pulls: FloatArray, direction: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Return what weights, and squared weights, are multiplied by."""
    along, turned = (scores @ direction)[:, None], (pulls @ direction)[:, None]
    linear = np.hstack([scores, pulls, along * pulls, turned * pulls])
    return linear, np.hstack([along**2, along * turned, turned**2])


def _parts(tables: tuple[FloatArray, FloatArray], weights: FloatArray, rank: int) -> Parts:
    sums = weights @ tables[0]
    score, pull, score_pull, pull_pull = (sums[:, at : at + rank] for at in range(0, 4 * rank, rank))
    return Parts(score, pull, score_pull, pull_pull, (weights**2) @ tables[1])


def _draw(
    tables: tuple[FloatArray, FloatArray],
    rank: int,
    kind: str,
    count: int,
    seed: int,
    *,
    listed: bool,
    workers: int,
) -> Parts:
    units = tables[0].shape[0]

    def work(start: int) -> Parts:
        stop = min(start + BLOCK, count)
        return _parts(tables, unit_weights(kind, units, start, stop, seed=seed, listed=listed), rank)

    starts = range(0, count, BLOCK)
    if workers == 1:
        return Parts.join(list(map(work, starts)))
    with ThreadPoolExecutor(workers) as pool:
        return Parts.join(list(pool.map(work, starts)))


def _pulls(regression: Regression, direction: FloatArray) -> FloatArray:
    """Return ``X_i'X_i u`` of every unit, shape (N, r): one linear map of the packed products."""
    r, means = regression.rank, regression.means()
    pulls = means[:, :r] * (regression.weights * (means[:, :r] @ direction))[:, None]
    if regression.deviations:
        left, right = np.triu_indices(regression.from_framed.shape[0])
        x = regression.from_framed[:, :r]
        e = x @ direction
        mapped = x[left] * e[right, None] + x[right] * e[left, None]
        mapped[left == right] /= 2.0
        pulls += regression.products.packed @ mapped
    return np.asarray(pulls)


def _energy(regression: Regression) -> float:
    """Return the residual sum of squares."""
    r = regression.rank
    total = float(regression.weights @ regression.means()[:, r] ** 2)
    if regression.deviations:
        left, right = np.triu_indices(regression.from_framed.shape[0])
        e = regression.from_framed[:, r]
        total += float(
            regression.products.packed.sum(axis=0) @ (np.where(left == right, 1.0, 2.0) * e[left] * e[right])
        )
    return total


def _combination(curve: Curve, regression: Regression, hypothesis: str | Mapping[str, float]) -> FloatArray:
    given = {hypothesis: 1.0} if isinstance(hypothesis, str) else dict(hypothesis)
    combination = np.zeros(curve.rank)
    for term, weight in given.items():
        if term not in curve.names:
            raise OptionError.not_among("term", term, curve.names)
        combination[curve.names.index(term)] = weight
    if not np.isfinite(combination).all() or not combination.any():
        raise OptionError("a combination has finite weights, not all of them zero.")
    lost = [
        name
        for name, weight, free in zip(curve.names, combination, regression.free, strict=True)
        if weight and not free
    ]
    if lost:
        raise IdentificationError(f"the {regression.side} regression does not determine {', '.join(lost)}.")
    return combination


def _coefficients(curve: Curve, regression: Regression, point: float | str | Fit, between: str) -> FloatArray:
    """Return the coefficients of the regression, zero where it determines none."""
    if isinstance(point, Fit):
        beta = point.beta
    elif regression.side == "curve":
        beta = curve.at(regression.psi).beta
    else:
        conventions = {"between": between} if regression.side == "between" else {}
        beta = fit_route(curve, regression.side, conventions, "no rows in order").beta
    return np.where(regression.free, beta, 0.0)


def _text(hypothesis: Mapping[str, float]) -> str:
    return " + ".join(f"{weight:g} {term}" for term, weight in hypothesis.items())


def _notes(
    kind: str, units: int, count: int, *, listed: bool, restricted: bool, regression: Regression
) -> tuple[str, ...]:
    how = f"all {count} weights listed" if listed else f"{count} replicates"
    residuals = "with the hypothesis imposed" if restricted else "without the hypothesis imposed"
    notes = [f"{kind} weights by unit, {units} units, {how}, residuals {residuals}"]
    if regression.correlated:
        notes.append("the variance ratio counts as known")
    if kind == "rademacher" and units <= FEW:
        notes.append(f"{units} units: the statistic has at most {2 ** (units - 1)} different sizes")
    return tuple(notes)
