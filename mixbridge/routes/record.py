"""The `Fit` record: one route on one panel, frozen."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from types import MappingProxyType

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from mixbridge.display import fragment, preformatted, table
from mixbridge.display.text import wrapped
from mixbridge.routes.certificate import Certificate

__all__ = ["FITTED", "NOT_POSITIVE", "NO_DF", "TRUNCATED", "Fit"]

FloatArray = NDArray[np.float64]

FITTED = "fitted"
NO_DF = "fitted without degrees of freedom"
TRUNCATED = "unit variance truncated"
NOT_POSITIVE = "idiosyncratic variance not positive"
COMPONENTS = ["unit_variance", "idiosyncratic_variance"]


@dataclass(frozen=True, slots=True, eq=False)
class Fit:
    """One route, with its conventions.

    Tables are made anew on each access, so changing one does not change the fit.

    Attributes
    ----------
    route : str
        Key of the route.
    conventions : mapping
        Every convention of the route with the value used.
    status : str
        ``fitted``; ``fitted without degrees of freedom`` (no standard errors); ``unit variance truncated``;
        ``idiosyncratic variance not positive``; ``likelihood flat``; ``likelihood unbounded``; ``not
        estimable: <reason>``.
    notes : tuple of str
        What a reader of the figures should know.
    terms : tuple of str
        Names of the coefficients.
    beta : ndarray of shape (p,)
        Coefficients; NaN where not estimable.
    root : ndarray of shape (p, r)
        J with ``JJ'`` times `scale` the covariance of the coefficients.
    not_estimable : mapping of str to str
        Coefficient -> reason.
    unit_variance_raw : float
        Unit variance before truncation at zero (a variance).
    unit_variance : float
        Unit variance used, ``sigma_a^2``; NaN where the route has none.
    idiosyncratic_variance : float
        ``sigma_u^2``, a variance.
    ratio : float
        ``psi = sigma_a^2 / sigma_u^2``; infinite for `within`; NaN for routes off the curve.
    components_covariance : ndarray of shape (2, 2)
        Sampling covariance of (raw unit variance, idiosyncratic variance) under normality.
    components_method : str
        How that covariance was obtained.
    scale : float
        Variance that multiplies ``(X'V_0^-1 X)^-1``.
    residual_df : float
        ``n - K``, ``n - N - K_w`` or ``N - K_p``, whichever belongs to the scale of the route.
    rank : int
        Number of estimable directions.
    forms_table : tuple of (str, float, float, float)
        First-stage forms: name, value, and the coefficients of ``sigma_u^2`` and ``sigma_a^2`` that were
        solved.
    sizes : ndarray of int
        Distinct unit sizes.
    log_likelihood : float
        With the constant named in the conventions; NaN where the route is not a likelihood.
    certificate : Certificate or None
        For `ml` and `reml`.
    rows, units : int
        Rows and units used.
    robust : ndarray of shape (p, p) or None
        Covariance of the coefficients where the conventions ask for a robust one.
    """

    route: str
    conventions: Mapping[str, object]
    status: str
    notes: tuple[str, ...]
    terms: tuple[str, ...]
    beta: FloatArray
    root: FloatArray
    not_estimable: Mapping[str, str]
    sizes: NDArray[np.int64]
    rows: int
    units: int
    unit_variance_raw: float = np.nan
    unit_variance: float = np.nan
    idiosyncratic_variance: float = np.nan
    ratio: float = np.nan
    components_covariance: FloatArray = field(default_factory=lambda: np.full((2, 2), np.nan))
    components_method: str = "none"
    scale: float = np.nan
    residual_df: float = np.nan
    rank: int = 0
    forms_table: tuple[tuple[str, float, float, float], ...] = ()
    log_likelihood: float = np.nan
    certificate: Certificate | None = None
    robust: FloatArray | None = None

    def __post_init__(self) -> None:
        """Make arrays and mappings read-only."""
        for array in (self.beta, self.root, self.components_covariance):
            array.setflags(write=False)
        object.__setattr__(self, "conventions", MappingProxyType(dict(self.conventions)))
        object.__setattr__(self, "not_estimable", MappingProxyType(dict(self.not_estimable)))

    @property
    def estimated(self) -> bool:
        """Whether the route gave coefficients."""
        return bool(np.isfinite(self.beta).any())

    @property
    def icc(self) -> float:
        """``psi / (1 + psi)``, the share of variance due to units, given the covariates."""
        return 1.0 if np.isinf(self.ratio) else self.ratio / (1.0 + self.ratio)

    @property
    def coefficients(self) -> pd.Series:
        """Coefficients by term, in the units of the data."""
        return pd.Series(self.beta.copy(), index=list(self.terms), name=self.route)

    @property
    def covariance_array(self) -> FloatArray:
        """``scale (X'V_0^-1 X)^-1`` as an array; NaN in the rows of coefficients that are not estimable."""
        if self.robust is not None:
            return self.robust.copy()
        covariance = self.scale * (self.root @ self.root.T)
        lost = ~np.isfinite(self.beta)
        covariance[lost] = np.nan
        covariance[:, lost] = np.nan
        return covariance

    @property
    def covariance(self) -> pd.DataFrame:
        """Covariance of the coefficients, of the kind named in the conventions."""
        return pd.DataFrame(self.covariance_array, index=list(self.terms), columns=list(self.terms))

    @property
    def standard_errors(self) -> pd.Series:
        """Standard errors by term, the square roots of the diagonal of `covariance`."""
        squares = np.diag(self.covariance_array)
        values = np.sqrt(np.where(squares >= 0.0, squares, np.nan))  # a two-way variance may be negative
        return pd.Series(values, index=list(self.terms), name=self.route)

    @property
    def component_covariance(self) -> pd.DataFrame:
        """Sampling covariance of the raw components, under normality."""
        return pd.DataFrame(self.components_covariance.copy(), index=COMPONENTS, columns=COMPONENTS)

    @property
    def component_standard_errors(self) -> pd.Series:
        """Standard errors of the two variances, and by the delta method of ratio and ICC."""
        c = self.components_covariance
        unit, idiosyncratic = np.sqrt(np.diag(c))
        ratio = np.nan
        if np.isfinite(c).all() and self.idiosyncratic_variance > 0.0:
            gradient = np.array([1.0, -self.ratio]) / self.idiosyncratic_variance
            ratio = float(np.sqrt(max(float(gradient @ c @ gradient), 0.0)))
        return pd.Series(
            [unit, idiosyncratic, ratio, ratio / (1.0 + self.ratio) ** 2], index=[*COMPONENTS, "ratio", "icc"]
        )

    @property
    def quasi_demeaning(self) -> pd.Series:
        """``lambda = 1 - (1 + T psi)^(-1/2)`` by unit size: the share of the unit mean that is subtracted."""
        return self._by_size(1.0 - 1.0 / np.sqrt(1.0 + self.sizes * self.ratio), "quasi_demeaning")

    @property
    def shrinkage(self) -> pd.Series:
        """``s = T psi / (1 + T psi)`` by unit size: the weight of a unit's data in its predicted effect."""
        if np.isinf(self.ratio):
            return self._by_size(np.ones(len(self.sizes)), "shrinkage")
        return self._by_size(self.sizes * self.ratio / (1.0 + self.sizes * self.ratio), "shrinkage")

    @property
    def forms(self) -> pd.DataFrame:
        """First-stage forms: value, and the coefficients of both variances in the equations solved."""
        columns = ["form", "value", "on_idiosyncratic_variance", "on_unit_variance"]
        return pd.DataFrame(list(self.forms_table), columns=columns).set_index("form")

    def _by_size(self, values: FloatArray, name: str) -> pd.Series:
        return pd.Series(values, index=pd.Index(self.sizes, name="size"), name=name)

    def __repr__(self) -> str:
        """Return a short form: route, status, components."""
        return (
            f"<Fit {self.route}: {self.status}; unit variance {self.unit_variance:.6g}, "
            f"idiosyncratic variance {self.idiosyncratic_variance:.6g}, ratio {self.ratio:.6g}>"
        )

    def _repr_html_(self) -> str:
        """Return what is printed, for a notebook: the coefficients as a table, the rest as lines."""
        rows = [
            (term, *("-" if np.isnan(value) else f"{value:.6g}" for value in (estimate, error)))
            for term, estimate, error in zip(self.terms, self.beta, self.standard_errors, strict=True)
        ]
        caption, *lines = str(self).split("\n")
        rest = "\n".join(line.removeprefix("  ") for line in lines[len(rows) + 1 :])
        header = ("term", "estimate", "standard error")
        return fragment(table(caption, header, rows, right=(1, 2)), preformatted(rest))

    def __str__(self) -> str:
        """Return coefficients, components, conventions that differ from the defaults, notes and certificate as text."""
        table = pd.DataFrame({"estimate": self.coefficients, "standard error": self.standard_errors})
        lines = [f"{self.route}: {self.status}; {self.rows} rows, {self.units} units"]
        lines += [
            f"  {line}"
            for line in table.to_string(float_format=lambda value: f"{value:.6g}", na_rep="-").splitlines()
        ]
        if np.isfinite(self.idiosyncratic_variance):
            raw = self.unit_variance_raw
            lines.append(
                f"  unit variance {'-' if np.isnan(raw) else format(raw, '.6g')}, "
                f"idiosyncratic variance {self.idiosyncratic_variance:.6g}, "
                f"ratio {self.ratio:.6g}, ICC {self.icc:.6g}"
            )
        chosen = ", ".join(
            f"{name}={value}" for name, value in self.conventions.items() if value != "default"
        )
        lines.append(f"  conventions: {chosen or 'none'}")
        texts = [f"{term}: {reason}" for term, reason in self.not_estimable.items() if self.estimated]
        texts += [f"note: {note}" for note in self.notes]
        texts += self.certificate.lines() if self.certificate is not None else []
        return "\n".join([*lines, *wrapped(texts, "  ", "    ")])
