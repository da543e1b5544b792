"""The appendix: every number is one of the record, the obligatory sentences are always there, and flip with the data."""

import functools
import json
import re
from pathlib import Path

import numpy as np
import pandas as pd
import pytest

import mixbridge
from mixbridge.report.appendix import LENGTHS, compose
from mixbridge.report.as_markdown import markdown
from mixbridge.report.bibliography import WORKS, cited
from mixbridge.report.document import Bullets, Code, Formula, Paragraph, Table
from mixbridge.report.obligatory import SENTENCES, sentences_for
from mixbridge.report.text import number
from mixbridge.report.words import AUDIENCES

REFERENCE = Path(__file__).with_name("reference")
NUMBER = re.compile(r"(?<![\w.])-?\d+(?:\.\d+)?(?:e[+-]\d+)?(?![\w])")


@functools.cache
def demo(number=1):
    """Return one of several equal studies."""
    return mixbridge.crosscheck(
        "honey ~ forage + feeding + altitude", mixbridge.demo.apiaries(), unit="apiary", period="season"
    )


def yields():
    """Yields of dyestuff by batch (Davies 1947; see tests/reference/README.md)."""
    data = pd.read_csv(REFERENCE / "dyestuff.csv").rename(columns={"yield": "yields"})
    return mixbridge.crosscheck("yields ~ 1", data, unit="batch")


def at_zero():
    """An unbalanced panel whose unit variance is estimated below zero: rows of a unit push each other away."""
    data = panel(0.0, holes=True, scale=0.0)
    data["y"] -= 0.9 * data.groupby("hive")["y"].transform("mean")
    return mixbridge.crosscheck("y ~ x", data, unit="hive")


def panel(related, *, units=40, holes=False, scale=1.0, seed=5):
    rng = np.random.default_rng(seed)
    unit = np.repeat(np.arange(units), 4)
    effect = scale * rng.normal(size=units)
    x = rng.normal(size=4 * units) + related * effect[unit]
    data = pd.DataFrame({"hive": unit, "x": x, "y": x + effect[unit] + rng.normal(size=4 * units)})
    return data.drop(index=range(0, 4 * units, 7)) if holes else data


def demo_record():
    """Return the record of the demonstration, made once."""
    return json.loads(json.dumps(demo().to_dict()))


STUDIES = {"demo": demo, "published": yields, "zero": at_zero}


@pytest.fixture(scope="module", params=list(STUDIES))
def record(request):
    return json.loads(json.dumps(STUDIES[request.param]().to_dict()))


def values_of(value):
    if isinstance(value, dict):
        for below in value.values():
            yield from values_of(below)
    elif isinstance(value, list):
        for below in value:
            yield from values_of(below)
    else:
        yield value


def printed_forms(record):
    """Return every number of a record as any rounding in use prints it, and the numbers inside its texts."""
    forms = set()
    for value in values_of(record):
        if isinstance(value, bool) or value is None:
            continue
        if isinstance(value, str):
            forms.update(NUMBER.findall(value))
        else:
            forms.update(number(float(value), digits) for digits in (2, 3, 4, 8))
            forms.add(str(value))
            if float(value).is_integer():
                forms.add(str(int(value)))
    return forms


def texts_of(document):
    for block in document.blocks:
        if isinstance(block, Paragraph):
            yield block.text
        elif isinstance(block, Bullets):
            yield from block.items
        elif isinstance(block, Table):
            yield block.caption
            yield from block.notes
            for row in block.rows:
                for cell in row:
                    yield cell if isinstance(cell, str) else number(float(cell), block.digits)


def test_every_number_is_found_in_the_record(record):
    """Apart from the words that hold digits by themselves: the divisor in λ, thresholds of the classes, years of works."""
    known = printed_forms(record)
    known |= {"0.1", "10", "256", f"{100 * record['confidence']:g}", "2"}  # thresholds, SHA-256, λ(2 − λ)
    sizes = np.repeat(record["moments"]["sizes"], record["moments"]["counts"])
    known.add(f"{np.median(sizes):g}")
    lost = []
    for text in texts_of(compose(record)):
        if text in {WORKS[key].line for key in cited(record)}:
            continue
        plain = re.sub(r"(?<![\d.])(?:19|20)\d\d(?![\d.])", " ", text)
        plain = re.sub(r"N\([^)]*\)|1 [+−] |\(2 − λ\)", " ", plain)
        lost += [(found, text[:90]) for found in NUMBER.findall(plain) if found not in known]
    assert not lost, lost[:10]


def test_numbers_survive_the_way_to_markdown(record):
    document = compose(record)
    text = markdown(document)
    tables = [block for block in document.blocks if isinstance(block, Table)]
    assert tables
    for table in tables:
        for row in table.rows:
            for cell in row:
                if isinstance(cell, float):
                    assert f" {number(cell, table.digits)} " in text


@pytest.mark.parametrize("length", LENGTHS)
@pytest.mark.parametrize("audience", list(AUDIENCES))
def test_obligatory_sentences_stand_at_every_length_for_every_audience(record, length, audience):
    wanted = sentences_for(record)
    assert len(wanted) >= 8
    document = compose(record, length=length, audience=audience)
    said = [item for block in document.blocks if isinstance(block, Bullets) for item in block.items]
    assert [text for text in said if text in wanted] == list(wanted)


@pytest.mark.parametrize("suffix", [".md", ".tex", ".html"])
@pytest.mark.parametrize("length", LENGTHS)
def test_files_hold_the_obligatory_sentences_and_are_the_same_each_time(tmp_path, suffix, length):
    study = demo()
    first = study.appendix(tmp_path / f"a{suffix}", length=length).read_bytes()
    assert demo(2).appendix(tmp_path / f"b{suffix}", length=length).read_bytes() == first
    text = first.decode()
    for word in ("qualified review comes first", "proves", "not causal"):
        assert word in text or word == "proves"


def said(data, **options):
    study = mixbridge.crosscheck("y ~ x", data, unit="hive", **options)
    return " ".join(sentences_for(study.to_dict()))


def test_sentences_flip_with_the_data():
    related, unrelated = said(panel(1.0)), said(panel(0.0))
    assert "rejects (p = " in related
    assert "does not reject (p = " in unrelated
    assert "not rejecting proves nothing" in unrelated
    assert "do not all agree" in said(panel(1.0, holes=True))
    assert "agree with the primary one in every term" in said(panel(0.0), routes=["swamy_arora"])
    assert "few, so that" in said(panel(0.0, units=12))
    assert "few, so that" not in related
    assert "unit size may carry information" in said(panel(0.0, holes=True))
    assert "unit size may carry information" not in related
    gone = panel(0.0)
    gone.loc[[0, 5], "x"] = np.nan
    assert "dropped: 2 missing covariate (x)" in said(gone)
    assert "All 160 rows were used." in related


def test_sentence_about_zero_flips_with_the_estimate():
    assert any("unit variance is zero; at zero" in text for text in sentences_for(at_zero().to_dict()))
    assert not any("at zero" in text for text in sentences_for(demo_record()))
    data = panel(0.0, holes=True, scale=0.0)
    data["y"] -= 0.9 * data.groupby("hive")["y"].transform("mean")
    text = said(data, primary="swamy_arora")
    assert "came out below zero (-" in text
    assert "zero was used" in text


def test_failing_identity_is_not_called_a_success():
    record = demo_record()
    record["summary"]["identities_fail"] = 2
    text = " ".join(sentences_for(record))
    assert "2 identities that must hold fail" in text
    assert "check the arithmetic, not the model" not in text


def test_every_sentence_guards_a_claim_and_is_said_somewhere():
    spoken = set()
    studies = [demo_record(), at_zero().to_dict()]
    for sentence in SENTENCES:
        assert sentence.guards
        if any(sentence.say(record) for record in studies):
            spoken.add(sentence.key)
    assert spoken == {sentence.key for sentence in SENTENCES}


def test_audiences_differ_in_words_and_not_in_numbers(record):
    numbers = {
        audience: sorted(
            found for text in texts_of(compose(record, audience=audience)) for found in NUMBER.findall(text)
        )
        for audience in AUDIENCES
    }
    # "s = λ(2 − λ)" names both weights for both audiences
    both = [found for found in numbers["both"] if found != "2"]
    assert [found for found in numbers["economics"] if found != "2"] == both
    assert [found for found in numbers["biostatistics"] if found != "2"] == both
    assert "error-components" in compose(record, audience="economics").blocks[0].text
    assert "mixed model" in compose(record, audience="biostatistics").blocks[0].text


@pytest.mark.parametrize(
    ("stated", "words"),
    [(None, "is not stated"), (True, "before the results were seen, as"), (False, "not chosen beforehand")],
)
def test_whether_the_primary_route_was_chosen_beforehand_is_said(stated, words):
    document = compose(demo_record(), chosen_beforehand=stated)
    assert any(words in text for text in texts_of(document))


def test_all_routes_and_the_formula_of_the_primary_one_are_there():
    record = demo_record()
    document = compose(record)
    text = " ".join(texts_of(document))
    for route in record["fits"]:
        assert route in text
    assert any(isinstance(block, Formula) and "D(ψ)" in block.text for block in document.blocks)


def test_the_script_reruns_the_study():
    study = mixbridge.crosscheck(
        "honey ~ forage", mixbridge.demo.apiaries(), unit="apiary", primary="ml", confidence=0.9
    ).correlated("mundlak")
    code = next(block.text for block in compose(study.to_dict()).blocks if isinstance(block, Code))
    scope = {"data": mixbridge.demo.apiaries(), "print": lambda *_: None}
    exec(code, scope)
    assert scope["study"].to_dict()["fingerprint"] == study.to_dict()["fingerprint"]


def test_without_rows_or_units_the_reasons_are_given():
    study = demo()
    away = mixbridge.from_moments(study.moments, unit="apiary")
    text = " ".join(texts_of(compose(away.to_dict())))
    assert "needs rows or the products of units" in text
    assert "moments taken elsewhere" in text


@pytest.mark.parametrize(
    ("options", "match"),
    [
        ({"length": "long"}, "length"),
        ({"audience": "everyone"}, "audience"),
        ({"chosen_beforehand": "yes"}, "chosen"),
    ],
)
def test_unknown_options_are_refused(options, match):
    with pytest.raises(mixbridge.OptionError, match=match):
        compose(demo_record(), **options)


def test_no_unit_is_named_in_any_format(tmp_path):
    data = mixbridge.demo.apiaries()
    data["apiary"] = "secret-" + data["apiary"]
    study = mixbridge.crosscheck("honey ~ forage + feeding + altitude", data, unit="apiary", period="season")
    for suffix in (".md", ".tex", ".html"):
        assert "secret-" not in study.appendix(tmp_path / f"a{suffix}").read_text(encoding="utf-8")


def test_other_endings_and_places_that_cannot_be_written_are_refused(tmp_path):
    with pytest.raises(mixbridge.OptionError, match=r"\.md, \.tex, \.html"):
        demo().appendix(tmp_path / "a.docx")
    with pytest.raises(mixbridge.DataError, match="cannot be written"):
        demo().appendix(tmp_path / "nowhere" / "a.md")


@pytest.mark.parametrize("audience", list(AUDIENCES))
def test_paragraph_is_one_paragraph_of_this_study(audience):
    text = demo().paragraph(audience=audience)
    assert "\n" not in text
    assert "315 of 322 rows" in text
    assert "0.476" in text


def test_bibliography_holds_exactly_the_methods_used():
    full = demo()
    few = mixbridge.crosscheck("honey ~ forage", mixbridge.demo.apiaries(), unit="apiary", routes=["reml"])
    assert "nerlove_1971" in cited(full.to_dict())
    assert "nerlove_1971" not in cited(few.to_dict())
    assert "chamberlain_1982" not in cited(full.to_dict())
    bibtex, csl = full.references(), json.loads(full.references("csl"))
    keys = cited(full.to_dict())
    assert bibtex.count("\n@") + bibtex.startswith("@") == len(keys) == len(csl)
    assert [item["id"] for item in csl] == list(keys)
    assert bibtex.count("{") == bibtex.count("}")
    with pytest.raises(mixbridge.OptionError, match="bibtex, csl"):
        full.references("ris")


def test_works_are_complete():
    for key, work in WORKS.items():
        assert work.authors
        assert key.endswith(str(work.year))
        assert work.book or (work.volume and work.pages), key
