"""REML with its certificate, against the mixed model of statsmodels."""

from __future__ import annotations

import warnings

import numpy as np
from statsmodels.regression.mixed_linear_model import MixedLM, MixedLMResults
from statsmodels.tools.sm_exceptions import ModelWarning

from benchmarks.measure import COLUMNS, described, interleaved
from benchmarks.panels import Panel, panel
from benchmarks.profiles import Profile
from benchmarks.results import Agreement, Ratio, Result, Table
from mixbridge.moments import Moments
from mixbridge.ratio import Curve, curve_of
from mixbridge.routes import Fit, fit_route, log_likelihood

NO_ORDER = "rows have no order here"


def certified(data: Panel) -> tuple[Curve, Fit]:
    curve = curve_of(Moments.from_arrays(data.x, data.y, data.codes, data.names))
    return curve, fit_route(curve, "reml", {"reml_constant": "omitted"}, NO_ORDER)


def rival_of(data: Panel) -> tuple[MixedLMResults, bool]:
    """Fit the rival; also tell whether it warned about its optimum."""
    with warnings.catch_warnings(record=True) as caught:
        warnings.simplefilter("always")
        fitted = MixedLM(data.y, data.x, groups=data.codes).fit(reml=True)
    return fitted, any(issubclass(each.category, ModelWarning) for each in caught)


def likelihood(profile: Profile) -> Result:
    """Compare times on one panel and deviances on several."""
    data = panel(profile.likelihood_units, seed=31)
    rival, ours = "mixed model (statsmodels MixedLM, REML)", "moments, REML and its certificate"
    kept = []
    slow = interleaved({rival: lambda: kept.append(rival_of(data))}, 1)
    times = slow | interleaved({ours: lambda: certified(data)}, profile.rounds)
    panels = [data] + [
        panel(30, columns=4, largest=6, seed=40 + i, ratio=(0.0, 0.02, 0.5, 3.0)[i % 4])
        for i in range(profile.likelihood_panels)
    ]
    above, own, certificates, warned = [], [], 0, 0
    for each in panels:
        curve, fit = certified(each)
        theirs, complained = kept[0] if each is data else rival_of(each)
        warned += complained
        ratio = float(np.asarray(theirs.cov_re)[0, 0] / theirs.scale)
        at_theirs = log_likelihood(curve, "reml", ratio, constant=False)
        above.append(2.0 * (fit.log_likelihood - at_theirs))
        # at the rival's own ratio both must give one log-likelihood, or they do not maximise the same function
        own.append(abs(at_theirs - theirs.llf) / abs(at_theirs))
        certificates += bool(fit.certificate is not None and fit.certificate.excluded)
    large, theirs = certified(data)[1], kept[0][0]
    gap = float(np.abs(large.beta - theirs.fe_params).max() / np.abs(large.standard_errors).max())
    speed = times[rival].best / times[ours].best
    return Result(
        problem=f"{data.y.size:,} rows × {data.x.shape[1]} columns, {profile.likelihood_units:,} units of 1 to 19 "
        f"rows; deviances also on {profile.likelihood_panels} panels of 30 units",
        method="rival: one round in the same run; ours: " + described(profile.rounds),
        table=Table(
            ("task", *COLUMNS, "log-likelihood (REML, without ½ log|X'X|)"),
            (
                (rival, *times[rival].cells(), f"{theirs.llf:.6f}"),
                (ours, *times[ours].cells(), f"{large.log_likelihood:.6f}"),
            ),
        ),
        ratios=(
            Ratio("rival's time / ours", speed, 200.0, "at least"),
            Ratio("lowest of (rival's deviance - ours) over all panels", min(above), -1e-9, "at least"),
            Ratio("largest of (rival's deviance - ours) over all panels", max(above)),
            Ratio("share of panels with a complete certificate", certificates / len(panels), 1.0, "at least"),
        ),
        agreements=(
            Agreement(
                "log-likelihood at the rival's ratio",
                max(own),
                1e-6,
                "the rival rounds its inverse of small blocks",
            ),
            Agreement(
                "coefficients, in standard errors", gap, 1e-3, "the rival stops when its gradient is small"
            ),
        ),
        notes=(
            "Deviance is minus twice the log-likelihood; both are evaluated by one function at each one's ratio. "
            f"The rival warned about its optimum on {warned} of {len(panels)} panels (a quarter of the small "
            "ones are drawn without a unit effect, a quarter with a very small one).",
        ),
    )
