"""Recompute a record from the moments in it."""

from __future__ import annotations

import json
from collections.abc import Mapping
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from mixbridge.errors import DataError
from mixbridge.moments import Moments
from mixbridge.panel import Accounting
from mixbridge.report.record import RECORD_FORMAT, RECORD_VERSION
from mixbridge.study.from_moments import from_moments

if TYPE_CHECKING:
    from mixbridge.moments.products import UnitProducts
    from mixbridge.report.verification import Verification

__all__ = ["verify"]

STATED = (
    "formula",
    "unit",
    "period",
    "primary",
    "confidence",
    "software",
    "terms",
    "source",
    "rows",
    "summary.identities_hold",
    "summary.identities_do_not_apply",
    "accounting.dropped",
    "accounting.missing",
    "accounting.notes",
    "accounting.by_unit",
    "audit.tests",
    "audit.tests_rejecting",
)
"""What a record says that does not follow from moments, counts with identities on rows among them."""


def verify(record: Mapping[str, Any] | str | Path, products: UnitProducts | None = None) -> Verification:
    """Check that every figure of a record follows from the moments that it carries.

    Parameters
    ----------
    record : mapping, str or Path
        What `Study.to_dict` returns, or the JSON file that ``mixbridge check --json`` printed.
    products : UnitProducts, optional
        Per-unit products of the same rows, where their owner gives them too: cluster-robust figures are then checked.

    Returns
    -------
    Verification
        Figure by figure: same, differs, needs rows. That the figures follow from the moments does not show that the
        moments are those of the data.

    Raises
    ------
    DataError
        If this is no record, or one of another version, or its moments are damaged.

    Examples
    --------
    >>> import mixbridge
    >>> study = mixbridge.crosscheck("honey ~ forage", mixbridge.demo.apiaries(), unit="apiary")
    >>> mixbridge.verify(study.to_dict()).passed
    True
    """
    from mixbridge.report.verification import compare_records

    given = record if isinstance(record, Mapping) else _read(Path(record))
    where = "the record" if isinstance(record, Mapping) else str(record)
    if given.get("format") != RECORD_FORMAT:
        raise DataError(
            f"{where} is not a record of a study: its format is {given.get('format')!r}, needed is {RECORD_FORMAT!r}. "
            "mixbridge check --json prints one."
        )
    if given.get("version") != RECORD_VERSION:
        raise DataError(
            f"{where} has version {given.get('version')!r} of the record; this program checks version "
            f"{RECORD_VERSION}. Use the release that wrote it, or make the record again."
        )
    try:
        moments = Moments.from_record(given["moments"])
        widest = max((int(stop) for _, stop in given["terms"].values()), default=0)
        if widest != len(moments.design):
            raise ValueError(f"its terms have {widest} columns and its moments {len(moments.design)}")
        study = from_moments(
            moments,
            formula=str(given["formula"]),
            unit=str(given["unit"]),
            period=given["period"],
            terms={name: slice(*pair) for name, pair in given["terms"].items()},
            accounting=_accounting(given["accounting"], moments.rows),
            primary=str(given["primary"]),
            routes=tuple(given["fits"]),
            confidence=float(given["confidence"]),
            products=products,
            source_note=None,
        )
    except (KeyError, TypeError, ValueError, IndexError, AttributeError) as error:
        raise DataError(f"{where} is incomplete or damaged: {type(error).__name__}: {error}.") from error
    again = json.loads(json.dumps(study.to_dict()))
    tolerance = max(1e-9, 1e3 * float(np.finfo(float).eps) * float(study.curve.condition))
    # the columns of a projection are columns like others in the moments: that they are one is a statement
    stated = STATED if given.get("added") is None else (*STATED, "added", "unit_means", "projection")
    return compare_records(given, again, tolerance=min(tolerance, 1e-4), stated=stated)


def _accounting(given: Mapping[str, Any], rows: int) -> Accounting:
    dropped = tuple((str(cause), str(name), int(count)) for cause, name, count in given["dropped"])
    return Accounting(
        rows_given=rows + sum(count for _, _, count in dropped),
        rows_used=rows,
        dropped=dropped,
        missing=tuple((str(name), int(count)) for name, count in given["missing"]),
        notes=tuple(str(note) for note in given["notes"]),
    )


def _read(path: Path) -> dict[str, Any]:
    try:
        found = json.loads(path.read_text(encoding="utf-8"))
    except OSError as error:
        raise DataError(f"{path} cannot be read: {error.strerror}.") from error
    except (UnicodeDecodeError, json.JSONDecodeError) as error:
        raise DataError(f"{path} is not JSON: {error}.") from error
    if not isinstance(found, dict):
        raise DataError(f"{path} holds a {type(found).__name__}; a record is an object with named parts.")
    return found
