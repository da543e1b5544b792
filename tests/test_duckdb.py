"""DuckDB relations against the same rows in one frame: summed in the database, streamed where SQL does not suffice."""

from fractions import Fraction

import numpy as np
import pandas as pd
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from mixbridge import crosscheck
from mixbridge.errors import DataError, FormulaError
from mixbridge.moments import close
from mixbridge.panel.pushed_query import build_query
from mixbridge.routes import LEDGER_ROUTES
from mixbridge.sources.arrow import to_pandas

duckdb = pytest.importorskip("duckdb")
pa = pytest.importorskip("pyarrow")

from mixbridge.moments import pushed  # noqa: E402  (after the packages it needs)
from mixbridge.sources.duckdb_source import ROWS, RelationSource  # noqa: E402

FORMULA = "honey ~ forage * region + C(frames) + np.log(weight)"
EPS = np.finfo(float).eps


def make(n=300, seed=5):
    rng = np.random.default_rng(seed)
    hive = rng.integers(0, 30, n)
    data = pd.DataFrame(
        {
            "hive": hive,
            "season": pd.Series(range(n)).groupby(hive).cumcount() + 2001,
            "forage": rng.normal(size=n) + 0.1 * hive,
            "altitude": 100.0 + 10 * (hive % 7),
            "weight": rng.exponential(size=n) + 1.0,
            "frames": rng.integers(1, 4, n),
            "region": rng.choice(["east", "it's north", "west"], n),
            "fed": rng.random(n) < 0.5,
        }
    )
    data["honey"] = 20 + data["forage"] + rng.normal(size=30)[hive] + rng.normal(size=n)
    data.loc[[3, 77], "forage"] = np.nan
    data.loc[[4, 50], "honey"] = np.nan
    data.loc[10, "weight"] = -1.0
    return data


def relation(data, select="*"):
    """A relation over a table of the data; what is not a number in it is NULL."""
    connection = duckdb.connect()
    table = pa.Table.from_pandas(data, preserve_index=False)
    connection.register("given", table)
    connection.execute(f"CREATE TABLE hives AS SELECT {select} FROM given")
    connection.unregister("given")
    return connection.sql("SELECT * FROM hives")


def same_study(got, wanted, allowed=1e-10, routes=LEDGER_ROUTES):
    """Coefficients and ratios to 1e-10 of the largest: the search for the ratio stops at 1e-12."""
    panel, whole = got.panel, wanted.panel
    assert panel.accounting == whole.accounting
    assert (panel.names, panel.outcome, panel.n, panel.N) == (whole.names, whole.outcome, whole.n, whole.N)
    assert dict(panel.terms) == dict(whole.terms)
    assert panel.constant == whole.constant
    assert list(panel.unit_keys) == list(whole.unit_keys)
    np.testing.assert_array_equal(got.opened.counts, wanted.opened.counts)
    assert got.moments.constant == wanted.moments.constant
    for key in routes:
        ours, theirs = got.fit(key), wanted.fit(key)
        assert ours.status == theirs.status
        if ours.estimated:
            scale = np.nanmax(np.abs(theirs.beta))
            np.testing.assert_allclose(ours.beta, theirs.beta, rtol=0, atol=allowed * scale)
            np.testing.assert_allclose(ours.ratio, theirs.ratio, rtol=1e2 * allowed, atol=1e2 * allowed)


def in_database(study):
    return "summed per unit in the database" in study.panel.source_note


CURVE = [key for key in LEDGER_ROUTES if key != "first_difference"]
PUSHED = [
    FORMULA,
    "honey ~ forage:altitude + I(forage ** 2) + np.sqrt(weight) + np.exp(-weight) + fed",
    "np.log(honey) ~ 0 + region + I(forage / weight) + np.abs(forage) + C(region, Sum):forage",
    "honey ~ C(frames, levels=[3, 2, 1]) + altitude + np.log10(weight) + log2(1 + forage ** 2) + I(weight ** -0.5)",
    "honey ~ forage",
]


@pytest.mark.parametrize("formula", PUSHED)
def test_formulas_that_sql_can_write(formula):
    data = make()
    study = crosscheck(formula, relation(data), unit="hive", period="season")
    assert in_database(study)
    same_study(study, crosscheck(formula, data, unit="hive", period="season"))


@settings(max_examples=10)
@given(
    st.integers(0, 2**32 - 1),
    st.integers(2, 60),
    st.sampled_from([0.0, 1e3, 1e9]),
    st.sampled_from([1, 2, 40]),
)
def test_random_rows_with_gaps_at_any_offset(seed, n, offset, units):
    """Rows stored at an offset are rounded there; what is computed from them is not rounded again."""
    rng = np.random.default_rng(seed)
    n += 2 * units
    unit = rng.integers(0, units, n)
    unit[:2] = [0, units]
    x = np.round(rng.normal(size=n) + unit % 3, 3)
    data = pd.DataFrame(
        {
            "unit": unit,
            "x": offset + x,
            "z": offset + 0.5 * unit,
            "y": offset + x + rng.normal(size=n) + rng.normal(size=units + 1)[unit],
        }
    )
    data.loc[rng.random(n) < 0.1, "x"] = np.nan
    try:
        wanted = crosscheck("y ~ x + z", data, unit="unit")
    except (DataError, ValueError) as error:
        with pytest.raises(type(error)):
            crosscheck("y ~ x + z", relation(data), unit="unit")
        return
    got = crosscheck("y ~ x + z", relation(data), unit="unit")
    assert in_database(got)
    ours, theirs = got.opened, wanted.opened
    # the rounding floor of the stored data, over the rows of a sum
    floor = n * EPS * theirs.magnitude
    assert (np.abs(ours.means + ours.shift - theirs.means - theirs.shift) <= floor).all()
    length = np.sqrt(np.diag(theirs.within)) + floor
    assert (
        np.abs(ours.within - theirs.within) <= 4 * n * EPS * pushed.PLAIN_LIMIT * np.outer(length, length)
    ).all()
    assert (np.diag(ours.within) == 0).tolist() == (np.diag(theirs.within) == 0).tolist()


@pytest.mark.parametrize(("offset", "step"), [(0, 1), (10**9, 1), (10**9, 10**6)])
def test_products_against_rational_arithmetic(offset, step):
    """Whole numbers at an offset, units far apart: W to 100 roundings of its diagonal, or a few if taken by a join."""
    rng = np.random.default_rng(1)
    unit = np.repeat(np.arange(12), [1, 2, 3, 4, 5, 6, 7, 8, 9, 10, 11, 30])
    data = pd.DataFrame(
        {
            "unit": unit,
            "x": offset + step * unit + rng.integers(0, 50, len(unit)),
            "y": offset - step * unit + rng.integers(0, 90, len(unit)),
        }
    ).sample(frac=1, random_state=1)
    study = crosscheck("y ~ x", relation(data), unit="unit")
    exact = [[Fraction(0)] * 2 for _ in range(2)]
    for _, part in data.groupby("unit"):
        z = [[Fraction(int(value)) for value in part[name]] for name in ("x", "y")]
        mean = [sum(column) / len(part) for column in z]
        for i in range(2):
            for j in range(2):
                exact[i][j] += sum((a - mean[i]) * (b - mean[j]) for a, b in zip(z[i], z[j], strict=True))
    joined = "means of units" in study.moments.note
    assert joined == (step > 1)
    allowed = EPS * (16 if joined else 2 * pushed.PLAIN_LIMIT)
    for i in range(2):
        for j in range(2):
            scale = float(exact[i][i] * exact[j][j]) ** 0.5
            assert abs(float(Fraction(study.opened.within[1 + i, 1 + j]) - exact[i][j])) <= allowed * scale


def test_near_dependencies_are_factored_from_streamed_rows():
    """As for rows in memory: kappa about 1e5 within units, both by QR of the same rows."""
    rng = np.random.default_rng(2)
    data = make()
    data["near"] = 1e6 + data["forage"] + 1e-5 * rng.normal(size=len(data))
    study = crosscheck("honey ~ forage + near", relation(data), unit="hive")
    assert "QR" in study.moments.note
    same_study(study, crosscheck("honey ~ forage + near", data, unit="hive"), 300 * EPS * 1e5, CURVE)


@pytest.mark.parametrize(
    ("formula", "reason"),
    [
        ("honey ~ np.expm1(-weight)", "np.expm1 is not a transform that SQL has"),
        ("honey ~ standardize(forage)", "standardize is not a transform"),
        ("honey ~ C(weight > 2)", "is not arithmetic"),
        ("honey ~ I(fed * forage)", "fed does not hold numbers"),
    ],
)
def test_what_sql_cannot_write_is_streamed_and_says_why(formula, reason):
    data = make()
    study = crosscheck(formula, relation(data), unit="hive")
    assert "streamed because" in study.panel.source_note
    assert reason in study.panel.source_note
    same_study(study, crosscheck(formula, data, unit="hive"))


def test_streaming_and_holding_on_request():
    data = make()
    streamed = crosscheck(FORMULA, relation(data), unit="hive", chunks=True)
    held = crosscheck(FORMULA, relation(data), unit="hive", chunks=False)
    assert streamed.panel.source_note.startswith("the rows of a DuckDB relation, streamed")
    assert "because" not in streamed.panel.source_note
    assert held.panel.source_note is None
    for study in (streamed, held):
        same_study(study, crosscheck(FORMULA, data, unit="hive"))


KEYS = {
    "wide": "hive + 4611686018427387904",
    "unsigned": "hive::UBIGINT + 9223372036854775808",
    "huge": "hive::HUGEINT + 100000000000000000000000000000000000000",
    "text": "'hive ' || hive",
    "whole floats": "CASE WHEN hive = 0 THEN -0.0::DOUBLE WHEN hive = 3 THEN NULL ELSE hive - 4 END::DOUBLE",
    "dates": "DATE '2001-01-01' + hive::INTEGER",
    "enum": "('h' || hive)::ENUM({})".format(", ".join(f"'h{i}'" for i in reversed(range(31)))),
}


@pytest.mark.parametrize("kind", KEYS)
def test_no_two_keys_become_one(kind):
    rows = relation(make(), f"* REPLACE ({KEYS[kind]} AS hive)")
    study = crosscheck("honey ~ forage", rows, unit="hive")
    assert in_database(study)
    same_study(study, crosscheck("honey ~ forage", to_pandas(rows.to_arrow_table()), unit="hive"))
    robust = study.fit("reml", covariance="CR1")
    assert np.isfinite(robust.standard_errors).all()


def test_names_that_the_queries_use_themselves():
    data = make().rename(
        columns={"hive": "k", "forage": "x1", "weight": "x0", "honey": "n", "altitude": "Mean 1"}
    )
    data["d0"], data["p"] = data["x1"] * 2 + data["x0"] ** 2, data["season"]
    formula = "n ~ x1 + x0 + d0 + Q('Mean 1')"
    study = crosscheck(formula, relation(data), unit="k", period="p")
    assert in_database(study)
    same_study(study, crosscheck(formula, data, unit="k", period="p"))


def test_rows_are_read_again_from_the_database():
    data = make()
    study = crosscheck(FORMULA, relation(data), unit="hive", period="season")
    whole = crosscheck(FORMULA, data, unit="hive", period="season")
    for kind in ("CR1", "CR2"):
        ours, theirs = (s.fit("reml", covariance=kind).standard_errors for s in (study, whole))
        np.testing.assert_allclose(
            ours, theirs, rtol=1e-9
        )  # as the coefficients, times the condition of the rows
    assert study.fit("first_difference").status == "fitted"
    with pytest.raises(DataError, match="chunks=False"):
        study.panel.matrix()


def test_gaps_between_periods_are_not_differenced():
    data = make().drop(index=range(100, 160))
    study = crosscheck("honey ~ forage", relation(data), unit="hive", period="season")
    whole = crosscheck("honey ~ forage", data, unit="hive", period="season")
    same_study(study, whole)
    assert study.panel.period_note == whole.panel.period_note


def test_periods_that_cannot_be_counted_or_repeat():
    data = make()
    dated = relation(data, "*, DATE '2000-01-01' + season::INTEGER AS day")
    study = crosscheck("honey ~ forage", dated, unit="hive", period="day")
    assert "whole numbers" in study.fit("first_difference").status
    again = pd.concat([data, data.iloc[[200]]])
    with pytest.raises(DataError, match="repeat a pair of unit and period"):
        crosscheck("honey ~ forage", relation(again), unit="hive", period="season")


def test_units_that_do_not_fit_are_closed_as_they_come():
    rng = np.random.default_rng(4)
    unit = np.repeat(np.arange(20_000), rng.integers(1, 6, 20_000))
    data = pd.DataFrame({"unit": unit, "x": rng.normal(size=len(unit)) + 0.01 * unit, "z": 1e4 * (unit % 5)})
    data["y"] = data["x"] + rng.normal(size=20_000)[unit] + rng.normal(size=len(unit))
    source = RelationSource(relation(data), rows=2048)
    query = build_query("y ~ x + z", source, unit="unit")
    whole = pushed.pushed_moments(query, 2**32)
    for limit in (1, 10**6):
        parts = pushed.pushed_moments(query, limit)
        assert parts.opened is None
        assert parts.units == 20_000
        ours, theirs = parts.moments, whole.moments
        np.testing.assert_array_equal(ours.sizes, theirs.sizes)
        np.testing.assert_array_equal(ours.counts, theirs.counts)
        np.testing.assert_array_equal(ours.scale, theirs.scale)
        np.testing.assert_allclose(ours.within.T @ ours.within, theirs.within.T @ theirs.within, rtol=1e-11)
        products = (np.swapaxes(m.between, 1, 2) @ m.between for m in (ours, theirs))
        # columns are standardised: products are of the order of the rows, sums of 20,000 terms off by that many eps
        np.testing.assert_allclose(*products, rtol=0, atol=20_000 * EPS * len(data))
    assert whole.opened is not None
    np.testing.assert_array_equal(close(whole.opened).between, whole.moments.between)


@pytest.mark.parametrize(
    ("change", "error", "message"),
    [
        (
            {"forage": "CASE WHEN hive = 2 THEN 'inf'::DOUBLE ELSE forage END"},
            DataError,
            "forage' is infinite in",
        ),
        ({"weight": "CASE WHEN hive = 2 THEN 0 ELSE weight END"}, DataError, "np.log.weight. is infinite"),
        ({"forage": "1e9 + 2e-7 * forage"}, DataError, "below what double precision carries"),
        ({"honey": "7.0"}, DataError, "has the one value 7"),
        ({"honey": "NULL::DOUBLE"}, DataError, "No row is left"),
        ({"hive": "1"}, DataError, "one unit"),
        ({"hive": "hive / 2"}, DataError, "fractions"),
        ({"honey": "region"}, DataError, "holds text"),
        ({"region": "'all'"}, None, ""),
    ],
)
def test_unusable_data_say_so(change, error, message):
    listed = ", ".join(f"{sql} AS {name}" for name, sql in change.items())
    rows = relation(make(), f"* REPLACE ({listed})")
    if error is None:
        study = crosscheck("honey ~ forage + region", rows, unit="hive")
        same_study(study, crosscheck("honey ~ forage + region", rows.df(), unit="hive"))
        assert any("one level" in note for note in study.panel.accounting.notes)
        return
    with pytest.raises(error, match=message):
        crosscheck("honey ~ forage + np.log(weight)", rows, unit="hive")


def test_unusable_options_say_so():
    rows = relation(make())
    with pytest.raises(FormulaError, match="'forrage'"):
        crosscheck("honey ~ forrage", rows, unit="hive")
    with pytest.raises(DataError, match="not a column"):
        crosscheck("honey ~ forage", rows, unit="hives")
    with pytest.raises(DataError, match="refused"):
        crosscheck("honey ~ forage", rows, unit="hive", incomplete_rows="refuse")
    with pytest.raises(DataError, match="have no rows"):
        crosscheck("honey ~ forage", rows.filter("false"), unit="hive")
    power = 2
    with pytest.raises(FormulaError, match="cannot be computed chunk by chunk"):
        crosscheck("honey ~ I(forage ** power)", rows, unit="hive")
    assert power


def test_a_stream_that_can_be_read_once_is_refused():
    table = pa.Table.from_pandas(make(), preserve_index=False)
    reader = pa.RecordBatchReader.from_batches(table.schema, table.to_batches())
    with pytest.raises(DataError, match="read several times"):
        crosscheck("honey ~ forage", duckdb.connect().from_arrow(reader), unit="hive")


def test_a_table_of_the_name_that_queries_use(tmp_path):
    connection = duckdb.connect(str(tmp_path / "hives.db"))
    table = pa.Table.from_pandas(make(), preserve_index=False)
    connection.register("given", table)
    connection.execute(f"CREATE TABLE {ROWS} AS SELECT * FROM given")
    connection.unregister("given")
    study = crosscheck(FORMULA, connection.sql(f"SELECT * FROM {ROWS}"), unit="hive")
    same_study(study, crosscheck(FORMULA, make(), unit="hive"))
    connection.close()


def test_a_table_that_changes_is_noticed():
    connection = duckdb.connect()
    table = pa.Table.from_pandas(make(), preserve_index=False)
    connection.register("given", table)
    connection.execute("CREATE TABLE hives AS SELECT * FROM given")
    study = crosscheck("honey ~ forage", connection.sql("SELECT * FROM hives"), unit="hive")
    connection.execute("DELETE FROM hives WHERE season = 2003")
    with pytest.raises(DataError, match="not what it was"):
        study.fit("reml", covariance="CR1")
