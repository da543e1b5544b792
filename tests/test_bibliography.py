"""The bibliography: the works that the text names, all of them and no others, as well-formed entries."""

import json
import re

import pytest
from appendix_cases import STUDIES, demo, panel, record_of

import mixbridge
from mixbridge.report.appendix import LENGTHS, compose
from mixbridge.report.bibliography import bibliography, cited
from mixbridge.report.document import Bullets
from mixbridge.report.document_text import texts_of
from mixbridge.report.estimators import ESTIMATORS
from mixbridge.report.works import named_in, works

CITATION = re.compile(r"(?:[A-Z][\w-]+(?:, [A-Z][\w-]+)* & )?[A-Z][\w-]+ \(?(?:(?:1[89]|20)\d\d)")
"""A name or names and a year."""


def references(record, length="full"):
    blocks = compose(record, length=length).blocks
    lines = {work.line: key for key, work in works().items()}
    last = blocks[-1]
    assert isinstance(last, Bullets)
    return [lines[item] for item in last.items]


def body(record, length="full"):
    return "\n".join(texts_of(compose(record, length=length).blocks[:-1]))


@pytest.mark.parametrize("name", list(STUDIES))
@pytest.mark.parametrize("length", LENGTHS)
def test_every_citation_has_its_reference_and_every_reference_its_citation(name, length):
    record = record_of(name)
    listed, text = references(record, length), body(record, length)
    marks = {works()[key].mark: key for key in listed}
    for found in CITATION.findall(text):
        assert found.replace("(", "") in marks or _second_year(found, text, listed), found
    for mark in marks:
        names, year = mark.rsplit(" ", 1)
        assert re.search(rf"{re.escape(names)} \(?(?:\d{{4}}, )*{year}", text), mark


def _second_year(found, text, listed):
    return any(works()[key].mark == found for key in listed)


def test_a_citation_without_a_reference_is_found():
    assert CITATION.findall("a test (Nobody 1999; Some & Body 2001)") == ["Nobody 1999", "Some & Body 2001"]
    assert named_in(["Nobody 1999"]) == ()


def test_names_are_read_as_they_are_written():
    assert named_in(["Pesaran 2004, 2015"]) == ("pesaran_2004", "pesaran_2015")
    assert named_in(["in Mundlak (1978)"]) == ("mundlak_1978",)
    assert named_in(["Searle, Casella & McCulloch 1992, ch. 4"]) == ("searle_casella_mcculloch_1992",)
    assert named_in(["Somebody & Mundlak 1978", "O'Mundlak1978", "Harville 1985"]) == ()


def test_methods_come_and_go_with_the_study():
    full = cited(demo())
    few = cited(record_of("published"))
    assert {
        "nerlove_1971",
        "swamy_arora_1972",
        "rao_1971",
        "guggenberger_2010",
        "patterson_thompson_1971",
    } <= set(full)
    assert {"pesaran_2004", "pesaran_2015", "baltagi_wu_1999"} <= set(full)  # these need periods
    assert not {"pesaran_2004", "baltagi_wu_1999", "mundlak_1978", "chamberlain_1982"} & set(few)
    data = mixbridge.demo.apiaries()
    alone = cited(mixbridge.crosscheck("honey ~ forage", data, unit="apiary", routes=["reml"]))
    assert "nerlove_1971" not in alone
    assert "reml" in record_of("demo")["fits"]
    within = mixbridge.crosscheck("honey ~ forage", data, unit="apiary", primary="within", routes=["within"])
    assert "arellano_1987" in cited(within)
    assert "arellano_1987" not in alone


def test_a_balanced_panel_with_unit_means_cites_what_it_uses():
    study = mixbridge.crosscheck("y ~ x", panel(0.4), unit="hive", routes=["reml", "within"])
    assert "mundlak_1978" in cited(study)
    assert "mundlak_1978" in cited(study.correlated("mundlak"))


def test_every_work_is_complete_and_says_where_its_details_come_from():
    for key, work in works().items():
        assert key.endswith(str(work.year))
        assert work.authors
        assert all(family and given for family, given in work.authors)
        assert work.kind in ("article", "book", "report")
        assert (bool(work.volume) and bool(work.pages)) == (work.kind == "article"), key
        assert work.title
        assert work.container
        assert work.provenance == "from memory"
        assert work.line.endswith(".")
    assert list(works()) == sorted(works(), key=lambda key: (works()[key].authors, works()[key].year))


def test_sources_of_estimators_are_known():
    for entry in ESTIMATORS.values():
        for found in CITATION.findall(entry.components):
            assert named_in([found]), found


def test_both_forms_hold_the_same_works_in_the_same_order():
    study = demo()
    keys = cited(study)
    bibtex, csl = study.references(), json.loads(study.references("csl"))
    assert re.findall(r"^@\w+\{(\w+),$", bibtex, re.MULTILINE) == list(keys) == [item["id"] for item in csl]
    for item in csl:
        work = works()[item["id"]]
        assert item["title"] == work.title
        assert item["issued"] == {"date-parts": [[work.year]]}
        assert item["note"] == "details from memory"
    assert bibtex.count("{") == bibtex.count("}")
    assert re.search(r"(?<!\\)&", bibtex) is None
    assert "from memory" in bibtex


def test_books_and_reports_have_entries_of_their_own():
    text = bibliography(("searle_casella_mcculloch_1992", "pesaran_2004", "rao_1971"), "bibtex")
    assert "@book{searle_casella_mcculloch_1992,\n" in text
    assert "publisher = {Wiley}" in text
    assert "@techreport{pesaran_2004,\n" in text
    assert "pages = {257--275}" in text
    kinds = [item["type"] for item in json.loads(bibliography(("pesaran_2004", "rao_1971"), "csl"))]
    assert kinds == ["report", "article-journal"]


def test_other_forms_are_refused():
    with pytest.raises(mixbridge.OptionError, match="bibtex, csl"):
        demo().references("ris")
