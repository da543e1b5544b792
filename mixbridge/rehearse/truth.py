"""The truth a design is rehearsed under, and what it becomes for one panel."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from mixbridge.errors import IdentificationError, OptionError
from mixbridge.ratio import Curve
from mixbridge.resample import Truth as NormalModel

__all__ = ["Model", "Truth", "model_of", "unit_mean_covariance"]

FloatArray = NDArray[np.float64]


@dataclass(frozen=True, slots=True)
class Truth:
    """What is taken as true.

    What is not given comes from the primary fit of a study; for a design, coefficients not named are 0 and the
    idiosyncratic variance is 1.

    Attributes
    ----------
    coefficients : mapping of str to float
        By term.
    ratio, icc : float, optional
        Variance of the unit effects, as ratio psi or as ICC ``psi / (1 + psi)``; one of the two.
    idiosyncratic : float, optional
        Variance ``sigma_u^2`` of the errors.
    correlation : mapping of str to float
        Correlations of the unit effects with unit means of covariates. The variance of the unit effects stays as
        stated: ``alpha_i = gamma'(xbar_i - mean) + a_i``, gamma zero for covariates not named.
    contextual : mapping of str to float
        That gamma itself, instead; the variance stated is then that of a_i.
    tail_df, unit_tail_df : float, optional
        Errors, or unit effects, from a t distribution with these degrees of freedom (above 2), scaled to the same
        variance, instead of normal.
    serial : float
        Autocorrelation between consecutive periods of a unit, -1 to 1: ``u_t = serial u_(t-1) + sqrt(1 - serial^2)
        e_t``. With `tail_df` it is e that has the tails.
    """

    coefficients: Mapping[str, float] = field(default_factory=dict)
    ratio: float | None = None
    icc: float | None = None
    idiosyncratic: float | None = None
    correlation: Mapping[str, float] = field(default_factory=dict)
    contextual: Mapping[str, float] = field(default_factory=dict)
    tail_df: float | None = None
    unit_tail_df: float | None = None
    serial: float = 0.0

    def __post_init__(self) -> None:
        """Refuse values out of their range."""
        if self.ratio is not None and self.icc is not None:
            raise OptionError("ratio and icc are two names of one number; give one of them.")
        _between("ratio", self.ratio, 0.0, np.inf, "a number, at least 0", closed=True)
        _between("icc", self.icc, 0.0, 1.0, "a number from 0 to below 1", closed=True)
        _between("idiosyncratic", self.idiosyncratic, 0.0, np.inf, "a variance above 0")
        _between("tail_df", self.tail_df, 2.0, np.inf, "a number above 2, else there is no variance")
        _between(
            "unit_tail_df", self.unit_tail_df, 2.0, np.inf, "a number above 2, else there is no variance"
        )
        _between("serial", self.serial, -1.0, 1.0, "a number between -1 and 1")
        if self.correlation and self.contextual:
            raise OptionError("correlation and contextual state the same thing; give one of them.")
        for name, value in self.correlation.items():
            _between(f"correlation of {name!r}", value, -1.0, 1.0, "a number between -1 and 1")
        for word, given in (("coefficients", self.coefficients), ("contextual", self.contextual)):
            for name, value in given.items():
                _between(f"{word}: {name!r}", value, -np.inf, np.inf, "a finite number")

    @property
    def by_rows(self) -> bool:
        """Whether the errors are not independent normal ones, so that rows must be drawn."""
        return self.tail_df is not None or self.unit_tail_df is not None or self.serial != 0.0

    @property
    def psi(self) -> float | None:
        """The ratio, if one was stated."""
        return self.icc / (1.0 - self.icc) if self.icc is not None else self.ratio


@dataclass(frozen=True, slots=True)
class Model:
    """A truth, for one panel.

    Attributes
    ----------
    normal : resample.Truth
        Coefficients, variance of ``a_i`` (what covariates leave of the unit effects) and of the errors.
    unit_variance : float
        Variance of the whole unit effects, that due to unit means included.
    contextual : ndarray of shape (p,)
        gamma by term, its part in the intercept (minus gamma'mean) included.
    truth : Truth
    """

    normal: NormalModel
    unit_variance: float
    contextual: FloatArray
    truth: Truth

    @property
    def correlated(self) -> bool:
        """Whether unit effects depend on unit means."""
        return bool(self.contextual.any())

    @property
    def icc(self) -> float:
        """ICC of the whole unit effects."""
        return self.unit_variance / (self.unit_variance + self.normal.idiosyncratic)


def model_of(truth: Truth, curve: Curve, base: NormalModel | None) -> Model:
    """Work out a truth for a panel.

    Parameters
    ----------
    truth : Truth
    curve : Curve
    base : resample.Truth or None
        Where values come from that are not stated; for a design, None.

    Returns
    -------
    Model
    """
    names = curve.names
    for given in (truth.coefficients, truth.correlation, truth.contextual):
        for name in given:
            if name not in names:
                raise OptionError.not_among("term", name, names)
    beta = np.zeros(curve.rank) if base is None else base.coefficients.copy()
    for name, value in truth.coefficients.items():
        beta[names.index(name)] = value
    idiosyncratic = truth.idiosyncratic
    if idiosyncratic is None:
        idiosyncratic = 1.0 if base is None else base.idiosyncratic
    psi = truth.psi
    if psi is None:
        if base is None:
            raise OptionError("the truth has no variance of unit effects: give ratio= or icc=.")
        psi = base.ratio
    unit = psi * idiosyncratic
    gamma, total = _contextual(truth, curve, unit)
    if truth.correlation:
        unit, total = total, unit
    return Model(NormalModel(beta, unit, idiosyncratic), total, gamma, truth)


def unit_mean_covariance(curve: Curve) -> tuple[FloatArray, FloatArray]:
    """Return mean and covariance (divisor N) of the unit means of each term, every unit counted once."""
    moments = curve.moments
    products = np.einsum("gri,grj->ij", moments.between[:, :, :-1], moments.between[:, :, :-1]) / curve.units
    centre, scale = products[0, 1:], moments.scale[:-1]
    spread = products[1:, 1:] - np.outer(centre, centre)
    mean, covariance = np.zeros(curve.rank), np.zeros((curve.rank, curve.rank))
    place = np.array([curve.names.index(name) for name in moments.columns[:-1]], dtype=np.intp)
    mean[place] = moments.shift[:-1] + centre * scale
    covariance[np.ix_(place, place)] = spread * np.outer(scale, scale)
    if moments.constant is not None:
        mean[curve.names.index(moments.constant)] = 1.0
    return mean, covariance


def _contextual(truth: Truth, curve: Curve, unit: float) -> tuple[FloatArray, float]:
    """Return gamma and, for a correlation, what it leaves of the variance; for gamma given, the total."""
    gamma = np.zeros(curve.rank)
    given = truth.correlation or truth.contextual
    if not any(given.values()):
        return gamma, unit
    constant = curve.moments.constant
    if constant is None:
        raise IdentificationError(
            "unit effects that depend on unit means need an intercept in the formula, which takes up their mean."
        )
    mean, covariance = unit_mean_covariance(curve)
    place = [curve.names.index(name) for name in given]
    spread = covariance[np.ix_(place, place)]
    size_of = dict(zip(curve.moments.columns, curve.moments.magnitude, strict=True))
    for name, variance in zip(given, np.diag(spread), strict=True):
        # what rounding of the stored column can produce
        if not variance > (1e-12 * size_of.get(name, 1.0)) ** 2:
            raise IdentificationError(
                f"the unit means of {name!r} do not vary: unit effects cannot depend on them."
            )
    values = np.array(list(given.values()))
    if truth.correlation:
        size = np.sqrt(np.diag(spread))
        weight = np.linalg.solve(spread / np.outer(size, size), values)
        share = float(weight @ values)
        if not share < 1.0:
            raise OptionError(
                f"correlation={dict(given)} is impossible in this design: the unit means would explain {share:.3g} "
                "of the variance of the unit effects. Give smaller correlations."
            )
        gamma[place] = np.sqrt(unit) * weight / size
        rest = unit * (1.0 - share)
    else:
        gamma[place] = values
        rest = unit + float(values @ spread @ values)
    gamma[curve.names.index(constant)] = -float(gamma @ mean)
    return gamma, rest


def _between(
    name: str, value: float | None, low: float, high: float, wanted: str, *, closed: bool = False
) -> None:
    if value is None:
        return
    number = isinstance(value, (int, float, np.floating, np.integer)) and not isinstance(value, bool)
    if not number or not (low < value < high or (closed and value == low)):
        raise OptionError(f"{name}={value!r} is not allowed; allowed: {wanted}.")
