"""The whole record of a study as plain values: unrounded, versioned, with the closed moments.

Version 2 has these parts, described in full by ``record.schema.json``. A part with a ``status`` is ``computed``, or the
status says why it is not.

=================================  ==================================================================================
``format``, ``version``            what this is
``formula`` to ``rows``            what was asked: names, primary route, level, source; whether rows are at hand
``terms``, ``added``               columns of each term; columns added for correlated effects
``software``                       versions
``accounting``                     rows given, used, dropped by cause, missing by column; spread over units
``columns``, ``ranks``             level and spread of each column; ranks of X, QX, PX and the unit-constant directions
``ledger``, ``summary``            every term by every route; counts of classes and of identities
``components``, ``fits``           variances by route; every fit with conventions, covariance, forms, certificate
``identities``                     what theory says must agree
``inference``, ``robust``          coefficients with reference, df, interval and p; the same with robust covariance
``likelihoods``                    log-likelihoods with their constants, AIC, BIC
``variance_tests``                 tests of a zero unit variance, with seed and draws
``component_intervals``            intervals for variances, ratio and ICC by every method
``contrasts``                      and ``contrasts_robust``: the exogeneity contrasts
``unit_means``, ``projection``     within, between and contextual coefficients; tests inside a projection
``attributions``                   where the widest gaps come from
``paths``                          range of each coefficient over the ratio
``without_singletons``             the primary route without one-row units
``influence``                      the primary route without each unit, no unit named
``audit``                          every shared assumption
``fingerprint``, ``moments``       the checksum of the closed moments, and the moments
=================================  ==================================================================================
"""

from __future__ import annotations

from dataclasses import asdict
from typing import Any

import numpy as np

from mixbridge.report.plain import plain, plain_array, plain_series, plain_table
from mixbridge.report.record_sections import (
    added_columns,
    rows_at_hand,
    sections_of,
    software,
    summary_of,
)
from mixbridge.report.screen import StudyView
from mixbridge.routes import Fit

__all__ = ["RECORD_FORMAT", "RECORD_VERSION", "fit_record", "study_record"]

RECORD_FORMAT = "mixbridge-study"
RECORD_VERSION = 2


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
    moments = study.moments.to_record()
    return {
        "format": RECORD_FORMAT,
        "version": RECORD_VERSION,
        "formula": panel.formula,
        "unit": panel.unit_name,
        "period": panel.period_name,
        "primary": study.primary,
        "confidence": study.confidence,
        "reference": study.reference,
        "source": panel.source_note,
        "rows": rows_at_hand(study),
        "terms": {name: [at.start, at.stop] for name, at in panel.terms.items()},
        "added": added_columns(study),
        "software": software(),
        "accounting": {
            "rows_given": panel.accounting.rows_given,
            "rows_used": panel.accounting.rows_used,
            "dropped": [list(entry) for entry in panel.accounting.dropped],
            "missing": [list(entry) for entry in panel.accounting.missing],
            "notes": list(panel.accounting.notes),
            "by_unit": None if panel.accounting.by_unit is None else asdict(panel.accounting.by_unit),
            "units": panel.N,
            "one_row_units": study.singletons,
            "median_size": _median_size(moments["sizes"], moments["counts"]),
        },
        "columns": plain_table(study.columns_report),
        "ranks": {
            "total": study.curve.rank,
            "within": study.curve.rank_within,
            "between": study.curve.rank_between,
            "unit_constant": study.curve.rank_constant,
        },
        "ledger": plain_table(study.ledger),
        "summary": summary_of(study),
        "components": plain_table(study.components),
        "fits": {key: fit_record(fit) for key, fit in study.fits.items()},
        "identities": [
            {key: plain(value) for key, value in asdict(item).items()} for item in study.identity_results
        ],
        **sections_of(study),
        "fingerprint": moments["checksum"],
        "moments": moments,
    }


def _median_size(sizes: list[int], counts: list[int]) -> float:
    """Return the median number of rows of a unit, from distinct sizes and their counts."""
    upto = np.cumsum(counts)
    total = int(upto[-1])
    middle = np.searchsorted(upto, [(total + 1) // 2, total // 2 + 1])
    return float(np.asarray(sizes)[middle].mean())


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
        "conventions": {key: plain(value) for key, value in fit.conventions.items()},
        "status": fit.status,
        "notes": list(fit.notes),
        "coefficients": plain_series(fit.coefficients),
        "standard_errors": plain_series(fit.standard_errors),
        "covariance": plain_array(fit.covariance_array),
        "not_estimable": dict(fit.not_estimable),
        "component_covariance": plain_array(fit.components_covariance),
        "components_method": fit.components_method,
        "quasi_demeaning": plain_series(fit.quasi_demeaning),
        "shrinkage": plain_series(fit.shrinkage),
        "forms": [[plain(value) for value in row] for row in fit.forms_table],
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
        record[name] = plain(getattr(fit, name))
    for name in ("residual_df", "rank", "rows", "units"):
        record[name] = plain(getattr(fit, name))
    return record


def _certificate(fit: Fit) -> dict[str, Any]:
    certificate = fit.certificate
    assert certificate is not None
    values = {
        key: plain(value)
        for key, value in asdict(certificate).items()
        if key not in ("stationary", "unresolved")
    }
    return {
        **values,
        "stationary": [asdict(point) for point in certificate.stationary],
        "unresolved": [list(pair) for pair in certificate.unresolved],
        "statements": certificate.lines(),
    }
