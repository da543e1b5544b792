"""Tables of a rehearsal: bias, error, coverage and rejection, each with its Monte Carlo standard error."""

from __future__ import annotations

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from mixbridge.rehearse.replicates import Runs
from mixbridge.rehearse.widths import factors, rules_of
from mixbridge.resample.batch import STATUSES

__all__ = ["coefficient_table", "component_table", "interval_table", "status_table", "test_table"]

FloatArray = NDArray[np.float64]
SUMMARY = ["truth", "bias", "bias_error", "sd", "rmse", "rmse_error", "replicates"]


def coefficient_table(runs: Runs) -> pd.DataFrame:
    """Return ``route, term, truth, bias, bias_error, sd, rmse, rmse_error, replicates`` (those with a value)."""
    rows: list[list[object]] = []
    for key, found in runs.routes.items():
        for at, term in enumerate(runs.curve.names):
            values = found.coefficients[:, at]
            if np.isfinite(values).any():
                rows.append([key, term, *summary(values, float(runs.model.normal.coefficients[at]))])
    return pd.DataFrame(rows, columns=["route", "term", *SUMMARY])


def component_table(runs: Runs) -> pd.DataFrame:
    """Return the components: as `coefficient_table` by ``quantity``, with the share of estimates at zero.

    The truth of the unit variance is that of the whole unit effects, what unit means explain included.
    """
    model = runs.model
    rows: list[list[object]] = []
    for key, found in runs.routes.items():
        if not np.isfinite(found.unit_variance_raw).any() or runs.fits[key].route == "pooled":
            continue
        raw = found.unit_variance_raw
        known = np.isfinite(raw)
        zero = float((raw[known] <= 0.0).mean())
        error = _share_error(zero, int(known.sum()))
        for quantity, values, truth in (
            ("unit_variance", np.maximum(raw, 0.0), model.unit_variance),
            ("unit_variance_raw", raw, model.unit_variance),
            ("idiosyncratic_variance", found.idiosyncratic_variance, model.normal.idiosyncratic),
            ("icc", found.ratio / (1.0 + found.ratio), model.icc),
        ):
            rows.append([key, quantity, *summary(values, truth), zero, error])
    return pd.DataFrame(rows, columns=["route", "quantity", *SUMMARY, "zero", "zero_error"])


def interval_table(runs: Runs, confidence: float) -> pd.DataFrame:
    """Return coverage, mean half-width and rejection of a coefficient of 0, by route, term and interval rule.

    Returns
    -------
    DataFrame
        ``route, term, rule, truth, coverage, coverage_error, half_width, rejection, rejection_error, replicates``.
        Where the truth is 0, ``rejection`` is the size of the test, else its power.
    """
    rows: list[list[object]] = []
    truth = runs.model.normal.coefficients
    for key, found in runs.routes.items():
        for rule in rules_of(runs.fits[key]):
            half = found.standard_errors * factors(runs.curve, runs.fits[key], found, rule, confidence)
            off = np.abs(found.coefficients - truth)
            for at, term in enumerate(runs.curve.names):
                known = np.isfinite(half[:, at]) & np.isfinite(off[:, at])
                used = int(known.sum())
                if not used:
                    continue
                width = half[known, at]
                covered = float((off[known, at] <= width).mean())
                rejected = float((np.abs(found.coefficients[known, at]) > width).mean())
                rates = [covered, _share_error(covered, used), float(width.mean())]
                rejects = [rejected, _share_error(rejected, used)]
                rows.append([key, term, rule, float(truth[at]), *rates, *rejects, used])
    columns = ["route", "term", "rule", "truth", "coverage", "coverage_error", "half_width", "rejection"]
    return pd.DataFrame(rows, columns=[*columns, "rejection_error", "replicates"])


def test_table(runs: Runs) -> pd.DataFrame:
    """Return how often each test of an assumption rejects.

    Returns
    -------
    DataFrame
        ``test, hypothesis, true`` (whether the truth obeys it), ``reference, rejection, rejection_error,
        replicates``.
    """
    holds = {
        "zero unit variance": runs.model.unit_variance == 0.0,
        "unrelated unit effects": not runs.model.correlated,
    }
    rows: list[list[object]] = []
    for name, critical in runs.tests.items():
        values = runs.statistics[name]
        known = ~np.isnan(values)
        used = int(known.sum())
        share = float((values[known] > critical.value).mean()) if used else np.nan
        true = holds[critical.hypothesis]
        rows.append(
            [name, critical.hypothesis, true, critical.reference, share, _share_error(share, used), used]
        )
    columns = ["test", "hypothesis", "true", "reference", "rejection", "rejection_error", "replicates"]
    return pd.DataFrame(rows, columns=columns)


def status_table(runs: Runs) -> pd.DataFrame:
    """Return how many replicates have each status, by route, and how many optima are not certified."""
    rows = []
    for key, found in runs.routes.items():
        counts = np.bincount(found.status, minlength=len(STATUSES)).tolist()
        rows.append([key, *counts, int((~found.certified).sum())])
    return pd.DataFrame(rows, columns=["route", *STATUSES, "not certified"])


def summary(values: FloatArray, truth: float) -> list[object]:
    """Return truth, bias, its error, standard deviation, rmse, its error, and the number of values."""
    kept = values[np.isfinite(values)]
    if kept.size < 2:
        return [truth, *[np.nan] * 5, int(kept.size)]
    off = kept - truth
    bias, sd = float(off.mean()), float(off.std(ddof=1))
    square = float((off**2).mean())
    rmse, root = float(np.sqrt(square)), float(np.sqrt(kept.size))
    of_rmse = float((off**2).std(ddof=1)) / (2.0 * rmse * root) if rmse > 0.0 else 0.0
    return [truth, bias, sd / root, sd, rmse, of_rmse, int(kept.size)]


def _share_error(share: float, used: int) -> float:
    return float(np.sqrt(share * (1.0 - share) / used)) if used else np.nan
