"""The appendix: every number is one of the record, words follow the audience, nothing false is said of odd studies."""

import html as markup
import json
import re
from importlib.util import find_spec

import numpy as np
import pandas as pd
import pytest
from appendix_cases import HONEY, STUDIES, demo, panel, record_of, repelling

import mixbridge
from mixbridge.display.text import number
from mixbridge.report.appendix import LENGTHS, compose
from mixbridge.report.as_html import html
from mixbridge.report.as_latex import latex
from mixbridge.report.as_markdown import markdown
from mixbridge.report.document import Bullets, Code, Formula, Heading, Paragraph, Table
from mixbridge.report.document_text import texts_of
from mixbridge.report.estimators import ESTIMATORS
from mixbridge.report.words import AUDIENCES
from mixbridge.routes import ROUTES

NUMBER = re.compile(r"(?<![\w.])-?\d+(?:\.\d+)?(?:e[+-]\d+)?(?![\w])")
DIGITS = (2, 3, 4, 6, 8)
"""Significant digits that the appendix prints."""


@pytest.fixture(params=list(STUDIES))
def record(request):
    return record_of(request.param)


def values_of(value):
    if isinstance(value, dict):
        for key, below in value.items():
            yield key
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
            forms.update(number(float(value), digits) for digits in DIGITS)
            forms.update((str(value), f"{value:g}"))
    return forms


def read_markdown(text):
    """Return the text of a Markdown file without fenced lines and references, signs as they were meant."""
    text = re.sub(r"^```.*?^```", "", text, flags=re.DOTALL | re.MULTILINE)
    text = text.partition("\n## References")[0]
    return markup.unescape(re.sub(r"\\(.)", r"\1", text))


def without_symbols(text):
    """Take out years of works, and numbers that belong to symbols: divisors, λ(2 − λ), N(0, 1), SHA-256."""
    text = re.sub(r"[A-Z][\w-]+ (?:(?:19|20)\d\d(?:, )?)+", " ", text)
    text = re.sub(
        r"[nNT] [-−] 1\b|ψ ≥ 0|λ\(2 − λ\)|\(1 \+ ψ\)|ψ = 0(?!\.)|σ_α² = 0|SHA-256|\bN\(0, 1\)", " ", text
    )
    return re.sub(r"multiplier N/\(N - 1\)", " ", text)


def test_every_number_in_the_file_is_found_in_the_record(record, tmp_path):
    """Numbers that are no figures of the study: the thresholds of the classes, and what the record says as a share."""
    path = tmp_path / "appendix.md"
    path.write_text(markdown(compose(record)), encoding="utf-8")
    known = printed_forms(record) | {"0.1", "10"}  # immaterial: 0.1 standard errors, 10%
    known.add(f"{100 * record['confidence']:g}")
    known.update(
        f"{fit['certificate']['epsilon']:.0e}" for fit in record["fits"].values() if fit["certificate"]
    )
    read = without_symbols(read_markdown(path.read_text(encoding="utf-8")))
    lost = [line[:120] for line in read.splitlines() for found in NUMBER.findall(line) if found not in known]
    assert not lost, lost[:10]


def test_a_number_that_is_not_in_the_record_is_noticed(record):
    known = printed_forms(record)
    assert "31.41592" not in known
    assert NUMBER.findall(without_symbols("a slope of 31.41592 (Hausman 1978)")) == ["31.41592"]


def test_cells_are_unrounded_values_of_the_record(record):
    known = {float(value) for value in values_of(record) if isinstance(value, int | float)}
    tables = [block for block in compose(record).blocks if isinstance(block, Table)]
    assert len(tables) > 10
    for table in tables:
        for row in table.rows:
            assert len(row) == len(table.header)
            for cell in row:
                if isinstance(cell, float):
                    assert cell in known, (table.name, cell)


def test_numbers_survive_the_way_to_markdown(record):
    document = compose(record)
    text = markdown(document)
    for table in (block for block in document.blocks if isinstance(block, Table)):
        for row in table.rows:
            for cell in row:
                if isinstance(cell, float):
                    assert f" {number(cell, table.digits)} " in text


def test_headings_of_columns_and_names_of_tables_are_distinct(record):
    tables = [block for block in compose(record).blocks if isinstance(block, Table)]
    assert len({table.name for table in tables}) == len(tables)
    for table in tables:
        assert len(set(table.header)) == len(table.header), table.name
        assert re.fullmatch("[a-z0-9-]+", table.name)


def test_the_full_length_has_every_section(record):
    said = [block.text for block in compose(record).blocks if isinstance(block, Heading) and block.level == 1]
    assert said == [
        "Model",
        "Words of two fields",
        "Rows and units",
        "Estimator",
        "Coefficients",
        "Variance components",
        "All routes side by side",
        "Where the gaps come from",
        "Is the unit variance zero?",
        "Unit effects and covariates",
        "Likelihoods and the optimum",
        "Identities. These check the arithmetic, not the model.",
        "Assumptions that all routes share",
        "Sensitivity",
        "What this analysis cannot show",
        "Software, and how to run it again",
        "References",
    ]


def test_lengths_nest():
    record = record_of("demo")
    sizes = [len(markdown(compose(record, length=length))) for length in LENGTHS]
    assert sizes[0] < sizes[1] < sizes[2]
    short = " ".join(texts_of(compose(record, length="paragraph")))
    assert "primary route is reml" in short


@pytest.fixture(scope="module")
def again():
    """The demo study, made a second time."""
    return mixbridge.crosscheck(HONEY, mixbridge.demo.apiaries(), unit="apiary", period="season")


@pytest.mark.parametrize("suffix", [".md", ".tex", ".html"])
def test_files_are_the_same_each_time(tmp_path, suffix, again):
    first = demo().appendix(tmp_path / f"a{suffix}").read_bytes()
    assert again.appendix(tmp_path / f"b{suffix}").read_bytes() == first
    if suffix == ".html":
        assert b'download="record.json"' in first
        if find_spec("matplotlib") is not None:
            assert first.count(b'<figure class="picture"') >= 2
        assert (
            b'<figure class="picture"' not in again.appendix(tmp_path / "c.html", length="page").read_bytes()
        )


def test_a_record_changed_by_its_reader_does_not_change_the_study():
    study = demo()
    study.to_dict()["fits"].clear()
    assert study.to_dict()["fits"]


def test_audiences_differ_in_words_and_not_in_numbers(record):
    found = {
        audience: sorted(
            found
            for text in texts_of(compose(record, audience=audience))
            for found in NUMBER.findall(without_symbols(text))
        )
        for audience in AUDIENCES
    }
    assert found["economics"] == found["both"] == found["biostatistics"]
    economics, biostatistics = (
        " ".join(texts_of(compose(record, audience=audience, length="page")))
        for audience in ("economics", "biostatistics")
    )
    assert "error-components" in economics
    assert "idiosyncratic" in economics
    assert "mixed model" in biostatistics
    assert "idiosyncratic" not in biostatistics.replace("idiosyncratic variance of the route", "")


@pytest.mark.parametrize("length", LENGTHS)
@pytest.mark.parametrize(
    ("stated", "words"),
    [(None, "is not stated"), (True, "before the results were seen, as"), (False, "not chosen beforehand")],
)
def test_whether_the_primary_route_was_chosen_beforehand_is_said(length, stated, words):
    document = compose(record_of("demo"), length=length, chosen_beforehand=stated)
    assert any(words in text for text in texts_of(document))


def test_every_route_has_a_name_and_a_formula():
    assert set(ESTIMATORS) == set(ROUTES)
    for entry in ESTIMATORS.values():
        assert entry.name
        assert entry.components
        assert entry.tex
        assert entry.text


def test_printed_sums_of_squares_give_the_printed_components():
    """The first-stage table, read as two equations: value = times of one variance + times of the other."""
    for fit in record_of("demo")["fits"].values():
        if len(fit["forms"]) == 2:
            system = np.array([[on_error, on_unit] for _, _, on_error, on_unit in fit["forms"]])
            found = np.linalg.solve(system, [value for _, value, _, _ in fit["forms"]])
            assert found == pytest.approx(
                [fit["idiosyncratic_variance"], fit["unit_variance_raw"]], rel=1e-12
            )


def test_the_printed_log_likelihood_is_that_of_the_normal_density():
    """By dense matrices, as the printed formula says."""
    x, y = demo().panel.matrix()
    codes, record = demo().panel.codes, record_of("demo")
    z = (codes[:, None] == np.arange(codes.max() + 1)).astype(float)
    n, k = x.shape
    for row, kind, m in zip(
        record["likelihoods"]["rows"], ("ml", "reml", "reml"), (n, n - k, n - k), strict=True
    ):
        psi = record["fits"][kind]["ratio"]
        inverse = np.linalg.inv(np.eye(n) + psi * z @ z.T)
        cross = x.T @ inverse @ x
        e = y - x @ np.linalg.solve(cross, x.T @ inverse @ y)
        value = m * np.log(2 * np.pi * (e @ inverse @ e) / m) + m + np.log1p(psi * z.sum(axis=0)).sum()
        if kind == "reml":
            value += np.linalg.slogdet(cross)[1]
        if row["likelihood"].startswith("reml, with half"):
            value -= np.linalg.slogdet(x.T @ x)[1]
        assert row["log_likelihood"] == pytest.approx(-0.5 * value, rel=1e-10)


@pytest.mark.parametrize("route", ["within", "first_difference", "swamy_arora", "minque_1"])
def test_another_primary_route_is_described_by_its_own_formula(route):
    data = mixbridge.demo.apiaries()
    study = mixbridge.crosscheck(
        "honey ~ forage", data, unit="apiary", period="season", primary=route, routes=["reml", "within"]
    )
    document = compose(study.to_dict(), length="page")
    formulas = [block.text for block in document.blocks if isinstance(block, Formula)]
    text = " ".join(texts_of(document))
    key = "minque" if route.startswith("minque") else route
    assert ESTIMATORS[key].text in formulas
    assert any("λ_i" in formula for formula in formulas) == (route in ("swamy_arora", "minque_1"))
    assert ("intraclass correlation" in text) == (route in ("swamy_arora", "minque_1"))
    assert "random-intercept model" not in text or route in ("swamy_arora", "minque_1")


def test_a_truncated_route_says_what_was_done():
    study = mixbridge.crosscheck("y ~ x", repelling(), unit="hive", primary="swamy_arora", routes=["reml"])
    record = study.to_dict()
    raw = number(record["fits"]["swamy_arora"]["unit_variance_raw"], 4)
    assert raw.startswith("-")
    text = " ".join(texts_of(compose(record)))
    assert f"came out as {raw}. It is reported as such, and zero is used" in text
    assert "unit_variance_raw" not in text
    assert "both are 0 at ψ = 0" in text
    other = " ".join(texts_of(compose(record_of("demo"))))
    assert "reported as such" not in other
    assert "both are 0" not in other


def test_nothing_is_said_of_rows_lost_or_of_sizes_where_there_are_none():
    text = " ".join(texts_of(compose(record_of("published"), length="page")))
    assert "All 30 rows were used" in text
    assert "balanced: each unit has 5 rows" in text
    for word in ("dropped", "one-row", "one row", "median", "unbalanced"):
        assert word not in text, word


def test_rows_lost_are_counted_by_unit():
    data = panel(0.0, units=6)
    data.loc[0:3, "x"] = np.nan
    data.loc[[4, 5, 9], "y"] = np.nan
    record = mixbridge.crosscheck("y ~ x", data, unit="hive", routes=["reml"]).to_dict()
    assert record["accounting"]["by_unit"] == {
        "units_given": 6,
        "units_without_usable_row": 1,
        "units_with_dropped_rows": 2,
        "most_rows_dropped": 2,
    }
    text = " ".join(texts_of(compose(record)))
    assert "Of 6 units in the data 1 has no usable row. 2 of the units used lost at most 2 rows each." in text


def test_units_are_counted_by_key_of_any_type():
    base = panel(0.0, units=4)
    base.loc[[0, 1, 2, 3, 4], "x"] = np.nan
    for keys in (  # the account alone: the rest of a record takes longer
        base["hive"],
        base["hive"].astype(float).mask(base.index == 9),
        base["hive"].map("hive {}".format),
        base["hive"].astype("category"),
        pd.to_datetime("2020-01-01") + pd.to_timedelta(base["hive"], unit="D"),
    ):
        study = mixbridge.crosscheck("y ~ x", base.assign(hive=keys), unit="hive", routes=["reml"])
        found = study.panel.accounting.by_unit
        assert (found.units_given, found.units_without_usable_row) == (4, 1)
        assert (found.units_with_dropped_rows, found.most_rows_dropped) == (1, 1)


@pytest.mark.parametrize("means_of", [None, ["feeding"]])
def test_the_script_reruns_the_study(means_of):
    study = mixbridge.crosscheck(
        "honey ~ forage + feeding",
        mixbridge.demo.apiaries(),
        unit="apiary",
        primary="ml",
        confidence=0.9,
        routes=["within"],
    ).correlated("mundlak", means_of=means_of)
    code = next(block.text for block in compose(study.to_dict()).blocks if isinstance(block, Code))
    scope = {"data": mixbridge.demo.apiaries(), "print": lambda *_: None}
    exec(code, scope)
    assert scope["study"].to_dict() == study.to_dict()


def test_the_script_of_a_study_of_moments_reads_them_from_the_record(tmp_path, monkeypatch):
    study = mixbridge.from_moments(demo().moments, unit="apiary", routes=["reml", "ml"])
    record = study.to_dict()
    monkeypatch.chdir(tmp_path)
    (tmp_path / "record.json").write_text(json.dumps(record), encoding="utf-8")
    code = next(block.text for block in compose(record).blocks if isinstance(block, Code))
    scope = {"print": lambda *_: None}
    exec(code, scope)
    assert scope["study"].to_dict()["fits"] == record["fits"]


def test_without_rows_or_units_the_reasons_are_given():
    away = mixbridge.from_moments(demo().moments, unit="apiary", routes=["reml", "within"]).to_dict()
    assert away["rows"] == "absent"
    text = " ".join(texts_of(compose(away)))
    assert "needs rows or the products of units" in text
    assert "moments taken elsewhere" in text
    assert "So there is nothing, neither for nor against, from:" in text


def test_rows_read_in_chunks_give_the_same_figures_and_say_what_was_not_assessed():
    data = mixbridge.demo.apiaries()
    record = mixbridge.crosscheck(HONEY, data, unit="apiary", period="season", chunks=True).to_dict()
    assert record["rows"] == "in chunks"
    text = " ".join(texts_of(compose(record)))
    assert "How the rows dropped are spread over units was not counted." in text
    assert "never held together" in text
    whole = record_of("demo")
    for name in ("inference", "unit_means", "paths", "contrasts"):
        again, kept = (
            [value for value in values_of(part) if isinstance(value, int | float)]
            for part in (record[name], whole[name])
        )
        assert again == pytest.approx(kept, rel=1e-9, abs=1e-9)  # sums in another order


@pytest.mark.parametrize("form", ["mundlak", "chamberlain"])
def test_a_study_with_added_columns_shows_their_coefficients_or_tests(form):
    data = panel(0.5)
    data["season"] = data.groupby("hive").cumcount()
    study = mixbridge.crosscheck("y ~ x", data, unit="hive", period="season", routes=["reml", "within"])
    record = study.correlated(form).to_dict()
    tables = {block.name for block in compose(record).blocks if isinstance(block, Table)}
    text = " ".join(texts_of(compose(record)))
    assert record["added"]["statement"] in text
    assert "what is left of the unit effect" in text
    assert ("unit-means" in tables) == (form == "mundlak")
    assert ("projection-tests" in tables) == (form == "chamberlain")
    assert mixbridge.verify(json.loads(json.dumps(record))).passed


def test_many_terms_are_named_up_to_a_number_and_counted_beyond_it():
    rng = np.random.default_rng(3)
    unit = np.repeat(np.arange(30), 4)
    data = pd.DataFrame({f"x{j}": rng.normal(size=120) + 0.5 * rng.normal(size=30)[unit] for j in range(14)})
    means = data.groupby(unit).transform("mean").sum(axis=1)
    data["y"] = data.sum(axis=1) * 0.2 - means + rng.normal(size=30)[unit] + rng.normal(size=120)
    data["unit"] = unit
    names = " + ".join(f"x{j}" for j in range(14))
    study = mixbridge.crosscheck(
        f"y ~ {names}", data, unit="unit", routes=["reml", "swamy_arora", "pooled_minus_within", "minque_0"]
    )
    record = study.to_dict()
    found = record["attributions"]
    assert len(found["rows"]) == 6 < found["terms_apart"]
    text = " ".join(texts_of(compose(record, length="full")))
    assert "more terms" in study.paragraph()
    assert f"terms furthest apart, of {found['terms_apart']}" in text


def test_ranges_over_the_ratio_are_those_of_the_paths():
    for row in record_of("demo")["paths"]["rows"]:
        path = demo().path(row["term"], points=33)
        assert (row["lowest"], row["highest"]) == path.range_all
        assert (row["lowest_allowed"], row["highest_allowed"]) == path.range_allowed
        assert row["changes_of_sign"] == [list(change) for change in path.changes]


HOSTILE = "a_b*c|<script>alert(1)</script> $x$ \\input{y} & 100% `q` \u202etxt\u202c " + "n" * 200


def test_hostile_names_are_passed_on_as_text_and_shown_harmlessly():
    data = panel(0.3, units=12).rename(columns={"hive": HOSTILE})
    data[HOSTILE] = data[HOSTILE].map(lambda key: f"{key}\n# {HOSTILE}")
    data = data.rename(columns={"y": "<y> $&_%"})
    study = mixbridge.crosscheck('Q("<y> $&_%") ~ x', data, unit=HOSTILE, routes=["reml", "within"])
    document = compose(study.to_dict(), title=HOSTILE)
    assert any(HOSTILE in text for text in texts_of(document))
    assert "<script>alert" not in html(document)
    assert "\\input{y}" not in latex(document)
    text = markdown(document)
    body = re.sub(r"^```.*?^```", "", text, flags=re.DOTALL | re.MULTILINE)
    assert "<script>" not in body
    assert "\u202e" not in text


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
        compose(record_of("demo"), **options)


def test_other_endings_and_places_that_cannot_be_written_are_refused(tmp_path):
    with pytest.raises(mixbridge.OptionError, match=r"\.md, \.tex, \.html"):
        demo().appendix(tmp_path / "a.docx")
    with pytest.raises(mixbridge.DataError, match="cannot be written"):
        demo().appendix(tmp_path / "nowhere" / "a.md")


@pytest.mark.parametrize("audience", list(AUDIENCES))
def test_paragraph_is_one_paragraph_of_this_study(audience):
    text = demo().paragraph(audience=audience)
    assert "\n" not in text
    assert (
        "315 of 322 rows (4 with missing outcome honey and 3 with missing covariate forage dropped)" in text
    )
    assert "0.476" in text
    assert len(text) < 1500


def test_names_of_columns_are_never_given_a_capital():
    text = "\n".join(
        block.text for block in compose(record_of("demo")).blocks if isinstance(block, Paragraph)
    )
    assert "Altitude" not in text
    assert "Forage" not in text
    assert not any(item.startswith("First_difference") for item in texts_of(compose(record_of("demo"))))


def test_bullets_hold_sentences(record):
    for block in compose(record).blocks:
        if isinstance(block, Bullets):
            assert all(item.strip() == item and item for item in block.items)
