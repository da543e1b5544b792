"""Moments as files: exact, and refused where they are not what was written."""

import json
import re
import sys
from dataclasses import replace
from datetime import date, timedelta
from pathlib import Path

import numpy as np
import pandas as pd
import pytest
from moment_records import records_of, rows_of

import mixbridge
from mixbridge.moments import OpenMoments, closed_file, files
from mixbridge.moments.products import UnitProducts


def numbered(make):
    return lambda n: pd.Index([make(j) for j in range(n)], dtype=object, tupleize_cols=False)


KEYS = {
    "range": lambda n: pd.RangeIndex(7, 7 + 3 * n, 3, name="apiary"),
    "integers": lambda n: pd.Index(np.arange(n, dtype=np.int16)[::-1], name="apiary"),
    "wide integers": lambda n: pd.Index(np.arange(n, dtype=np.int64) + 2**62),
    "unsigned": lambda n: pd.Index(np.arange(n, dtype=np.uint64) + np.uint64(2**63)),
    "integers of any size": numbered(lambda j: 2**80 + j),
    "floats": lambda n: pd.Index(np.arange(n) / 7),
    "text": lambda n: pd.Index([f"unit <{j}> \u05d0\U0001f41d\n\x00" for j in range(n)], name="\u00e9"),
    "text as objects": numbered(lambda j: "" if not j else f"\u05d0{j}"),
    "halves of a pair": numbered(lambda j: f"\ud83d{j}"),
    "numbers and text": numbered(lambda j: j if j % 2 else f"{j}a"),
    "calendar dates": numbered(lambda j: date(1899, 12, 1 + j % 28) + timedelta(days=400 * j)),
    "times": lambda n: pd.date_range("1677-09-22 01:02:03.000000001", periods=n, freq="3h"),
    "times in days": lambda n: pd.DatetimeIndex(np.datetime64("0001-01-01", "s") + np.arange(n)),
    "times in a zone": lambda n: pd.date_range(
        "2024-10-27", periods=n, freq="h", tz="Europe/Berlin", unit="us"
    ),
    "times off UTC": lambda n: pd.date_range("2024-10-27", periods=n, tz="UTC+05:30"),
    "durations": lambda n: pd.timedelta_range("1 day", periods=n, freq="1h"),
    "months": lambda n: pd.period_range("1999-12", periods=n, freq="M"),
}


@pytest.mark.parametrize("kind", list(KEYS))
def test_all_three_come_back_as_they_were(tmp_path, kind):
    x, y, codes = rows_of()
    opened, moments, products = records_of(x, y, codes, KEYS[kind](40))
    for number, (record, cls) in enumerate(
        [(opened, OpenMoments), (moments, mixbridge.Moments), (products, UnitProducts)]
    ):
        path = tmp_path / f"record{number}"
        for coded in (record, replace(record, coding="0123456789abcdef")):
            coded.save(path)
            same_record(coded, cls.load(path))
    assert len(list(tmp_path.iterdir())) == 3


def same_record(one, two):
    for name in one.__slots__:
        a, b = getattr(one, name), getattr(two, name)
        if isinstance(a, np.ndarray):
            assert a.dtype == b.dtype, name
            assert a.shape == b.shape, name
            assert a.tobytes() == b.tobytes(), name
        elif isinstance(a, pd.Index):
            assert type(a) is type(b)
            assert a.dtype == b.dtype
            assert a.name == b.name
            assert a.tolist() == b.tolist()
            assert list(map(type, a)) == list(map(type, b))
        else:
            assert a == b, name


@pytest.mark.parametrize(
    ("keys", "dtype"),
    [
        (pd.CategoricalIndex([f"{j:02}" for j in range(40)]), None),
        (pd.CategoricalIndex(range(40)), "int64"),
        (pd.Index(range(40), dtype="Int64"), "int64"),
        (pd.Index(range(40), dtype="uint8[pyarrow]"), "uint8"),
        (pd.Index([np.int8(j) for j in range(40)], dtype=object), "object"),
        (pd.Index([f"{j}" for j in range(40)], dtype="string[pyarrow]"), None),
    ],
)
def test_keys_of_types_that_hold_the_same_values_keep_the_values(tmp_path, keys, dtype):
    opened = replace(records_of(*rows_of())[0], keys=keys)
    opened.save(tmp_path / "a")
    again = OpenMoments.load(tmp_path / "a").keys
    assert again.tolist() == keys.tolist()
    assert dtype is None or str(again.dtype) == dtype
    assert again.get_indexer(keys).tolist() == list(range(40))


@pytest.mark.parametrize("make", [lambda j: (j, "a"), pd.Timestamp, lambda j: frozenset([j])])
def test_keys_that_are_neither_numbers_nor_text_nor_dates_are_refused(tmp_path, make):
    opened = replace(records_of(*rows_of())[0], keys=numbered(make)(40))
    with pytest.raises(mixbridge.DataError, match="only units keyed by"):
        opened.save(tmp_path / "a")
    assert not list(tmp_path.iterdir())


def test_open_moments_with_a_factor_come_back(tmp_path):
    opened, _, _ = records_of(*rows_of())
    wide = opened.with_factor(np.linalg.cholesky(opened.within + np.eye(4)).T)
    wide.save(tmp_path / "a")
    np.testing.assert_array_equal(OpenMoments.load(tmp_path / "a").factor, wide.factor)


@pytest.mark.parametrize("cls", [OpenMoments, mixbridge.Moments, UnitProducts])
def test_damaged_changed_foreign_and_missing_files_are_refused(tmp_path, cls):
    opened, moments, products = records_of(*rows_of())
    record = {OpenMoments: opened, mixbridge.Moments: moments, UnitProducts: products}[cls]
    path = tmp_path / "file"
    with pytest.raises(mixbridge.DataError, match="cannot be read"):
        cls.load(path)
    record.save(path)
    whole = path.read_bytes()
    path.write_bytes(whole[: len(whole) // 2])
    with pytest.raises(mixbridge.DataError, match="damaged"):
        cls.load(path)
    path.write_text("hello", encoding="utf-8")
    with pytest.raises(mixbridge.DataError, match=r"damaged|not a"):
        cls.load(path)
    other = products if cls is not UnitProducts else opened
    other.save(path)
    with pytest.raises(mixbridge.DataError, match=r"not |damaged"):
        cls.load(path)


def test_one_changed_number_is_found(tmp_path):
    opened, moments, _ = records_of(*rows_of())
    path = tmp_path / "closed.json"
    moments.save(path)
    body = json.loads(path.read_text())
    body["shift"][0] += 1e-9
    path.write_text(json.dumps(body))
    with pytest.raises(mixbridge.DataError, match="checksum"):
        mixbridge.Moments.load(path)
    path = tmp_path / "open"
    opened.save(path)
    data = bytearray(path.read_bytes())
    at = data.find(opened.means.tobytes()[:64])
    data[at + 3] ^= 1
    path.write_bytes(bytes(data))
    with pytest.raises(mixbridge.DataError, match=r"checksum|damaged"):
        OpenMoments.load(path)


@pytest.mark.parametrize("cls", [OpenMoments, mixbridge.Moments, UnitProducts])
def test_any_changed_byte_is_found_or_means_nothing(tmp_path, cls):
    """A byte may hold a time of the zip or a blank of a head; whatever holds a number, a name or a key is found."""
    record = records_of(*rows_of(units=12), KEYS["text"](12))[
        [OpenMoments, mixbridge.Moments, UnitProducts].index(cls)
    ]
    path = tmp_path / "file"
    record.save(path)
    whole = path.read_bytes()
    rng = np.random.default_rng(0)
    refused: list[str] = []
    for at in rng.permutation(len(whole))[:400].tolist():
        path.write_bytes(whole[:at] + bytes([whole[at] ^ int(rng.integers(1, 256))]) + whole[at + 1 :])
        try:
            found = cls.load(path)
        except mixbridge.DataError as error:
            refused.append(str(error))
        else:
            same_record(record, found)
    assert len(refused) > 320
    assert all(str(path) in reason for reason in refused)
    for length in rng.integers(0, len(whole), 40).tolist():
        path.write_bytes(whole[:length])
        with pytest.raises(mixbridge.DataError, match=re.escape(str(path))):
            cls.load(path)


def rewritten(path, change):
    """Change what a file holds and give it the checksum of the changed content."""
    with np.load(path) as file:
        arrays = dict(file)
    meta = json.loads(str(arrays.pop("meta")))
    change(meta, arrays)
    del meta["checksum"]
    meta["checksum"] = files._checksum(meta, arrays)
    with path.open("wb") as file:
        np.savez(file, meta=np.array(json.dumps(meta)), **arrays)


@pytest.mark.parametrize(
    ("change", "reason"),
    [
        (lambda meta, _: meta.update(version=2), "version 2"),
        (lambda meta, _: meta.update(format="other"), "holds 'other'"),
        (lambda _, arrays: arrays.update(keys=arrays["keys"][:2]), "keys of units"),
        (lambda meta, _: meta["keys"].update(kind="time", dtype="nothing"), "keys of units"),
        (lambda _, arrays: arrays.update(keys=np.array([0, 39, 1])), "one key for each unit"),
        (lambda _, arrays: arrays.pop("keys"), "checksum"),
        (lambda _, arrays: arrays.pop("means"), "checksum"),
    ],
)
def test_a_file_that_is_whole_but_not_what_it_should_be(tmp_path, change, reason):
    path = tmp_path / "file"
    for record in records_of(*rows_of())[::2]:
        record.save(path)
        rewritten(path, change)
        with pytest.raises(mixbridge.DataError, match=reason) as caught:
            type(record).load(path)
        assert str(path) in str(caught.value)


@pytest.mark.parametrize(
    ("change", "reason"),
    [
        ({"version": 2}, "of version 1: its version is 2"),
        ({"format": "other"}, "its format is 'other'"),
        ({"scale": [1.0]}, "do not fit together"),
        ({"within": [[1.0, 0.0]]}, "do not fit together"),
        ({"sizes": "many"}, "not a whole record"),
        ({"design": ["x"]}, "do not fit together"),
    ],
)
def test_a_record_that_is_whole_but_not_what_it_should_be(tmp_path, change, reason):
    body = {
        key: value for key, value in records_of(*rows_of())[1].to_record().items() if key != "checksum"
    } | change
    path = tmp_path / "file"
    path.write_text(json.dumps({**body, "checksum": closed_file._checksum(body)}), encoding="utf-8")
    with pytest.raises(mixbridge.DataError, match=reason) as caught:
        mixbridge.Moments.load(path)
    assert str(path) in str(caught.value)


def test_a_file_is_replaced_whole_or_not_at_all(tmp_path, monkeypatch):
    opened, moments, _ = records_of(*rows_of())
    for record in (opened, moments):
        path = tmp_path / "a"
        record.save(path)
        before = path.read_bytes()

        def half(self, *_, **__):
            raise OSError(28, "No space left on device")

        with monkeypatch.context() as patch:
            patch.setattr(Path, "replace", half)
            with pytest.raises(mixbridge.DataError, match="cannot be written: No space left"):
                record.save(path)
        assert path.read_bytes() == before
        assert [file.name for file in tmp_path.iterdir()] == ["a"]


@pytest.mark.parametrize("kind", ["range", "wide integers", "text", "times in a zone"])
def test_files_of_many_units_take_no_loop_over_units(tmp_path, kind):
    """Python functions called while 20,000 units are written, read and merged are few."""
    units = 20_000
    opened = OpenMoments(
        ("c", "x", "y"),
        KEYS[kind](units),
        np.full(units, 3),
        np.zeros(3),
        np.random.default_rng(0).normal(size=(units, 3)),
        np.eye(3),
        np.ones(3),
    )
    calls = 0

    def count(_frame, event, _argument):
        nonlocal calls
        calls += event == "call"

    sys.setprofile(count)
    try:
        opened.save(tmp_path / "a")
        again = OpenMoments.load(tmp_path / "a")
        twice = opened + again
    finally:
        sys.setprofile(None)
    assert twice.counts.tolist() == [6] * units
    assert calls < 5_000


def test_it_cannot_be_written_where_there_is_no_folder(tmp_path):
    opened, _, _ = records_of(*rows_of())
    with pytest.raises(mixbridge.DataError, match="cannot be written"):
        opened.save(tmp_path / "nowhere" / "a")
