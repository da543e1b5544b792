"""A panel with unit means as further columns: moments, unit-level means, unit products and rows, consistently.

Nothing is read again: the unit means of all design columns are in the open moments, and a unit mean does not
vary within its unit.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field, replace
from types import MappingProxyType
from typing import cast

import numpy as np
from numpy.typing import NDArray

from mixbridge.correlated.choice import chosen_columns
from mixbridge.correlated.means import varying_columns, with_unit_means
from mixbridge.errors import DataError, IdentificationError
from mixbridge.moments import Moments, OpenMoments, close
from mixbridge.moments.products import UnitProducts
from mixbridge.panel import Panel
from mixbridge.panel.widened import WidenedPanel

__all__ = ["Augmented", "augment", "widen_products"]

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.intp]


@dataclass(frozen=True, slots=True, eq=False)
class Augmented:
    """A panel with the unit means of some of its columns.

    Attributes
    ----------
    panel : Panel
        The same rows; its blocks hold the added columns too.
    opened : OpenMoments or None
        With the added columns, before the outcome; None where the means of units were not kept.
    moments : Moments
        Closed, likewise.
    names : tuple of str
        Design columns, the added ones last.
    varying : tuple of str
        Given columns that vary within units.
    source : mapping of str to str
        Added column -> the column whose unit mean it is.
    dropped : mapping of str to str
        Mean not added because it is a combination of other columns -> that combination.
    left_out : tuple of str
        Columns that vary within units and whose means were not asked for.
    statement : str
        What was added, and what this form assumes.
    """

    panel: Panel
    opened: OpenMoments | None = field(repr=False)
    moments: Moments = field(repr=False)
    names: tuple[str, ...]
    varying: tuple[str, ...]
    source: Mapping[str, str]
    dropped: Mapping[str, str]
    left_out: tuple[str, ...]
    statement: str

    @property
    def added(self) -> tuple[str, ...]:
        """Names of the added columns."""
        return tuple(self.source)

    @property
    def partial(self) -> bool:
        """Whether means were added for some columns only, by choice."""
        return bool(self.left_out)

    def kept(self) -> OpenMoments:
        """Return the open moments, or refuse where the means of units were not kept."""
        if self.opened is None:
            raise DataError(
                "this question needs the means of every unit, which were not kept: the study has its closed "
                "moments only. Ask it of a study whose units fit into memory."
            )
        return self.opened

    def mean_of(self, column: str) -> str | None:
        """Return the added mean of a column; None if it has none."""
        return next((name for name, source in self.source.items() if source == column), None)

    def why_no_mean(self, column: str) -> str:
        """Say why a column that varies within units has no mean of its own; empty if it has one."""
        if self.mean_of(column) is not None:
            return ""
        if column in self.left_out:
            return "its unit mean was not asked for"
        text = next((text for name, text in self.dropped.items() if _is_mean_of(name, column)), "")
        return f"no unit mean of its own: {text}"


def augment(
    panel: Panel,
    opened: OpenMoments | None,
    moments: Moments | None = None,
    *,
    means_of: Sequence[str] | None = None,
) -> Augmented:
    """Add the unit means of design columns, on the rows used.

    Parameters
    ----------
    panel : Panel
    opened : OpenMoments or None
        Of the rows of the panel; without it all that follows from closed moments is there, but no rows.
    moments : Moments, optional
        The same, closed; closed here unless given.
    means_of : sequence of str, optional
        Terms of the formula or design columns whose means are added; every column that varies within units
        unless given.

    Returns
    -------
    Augmented
        A mean that is a combination of given columns and of means before it is not added, and the combination
        is kept; a given column is never left out.

    Raises
    ------
    IdentificationError
        If no column varies within units.
    OptionError
        If a name in `means_of` means no column that varies within units.
    """
    if moments is None and opened is None:
        raise DataError("there are no moments to add unit means to: give open or closed ones.")
    closed = close(opened) if moments is None and opened is not None else cast(Moments, moments)
    if closed.rows != panel.n or closed.design != panel.names:
        raise DataError("moments and panel hold different rows or columns: take both from the same study.")
    varying = varying_columns(closed)
    if not varying:
        raise IdentificationError("no column varies within units: there are no unit means to add.")
    chosen = (
        varying
        if means_of is None
        else chosen_columns("means_of", means_of, varying, panel.terms, panel.names)
    )
    wide = with_unit_means(closed, chosen)
    left_out = tuple(name for name in varying if name not in chosen)
    names = tuple(wide.source)
    widened, values = None, None
    if opened is not None:
        at = np.array([opened.columns.index(column) for column in wide.source.values()], dtype=np.intp)
        widened = _widen_opened(opened, at, names)
        values = (opened.means[:, at] + opened.shift[at])[opened.keys.get_indexer(panel.unit_keys)]
    return Augmented(
        panel=WidenedPanel(panel, values, names),
        opened=widened,
        moments=wide.moments,
        names=wide.moments.design,
        varying=varying,
        source=MappingProxyType(dict(wide.source)),
        dropped=MappingProxyType(dict(wide.dropped)),
        left_out=left_out,
        statement=_statement(panel.unit_name, wide.source, wide.dropped, left_out),
    )


def widen_products(products: UnitProducts, augmented: Augmented) -> UnitProducts:
    """Add the same unit means to unit products, by a linear map of what they hold.

    Parameters
    ----------
    products : UnitProducts
        Of the rows and columns before means were added.
    augmented : Augmented

    Returns
    -------
    UnitProducts
        As if gathered from rows with the added columns.

    Raises
    ------
    DataError
        If the columns are others.
    """
    moments, q = augmented.moments, len(augmented.source)
    p = len(products.columns) - 1
    expected = (moments.design[: len(moments.design) - q], moments.constant, moments.outcome)
    if (products.design, products.constant, products.outcome) != expected:
        raise DataError("the unit products have other columns than the panel that the means were added to.")
    picks = [products.columns.index(column) for column in augmented.source.values()]
    means = (
        products.means[:, picks] * products.scale[picks] + products.shift[picks] - moments.shift[p:-1]
    ) / (moments.scale[p:-1])
    frame = np.eye(p + q + 1)
    old = np.r_[np.arange(p), p + q]
    frame[np.ix_(old, old)] = products.frame
    rows, columns = np.triu_indices(p + q + 1)
    packed = np.zeros((products.units, rows.size))
    packed[:, np.isin(rows, old) & np.isin(columns, old)] = products.packed
    return replace(
        products,
        design=moments.design,
        shift=moments.shift,
        scale=moments.scale,
        means=np.column_stack([products.means[:, :p], means, products.means[:, p]]),
        frame=frame,
        packed=packed,
    )


def _widen_opened(opened: OpenMoments, at: IntArray, names: tuple[str, ...]) -> OpenMoments:
    p, q = len(opened.columns) - 1, at.size
    old = np.r_[np.arange(p), p + q]

    def padded(square: FloatArray) -> FloatArray:
        wide = np.zeros((p + q + 1, p + q + 1))
        wide[np.ix_(old, old)] = square
        return wide

    order = np.r_[np.arange(p), at, p]
    loss = opened.loss[order]
    loss[p : p + q] = 1.0
    return OpenMoments(
        columns=(*opened.columns[:-1], *names, opened.columns[-1]),
        keys=opened.keys,
        counts=opened.counts,
        shift=opened.shift[order],
        means=opened.means[:, order],
        within=padded(opened.within),
        loss=loss,
        factor=None if opened.factor is None else padded(opened.factor),
    )


def _is_mean_of(name: str, column: str) -> bool:
    while name.startswith("unit_"):
        name = name.removeprefix("unit_")
    return name == f"mean({column})"


def _statement(
    unit: str, source: Mapping[str, str], dropped: Mapping[str, str], left_out: tuple[str, ...]
) -> str:
    parts = [f"Unit means over the rows used, by {unit}: {', '.join(source) or 'none'}."]
    if dropped:
        parts.append(f"Not added, being combinations of other columns: {'; '.join(dropped.values())}.")
    if left_out:
        parts.append(
            f"Partial form, without the means of {', '.join(left_out)}: it assumes that, given the columns "
            f"in the model, the {unit} effect is unrelated to these means. Where that is false all slopes "
            "can be off, also those of columns whose means were added; they need not equal the within slopes."
        )
    else:
        parts.append(
            f"The {unit} effect may be related to all columns through their unit means. Slopes of columns "
            "that vary within units then equal the within slopes at every variance ratio. Unit means do not "
            "cure confounding that varies over time, reverse causality or measurement error, and contextual "
            "coefficients are not causal."
        )
    return " ".join(parts)
