"""What results print: text no wider than a screen, never a dump of arrays, with the figures that matter."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest

import mixbridge
from mixbridge.display.text import WIDTH, frame_lines, number, sentence


@pytest.fixture(scope="module")
def study():
    return mixbridge.crosscheck(
        "honey ~ forage + feeding + altitude", mixbridge.demo.apiaries(), unit="apiary", period="season"
    )


@pytest.fixture(scope="module")
def means(study):
    return study.correlated("mundlak")


RESULTS = {
    "study": lambda study, _: study,
    "fit": lambda study, _: study.fit("reml"),
    "audit": lambda study, _: study.audit(),
    "hypothesis": lambda study, _: study.hypothesis("forage = feeding"),
    "instrumented": lambda study, _: study.instrumented("hausman_taylor", unrelated=["forage", "altitude"]),
    "bootstrap": lambda study, _: study.bootstrap(replicates=200),
    "leave one out": lambda study, _: study.leave_one_out(),
    "leave one period out": lambda study, _: study.leave_one_period_out(),
    "leave two out": lambda study, _: study.leave_two_out(list(study.panel.unit_keys[:3])),
    "unit bootstrap": lambda study, _: study.unit_bootstrap(replicates=60),
    "wild bootstrap": lambda study, _: study.wild_bootstrap("feeding"),
    "attribution": lambda study, _: study.attribution("feeding", "swamy_arora"),
    "path": lambda study, _: study.path("feeding"),
    "rehearsal": lambda study, _: study.rehearse(replicates=100),
    "match": lambda study, _: mixbridge.match_reported({"b:feeding": "0.221"}, study),
    "shared": lambda study, _: mixbridge.shared_moments(study, 3),
    "moments": lambda study, _: study.moments,
    "opened": lambda study, _: study.opened,
    "products": lambda study, _: study.products,
    "coordinates": lambda _, means: means.coordinates(),
    "slope certificate": lambda _, means: means.slope_certificate(),
    "noisy means": lambda _, means: means.noisy_means(),
}
ONE_LINE = {"path", "attribution"}
"""Results in sentences, which are as long as they are."""


@pytest.mark.parametrize("name", RESULTS)
def test_results_print_as_text(name, study, means):
    result = RESULTS[name](study, means)
    text = str(result)
    lines = text.split("\n")
    assert "array(" not in text
    assert "mappingproxy" not in text
    assert 2 <= len(text) < 40_000
    if name not in ONE_LINE:
        assert max(map(len, lines)) <= WIDTH, max(lines, key=len)
    assert all(line == line.rstrip() for line in lines)
    if name not in ("study", "fit"):
        assert "mixbridge" in result._repr_html_()


def test_coordinates_print_what_their_table_holds(means):
    found = means.coordinates()
    text = str(found)
    for row in found.table.itertuples(index=False):
        line = next(line.split() for line in text.split("\n") if line.split()[0] == row.term)
        expected = [row.within, row.within_se, row.between, row.between_se, row.contextual, row.contextual_se]
        assert line[1:7] == [number(value) for value in expected]


def test_terms_without_a_mean_are_named_with_the_reason_once():
    rng = np.random.default_rng(5)
    data = pd.DataFrame({"unit": np.repeat(np.arange(30), 4), "time": np.tile(np.arange(4), 30)})
    data["x"] = rng.normal(size=120) + rng.normal(size=30).repeat(4)
    data["age"] = data["time"] + rng.integers(20, 60, 30).repeat(4)
    data["y"] = data["x"] + rng.normal(size=120)
    means = mixbridge.crosscheck("y ~ x + age + C(time)", data, unit="unit", period="time").correlated(
        "mundlak"
    )
    text = str(means.coordinates())
    assert "is the same for all units" in text
    printed = str(means.slope_certificate())
    assert printed.count("not separable within units") == 1
    assert "Not compared: " in printed


def test_leave_one_out_prints_the_unit_that_moves_each_term_most(study):
    found = study.leave_one_out()
    moved = found.influence()
    text = str(found).split("The unit that moves each coefficient")[1]
    for term in moved:
        unit = moved[term].abs().idxmax()
        line = next(line.split() for line in text.split("\n") if line.split()[:1] == [term])
        assert line[1:] == [str(unit), number(moved.at[unit, term])]


def test_tables_are_cut_with_a_count_and_cells_in_their_middle():
    table = pd.DataFrame({"some_name": ["x" * 50] * 5, "n": range(5), "v": [0.5, np.nan, np.inf, 0.0, 1e9]})
    lines = frame_lines(table, most=3, widest=11)
    assert lines[0].split() == ["some", "name", "n", "v"]
    assert lines[1].split() == ["xxxxx…xxxxx", "0", "0.5000"]
    assert [line.split()[-1] for line in lines[2:4]] == ["-", "inf"]
    assert lines[-1] == "  and 2 more rows"
    assert frame_lines(table.head(0)) == []
    assert frame_lines(pd.DataFrame({"held": [True, None]}))[1:] == ["  yes", "  -"]


def test_sentences():
    assert sentence("few units") == "Few units."
    assert sentence("first_difference is left out") == "first_difference is left out."
    assert sentence("Done.") == "Done."
