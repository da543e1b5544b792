"""The record of leave-one-unit-out, and what is read off it."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, replace
from types import MappingProxyType

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from mixbridge.display import Printed
from mixbridge.display.text import frame_lines, sentence, wrapped
from mixbridge.errors import OptionError
from mixbridge.resample.deletion_routes import Refits
from mixbridge.resample.jackknife_verdicts import (
    CLASSES,
    NOT_AVAILABLE,
    SIGNS,
    Limits,
    against_zero,
    agreement,
)
from mixbridge.routes import REFERENCE_ROUTES, Fit

__all__ = ["LeaveOneOut", "without_names"]

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.intp]
DECIDING_COLUMNS = ["unit", "route", "term", "conclusion", "with_all_units", "without_the_unit", "influence"]
DECIDING_SHOWN = ["unit", "route", "term", "conclusion", "with it", "without it", "moved by (se)"]
MULTIPLIERS = {"jackknife": "(N - 1)/N", "none": "1"}
"""Multiplier of the sum of squares, in words: with ``none`` it is CR3 with the ratio estimated anew."""


@dataclass(frozen=True, slots=True, eq=False)
class LeaveOneOut(Printed):
    """Every route without each unit in turn.

    Attributes
    ----------
    terms : tuple of str
        Coefficients.
    primary : str
        The route that is reported.
    fits : mapping of str to Fit
        Routes fitted to all units.
    refits : mapping of str to Refits
        The same routes without each unit, in the order of `units`.
    units : pandas.Index
        Keys of the units; ``unit 1``, ... by influence where names are off.
    sizes : ndarray of int or None
        Rows of each unit; None where names are off.
    multipliers : mapping of str to ndarray
        By route, what standard errors are multiplied by to make intervals.
    limits : Limits
        What counts as immaterial.
    named : bool
        Whether units are named.
    notes : tuple of str
        What a reader of the figures should know.
    """

    terms: tuple[str, ...]
    primary: str
    fits: Mapping[str, Fit]
    refits: Mapping[str, Refits]
    units: pd.Index
    sizes: NDArray[np.int64] | None
    multipliers: Mapping[str, FloatArray]
    limits: Limits
    named: bool
    notes: tuple[str, ...]

    def __str__(self) -> str:
        """Return which units decide something, and how far the most influential ones move each coefficient."""
        moved = self.influence()
        rows = []
        for term in self.terms:
            values = moved[term].abs()
            unit = values.idxmax() if values.notna().any() else None
            rows.append([term, unit, np.nan if unit is None else moved.at[unit, term]])
        largest = pd.DataFrame(rows, columns=["term", "unit", "moved by (se)"])
        deciding = self.deciding()
        head = (
            f"Leave-one-unit-out: {len(self.units)} units, {len(self.fits)} routes; moves in standard errors of "
            f"{self.primary}. Without any one of {deciding['unit'].nunique()} units some conclusion is another:"
        )
        lines = [
            *wrapped([head]),
            *frame_lines(deciding.set_axis(DECIDING_SHOWN, axis=1), most=12, widest=22),
        ]
        lines += [f"The unit that moves each coefficient by {self.primary} most:", *frame_lines(largest)]
        return "\n".join([*lines, *wrapped(sentence(note) for note in self.notes)])

    def influence(self, route: str | None = None) -> pd.DataFrame:
        """Return how far each deletion moves each coefficient, in standard errors of the primary route.

        Parameters
        ----------
        route : str, optional
            The primary route unless given.

        Returns
        -------
        DataFrame
            Units by terms: estimate without the unit minus estimate with all, over the primary route's standard
            error with all units. NaN where the deletion leaves no estimate.
        """
        key = self._known(route)
        errors = self.fits[self.primary].standard_errors.to_numpy()
        moved = (self.refits[key].coefficients - self.fits[key].beta) / np.where(errors > 0.0, errors, np.nan)
        return pd.DataFrame(moved, index=self.units, columns=list(self.terms))

    def components(self, route: str | None = None) -> pd.DataFrame:
        """Return variances, ratio and status without each unit.

        Parameters
        ----------
        route : str, optional
            The primary route unless given.

        Returns
        -------
        DataFrame
            Units by ``unit_variance_raw``, ``idiosyncratic_variance``, ``ratio``, ``ratio_moved`` (minus the one with
            all units), ``status``, ``certified``.
        """
        key = self._known(route)
        of = self.refits[key]
        with np.errstate(invalid="ignore"):
            moved = of.ratio - self.fits[key].ratio
        columns = {
            "unit_variance_raw": of.unit_variance_raw,
            "idiosyncratic_variance": of.idiosyncratic_variance,
            "ratio": of.ratio,
            "ratio_moved": moved,
            "status": of.status,
            "certified": of.certified,
        }
        return pd.DataFrame(columns, index=self.units)

    def classes(self, route: str) -> pd.DataFrame:
        """Return the agreement class of a route with the primary one without each unit, term by term.

        Parameters
        ----------
        route : str
            A random-effects route.

        Returns
        -------
        DataFrame
            Units by terms.
        """
        codes = self._codes(self._compared(route), self.refits)
        return pd.DataFrame(
            np.array(CLASSES, dtype=object)[codes], index=self.units, columns=list(self.terms)
        )

    def deciding(self) -> pd.DataFrame:
        """Return the units whose deletion changes a conclusion, the most influential first.

        Returns
        -------
        DataFrame
            ``unit, route, term, conclusion, with_all_units, without_the_unit, influence``. Conclusions: where the
            interval of the primary route lies (``interval against zero``), whether its ratio is zero (``ratio``), the
            ``status`` of any route, and the class of any other random-effects route (``agreement``). Influence is
            that of the unit on the term by the primary route; where there is no term, the largest.
        """
        found: list[tuple[int, list[object]]] = []
        for key in self.fits:
            found += self._changed_status(key)
        found += self._changed_ratio()
        found += self._changed_intervals()
        for key in self.fits:
            if key != self.primary and key not in REFERENCE_ROUTES:
                found += self._changed_classes(key)
        place = np.empty(len(self.units), dtype=np.intp)
        place[self._order()] = np.arange(len(self.units))
        found.sort(key=lambda row: int(place[row[0]]))
        return pd.DataFrame([[self.units[unit], *row] for unit, row in found], columns=DECIDING_COLUMNS)

    def jackknife(self, route: str | None = None, multiplier: str = "jackknife") -> pd.DataFrame:
        """Return jackknife standard errors of the coefficients and of the ratio.

        Parameters
        ----------
        route : str, optional
            The primary route unless given.
        multiplier : {'jackknife', 'none'}
            ``(N - 1)/N``, or 1: CR3 with the ratio estimated anew in each deletion.

        Returns
        -------
        DataFrame
            ``quantity`` (terms, then ``ratio``), ``estimate``, ``standard_error``: root of the multiplier times the sum
            over units of squared distances from the estimate with all units; ``bias``: ``(N - 1)`` times mean of the
            deletions minus estimate; ``reason`` where a deletion leaves no estimate, and so no standard error.
        """
        key = self._known(route)
        if multiplier not in MULTIPLIERS:
            raise OptionError.not_among("multiplier", multiplier, MULTIPLIERS)
        values, estimate = self._stacked(key)
        count = len(values)
        factor = (count - 1.0) / count if multiplier == "jackknife" else 1.0
        with np.errstate(invalid="ignore"):
            moved = values - estimate
            error = np.sqrt(factor * (moved**2).sum(axis=0))
            bias = (count - 1.0) * moved.mean(axis=0)
        lost = (~np.isfinite(values)).sum(axis=0)
        reasons = [
            ""
            if not gone
            else "no estimate"
            if not np.isfinite(here)
            else f"{gone} deletion(s) leave no estimate"
            for gone, here in zip(lost.tolist(), estimate.tolist(), strict=True)
        ]
        return pd.DataFrame(
            {
                "quantity": [*self.terms, "ratio"],
                "estimate": estimate,
                "standard_error": error,
                "bias": bias,
                "reason": reasons,
            }
        )

    def jackknife_covariance(self, route: str | None = None, multiplier: str = "jackknife") -> pd.DataFrame:
        """Return the jackknife covariance of coefficients and ratio; parameters as for `jackknife`."""
        key = self._known(route)
        if multiplier not in MULTIPLIERS:
            raise OptionError.not_among("multiplier", multiplier, MULTIPLIERS)
        values, estimate = self._stacked(key)
        with np.errstate(invalid="ignore"):
            moved = values - estimate
        factor = (len(values) - 1.0) / len(values) if multiplier == "jackknife" else 1.0
        labels = [*self.terms, "ratio"]
        return pd.DataFrame(factor * (moved.T @ moved), index=labels, columns=labels)

    def _stacked(self, key: str) -> tuple[FloatArray, FloatArray]:
        values = np.column_stack([self.refits[key].coefficients, self.refits[key].ratio])
        estimate = np.append(self.fits[key].beta, self.fits[key].ratio)
        values = np.where(np.isfinite(values), values, np.nan)
        return values, np.where(np.isfinite(estimate), estimate, np.nan)

    def _known(self, route: str | None) -> str:
        key = self.primary if route is None else route
        if key not in self.fits:
            raise OptionError.not_among("route", key, self.fits)
        return key

    def _compared(self, route: str) -> str:
        key = self._known(route)
        if key == self.primary or key in REFERENCE_ROUTES:
            allowed = [name for name in self.fits if name != self.primary and name not in REFERENCE_ROUTES]
            raise OptionError.not_among("route to compare with the primary one", key, allowed)
        return key

    def _codes(self, key: str, of: Mapping[str, Refits]) -> NDArray[np.int8]:
        return agreement(
            of[key], of[self.primary], self.multipliers[key], self.multipliers[self.primary], self.limits
        )

    def _whole(self) -> dict[str, Refits]:
        """Return the fits to all units as refits of one panel."""
        made = {}
        for key, fit in self.fits.items():
            made[key] = Refits.empty(1, len(self.terms))
            made[key].put_alone(0, fit)
        return made

    def _largest(self) -> FloatArray:
        """Return the largest influence of each unit on any term; infinite where nothing is left to estimate."""
        table = np.abs(self.influence().to_numpy())
        live = np.isfinite(self.fits[self.primary].beta)
        table = np.where(np.isfinite(table), table, np.inf)[:, live]
        return np.asarray(table.max(axis=1, initial=0.0))

    def _order(self) -> IntArray:
        return np.argsort(-self._largest(), kind="stable")

    def _changed_status(self, key: str) -> list[tuple[int, list[object]]]:
        before, largest = self.fits[key].status, self._largest()
        if before.startswith("not estimable"):
            return []
        at = np.flatnonzero(self.refits[key].status != before)
        return [(int(i), [key, "", "status", before, self.refits[key].status[i], largest[i]]) for i in at]

    def _changed_ratio(self) -> list[tuple[int, list[object]]]:
        before, after = self.fits[self.primary].ratio, self.refits[self.primary].ratio
        if not np.isfinite(before):
            return []
        words = {True: "zero", False: "above zero"}
        largest = self._largest()
        at = np.flatnonzero(np.isfinite(after) & ((after == 0.0) != (before == 0.0)))
        return [
            (int(i), [self.primary, "", "ratio", words[before == 0.0], words[before != 0.0], largest[i]])
            for i in at
        ]

    def _changed_intervals(self) -> list[tuple[int, list[object]]]:
        multiplier = self.multipliers[self.primary]
        before = against_zero(self._whole()[self.primary], multiplier)[0]
        after = against_zero(self.refits[self.primary], multiplier)
        influence, rows = self.influence().to_numpy(), []
        for i, j in zip(*np.nonzero((after != before) & (after != 2)), strict=True):
            words = [SIGNS[int(before[j])], SIGNS[int(after[i, j])]]
            rows.append(
                (int(i), [self.primary, self.terms[j], "interval against zero", *words, influence[i, j]])
            )
        return rows

    def _changed_classes(self, key: str) -> list[tuple[int, list[object]]]:
        before, after = self._codes(key, self._whole())[0], self._codes(key, self.refits)
        influence, rows = self.influence().to_numpy(), []
        for i, j in zip(*np.nonzero((after != before) & (after != NOT_AVAILABLE)), strict=True):
            words = [CLASSES[before[j]], CLASSES[after[i, j]]]
            rows.append((int(i), [key, self.terms[j], "agreement", *words, influence[i, j]]))
        return rows


def without_names(found: LeaveOneOut) -> LeaveOneOut:
    """Return the same figures with units numbered by influence: no key, no size, no place in the data is left.

    Parameters
    ----------
    found : LeaveOneOut

    Returns
    -------
    LeaveOneOut
        Reasons of deletions that cannot be fitted are cut, since they hold numbers of rows.
    """
    order = found._order()
    refits = {key: of.take(order) for key, of in found.refits.items()}
    for of in refits.values():
        of.status[:] = [str(status).partition(":")[0] for status in of.status]
    return replace(
        found,
        refits=MappingProxyType({key: of.freeze() for key, of in refits.items()}),
        units=pd.Index([f"unit {i + 1}" for i in range(len(order))]),
        sizes=None,
        named=False,
    )
