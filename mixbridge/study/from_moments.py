"""A study from moments alone: rows taken elsewhere, in several places, or not at hand."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from types import MappingProxyType
from typing import TYPE_CHECKING

from mixbridge.errors import OptionError
from mixbridge.moments import Moments, OpenMoments, close
from mixbridge.panel import Accounting
from mixbridge.panel.absent import RowlessPanel
from mixbridge.routes import LEDGER_ROUTES, named_route
from mixbridge.study.record import Study

if TYPE_CHECKING:
    from mixbridge.moments.products import UnitProducts

__all__ = ["from_moments"]


def from_moments(
    moments: Moments | OpenMoments,
    *,
    formula: str | None = None,
    unit: str = "unit",
    period: str | None = None,
    terms: Mapping[str, slice] | None = None,
    accounting: Accounting | None = None,
    primary: str = "reml",
    routes: Sequence[str] | None = None,
    confidence: float = 0.95,
    products: UnitProducts | None = None,
    source_note: str | None = "moments taken elsewhere; the rows are not at hand",
) -> Study:
    """Cross-check the routes on moments, without rows.

    Parameters
    ----------
    moments : Moments or OpenMoments
        Of one data set, or merged from several.
    formula : str, optional
        As printed in the output; made from the names of the columns unless given.
    unit, period : str
        What the units and periods are called.
    terms : mapping of str to slice, optional
        Columns of each term; each column is a term of its own unless given.
    accounting : Accounting, optional
        What became of the rows; the rows in the moments unless given.
    primary, routes, confidence
        As for `mixbridge.crosscheck`.
    products : UnitProducts, optional
        Per-unit products of the same rows; with them cluster-robust covariances and predicted effects are there too.
    source_note : str or None
        Where the moments come from, as printed.

    Returns
    -------
    Study
        What needs rows raises a DataError or has a status that says so; what needs the means of units does where
        the moments are closed.

    Examples
    --------
    >>> import mixbridge
    >>> data = mixbridge.demo.apiaries()
    >>> study = mixbridge.crosscheck("honey ~ forage + feeding", data, unit="apiary")
    >>> again = mixbridge.from_moments(study.moments, unit="apiary")
    >>> bool((again.fit("ml").beta == study.fit("ml").beta).all())
    True
    """
    if not 0.0 < confidence < 1.0:
        raise OptionError(f"confidence={confidence!r} is not allowed; allowed: a number between 0 and 1.")
    chosen = tuple(dict.fromkeys(LEDGER_ROUTES if routes is None else routes))
    for key in (*chosen, primary):
        named_route(key)
    opened = moments if isinstance(moments, OpenMoments) else None
    closed = close(moments) if isinstance(moments, OpenMoments) else moments
    names = closed.design
    constant = None if closed.constant is None else names.index(closed.constant)
    shown = (
        formula
        or f"{closed.outcome} ~ {' + '.join(name for name in names if name != closed.constant) or '1'}"
    )
    panel = RowlessPanel(
        formula=shown,
        outcome=closed.outcome,
        names=names,
        terms=MappingProxyType(dict(terms or {name: slice(j, j + 1) for j, name in enumerate(names)})),
        constant=constant,
        unit_name=unit,
        period_name=period,
        accounting=accounting or Accounting(closed.rows, closed.rows, (), ()),
        n=closed.rows,
        N=int(closed.counts.sum()),
        source_note=source_note,
    )
    study = Study(
        panel,
        opened,
        closed,
        primary,
        chosen if primary in chosen else (*chosen, primary),
        confidence,
        given_products=products,
    )
    _ = study.curve
    return study
