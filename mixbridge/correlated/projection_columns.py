"""Columns of a projection of the unit effect: values of all periods, or unit means by unit size.

Chamberlain (1982; 1984) writes the unit effect as a linear projection on the covariates of all periods,

    alpha_i = c + sum_t x_it' l_t + a_i,

so that the augmented regression has, beside x_it, a unit-constant column for each covariate and period. In a panel
with holes the projection differs by the set of periods seen (Abrevaya 2013): for each pattern g of at least so many
units a constant and columns ``x_t 1[pattern of i is g]`` for the periods t in g. Units in rarer patterns get a constant
and their unit means, all of them, period indicators included.

By size (Wooldridge 2019): ``alpha_i = sum_r 1[T_i = r] (c_r + mean(x_i)' k_r) + a_i``.

In each form the unit means of all columns lie in the span of the added columns and the constant, so that slopes of
columns that vary within units stay the within slopes at every variance ratio.
"""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from mixbridge.correlated.period_table import PeriodTable
from mixbridge.errors import IdentificationError

__all__ = ["Columns", "Origin", "by_pattern", "by_size"]

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.intp]
BoolArray = NDArray[np.bool_]


@dataclass(frozen=True, slots=True)
class Origin:
    """Where an added column comes from.

    Attributes
    ----------
    column : str
        Design column; empty for the constant of a group.
    period : int or None
        Ordinal of the period; None for unit means and constants.
    group : str
        Pattern or size class; empty where all units are one group.
    """

    column: str
    period: int | None
    group: str


@dataclass(frozen=True, slots=True, eq=False)
class Columns:
    """Columns offered to the regression.

    Attributes
    ----------
    names : tuple of str
    values : ndarray of shape (N, q)
    origins : tuple of Origin
    left_out : tuple of str
        Columns of the formula that take one value per period for all units: they stay out of the projection.
    text : str
        What was done, in words.
    """

    names: tuple[str, ...]
    values: FloatArray
    origins: tuple[Origin, ...]
    left_out: tuple[str, ...]
    text: str


def by_pattern(table: PeriodTable, means: FloatArray, unit_name: str) -> Columns:
    """Return the values of all periods, by pattern of periods seen where there is more than one.

    Parameters
    ----------
    table : PeriodTable
        Of the columns that vary within units.
    means : ndarray of shape (N, k)
        Unit means of the same columns.
    unit_name : str
        For messages.

    Raises
    ------
    IdentificationError
        If there are no fewer columns than units, or no pattern has more units than columns.
    """
    alike = table.same_for_all
    free = np.flatnonzero(~alike)
    if not free.size:
        raise IdentificationError(
            "no column varies both within units and between units in a period: there is nothing to project on. "
            "Period indicators and deterministic trends stay out of the projection."
        )
    patterns, group, counts = np.unique(table.present, axis=0, return_inverse=True, return_counts=True)
    group = np.asarray(group).reshape(-1)
    large = counts > 1 + patterns.sum(axis=1) * free.size
    _enough(table, patterns, counts, large, free=free.size, unit_name=unit_name)
    order = np.flatnonzero(large)[np.argsort(-counts[large], kind="stable")]
    offered = _Offered()
    single = len(patterns) == 1
    for number, g in enumerate(order, start=1):
        label = "" if single else f"pattern {number}"
        inside = (group == g).astype(float)
        if number > 1:
            offered.put(label, Origin("", None, label), inside)
        _values_of(offered, table, free, seen=patterns[g], inside=inside, label=label)
    rest = ~np.isin(group, order)
    if rest.any():
        inside = rest.astype(float)
        offered.put("other patterns", Origin("", None, "other patterns"), inside)
        for j, column in enumerate(table.columns):
            origin = Origin(column, None, "other patterns")
            offered.put(f"mean({column})[other patterns]", origin, inside * means[:, j])
    units, periods, _ = table.values.shape
    if len(offered.names) + 1 >= units:
        raise IdentificationError(
            f"the projection adds {len(offered.names)} columns for {units} units ({unit_name}): not identified. Use "
            "correlated('mundlak'), or correlated('mundlak_sizes') for terms by unit size."
        )
    shown = ", ".join(table.columns[j] for j in free)
    text = f"values of {shown} in each of {periods} periods"
    if not single:
        text = (
            f"values of {shown} in each period seen, separately for {len(order)} of {len(patterns)} patterns of "
            f"periods seen ({int(counts[order].sum())} of {units} units)"
        )
    if rest.any():
        text += f", and unit means for the {int(rest.sum())} units in rarer patterns"
    left_out = tuple(table.columns[j] for j in np.flatnonzero(alike))
    return Columns(
        tuple(offered.names), np.column_stack(offered.values), tuple(offered.origins), left_out, text
    )


def by_size(
    columns: tuple[str, ...], means: FloatArray, sizes: NDArray[np.int64], *, linear: bool
) -> Columns:
    """Return unit means with terms by unit size.

    Parameters
    ----------
    columns : tuple of str
        Columns that vary within units.
    means : ndarray of shape (N, k)
    sizes : ndarray of int, shape (N,)
        Rows of each unit.
    linear : bool
        Size itself and its products with the means; else an indicator of each size that more units have than the
        means and a constant have coefficients.

    Raises
    ------
    IdentificationError
        If all units have the same size, or no size has enough units.
    """
    found, counts = np.unique(sizes, return_counts=True)
    if found.size == 1:
        raise IdentificationError(
            f"all units have {int(sizes[0])} rows: there are no terms by unit size. Use correlated('mundlak')."
        )
    offered = _Offered()
    for j, column in enumerate(columns):
        offered.put(f"mean({column})", Origin(column, None, ""), means[:, j])
    if linear:
        groups = [("size", np.asarray(sizes - sizes.mean(), dtype=np.float64))]
        text = f"unit means of {', '.join(columns)}, unit size, and their products"
    else:
        groups, text = _size_classes(columns, sizes, found, counts)
    for label, inside in groups:
        offered.put(label, Origin("", None, label), inside)
        for j, column in enumerate(columns):
            offered.put(f"mean({column})[{label}]", Origin(column, None, label), inside * means[:, j])
    return Columns(tuple(offered.names), np.column_stack(offered.values), tuple(offered.origins), (), text)


@dataclass(slots=True, eq=False)
class _Offered:
    """Columns as they are gathered."""

    names: list[str] = field(default_factory=list)
    origins: list[Origin] = field(default_factory=list)
    values: list[FloatArray] = field(default_factory=list)

    def put(self, name: str, origin: Origin, column: FloatArray) -> None:
        self.names.append(name)
        self.origins.append(origin)
        self.values.append(column)


def _values_of(
    offered: _Offered, table: PeriodTable, free: IntArray, *, seen: BoolArray, inside: FloatArray, label: str
) -> None:
    """Offer the values of each column in each period that a pattern has."""
    for j in free:
        for t in np.flatnonzero(seen):
            period = int(table.periods[t])
            name = f"{table.columns[j]}@{period}" + (f"[{label}]" if label else "")
            column = np.where(inside > 0.0, np.nan_to_num(table.values[:, t, j]), 0.0)
            offered.put(name, Origin(table.columns[j], period, label), column)


def _enough(
    table: PeriodTable, patterns: BoolArray, counts: IntArray, large: BoolArray, *, free: int, unit_name: str
) -> None:
    """Refuse where no pattern has more units than coefficients."""
    units, periods, _ = table.values.shape
    if large.any():
        return
    if len(patterns) == 1:
        raise IdentificationError(
            f"the projection has {free} columns x {periods} periods = {free * periods} coefficients and a "
            f"constant for {units} units ({unit_name}): not identified. Use correlated('mundlak'), which adds "
            f"{free} unit means."
        )
    most = int(counts.argmax())
    raise IdentificationError(
        f"the {units} units have {len(patterns)} patterns of periods seen; the commonest, of {int(counts[most])} "
        f"units, needs {1 + int(patterns[most].sum()) * free} coefficients: no pattern has more units than "
        "coefficients. Use correlated('mundlak'), or correlated('mundlak_sizes') for terms by unit size."
    )


def _size_classes(
    columns: tuple[str, ...], sizes: NDArray[np.int64], found: NDArray[np.int64], counts: IntArray
) -> tuple[list[tuple[str, FloatArray]], str]:
    k = len(columns)
    large = counts > k + 1
    if not large.any():
        raise IdentificationError(
            f"no unit size is shared by more than {k + 1} units, as separate coefficients of {k} unit means and a "
            "constant need. Use correlated('mundlak_size_linear'), which takes size itself."
        )
    own = found[large]
    if large.all():  # the commonest is what the others are compared with
        own = np.delete(own, int(counts.argmax()))
    others = "the commonest size" if large.all() else f"the {int(counts[~large].sum())} units of other sizes"
    text = (
        f"unit means of {', '.join(columns)} with separate coefficients and constants for units of "
        f"{', '.join(map(str, own.tolist()))} rows, beside those of {others}"
    )
    return [(f"size {size}", (sizes == size).astype(np.float64)) for size in own.tolist()], text
