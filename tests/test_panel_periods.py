"""How periods are placed on an equally spaced scale."""

import datetime
from decimal import Decimal

import numpy as np
import pandas as pd
import pytest

from mixbridge.errors import DataError
from mixbridge.panel import build_panel


def ordinals(periods):
    n = len(periods)
    data = pd.DataFrame({"g": np.arange(n) % 2, "t": periods, "y": np.arange(n) % 3.0})
    panel = build_panel("y ~ 1", data, unit="g", period="t")
    return panel.period_ordinals, panel.period_note


@pytest.mark.parametrize(
    "periods",
    [
        [2001, 2003, 2002],
        np.array([2001, 2003, 2002], dtype="uint16"),
        [2001.0, 2003.0, 2002.0],
        pd.array([2001, 2003, 2002], dtype="Int64"),
        pd.Series([2001, 2003, 2002], dtype=object),
        pd.array([2001, 2003, 2002], dtype="int64[pyarrow]"),
    ],
)
def test_integers_are_taken_as_they_are(periods):
    positions, note = ordinals(periods)
    assert positions.dtype == np.int64
    assert positions.tolist() == [2001, 2003, 2002]
    assert "as they are" in note


@pytest.mark.parametrize(
    ("dates", "step", "gaps"),
    [
        (["2001-01-01", "2002-01-01", "2003-01-01", "2005-01-01"], "year", [1, 1, 2]),
        (["2001-12-31", "2002-12-31", "2003-12-31"], "year", [1, 1]),
        (["2001-03-05", "2002-04-11", "2003-02-20"], "year", [1, 1]),
        (["2001-01-01", "2003-01-01", "2005-01-01"], "year", [2, 2]),
        (["2001-01-01", "2001-04-01", "2001-07-01", "2001-10-01", "2002-01-01"], "quarter", [1, 1, 1, 1]),
        (["2001-11-30", "2001-12-31", "2002-01-31", "2002-02-28", "2002-04-30"], "month", [1, 1, 1, 2]),
        (["2001-12-24", "2001-12-31", "2002-01-07", "2002-01-21"], "week", [1, 1, 2]),
        (["2001-12-30", "2001-12-31", "2002-01-01", "2002-01-04"], "day", [1, 1, 3]),
    ],
)
def test_dates_are_counted_by_the_calendar_step_they_keep(dates, step, gaps):
    for periods in (
        pd.to_datetime(dates),
        pd.to_datetime(dates).tz_localize("America/Lima"),
        [datetime.date.fromisoformat(date) for date in dates],
    ):
        positions, note = ordinals(periods)
        assert np.diff(positions).tolist() == gaps
        assert f"by {step}" in note


def test_dates_in_any_order():
    positions, _ = ordinals(pd.to_datetime(["2003-01-01", "2001-01-01", "2002-01-01"]))
    assert positions.tolist() == [2003, 2001, 2002]


def test_times_within_a_day():
    positions, note = ordinals(pd.to_datetime(["2001-01-01 00:00", "2001-01-01 06:00", "2001-01-01 18:00"]))
    assert np.diff(positions).tolist() == [1, 2]
    assert "0 days 06:00:00" in note
    positions, note = ordinals(pd.to_datetime(["2001-01-01 00:00", "2001-01-01 06:00", "2001-01-01 17:00"]))
    assert positions is None
    assert "not multiples" in note


def test_calendar_periods():
    positions, note = ordinals(pd.PeriodIndex(["2001-11", "2002-01", "2001-12"], freq="M"))
    assert (positions - positions.min()).tolist() == [0, 2, 1]
    assert "frequency M" in note


def test_ordered_categories_are_one_step_apart_unused_levels_included():
    levels = ["spring", "summer", "autumn", "winter"]
    positions, note = ordinals(pd.Categorical(["winter", "spring", "summer"], levels, ordered=True))
    assert positions.tolist() == [3, 0, 1]
    assert "ordered categories" in note


@pytest.mark.parametrize(
    "periods",
    [["spring", "summer", "autumn"], pd.Categorical(["a", "b", "c"]), [1, "a", 2], [(1, 2), (1, 3), (2, 1)]],
)
def test_no_order_is_said_and_is_no_error(periods):
    positions, note = ordinals(periods)
    assert positions is None
    assert "no order" in note


@pytest.mark.parametrize(
    ("periods", "gaps"),
    [
        ([2000.0, 2000.25, 2000.5, 2001.25], [1, 1, 3]),
        ([0.1, 0.2, 0.3, 0.5], [1, 1, 2]),
        ([Decimal("0.1"), Decimal("0.2"), Decimal("0.4")], [1, 2]),
    ],
)
def test_fractions_in_equal_steps(periods, gaps):
    positions, note = ordinals(periods)
    assert np.diff(positions).tolist() == gaps
    assert "in steps of" in note


def test_fractions_without_a_common_step():
    positions, note = ordinals([0.0, 1.0, 2.5])
    assert positions is None
    assert "not multiples" in note


def test_year_and_month_in_one_integer_is_pointed_out():
    positions, note = ordinals([200111, 200112, 200201])
    assert positions.tolist() == [200111, 200112, 200201]
    assert "December to January" in note


def test_integers_too_large_for_steps():
    positions, note = ordinals(np.array([2**63, 2**63 + 1, 2**63 + 2], dtype="uint64"))
    assert positions is None
    assert "subtract a base" in note


def test_truth_values_single_periods_and_spans():
    assert ordinals([False, True])[0].tolist() == [0, 1]
    assert ordinals(pd.to_datetime(["2001-01-01", "2001-01-01"]))[0].tolist() == [11323, 11323]
    assert ordinals([0.5, 0.5])[0].tolist() == [0, 0]
    assert (
        np.diff(ordinals(pd.to_timedelta([1, 2, 4], unit="h"))[0]).tolist()[1]
        == 2 * np.diff(ordinals(pd.to_timedelta([1, 2, 4], unit="h"))[0])[0]
    )


def test_calendar_periods_and_floats_kept_as_objects():
    periods = pd.Series(
        [pd.Period("2001-11", "M"), pd.Period("2002-01", "M"), pd.Period("2001-12", "M")], dtype=object
    )
    assert (np.array(ordinals(periods)[0]) - ordinals(periods)[0].min()).tolist() == [0, 2, 1]
    assert ordinals(pd.Series([1.0, 3.0, 2], dtype=object))[0].tolist() == [1, 3, 2]


def test_infinite_periods():
    with pytest.raises(DataError, match="infinite"):
        ordinals([0.5, np.inf, 1.0])


def test_missing_periods_leave_integers_integers():
    data = pd.DataFrame({"g": [1, 1, 2, 2], "t": [1.0, 2.0, np.nan, 2.0], "y": [1.0, 2.0, 3.0, 5.0]})
    panel = build_panel("y ~ 1", data, unit="g", period="t")
    assert panel.period_ordinals.tolist() == [1, 2, 2]
    assert panel.accounting.dropped == (("missing period", "t", 1),)


def test_without_a_period_there_is_no_note():
    data = pd.DataFrame({"g": [1, 1, 2, 2], "y": [1.0, 2.0, 3.0, 5.0]})
    panel = build_panel("y ~ 1", data, unit="g")
    assert (panel.period_name, panel.period_ordinals, panel.period_note) == (None, None, None)
