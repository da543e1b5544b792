"""Iterated forms as paths."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest
from panels import BY_NAME

import mixbridge


def study_of(panel):
    frame = pd.DataFrame(panel.X, columns=[f"x{j}" for j in range(panel.X.shape[1])])
    frame["y"], frame["unit"] = panel.y, panel.units
    return mixbridge.crosscheck("y ~ 0 + " + " + ".join(frame.columns[:-2]), frame, unit="unit")


@pytest.mark.parametrize(
    "name", [name for name in BY_NAME if name.startswith(("mild", "balanced", "two_minima"))]
)
def test_iterated_gls_raises_the_likelihood_at_each_step_and_ends_stationary(name):
    study = study_of(BY_NAME[name])
    if not study.fit("ml").estimated:
        pytest.skip("no maximum of the likelihood")
    for start in ("within", "pooled", 3.0):
        path = study.iterate("gls", start=start)
        gaps = np.diff(path["deviance"])
        # deviances of size n log r: their rounding is n times eps, times ten for the sums inside
        assert (gaps <= 10 * np.finfo(float).eps * study.panel.n * (1 + np.abs(path["deviance"]).max())).all()
        assert path["status"].iloc[-1] == "converged"
        certificate = study.fit("ml").certificate
        known = np.array([point.psi for point in certificate.stationary] + [0.0])
        end = path["ratio"].iloc[-1]
        # the path contracts linearly and stops at a relative change of 1e-12; a contraction factor up to 0.99 leaves 1e-10
        assert np.min(np.abs(known - end)) <= 1e-9 * max(end, 1e-3)


def test_balanced_paths_are_monotone_from_both_ends_and_meet_at_ml():
    """Breusch 1987: monotone from the within and the between end; where both meet the end is ML."""
    rng = np.random.default_rng(3)
    unit = np.repeat(np.arange(30), 5)
    frame = pd.DataFrame({"unit": unit, "x": rng.normal(size=150) + rng.normal(size=30)[unit]})
    frame["y"] = frame["x"] + rng.normal(size=30)[unit] + rng.normal(size=150)
    study = mixbridge.crosscheck("y ~ x", frame, unit="unit")
    down, up = study.iterate("gls", start="within"), study.iterate("gls", start="between")
    assert (np.diff(down["ratio"]) <= 1e-13).all() != (np.diff(up["ratio"]) <= -1e-13).any()
    for path in (down, up):
        np.testing.assert_allclose(path["ratio"].iloc[-1], study.fit("ml").ratio, rtol=1e-10)
        steps = np.diff(path["ratio"])
        assert (steps <= 1e-13).all() or (steps >= -1e-13).all()


@pytest.mark.parametrize("prior", [0.0, 1.0, 50.0])
def test_iterated_minque_ends_at_a_stationary_point_of_reml(prior):
    panel = mixbridge.crosscheck(
        "honey ~ forage + feeding + altitude", mixbridge.demo.apiaries(), unit="apiary"
    )
    path = panel.iterate("minque", start=prior)
    assert path["status"].iloc[-1] == "converged"
    np.testing.assert_allclose(path["ratio"].iloc[-1], panel.fit("reml").ratio, rtol=1e-10)
    first = panel.fit("minque", prior=prior)
    np.testing.assert_allclose(path["unit_variance"].iloc[0], first.unit_variance_raw, rtol=1e-13)


def test_bad_starts_are_refused():
    study = mixbridge.crosscheck("honey ~ forage", mixbridge.demo.apiaries(), unit="apiary")
    with pytest.raises(mixbridge.OptionError, match="within"):
        study.iterate("gls", start="nowhere")
    with pytest.raises(mixbridge.OptionError, match="finite ratio"):
        study.iterate("gls", start=-1.0)
    with pytest.raises(mixbridge.OptionError, match="minque"):
        study.iterate("newton")
    with pytest.raises(mixbridge.OptionError, match="pooled"):
        study.iterate("minque", start="within")
