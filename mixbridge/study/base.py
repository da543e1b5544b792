"""What every part of a study builds on: the panel, its moments, the curve, and the fits."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from dataclasses import dataclass, field, replace
from functools import cached_property
from types import MappingProxyType
from typing import TYPE_CHECKING

import numpy as np

from mixbridge.errors import DataError, IdentificationError, OptionError
from mixbridge.moments import Block, Moments, OpenMoments
from mixbridge.panel import Panel
from mixbridge.panel.absent import Apart, RowlessPanel
from mixbridge.panel.parted_panel import PartedPanel
from mixbridge.ratio import Curve, curve_of
from mixbridge.routes import LEDGER_ROUTES, Fit, fit_route
from mixbridge.study.differences import Gather, differences_for

if TYPE_CHECKING:
    from mixbridge.correlated import Mundlak, Projection
    from mixbridge.inference.robust import RobustCovariance
    from mixbridge.inference.robust_two_way import PeriodBlock
    from mixbridge.moments.products import UnitProducts
    from mixbridge.reconcile.agreement import Interval

__all__ = ["StudyBase"]


@dataclass(frozen=True, eq=False)
class StudyBase:
    """Rows, moments and fits of a cross-check."""

    panel: Panel
    unit_moments: OpenMoments | None = field(repr=False)
    moments: Moments = field(repr=False)
    primary: str = "reml"
    routes: tuple[str, ...] = LEDGER_ROUTES
    confidence: float = 0.95
    unit_means: Mundlak | None = field(default=None, repr=False)
    projection: Projection | None = field(default=None, repr=False)
    given_products: UnitProducts | None = field(default=None, repr=False)

    @property
    def opened(self) -> OpenMoments:
        """Counts and means per unit.

        Raises
        ------
        DataError
            If they were not kept.
        """
        if self.unit_moments is None:
            raise DataError(
                "this question needs the counts and means of every unit, which were not kept: the study has its "
                "closed moments only. "
                + (
                    "Pass chunks=True to read the partitions one after the other in this process."
                    if isinstance(self.panel, PartedPanel)
                    else "Ask it of a study whose units fit into memory; of rows sorted by unit and read in chunks "
                    "they are kept with chunks=ChunkOptions(unit_records=True)."
                )
            )
        return self.unit_moments

    @property
    def has_unit_records(self) -> bool:
        """Whether the rows can be read again and the units are known, as robust covariances need."""
        rows = self.unit_moments is not None and not isinstance(self.panel, RowlessPanel)
        return rows or self.given_products is not None

    @cached_property
    def curve(self) -> Curve:
        """The panel reduced to what depends on the variance ratio."""
        return curve_of(self.moments)

    @cached_property
    def fits(self) -> MappingProxyType[str, Fit]:
        """Every route shown, with default conventions."""
        return MappingProxyType({key: self.fit(key) for key in self.routes})

    @cached_property
    def products(self) -> UnitProducts:
        """Products of every unit's rows, taken in one more pass when first asked for."""
        from mixbridge.moments.products import collect_products

        if self.given_products is not None:
            return self.given_products
        return collect_products(self._blocks, self.opened, self.moments, self.panel.unit_keys)

    @property
    def singletons(self) -> int:
        """Number of units with one row."""
        return int(self.moments.counts[self.moments.sizes == 1].sum())

    def fit(self, route: str, **conventions: object) -> Fit:
        """Fit one route.

        Parameters
        ----------
        route : str
            For example ``"reml"``, ``"swamy_arora"``, ``"minque_1"``.
        **conventions
            Conventions that differ from the defaults; the table `mixbridge.routes.AXES` lists them. Those that
            concern the covariance (``covariance``, ``multiplier``, ``scale``) never change the coefficients.

        Returns
        -------
        Fit
            With a status; a route that cannot be computed says why.
        """
        curve = self._curve_for(conventions)
        fit = fit_route(curve, route, conventions, self._differences())
        kind = fit.conventions.get("covariance", "model")
        if kind == "model" or not fit.estimated:
            return fit
        found = self.robust(fit, str(kind), fit.conventions.get("multiplier"))
        notes = (*fit.notes, *found.notes, *([] if found.status == "computed" else [found.status]))
        return replace(fit, robust=found.covariance_array, notes=notes)

    def robust(self, fit: Fit, kind: str, multiplier: object = None) -> RobustCovariance:
        """Compute a covariance robust to dependence within units, or within units and within periods.

        Parameters
        ----------
        fit : Fit
            Any route but `first_difference`.
        kind : {"CR0", "CR1", "CR2", "CR3", "two_way"}
        multiplier : str, optional
            Small-sample multiplier; the default of the kind unless given.

        Returns
        -------
        RobustCovariance
        """
        from mixbridge.inference.robust import robust_covariance
        from mixbridge.inference.robust_two_way import two_way_covariance

        name = None if multiplier in (None, "default") else str(multiplier)
        curve = self._curve_for(fit.conventions)
        products = self.products
        if curve is not self.curve:
            products = products.without_sizes(1)
        if kind != "two_way":
            return robust_covariance(curve, products, fit, kind=kind, multiplier=name)
        if self.panel.period_ordinals is None:
            raise OptionError(
                "covariance='two_way' needs periods: name the column with period=. "
                + (self.panel.period_note or "No period was given.")
                if not isinstance(self.panel, Apart)
                else f"covariance='two_way' cannot be computed: {self.panel.why_apart}"
            )
        return two_way_covariance(
            curve, products, fit, self._period_blocks, keys=self.panel.unit_keys, multiplier=name or "units"
        )

    @cached_property
    def _curve_without_singletons(self) -> Curve:
        if not (self.moments.sizes > 1).any():
            raise IdentificationError(
                "every unit has one row: nothing is left when one-row units are dropped."
            )
        return curve_of(self.moments.without_one_row_units())

    def _curve_for(self, conventions: Mapping[str, object]) -> Curve:
        dropped = conventions.get("one_row_units") == "dropped"
        return self._curve_without_singletons if dropped and self.singletons else self.curve

    def intervals(self, fit: Fit, rule: str | None = None) -> dict[str, Interval]:
        """Return the interval of every term.

        Parameters
        ----------
        fit : Fit
        rule : str, optional
            Reference distribution; the one in the conventions of the fit unless given, whose default is
            Satterthwaite on the curve and the classical t elsewhere; robust covariances take t with N - 1 there.

        Returns
        -------
        dict of str to Interval
            By term. With Kenward-Roger the standard errors are those of the adjusted covariance.
        """
        from mixbridge.inference.kenward_roger import kenward_roger
        from mixbridge.inference.references import default_rule, pick_reference
        from mixbridge.reconcile.agreement import Interval

        if not fit.estimated:
            return dict.fromkeys(fit.terms, Interval(*[np.nan] * 4))
        name = rule or str(fit.conventions.get("reference", "default"))
        if name == "default":
            name = default_rule(fit) if fit.robust is None else "t_units"
        curve = self._curve_for(fit.conventions)
        errors = fit.standard_errors.to_numpy()
        if name == "kenward_roger":
            errors = np.sqrt(np.diag(kenward_roger(curve, fit).covariance))
        found: dict[str, Interval] = {}
        for term, estimate, error, reference in zip(
            fit.terms, fit.beta, errors, pick_reference(curve, fit, rule=name), strict=True
        ):
            low, high = reference.interval(float(estimate), float(error), self.confidence)
            found[term] = Interval(float(estimate), float(error), low, high)
        return found

    def _blocks(self) -> Iterator[Block]:
        return self.panel.blocks_with_codes()

    def _period_blocks(self) -> Iterator[PeriodBlock]:
        codes, ordinals = self.panel.codes, self.panel.period_ordinals
        assert ordinals is not None
        _, periods = np.unique(ordinals, return_inverse=True)
        for start, x, y in self.panel.blocks():
            stop = start + y.size
            yield codes[start:stop], x, y, periods[start:stop]

    def _differences(self) -> Gather | str:
        return differences_for(self.panel)
