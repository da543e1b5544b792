"""What a notebook shows of a study, its fits and its tables."""

from html.parser import HTMLParser

import numpy as np
import pandas as pd
import pytest
from documents import HOSTILE

import mixbridge
from mixbridge.demo import apiaries
from mixbridge.display import visible
from mixbridge.report.notebook import table_html

FORMULA = "honey ~ forage + feeding + altitude"


@pytest.fixture(scope="module")
def study():
    return mixbridge.crosscheck(FORMULA, apiaries(), unit="apiary", period="season")


class Text(HTMLParser):
    """Collects the tags and the text, without the style."""

    def __init__(self, page):
        super().__init__(convert_charrefs=True)
        self.tags, self.parts, self._style = [], [], False
        self.feed(page)
        self.close()
        self.text = "".join(self.parts)

    def handle_starttag(self, tag, attributes):
        self.tags.append(tag)
        self._style = tag == "style"
        assert not any(key.startswith("on") or key in {"src", "href"} for key, _ in attributes)

    def handle_endtag(self, tag):
        self._style = False

    def handle_data(self, data):
        if not self._style:
            self.parts.append(data)


def test_a_study_shows_its_first_screen_and_its_tables_to_unfold(study):
    page = Text(study._repr_html_())
    assert str(study) in page.text
    assert page.tags.count("details") == page.tags.count("table") == 2
    assert f"Every term by every route: {len(study.ledger)} rows" in page.text
    assert "script" not in page.tags


def test_a_fit_shows_what_it_prints(study):
    for key in ("reml", "within", "swamy_arora"):
        fit = study.fit(key)
        page = Text(fit._repr_html_())
        first, *lines = str(fit).split("\n")
        assert first in page.text
        for line in lines[1 + len(fit.terms) :]:
            assert line.removeprefix("  ") in page.text
        for term, estimate in fit.coefficients.items():
            assert term in page.text
            assert np.isnan(estimate) or f"{estimate:.6g}" in page.text
        assert "nan" not in page.text.split("unit variance")[0]


@pytest.mark.parametrize(
    "ask",
    [
        lambda study: study.hypothesis("forage = feeding"),
        lambda study: study.path("feeding"),
        lambda study: study.attribution("feeding", "swamy_arora"),
        lambda study: study.audit(),
    ],
    ids=["hypothesis", "path", "attribution", "audit"],
)
def test_a_printed_record_shows_its_text(study, ask):
    record = ask(study)
    assert visible(str(record), lines=True) in Text(record._repr_html_()).text


def test_tables_show_names_and_obey_none():
    frame = pd.DataFrame(
        {"name <b>": pd.Series(HOSTILE, dtype=object), "value": np.arange(len(HOSTILE)) / 7.0}
    )
    page = Text(table_html(frame, HOSTILE[1]))
    assert set(page.tags) <= {"div", "style", "table", "caption", "thead", "tbody", "tr", "th", "td"}
    for name in HOSTILE:
        assert visible(name) in page.text
    assert visible(HOSTILE[1]) in page.text


def test_tables_round_numbers_and_keep_an_index_with_a_meaning():
    frame = pd.DataFrame(
        {"a": [0.123456, np.nan], "b": [1, 2], "c": [True, False], "d": [None, "x"]},
        index=pd.Index(["u", "v"], name="unit"),
    )
    page = table_html(frame, "Units", digits=3)
    for part in (
        '<th scope="col">unit</th>',
        '<th scope="row">u</th><td class="n">0.123</td><td class="n">1</td><td class="n">yes</td><td>-</td>',
        '<td class="n">-</td><td class="n">2</td><td class="n">no</td><td>x</td>',
    ):
        assert part in page
    assert 'scope="row" class="n">0.1235' in table_html(frame.reset_index(drop=True), "Units")


def test_notebooks_leave_dollar_signs_alone():
    assert 'class="mixbridge tex2jax_ignore mathjax_ignore"' in table_html(
        pd.DataFrame({"$x$": ["$y$"]}), "$z$"
    )
