"""Adopting a fit of another program through the public name."""

import statsmodels.formula.api as smf

import mixbridge


def test_a_mixed_model_is_recognised_and_compared():
    data = mixbridge.demo.apiaries().dropna()
    result = smf.mixedlm("honey ~ forage + feeding", data, groups="apiary").fit(reml=True)
    found = mixbridge.adopt(result)
    assert isinstance(found.study, mixbridge.Study)
    assert not found.stuck
    assert abs(found.excess) < 1e-3
    assert "reml" in str(found).lower()
