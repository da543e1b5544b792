"""The whole record of a study as plain values: unrounded, versioned, with the closed moments."""

from __future__ import annotations

import math
from dataclasses import asdict
from typing import Any

import numpy as np
import pandas as pd

from mixbridge.report.screen import StudyView
from mixbridge.routes import Fit

__all__ = ["RECORD_FORMAT", "RECORD_VERSION", "fit_record", "study_record"]

RECORD_FORMAT = "mixbridge-study"
RECORD_VERSION = 1


def study_record(study: StudyView) -> dict[str, Any]:
    """Return a study as nested lists, numbers and strings, ready for JSON.

    Parameters
    ----------
    study : StudyView

    Returns
    -------
    dict
        Unrounded, versioned, with the closed moments. Infinite numbers are the strings ``"inf"`` and
        ``"-inf"``, undefined ones None.
    """
    panel = study.panel
    return {
        "format": RECORD_FORMAT,
        "version": RECORD_VERSION,
        "formula": panel.formula,
        "unit": panel.unit_name,
        "period": panel.period_name,
        "primary": study.primary,
        "confidence": study.confidence,
        "reference": study.reference,
        "accounting": {
            "rows_given": panel.accounting.rows_given,
            "rows_used": panel.accounting.rows_used,
            "dropped": [list(entry) for entry in panel.accounting.dropped],
            "missing": [list(entry) for entry in panel.accounting.missing],
            "notes": list(panel.accounting.notes),
            "units": panel.N,
            "one_row_units": study.singletons,
        },
        "columns": _table(study.columns_report),
        "ranks": {
            "total": study.curve.rank,
            "within": study.curve.rank_within,
            "between": study.curve.rank_between,
            "unit_constant": study.curve.rank_constant,
        },
        "ledger": _table(study.ledger),
        "components": _table(study.components),
        "fits": {key: fit_record(fit) for key, fit in study.fits.items()},
        "identities": [
            {key: _plain(value) for key, value in asdict(item).items()} for item in study.identity_results
        ],
        "moments": study.moments.to_record(),
    }


def fit_record(fit: Fit) -> dict[str, Any]:
    """Return one fit as plain values.

    Parameters
    ----------
    fit : Fit

    Returns
    -------
    dict
        Components are variances, ``standard_errors`` are standard deviations; numbers as in `study_record`.
    """
    record = {
        "route": fit.route,
        "conventions": {key: _plain(value) for key, value in fit.conventions.items()},
        "status": fit.status,
        "notes": list(fit.notes),
        "coefficients": _series(fit.coefficients),
        "standard_errors": _series(fit.standard_errors),
        "covariance": _array(fit.covariance_array),
        "not_estimable": dict(fit.not_estimable),
        "component_covariance": _array(fit.components_covariance),
        "components_method": fit.components_method,
        "quasi_demeaning": _series(fit.quasi_demeaning),
        "shrinkage": _series(fit.shrinkage),
        "forms": [[_plain(value) for value in row] for row in fit.forms_table],
        "certificate": None if fit.certificate is None else _certificate(fit),
    }
    for name in (
        "unit_variance_raw",
        "unit_variance",
        "idiosyncratic_variance",
        "ratio",
        "icc",
        "scale",
        "log_likelihood",
    ):
        record[name] = _plain(getattr(fit, name))
    for name in ("residual_df", "rank", "rows", "units"):
        record[name] = _plain(getattr(fit, name))
    return record


def _certificate(fit: Fit) -> dict[str, Any]:
    certificate = fit.certificate
    assert certificate is not None
    values = {
        key: _plain(value)
        for key, value in asdict(certificate).items()
        if key not in ("stationary", "unresolved")
    }
    return {
        **values,
        "stationary": [asdict(point) for point in certificate.stationary],
        "unresolved": [list(pair) for pair in certificate.unresolved],
        "statements": certificate.lines(),
    }


def _plain(value: Any) -> Any:
    """Return a JSON value: numbers as they are, infinities as text, undefined numbers as null."""
    if isinstance(value, (bool, str)) or value is None:
        return value
    if isinstance(value, (int, np.integer)):
        return int(value)
    if isinstance(value, (float, np.floating)):
        number = float(value)
        if math.isnan(number):
            return None
        return ("inf" if number > 0 else "-inf") if math.isinf(number) else number
    return str(value)


def _series(series: pd.Series) -> dict[str, Any]:
    return {str(key): _plain(value) for key, value in series.items()}


def _array(values: np.ndarray[Any, Any]) -> list[Any]:
    return [[_plain(value) for value in row] for row in values]


def _table(table: pd.DataFrame) -> list[dict[str, Any]]:
    return [{str(key): _plain(value) for key, value in row.items()} for row in table.to_dict("records")]
