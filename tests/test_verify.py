"""A record is recomputed from its own moments; every figure that was changed is found."""

import copy
import json

import numpy as np
import pytest

import mixbridge
from mixbridge.cli import main
from mixbridge.moments import Moments
from mixbridge.report.verification import DIFFERS, NEEDS_ROWS, STATED, compare_records
from mixbridge.study.verify import STATED as STATED_PLACES

FORMULA = "honey ~ forage + feeding + altitude"


def record_of(study):
    return json.loads(json.dumps(study.to_dict()))


@pytest.fixture(scope="module")
def study():
    return mixbridge.crosscheck(FORMULA, mixbridge.demo.apiaries(), unit="apiary", period="season")


@pytest.fixture(scope="module")
def record(study):
    return record_of(study)


def leaves(value, place=()):
    if isinstance(value, dict):
        for key, below in value.items():
            yield from leaves(below, (*place, key))
    elif isinstance(value, list):
        for number, below in enumerate(value):
            yield from leaves(below, (*place, number))
    else:
        yield place, value


def neighbours(record, place):
    parent = record
    for key in place[:-1]:
        parent = parent[key]
    values = parent.values() if isinstance(parent, dict) else parent
    return max(
        [abs(v) for v in values if isinstance(v, float | int) and not isinstance(v, bool)], default=0.0
    )


def with_change(record, place, value):
    changed = copy.copy(record)
    parent = changed
    for key in place[:-1]:
        parent[key] = copy.copy(parent[key])
        parent = parent[key]
    parent[place[-1]] = value
    return changed


def test_the_record_of_the_demo_is_found_to_follow_from_its_moments(record):
    found = mixbridge.verify(record)
    assert found.passed
    assert found.counts["same"] > 2_000
    assert any(
        item.place.startswith("fits.first_difference") for item in found.checked if item.verdict == NEEDS_ROWS
    )
    assert {item.place for item in found.checked if item.verdict == STATED} >= {"formula", "unit", "period"}


def part_of(record, place):
    """Return the part of a record that holds a place, and the place in it: comparing all of it each time is slow."""
    section = record[place[0]]
    if len(place) < 3:
        return {place[0]: section}, place
    if isinstance(section, list):
        return {place[0]: [section[place[1]]]}, (place[0], 0, *place[2:])
    return {place[0]: {place[1]: section[place[1]]}}, place


def test_every_single_changed_figure_is_found(record):
    verdicts = {item.place: item.verdict for item in mixbridge.verify(record).checked}
    tried = 0
    for place, value in leaves({key: value for key, value in record.items() if key != "moments"}):
        whole = ".".join(map(str, place))
        if verdicts.get(whole, NEEDS_ROWS) in (NEEDS_ROWS, STATED):
            continue
        part, at = part_of(record, place)
        if isinstance(value, bool) or value is None:
            changed = "changed"
        elif isinstance(value, float):
            changed = value + float(np.copysign(1e-6 * (abs(value) + neighbours(record, place)), value))
        elif isinstance(value, int):
            changed = value + 1
        else:
            changed = value + "x"
        if changed == value:  # zero among zeros
            continue
        found = compare_records(with_change(part, at, changed), part, tolerance=1e-9, stated=STATED_PLACES)
        wrong = [item.place for item in found.checked if item.verdict == DIFFERS]
        assert wrong == [".".join(map(str, at))], whole
        tried += 1
    assert tried > 2_000


def test_changed_coefficient_is_named_in_the_output(record):
    changed = copy.deepcopy(record)
    changed["fits"]["reml"]["coefficients"]["forage"] *= 1.0001
    found = mixbridge.verify(changed)
    assert not found.passed
    assert "fits.reml.coefficients.forage" in str(found)
    assert "does not show that the\nmoments are those of the data" in str(found)


def test_changed_moments_are_damaged_unless_their_checksum_is_made_anew(record, study):
    changed = copy.deepcopy(record)
    changed["moments"]["within"][0][0] += 1.0
    with pytest.raises(mixbridge.DataError, match="checksum"):
        mixbridge.verify(changed)
    rng = np.random.default_rng(1)
    codes = np.repeat(np.arange(10), 6)
    x = np.column_stack([np.ones(60), rng.normal(size=(60, 3))])
    changed["moments"] = Moments.from_arrays(x, rng.normal(size=60), codes, study.panel.names).to_record()
    found = mixbridge.verify(changed)
    assert found.counts["differs"] > 500
    other = Moments.from_arrays(rng.normal(size=(60, 2)), rng.normal(size=60), codes, ("a", "b"))
    changed["moments"] = other.to_record()
    with pytest.raises(mixbridge.DataError, match="terms have 4 columns and its moments 2"):
        mixbridge.verify(changed)


def test_count_of_dropped_rows_must_add_up(record):
    changed = copy.deepcopy(record)
    changed["accounting"]["rows_given"] += 1
    found = mixbridge.verify(changed)
    assert [item.place for item in found.checked if item.verdict == DIFFERS] == ["accounting.rows_given"]


def test_removed_and_added_figures_are_found(record):
    changed = copy.deepcopy(record)
    del changed["fits"]["ml"]["coefficients"]["forage"]
    changed["fits"]["ml"]["extra"] = 1.0
    wrong = [item.place for item in mixbridge.verify(changed).checked if item.verdict == DIFFERS]
    assert wrong == ["fits.ml.coefficients.forage", "fits.ml.extra"]


def test_names_of_the_user_do_not_hide_a_changed_figure():
    data = mixbridge.demo.apiaries().rename(columns={"apiary": "needs rows", "honey": "not kept"})
    study = mixbridge.crosscheck("Q('not kept') ~ forage", data, unit="needs rows", routes=["within", "reml"])
    changed = record_of(study)
    changed["fits"]["reml"]["coefficients"]["forage"] *= 1.001
    assert not mixbridge.verify(changed).passed


def test_record_of_unit_means_is_verified_too(study):
    assert mixbridge.verify(record_of(study.correlated("mundlak"))).passed


@pytest.mark.parametrize(
    ("change", "match"),
    [
        ({"format": "something"}, "not a record of a study"),
        ({"version": 0}, "version 0"),
        ({"moments": None}, "incomplete or damaged"),
        ({"fits": None}, "incomplete or damaged"),
    ],
)
def test_what_is_no_record_is_refused(record, change, match):
    with pytest.raises(mixbridge.DataError, match=match):
        mixbridge.verify({**record, **change})


def test_command_line(tmp_path, record, capsys):
    good, bad, broken = tmp_path / "good.json", tmp_path / "bad.json", tmp_path / "broken.json"
    good.write_text(json.dumps(record), encoding="utf-8")
    changed = copy.deepcopy(record)
    changed["fits"]["swamy_arora"]["icc"] = 0.5
    bad.write_text(json.dumps(changed), encoding="utf-8")
    broken.write_text("{", encoding="utf-8")
    assert main(["verify", str(good)]) == 0
    assert main(["verify", str(bad)]) == 1
    assert "fits.swamy_arora.icc" in capsys.readouterr().out
    assert main(["verify", str(broken)]) == 2
    assert main(["verify", str(tmp_path / "nothing.json")]) == 2
    assert "cannot be read" in capsys.readouterr().err


def test_unit_products_give_what_is_cluster_robust(study):
    with_rows = study.fit("reml", covariance="CR2")
    away = mixbridge.from_moments(study.moments, unit="apiary", products=study.products)
    np.testing.assert_allclose(
        away.fit("reml", covariance="CR2").standard_errors, with_rows.standard_errors, rtol=1e-12
    )
