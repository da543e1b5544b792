"""The shipped schema describes the record of every kind of study, and nothing else."""

import copy
import json
from importlib.resources import files

import jsonschema
import pandas as pd
import pytest
from panels import PANELS

import mixbridge
from mixbridge.report.appendix import compose

SCHEMA = json.loads(files("mixbridge.report").joinpath("record.schema.json").read_text(encoding="utf-8"))
CHECKER = jsonschema.Draft202012Validator(SCHEMA)
FORMULA = "honey ~ forage + feeding + altitude"


def record_of(study):
    return json.loads(json.dumps(study.to_dict(), allow_nan=False))


def study_of(panel):
    names = {name: f"x{j}" for j, name in enumerate(panel.names) if name != "Intercept"}
    data = pd.DataFrame(panel.X, columns=list(panel.names)).rename(columns=names)
    data = data.assign(y=panel.y, unit=panel.units, period=panel.periods)
    right = " + ".join(names.values()) or "1"
    formula = f"y ~ {right}" if "Intercept" in panel.names else f"y ~ {right} - 1"
    return mixbridge.crosscheck(formula, data, unit="unit", period="period")


def test_schema_is_a_schema():
    jsonschema.Draft202012Validator.check_schema(SCHEMA)


@pytest.mark.parametrize("panel", PANELS[::4], ids=lambda panel: panel.name)
def test_records_of_awkward_panels_fit_the_schema_and_follow_from_their_moments(panel):
    record = record_of(study_of(panel))
    CHECKER.validate(record)
    found = mixbridge.verify(record)
    assert found.passed, found
    for length in ("paragraph", "page", "full"):
        assert compose(record, length=length).blocks


@pytest.mark.parametrize("kind", ["plain", "unit means", "moments only", "constant only", "another route"])
def test_records_of_every_kind_of_study_fit_the_schema(kind):
    data = mixbridge.demo.apiaries()
    study = mixbridge.crosscheck(FORMULA, data, unit="apiary", period="season")
    if kind == "unit means":
        study = study.correlated("mundlak")
    if kind == "moments only":
        study = mixbridge.from_moments(study.moments, unit="apiary")
    if kind == "constant only":
        study = mixbridge.crosscheck("honey ~ 1", data, unit="apiary")
    if kind == "another route":
        study = mixbridge.crosscheck(FORMULA, data, unit="apiary", primary="swamy_arora", routes=["within"])
    record = record_of(study)
    CHECKER.validate(record)
    assert mixbridge.verify(record).passed
    assert compose(record).blocks


@pytest.mark.parametrize(
    "change",
    [
        lambda r: r.update(version=1),
        lambda r: r.update(more=1),
        lambda r: r.pop("fingerprint"),
        lambda r: r["fits"]["reml"].update(icc="large"),
        lambda r: r["ledger"][0].pop("estimate"),
        lambda r: r["accounting"].update(units=4.5),
        lambda r: r["inference"].update(status="computed", rows=None),
    ],
)
def test_what_is_not_a_record_is_found(change):
    study = mixbridge.crosscheck(
        "honey ~ forage", mixbridge.demo.apiaries(), unit="apiary", routes=["within", "reml"]
    )
    record = copy.deepcopy(record_of(study))
    change(record)
    with pytest.raises(jsonschema.ValidationError):
        CHECKER.validate(record)
