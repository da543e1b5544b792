"""The benchmarks run, on a size whose times mean nothing, and compute what their rivals compute."""

import re

import numpy as np
import pytest

from benchmarks.page import page
from benchmarks.profiles import PROFILES
from benchmarks.registry import PROBLEMS
from benchmarks.results import Agreement, Ratio


@pytest.fixture(scope="module")
def results():
    return {name: problem.run(PROFILES["tiny"]) for name, problem in PROBLEMS.items()}


@pytest.mark.parametrize("name", PROBLEMS)
def test_numbers_are_those_of_the_rival(results, name):
    assert [each for each in results[name].agreements if not each.holds] == []


@pytest.mark.parametrize("name", PROBLEMS)
def test_every_row_is_measured(results, name):
    result = results[name]
    assert result.table.rows
    assert all(len(row) == len(result.table.columns) and all(row) for row in result.table.rows)
    assert all(np.isfinite(ratio.value) for ratio in result.ratios)


def test_deviance_is_never_worse_than_the_rivals(results):
    [lowest] = [ratio for ratio in results["likelihood"].ratios if ratio.name.startswith("lowest")]
    assert lowest.met


def test_the_page_shows_every_figure_with_its_target(results):
    text = page(results, "tiny", "1", ("0.1", "1.0"))
    for name, result in results.items():
        assert f"## {PROBLEMS[name].title}\n" in text
        for ratio in result.ratios:
            assert f"- {ratio.name}: " in text
    targets = sum(ratio.target is not None for result in results.values() for ratio in result.ratios)
    assert len(re.findall(r"^\| .* \| (?:met|MISSED) \|$", text, flags=re.MULTILINE)) == targets


def test_a_missed_target_and_a_differing_number_are_told():
    assert Ratio("r", 0.61, 0.6).met is False
    assert Ratio("r", 199.0, 200.0, "at least").met is False
    assert Ratio("r", 0.6, 0.6).met
    assert Ratio("r", 1e9).met
    assert not Agreement("a", float("nan"), 1.0, "undefined is not the same").holds
