"""Where each node of a chain lies: its ratio before and after truncation, from the fit or step itself."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from mixbridge.ratio import Curve
from mixbridge.reconcile.attribution_node import Node, node_of
from mixbridge.routes import FITTED, NOT_POSITIVE, TRUNCATED, Fit, fit_route, iterate

__all__ = ["Move", "Position", "Positions"]

FloatArray = NDArray[np.float64]
NO_ROWS = "differences are not on the curve"


@dataclass(frozen=True, slots=True)
class Position:
    """One node on these data.

    Attributes
    ----------
    node : Node
    ratio : float
        The ratio used; infinite for `within`.
    raw : float
        The ratio before truncation, where weights exist for it (``1 + T psi > 0`` for every size); otherwise the
        ratio used.
    idiosyncratic_variance : float
        NaN for `within`, whose ratio needs none.
    status : str
        ``fitted``, ``unit variance truncated``, or why there is no ratio.
    """

    node: Node
    ratio: float
    raw: float
    idiosyncratic_variance: float
    status: str

    @property
    def available(self) -> bool:
        """Whether there is a ratio."""
        return not np.isnan(self.ratio)

    @property
    def cut(self) -> bool:
        """Whether truncation moved the ratio."""
        return self.raw != self.ratio


@dataclass(frozen=True, slots=True)
class Move:
    """One change of the ratio.

    Attributes
    ----------
    start, end : str
        Estimators before and after it.
    cause : str
        Key of `attribution_node.CAUSES`.
    sentence : str
        What is done after it instead of before it.
    ratio_from, ratio_to : float
    """

    start: str
    end: str
    cause: str
    sentence: str
    ratio_from: float
    ratio_to: float


Walks = tuple[tuple[tuple[Move, ...], ...], tuple[str, ...]]


@dataclass(frozen=True)
class Positions:
    """All nodes of one panel; each is computed once, when first asked for.

    Attributes
    ----------
    curve : Curve
    fits : mapping of str to Fit
        Fits of this panel; used as they are.
    known : dict
        Positions found so far, by node.
    walks : dict
        Chains found so far, by start, end and how much longer than the shortest they may be.
    """

    curve: Curve
    fits: Mapping[str, Fit]
    walks: dict[tuple[Node, Node, int], Walks] = field(default_factory=dict, repr=False)
    known: dict[Node, Position] = field(default_factory=dict, repr=False)
    _beta: dict[float, FloatArray] = field(default_factory=dict, repr=False)

    def __post_init__(self) -> None:
        """Take over the fits that are at hand."""
        for fit in self.fits.values():
            if fit.rows == self.curve.n and fit.route not in ("between", "first_difference"):
                node = node_of(fit)
                self.known.setdefault(node, self._of_fit(node, fit))

    def at(self, node: Node) -> Position:
        """Return the position of a node.

        Parameters
        ----------
        node : Node

        Returns
        -------
        Position
        """
        if node not in self.known:
            self.known[node] = self._found(node)
        return self.known[node]

    def beta(self, ratio: float) -> FloatArray:
        """Return the coefficients at a ratio; within slopes at an infinite one, NaN where there is none.

        Parameters
        ----------
        ratio : float

        Returns
        -------
        ndarray of shape (p,)
        """
        if ratio not in self._beta:
            self._beta[ratio] = (
                fit_route(self.curve, "within", {}, NO_ROWS).beta
                if np.isinf(ratio)
                else self.curve.at(ratio).beta
            )
        return self._beta[ratio]

    def _found(self, node: Node) -> Position:
        if node.start is None:
            return self._of_fit(node, fit_route(self.curve, node.route, dict(node.conventions), NO_ROWS))
        start = self.at(node.start)
        if not start.available:
            return Position(node, np.nan, np.nan, np.nan, f"{node.start.label}: {start.status}")
        if node.made == "minque":
            fit = fit_route(self.curve, "minque", {"prior": start.ratio}, NO_ROWS)
            return self._of_fit(node, fit)
        return self._of_path(node, start)

    def _of_fit(self, node: Node, fit: Fit) -> Position:
        if fit.status == NOT_POSITIVE or np.isnan(fit.ratio):
            return Position(node, np.nan, np.nan, fit.idiosyncratic_variance, fit.status)
        raw = fit.ratio
        if fit.status == TRUNCATED:
            raw = self._on_curve(fit.unit_variance_raw / fit.idiosyncratic_variance)
        return Position(node, fit.ratio, raw, fit.idiosyncratic_variance, fit.status)

    def _of_path(self, node: Node, start: Position) -> Position:
        if self.curve.df_within < 1 or not self.curve.within_residual > 0.0:
            return Position(node, np.nan, np.nan, np.nan, "no error is left within units")
        kind, steps = ("gls", 0) if node.made == "gls" else (node.made.removeprefix("iterated_"), 500)
        origin: str | float = "within" if np.isinf(start.ratio) else start.ratio
        path = iterate(self.curve, kind, origin, steps=steps)
        last = path.iloc[-1]
        status, ratio = str(last["status"]), float(last["ratio"])
        if np.isnan(ratio) or (steps and status != "converged"):
            return Position(node, np.nan, np.nan, np.nan, status)
        unit, idiosyncratic = float(last["unit_variance"]), float(last["idiosyncratic_variance"])
        if unit < 0.0:
            return Position(node, ratio, self._on_curve(unit / idiosyncratic), idiosyncratic, TRUNCATED)
        return Position(node, ratio, ratio, idiosyncratic, FITTED)

    def _on_curve(self, raw: float) -> float:
        """Return a negative ratio if every unit still has a positive weight, else zero."""
        return raw if 1.0 + float(self.curve.sizes[-1]) * raw > 0.0 else 0.0
