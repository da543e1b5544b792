"""The correction for noisy unit means as linear maps of the coefficients; `noisy_means` has the formulas."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from mixbridge.correlated.mundlak import Mundlak
from mixbridge.moments.coordinates import model_coordinates
from mixbridge.moments.factors import root_of

__all__ = ["NO_SIGNAL", "Correction", "added_mean", "correction_at", "independent"]

FloatArray = NDArray[np.float64]

NO_SIGNAL = 1e-8
"""Share of signal, in the noisiest direction, that rounding of a difference can leave."""


@dataclass(frozen=True, slots=True, eq=False)
class Correction:
    """The correction as linear maps, in the units of the data.

    Attributes
    ----------
    factor : ndarray of shape (m, m)
        ``(S - N)^-1 S``.
    carried : ndarray of shape (o, m)
        ``M_zz^-1 M_zx``.
    attenuation : ndarray of shape (G, m, m)
        What regression on means over each number of rows makes of contextual coefficients.
    noise : ndarray of shape (r, m)
        Factor of ``S_w``.
    signal : float
    """

    factor: FloatArray
    carried: FloatArray
    attenuation: FloatArray
    noise: FloatArray
    signal: float

    def map(self, m: int) -> FloatArray:
        """Return the map from (within, contextual, between, others) to the same, corrected."""
        o = self.carried.shape[0]
        whole = np.eye(3 * m + o)
        change = self.factor - np.eye(m)
        whole[m : 2 * m, m : 2 * m] += change
        whole[2 * m : 3 * m, m : 2 * m] += change
        whole[3 * m :, m : 2 * m] -= self.carried @ change
        return whole


def correction_at(
    mundlak: Mundlak,
    psi: float,
    terms: tuple[str, ...],
    others: tuple[str, ...],
    *,
    fixed: tuple[str, ...],
    population: float,
) -> Correction:
    """Return the correction at a ratio; everything diagonal in the directions that S and N share."""
    curve = mundlak.curve
    model, sizes, names = model_coordinates(curve.moments), curve.sizes, list(curve.names)
    x = [names.index(term) for term in terms]
    means = [names.index(added_mean(mundlak, term)) for term in terms]
    z = [names.index(name) for name in others]
    weights = sizes / (1.0 + sizes * psi)
    columns = (
        model.between[:, :, :-1] * model.typical
    )  # unit means in data units, from grand means with a constant
    stacked = (np.sqrt(weights)[:, None, None] * columns).reshape(-1, len(names))
    root = root_of(stacked[:, z])
    basis = stacked[:, z] @ root
    carried = root @ (basis.T @ stacked[:, means])
    net = stacked[:, means] - basis @ (basis.T @ stacked[:, means])
    if model.constant is not None:
        at = names.index(model.constant)
        level = -model.to_model[at] * model.typical
        level[at] = 0.0
        carried[z.index(at)] += level[means] - level[z] @ carried
    leverage = (basis.reshape(sizes.size, -1, len(z)) ** 2).sum(axis=(1, 2))
    free = weights * (curve.counts - leverage)
    exposure = 1.0 / sizes - 1.0 / population
    noise = _within_factor(mundlak, model.within[:, :-1] * model.typical, x, fixed)
    half = root_of(net)
    _, lengths, directions = np.linalg.svd(noise @ half, full_matrices=False)
    shares = lengths**2 * float(free @ exposure)
    left = half @ directions.T
    right = np.linalg.solve(left, np.eye(len(terms)))
    signal = 1.0 - float(shares.max(initial=0.0))
    if not signal > NO_SIGNAL:
        return Correction(
            np.eye(len(terms)), carried, np.zeros((sizes.size, len(terms), len(terms))), noise, signal
        )
    spread = (1.0 - shares) / float(free.sum())
    kept = spread / (spread + exposure[:, None] * lengths**2)
    attenuation = np.einsum("ij,gj,jk->gik", left, kept, right)
    return Correction(left / (1.0 - shares) @ right, carried, attenuation, noise, signal)


def _within_factor(mundlak: Mundlak, within: FloatArray, x: list[int], fixed: tuple[str, ...]) -> FloatArray:
    """Return a factor of the within covariance of the sampled covariates, net of the other columns."""
    beside = [mundlak.curve.names.index(name) for name in independent(mundlak, fixed)]
    basis = (
        np.linalg.qr(within[:, beside] @ root_of(within[:, beside]))[0]
        if beside
        else np.zeros((within.shape[0], 0))
    )
    rest = within[:, x] - basis @ (basis.T @ within[:, x])
    return np.asarray(rest / np.sqrt(mundlak.raw.n - mundlak.raw.units - len(beside)))


def independent(mundlak: Mundlak, columns: tuple[str, ...]) -> tuple[str, ...]:
    """Leave out columns that depend on earlier ones within units."""
    kept = {mundlak.raw.names[j] for j in mundlak.raw.within_span.kept}
    return tuple(column for column in columns if column in kept)


def added_mean(mundlak: Mundlak, column: str) -> str:
    """Return the name of the unit mean of a sampled column."""
    name = mundlak.augmented.mean_of(column)
    assert name is not None, "sampled columns are those with a unit mean"
    return name
