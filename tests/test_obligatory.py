"""The sentences that never get lost: at every length, audience and format, and turning with the data."""

import html as markup
import json
import re
from functools import cache

import numpy as np
import pytest
from appendix_cases import STUDIES, demo, panel, record_of, repelling

import mixbridge
from mixbridge.report.appendix import LENGTHS, compose
from mixbridge.report.as_html import html
from mixbridge.report.as_latex import latex
from mixbridge.report.as_markdown import markdown
from mixbridge.report.document import Bullets, Document
from mixbridge.report.obligatory import FEW_UNITS, SENTENCES, sentences_for
from mixbridge.report.words import AUDIENCES

FEW_ROUTES = ("reml", "swamy_arora", "within")
RENDERERS = {"markdown": markdown, "latex": latex, "html": html}
ALWAYS = (
    "together",
    "rejecting",
    "pretest",
    "units",
    "dropped",
    "negative",
    "scope",
    "matched",
    "verified",
    "health",
)


def sentence(key, record):
    return next(item.say(record) for item in SENTENCES if item.key == key)


def record(data, *, primary="reml", routes=FEW_ROUTES, formula="y ~ x"):
    study = mixbridge.crosscheck(formula, data, unit="hive", primary=primary, routes=routes)
    return json.loads(json.dumps(study.to_dict()))


@cache
def related():
    return record(panel(1.0))


@cache
def unrelated():
    return record(panel(0.0))


@cache
def uneven():
    data = panel(0.0, holes=True)
    data.loc[[1, 5], "x"] = np.nan
    return record(data)


@pytest.mark.parametrize("name", list(STUDIES))
@pytest.mark.parametrize("length", LENGTHS)
@pytest.mark.parametrize("audience", list(AUDIENCES))
def test_they_stand_word_for_word_at_every_length_for_every_audience(name, length, audience):
    found = record_of(name)
    wanted = sentences_for(found)
    assert len(wanted) >= len(ALWAYS)
    lists = [
        block.items
        for block in compose(found, length=length, audience=audience).blocks
        if isinstance(block, Bullets) and block.items[-1] == wanted[-1]
    ]
    assert lists == [wanted]


@pytest.mark.parametrize("form", list(RENDERERS))
@pytest.mark.parametrize("length", LENGTHS)
@pytest.mark.parametrize("audience", list(AUDIENCES))
def test_they_stand_in_every_format(form, length, audience):
    found = record_of("demo")
    text = RENDERERS[form](compose(found, length=length, audience=audience))
    for said in sentences_for(found):
        assert _shown(said, form) in text


def _shown(said, form):
    """Return a sentence as a renderer shows it, by a document that holds nothing else."""
    alone = RENDERERS[form](Document("t", (Bullets((said,)),)))
    if form == "markdown":
        return re.search(r"^- (.*)$", alone, re.MULTILINE)[1]
    if form == "latex":
        return re.search(r"\\item (.*)$", alone, re.MULTILINE)[1]
    shown = re.search(r"<ul><li>(.*?)</li></ul>", alone, re.DOTALL)[1]
    assert markup.unescape(re.sub("<[^>]+>", "", shown)) == said
    return shown


def test_the_list_says_what_each_guards_when_and_how_it_turns():
    keys = [item.key for item in SENTENCES]
    assert len(set(keys)) == len(keys)
    for item in SENTENCES:
        assert item.guards
        assert item.when
    assert {item.key for item in SENTENCES if item.when == "always"} == set(ALWAYS)


def test_every_sentence_is_said_somewhere_and_those_called_always_everywhere():
    records = [record_of(name) for name in STUDIES] + [related(), unrelated(), uneven()]
    for item in SENTENCES:
        said = [item.say(found) is not None for found in records]
        assert any(said), item.key
        assert all(said) or item.when != "always", item.key


def test_agreement_turns():
    assert "do not all agree" in sentence("together", record_of("demo"))
    assert "agree with the primary one in every term" in sentence("together", unrelated())
    alone = record(panel(0.0), routes=("reml",))
    assert "stands alone" in sentence("together", alone)
    flat = record(panel(0.0)[::4])
    assert "cannot be compared with the primary one in any term" in sentence("together", flat)
    for found in (record_of("demo"), unrelated(), alone, flat):
        assert "no evidence for the model" in sentence("together", found)


def test_identities_turn():
    found = record_of("demo")
    hold = found["summary"]["identities_hold"]
    assert sentence("arithmetic", found).startswith(f"{hold} identities of theory hold")
    assert "check the arithmetic, not the model" in sentence("arithmetic", found)
    found["summary"]["identities_fail"] = 1
    assert "1 identity that must hold fails: the arithmetic" in sentence("arithmetic", found)
    assert "not the model" not in sentence("arithmetic", found)
    found["summary"].update(identities_fail=0, identities_hold=0)
    assert sentence("arithmetic", found) is None


def test_the_contrast_turns_with_the_data():
    assert "rejects (p = " in sentence("contrast", related())
    assert "does not make the within slopes causal" in sentence("contrast", related())
    assert "does not reject (p = " in sentence("contrast", unrelated())
    assert "not rejecting proves nothing" in sentence("contrast", unrelated())
    assert sentence("contrast", record_of("published")) is None  # a constant alone


def test_tests_of_assumptions_are_counted_as_they_reject():
    found = record_of("demo")
    tests, reject = found["audit"]["tests"], found["audit"]["tests_rejecting"]
    assert 0 < reject < tests
    assert (
        f"Of {tests} tests of assumptions {reject} reject at 0.05; that the others do not proves"
        in sentence("rejecting", found)
    )
    p = [row["p_value"] for row in found["audit"]["rows"].values() if row["p_value"] is not None]
    assert (len(p), sum(value <= 0.05 for value in p)) == (tests, reject)
    found["audit"]["tests_rejecting"] = 0
    assert "none rejects at 0.05; that proves nothing" in sentence("rejecting", found)
    found["audit"]["tests_rejecting"] = tests
    assert "had one not rejected" in sentence("rejecting", found)
    found["audit"] = {"status": "not computed: no rows"}
    assert "assumptions that no test looked at" in sentence("rejecting", found)


def test_units_turn_at_the_number_stated():
    assert "40 units; what varies" in sentence("units", unrelated())
    few = record(panel(0.0, units=FEW_UNITS - 1))
    assert f"There are {FEW_UNITS - 1} units: few" in sentence("units", few)
    enough = record(panel(0.0, units=FEW_UNITS))
    assert "few" not in sentence("units", enough)


def test_rows_and_sizes_turn():
    assert sentence("dropped", unrelated()) == "All 160 rows were used."
    assert sentence("size", unrelated()) is None
    assert "dropped: 2 missing covariate (x)" in sentence("dropped", uneven())
    assert "can be biased" in sentence("dropped", uneven())
    assert "unit size may carry information" in sentence("size", uneven())
    assert "3 units have one row and tell nothing" in sentence("dropped", record_of("demo"))


def test_a_zero_estimate_turns():
    assert sentence("zero", record_of("demo")) is None
    assert sentence("zero", record_of("zero")).startswith(
        "The estimate of the unit variance is zero; at zero"
    )
    cut = record(repelling(), primary="swamy_arora")
    assert "came out below zero (-" in sentence("zero", cut)
    assert "and zero was used" in sentence("zero", cut)
    assert sentence("zero", record(repelling(), primary="pooled")) is None


def test_routes_below_zero_are_counted():
    found = record_of("zero")
    below = sum(1 for row in found["components"] if (row["unit_variance"] or 0.0) < 0.0)
    assert below > 1
    assert f"{below} routes estimate a unit variance below zero" in sentence("negative", found)
    assert "routes estimate" not in sentence("negative", record_of("demo"))
    assert "lies outside the model" in sentence("negative", record_of("demo"))


def test_the_icc_and_intervals_are_guarded_where_they_are_printed():
    assert "0.476, is conditional on the covariates" in sentence("icc", record_of("demo"))
    assert sentence("icc", record(panel(0.0), primary="within")) is None
    assert "fragile to kurtosis" in sentence("kurtosis", record_of("demo"))
    flat = record(panel(0.0)[::4])
    assert sentence("kurtosis", flat) is None
    assert sentence("causal", flat) is None


def test_contextual_coefficients_and_influence_are_guarded_where_they_are_shown():
    assert "not causal" in sentence("contextual", record_of("demo"))
    assert sentence("contextual", record_of("published")) is None
    assert "may disclose a confidential unit" in sentence("disclosure", record_of("demo"))
    away = mixbridge.from_moments(demo().moments, unit="apiary", routes=list(FEW_ROUTES)).to_dict()
    assert sentence("disclosure", away) is None


def test_no_unit_is_named_in_any_length_or_figure(tmp_path):
    data = panel(0.5, units=12)
    data["hive"] = data["hive"].map("hive-with-a-name-{}".format)
    study = mixbridge.crosscheck("y ~ x", data, unit="hive", routes=list(FEW_ROUTES))
    page = study.appendix(tmp_path / "a.html").read_text(encoding="utf-8")
    assert "hive-with-a-name" not in page
    assert "hive-with-a-name" not in json.dumps(study.to_dict())
    for length in LENGTHS:
        assert "hive-with-a-name" not in markdown(compose(study.to_dict(), length=length))
