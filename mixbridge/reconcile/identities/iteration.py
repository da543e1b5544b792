"""Identity 14: iterated generalised least squares from both ends of the curve, and maximum likelihood."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
from numpy.typing import NDArray

from mixbridge.reconcile.identities.plain import EPS
from mixbridge.reconcile.identities.registry import Compared, Unmet, identity
from mixbridge.reconcile.identities.setting import Setting, components_ratio, multiple

__all__: list[str] = []

FloatArray = NDArray[np.float64]
STEPS = 200
NEAR = 8.0 * EPS


def _map(setting: Setting) -> tuple[Callable[[FloatArray], FloatArray], float]:
    """Return the map from a weight ``1 / (1 + T psi)`` to the next, and how it amplifies rounding.

    In axes that make X'QX and X'PX diagonal (shares ``1 - mu`` and ``mu`` of ``X'X = I``) every step costs a
    few operations:
    ``b_k = ((1 - mu_k) b_within,k + w mu_k b_between,k) / (1 - mu_k + w mu_k)``.
    """
    curve = setting.curve
    p, size = curve.rank, float(curve.sizes[0])
    within, means = curve.within, np.sqrt(size) * curve.between[0]
    axes = _common_axes(within[:, :p], means[:, :p])
    inside, outside = within[:, :p] @ axes, means[:, :p] @ axes
    on_within, on_between = (inside**2).sum(axis=0), (outside**2).sum(axis=0)
    only_within, only_between = curve.rank - curve.rank_between, curve.rank_constant
    on_between[:only_within], on_within[p - only_between :] = 0.0, 0.0  # known from the ranks
    inner, outer = inside.T @ within[:, p], outside.T @ means[:, p]
    b_within = np.divide(inner, on_within, out=np.zeros(p), where=on_within > 0.0)
    b_between = np.divide(outer, on_between, out=np.zeros(p), where=on_between > 0.0)
    both = (on_within > 0.0) & (on_between > 0.0)
    gap = (b_between - b_within)[both]
    total_within, total_between = float(within[:, p] @ within[:, p]), float(means[:, p] @ means[:, p])
    least = total_between - float(outer @ b_between)
    rest = curve.within_residual
    # axes are exact to rounding over the root of the smallest share; residuals lose what is subtracted
    share, other = on_between[both], on_within[both]
    smallest = float(min(share.min(initial=1.0), other.min(initial=1.0)))
    amplified = float(
        ((total_within + 1.0) / rest + (total_between + 1.0) / max(least, EPS)) / np.sqrt(smallest)
    )

    def step(w: FloatArray) -> FloatArray:
        # toward[k] = distance of b from the within value in units of the gap; infinite w is the between end
        finite = np.where(np.isfinite(w), w, 1.0)[:, None]
        toward = np.where(np.isfinite(w)[:, None], finite * share / (other + finite * share), 1.0)
        deviations = rest + (other * (toward * gap) ** 2).sum(axis=1)
        unit_means = least + (share * ((1.0 - toward) * gap) ** 2).sum(axis=1)
        # unit means fitted exactly: the next variance ratio is endless
        ratio = np.divide(deviations, unit_means, out=np.full(len(w), np.inf), where=unit_means > 0.0)
        return np.asarray(ratio / (size - 1.0))

    return step, amplified


def _common_axes(within: FloatArray, between: FloatArray) -> FloatArray:
    """Return axes in which both products are diagonal, their sum being the identity, in increasing share between.

    Axes of small shares are exact only from the factor in which the share is small: the right singular
    vectors of the one are
    taken below the widest gap in the shares, those of the other above it.
    """
    on_within, from_within = _right_vectors(within)
    _, from_between = _right_vectors(between)
    shares = np.concatenate([[0.0], on_within, [1.0]])
    small = int(np.argmax(np.diff(shares)))
    return np.column_stack([from_between[:, : len(on_within) - small], from_within[:, :small][:, ::-1]])


def _right_vectors(factor: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Return squared singular values, smallest first, and their right vectors as columns."""
    _, values, vectors = np.linalg.svd(factor)
    squares = np.zeros(factor.shape[1])
    squares[: len(values)] = values**2
    return np.minimum(squares[::-1], 1.0), vectors[::-1].T


def _unmet(setting: Setting) -> str | None:
    """Say which condition of the data fails, None if none does."""
    curve = setting.curve
    if not setting.balanced:
        return f"balanced: units have {len(curve.sizes)} different sizes"
    if curve.df_within < 1 or not curve.within_residual > 0.0 or curve.units <= curve.rank_between:
        return "both ends defined: the within or the between regression leaves no error"
    return setting.missing("ml")


@identity(
    number=14,
    name="iterated generalised least squares",
    statement="balanced: iterated from the within and from the between end with likelihood divisors, the "
    "weight of unit means moves one way only; where both ends meet at a ratio >= 0 it is that of ML",
    source="Breusch 1987",
)
def iterated_is_ml(setting: Setting) -> Compared | Unmet:
    """Compare the meeting point of both iterations with the ML optimum, and see that they are monotone."""
    curve, unmet = setting.curve, _unmet(setting)
    if unmet:
        return Unmet(unmet)
    step, amplified = _map(setting)
    path = [np.array([0.0, np.inf])]
    for _ in range(STEPS):
        path.append(step(path[-1]))
        if not np.isfinite(path[-1]).all():
            return Unmet("both ends defined: the between regression leaves no error")
        if (np.abs(path[-1] - path[-2]) <= NEAR * path[-1]).all():
            break
    low, high = path[-1]
    if high - low > 1e-6 * high:
        return Unmet(
            f"both ends meet: after {len(path) - 1} steps the weights of unit means are {low:.6g} and "
            f"{high:.6g}"
        )
    middle = (low + high) / 2.0
    if middle > 1.0:
        return Unmet("meeting at a ratio >= 0: the ends meet below zero")
    around = step(middle * np.array([1.0 - 1e-4, 1.0 + 1e-4]))
    rate = float((around[1] - around[0]) / (2e-4 * middle))
    if not rate < 1.0 - 1e-6:
        return Unmet(f"a meeting point that draws the iteration in: its rate is {rate:.6g}")
    steps = np.diff(np.array(path[1:]), axis=0) / np.array(path[2:]) if len(path) > 2 else np.zeros((1, 2))
    wrong_way = float(max(-steps[:, 0].min(), steps[:, 1].max(), 0.0))
    weight = 1.0 / (1.0 + float(curve.sizes[0]) * components_ratio(setting.fits["ml"]))
    last = float(np.abs(path[-1] - path[-2]).max() / middle) if np.isfinite(path[-2]).all() else 0.0
    rounding = curve.condition * amplified / (1.0 - rate)
    away = max(abs(low - weight), abs(high - weight)) / weight
    return Compared(
        f"balanced; both ends meet after {len(path) - 1} steps",
        middle,
        weight,
        "weight of unit means 1 / (1 + T ratio): where both ends meet",
        "weight of unit means: ML",
        max(away, wrong_way),
        multiple(curve.rank) * rounding + last / (1.0 - rate),
        f"64 (columns + 1) x 2.2e-16 x {rounding:.3g} (condition of X x what residuals lose by subtraction "
        f"/ (1 - rate)), plus what is left of the iteration at rate {rate:.3g}; relative to the weight; a "
        "step the wrong way counts as distance",
    )
