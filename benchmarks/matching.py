"""Printed figures against the whole convention space, and how often a general optimiser of REML stops too early."""

from __future__ import annotations

import warnings

import numpy as np
import pandas as pd
from numpy.typing import NDArray
from statsmodels.regression.mixed_linear_model import MixedLM

import mixbridge
from benchmarks.measure import COLUMNS, described, interleaved
from benchmarks.panels import panel
from benchmarks.profiles import Profile
from benchmarks.results import Agreement, Ratio, Result, Table
from mixbridge.moments import Moments
from mixbridge.ratio import curve_of
from mixbridge.reconcile.match import match_reported
from mixbridge.routes import fit_route, log_likelihood

FloatArray = NDArray[np.float64]
WORSE = 1e-3
"""Deviance above the certified optimum from which a fit counts as stopped too early."""


def printed_column(study: mixbridge.Study, digits: int) -> dict[str, str]:
    """Print one column as a paper would: coefficients, standard errors of the residual scale, components."""
    fit = study.fit("swamy_arora", scale="gls_residuals")
    figures = {}
    for term in fit.terms:
        figures[f"b:{term}"] = f"{fit.coefficients[term]:.{digits}f}"
        figures[f"se:{term}"] = f"{fit.standard_errors[term]:.{digits}f}"
    figures["sigma_u"] = f"{fit.unit_variance**0.5:.{digits}f}"
    figures["sigma_e"] = f"{fit.idiosyncratic_variance**0.5:.{digits}f}"
    figures["rho"] = f"{fit.icc:.{digits}f}"
    for summary in ("min", "max"):
        figures[f"theta:{summary}"] = f"{getattr(fit.quasi_demeaning, summary)():.{digits}f}"
    return figures


def matching(profile: Profile) -> Result:
    """Time a search over every route and convention after the moments."""
    data = panel(profile.units)
    frame = data.frame()
    study = mixbridge.crosscheck(data.formula, frame, unit="unit", period="period")
    figures = printed_column(study, 5)
    slopes = {name: text for name, text in figures.items() if name.startswith("b:")}
    tasks = {
        f"{len(figures)} figures: coefficients, standard errors, components, weights": figures,
        f"{len(slopes)} coefficients only (first differences are searched too)": slopes,
        "icc only": {"rho": figures["rho"]},
    }
    found = {name: match_reported(given, study) for name, given in tasks.items()}
    times = interleaved(
        {name: lambda given=given: match_reported(given, study) for name, given in tasks.items()},
        profile.rounds,
    )
    full = found[next(iter(tasks))]
    held = [one.label for tied in full.classes for one in tied.candidates]
    return Result(
        problem=f"{data.y.size:,} rows × {data.x.shape[1]} columns, {profile.units:,} units of 1 to 19 rows, periods "
        "given; figures of one route and scale of standard errors, five decimals",
        method=described(profile.rounds) + "; the moments are there already",
        table=Table(
            ("figures given", *COLUMNS, "fits", "printouts", "left"),
            tuple(
                (
                    name,
                    *times[name].cells(),
                    str(match.account.fits),
                    str(match.account.printouts),
                    str(len(match.classes)),
                )
                for name, match in found.items()
            ),
        ),
        ratios=(
            Ratio("seconds, all figures", times[next(iter(tasks))].best, 1.0, "at most", "s"),
            Ratio("seconds, coefficients only", times[list(tasks)[1]].best, 1.0, "at most", "s"),
        ),
        agreements=(
            Agreement(
                "figures of the column reproduced",
                float(len(figures) - full.best),
                0.0,
                "its own route is in the space searched",
            ),
            Agreement(
                "the route of the column among those left",
                float("swamy_arora, scale=gls_residuals" not in held),
                0.0,
                "its own route is in the space searched",
            ),
        ),
        notes=(
            "Robust standard errors are searched only if no model-based ones reproduce every figure on panels of this "
            "size; each distinct regression then costs a pass over the units.",
        ),
    )


def scaled_panel(seed: int) -> tuple[FloatArray, FloatArray, NDArray[np.int64]]:
    """Draw a panel of 5 to 12 units of 1 to 6 rows, covariate and outcome scaled by 1e-4 to 1e4 each."""
    rng = np.random.default_rng([77, seed])
    units = int(rng.integers(5, 13))
    sizes = rng.integers(1, 7, units)
    while sizes.sum() - units < 4:
        sizes = rng.integers(1, 7, units)
    unit = np.repeat(np.arange(units), sizes)
    scale_x, scale_y = 10.0 ** rng.uniform(-4, 4, 2)
    x = rng.normal(size=unit.size) + rng.normal(size=units)[unit]
    effect = rng.choice([0.0, 0.3, 1.0, 3.0]) * rng.normal(size=units)[unit]
    y = scale_y * (1.0 + 0.5 * x + effect + rng.normal(size=unit.size))
    return np.column_stack([np.ones(unit.size), scale_x * x]), y, unit


def early_stops(panels: int) -> pd.DataFrame:
    """Fit the rival by its defaults on seeded panels and set its deviance against the certified optimum."""
    rows = []
    for seed in range(panels):
        x, y, unit = scaled_panel(seed)
        with warnings.catch_warnings(record=True) as caught:
            warnings.simplefilter("always")
            theirs = MixedLM(y, x, groups=unit).fit()
        curve = curve_of(Moments.from_arrays(x, y, unit, ("Intercept", "x")))
        ours = fit_route(curve, "reml", {}, "rows have no order here")
        ratio = float(np.asarray(theirs.cov_re)[0, 0] / theirs.scale)
        top, at = (log_likelihood(curve, "reml", psi) for psi in (ours.ratio, ratio))
        certified = bool(ours.certificate is not None and ours.certificate.excluded)
        rows.append([seed, 2.0 * (top - at), bool(theirs.converged), bool(caught), certified])
    return pd.DataFrame(rows, columns=["seed", "excess", "says_converged", "warned", "certified"])


def early(profile: Profile) -> Result:
    """Measure the share of panels on which the rival stops at a worse REML optimum."""
    table = early_stops(10 * profile.likelihood_panels)
    stuck = table[table["excess"] > WORSE]
    silent = float((stuck["says_converged"]).mean()) if len(stuck) else 0.0
    return Result(
        problem=f"{len(table)} panels of 5 to 12 units of 1 to 6 rows, covariate and outcome scaled by 1e-4 to 1e4",
        method="rival: mixed model (statsmodels MixedLM, REML) by its defaults; one function gives both deviances",
        table=Table(
            ("deviance above the certified optimum", "panels"),
            tuple(
                (f"above {bound:g}", str(int((table["excess"] > bound).sum())))
                for bound in (1e-6, 1e-3, 1e-2, 1e-1, 1.0)
            ),
        ),
        ratios=(
            Ratio(f"share stopped more than {WORSE:g} above", float((table["excess"] > WORSE).mean())),
            Ratio("of these, share that reported convergence", silent),
            Ratio("of these, share with some warning", float(stuck["warned"].mean()) if len(stuck) else 0.0),
            Ratio("lowest deviance of the rival above ours", float(table["excess"].min()), -1e-9, "at least"),
            Ratio("share with a complete certificate", float(table["certified"].mean()), 1.0, "at least"),
        ),
        agreements=(),
    )
