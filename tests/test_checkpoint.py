"""Interruption leaves nothing half done; a checkpoint lets a run go on, bit for bit."""

import gc
import os
import tempfile
from pathlib import Path

import numpy as np
import pandas as pd
import pyarrow as pa
import pyarrow.parquet as pq
import pytest
from streams import identical, in_order, make, split

import mixbridge
from mixbridge.errors import DataError, OptionError
from mixbridge.panel import streaming_attempts
from mixbridge.sources import checkpoint
from mixbridge.sources.checkpoint import Checkpoint, restored_series, series_state
from mixbridge.sources.chunk_options import ChunkOptions

NUMBERS = "honey ~ forage + np.log(weight)"
LEVELS = "honey ~ forage * region + C(frames)"


class Stop(Exception):
    pass


@pytest.fixture(autouse=True)
def at_every_chunk(monkeypatch):
    """Save as often as asked, however long that takes."""
    monkeypatch.setattr(checkpoint, "SHARE", 0.0)


def stopping(after, kind=Stop):
    calls = []

    def progress(done, total):
        calls.append(done)
        if len(calls) == after:
            raise kind

    return progress


def written(folder, data=None, rows=41, name="rows.parquet"):
    data = make() if data is None else data
    pq.write_table(pa.Table.from_pandas(data, preserve_index=False), folder / name, row_group_size=rows)
    return folder / name


def study(path, formula=NUMBERS, period="season", **options):
    return mixbridge.crosscheck(
        formula, path, unit="hive", period=period, chunks=ChunkOptions(**{"rows": 17, **options})
    )


def interrupted(path, folder, after, formula=NUMBERS, **options):
    with pytest.raises(Stop):
        study(path, formula, checkpoint=folder, checkpoint_seconds=0.0, progress=stopping(after), **options)


@pytest.mark.parametrize("formula", [NUMBERS, LEVELS])
@pytest.mark.parametrize("records", [True, False])
@pytest.mark.parametrize("workers", [1, 2])
def test_a_resumed_run_is_the_same_bit_for_bit(formula, records, workers, tmp_path):
    data = make() if records else in_order(make())
    path, folder = written(tmp_path, data), tmp_path / "states"
    whole = study(path, formula, unit_records=records)
    assert whole.panel.passes[0].rows == 300
    chunks = 22  # of at most 17 rows, in row groups of 41
    for after in (2, 9, chunks - 1, *([chunks + 2, chunks + 14] if formula == LEVELS else [])):
        interrupted(path, folder, after, formula, unit_records=records, workers=workers)
        shown = []
        got = study(
            path,
            formula,
            unit_records=records,
            workers=workers,
            checkpoint=folder,
            progress=lambda *rows: shown.append(rows),  # noqa: B023
        )
        assert identical(got.moments, whole.moments)
        assert got.panel.accounting == whole.panel.accounting
        assert got.panel.order.jumps == whole.panel.order.jumps
        assert got.panel.period_note == whole.panel.period_note
        if records:
            assert got.panel.unit_keys.equals(whole.panel.unit_keys)
            pd.testing.assert_frame_equal(got.ledger, whole.ledger, check_exact=True)
        assert list(folder.iterdir()) == []
        resumed = formula == NUMBERS or after > chunks
        if resumed:  # rows read before are not read again
            begun = [
                done for (done, _), before in zip(shown, [(301, 0), *shown], strict=False) if done < before[0]
            ]
            assert begun[-1] > 17
        assert shown[-1] == (300, 300)


def test_rows_of_a_text_file_go_on_too(tmp_path):
    path, folder = tmp_path / "rows.csv", tmp_path / "states"
    make().assign(hive=lambda frame: frame["hive"].map("hive {}".format)).to_csv(path, index=False)
    options = {"rows": 17}
    whole = mixbridge.crosscheck(NUMBERS, path, unit="hive", period="season", chunks=ChunkOptions(**options))
    with pytest.raises(Stop):
        mixbridge.crosscheck(
            NUMBERS,
            path,
            unit="hive",
            period="season",
            chunks=ChunkOptions(**options, checkpoint=folder, checkpoint_seconds=0, progress=stopping(9)),
        )
    assert [file.name for file in folder.iterdir()] == ["mixbridge-first-units.npz"]
    got = mixbridge.crosscheck(
        NUMBERS, path, unit="hive", period="season", chunks=ChunkOptions(**options, checkpoint=folder)
    )
    assert identical(got.moments, whole.moments)
    assert got.panel.unit_keys.equals(whole.panel.unit_keys)


def test_a_run_that_gave_up_keeping_units_goes_on(tmp_path, monkeypatch):
    monkeypatch.setattr(streaming_attempts, "RECORDS", 8 * streaming_attempts.bytes_per_unit(3))
    path, folder = written(tmp_path, in_order(make())), tmp_path / "states"
    whole = study(path)
    assert whole.unit_moments is None
    interrupted(path, folder, 20)
    assert (folder / "mixbridge-first-sorted.npz").exists()
    assert identical(study(path, checkpoint=folder).moments, whole.moments)


@pytest.mark.parametrize(
    "change",
    [
        lambda path: {"formula": "honey ~ forage"},
        lambda path: {"rows": 18},
        lambda path: {"period": None},
        lambda path: {"sorted_by_unit": False},
        lambda path: os.utime(path, (1, 1)) or {},
        lambda path: written(path.parent, make().assign(honey=1.5 * make()["honey"])) and {},
    ],
)
def test_a_stale_or_foreign_checkpoint_is_refused(change, tmp_path):
    path, folder = written(tmp_path), tmp_path / "states"
    interrupted(path, folder, 5)
    options = change(path)
    with pytest.raises(DataError, match="saved for other data"):
        study(path, checkpoint=folder, **options)


def test_a_damaged_checkpoint_is_refused(tmp_path):
    path, folder = written(tmp_path), tmp_path / "states"
    interrupted(path, folder, 5)
    [file] = folder.iterdir()
    content = file.read_bytes()
    place = content.rindex(np.float64(1.0).tobytes())
    for broken in (content[:-200], content[:place] + np.float64(2.0).tobytes() + content[place + 8 :], b"no"):
        file.write_bytes(broken)
        with pytest.raises(DataError, match="is damaged"):
            study(path, checkpoint=folder)


def test_what_has_no_fingerprint_is_refused(tmp_path):
    with pytest.raises(OptionError, match="takes data in files"):
        study(split(make(), [100]), checkpoint=tmp_path)
    chosen = [3, 2, 1]
    options = ChunkOptions(checkpoint=tmp_path / "states")
    with pytest.raises(OptionError, match="whether 'chosen' in"):
        mixbridge.crosscheck(
            "honey ~ C(frames, levels=chosen)", written(tmp_path), unit="hive", chunks=options
        )
    assert chosen == [3, 2, 1]
    data = make().assign(hive=lambda frame: frame["hive"].astype(str).astype("category"))
    path = written(tmp_path, data, name="categories.parquet")
    with pytest.raises(OptionError, match="does not hold the categories"):
        study(path, checkpoint=tmp_path / "states")


def test_a_state_is_whole_or_not_there(tmp_path, monkeypatch):
    saver = Checkpoint(tmp_path, {"a": 1}, 0.0)
    state = {"rows": 3, "inner": {"values": np.arange(3.0), "none": None}, "pair": [1, "x"]}
    saver.save("one", 7, state)
    chunks, found = saver.load("one")
    assert chunks == 7
    assert found["inner"]["values"].tolist() == [0, 1, 2]
    assert (found["rows"], found["inner"]["none"], found["pair"]) == (3, None, [1, "x"])

    def broken(*_, **__):
        raise KeyboardInterrupt

    monkeypatch.setattr(np, "savez", broken)
    with pytest.raises(KeyboardInterrupt):
        saver.save("one", 8, state)
    assert [file.name for file in tmp_path.iterdir()] == ["mixbridge-one.npz"]
    assert saver.load("one")[0] == 7
    assert saver.load("other") is None


def test_saving_takes_a_small_share_of_the_time(tmp_path, monkeypatch):
    monkeypatch.setattr(checkpoint, "SHARE", 20.0)
    now = [0.0]
    saver = Checkpoint(tmp_path, {}, 30.0, clock=lambda: now[0])
    assert not saver.due()
    now[0] = 30.0
    assert saver.due()
    real = np.savez

    def slow(*given, **named):
        now[0] += 10.0
        real(*given, **named)

    monkeypatch.setattr(np, "savez", slow)
    saver.save("one", 1, {"values": np.zeros(1)})
    now[0] += 199.0
    assert not saver.due()
    now[0] += 1.0
    assert saver.due()


@pytest.mark.parametrize(
    "values",
    [
        pd.Series([1, 5, -(2**63)]),
        pd.Series(["a", "ä\0", ""], dtype=object),
        pd.Series(["a", "b"], dtype="str"),
        pd.Series([0.1, -np.inf]),
        pd.Series([True, False]),
        pd.Series(pd.to_datetime(["2001-01-01 00:00", "2002-05-05 10:00"])),
    ],
)
def test_distinct_values_survive(values):
    got = restored_series(series_state(values))
    pd.testing.assert_series_equal(got, values, check_exact=True)


def test_values_that_cannot_be_saved_are_told():
    with pytest.raises(OptionError, match="numbers of 64 bits"):
        series_state(pd.Series([10**30, 1], dtype=object))


def files_of_ours():
    return set(Path(tempfile.gettempdir()).glob("mixbridge-*"))


@pytest.mark.parametrize("after", [1, 4, 30])
@pytest.mark.parametrize("spill", [False, True])
def test_an_interrupted_run_leaves_no_files(after, spill, tmp_path, monkeypatch):
    monkeypatch.setattr(tempfile, "tempdir", str(tmp_path))
    data = make()
    with pytest.raises(KeyboardInterrupt):
        mixbridge.crosscheck(
            LEVELS,
            split(data, range(20, 300, 20))(),
            unit="hive",
            period="season",
            chunks=ChunkOptions(rows=17, spill=spill, progress=stopping(after, KeyboardInterrupt)),
        )
    assert files_of_ours() == set()


def test_files_live_as_long_as_the_study(tmp_path, monkeypatch):
    monkeypatch.setattr(tempfile, "tempdir", str(tmp_path))
    got = mixbridge.crosscheck(
        NUMBERS,
        split(make(), [100])(),
        unit="hive",
        period="season",
        chunks=ChunkOptions(spill=True),
    )
    assert len(files_of_ours()) == 1  # the sorted rows; those of the stream are gone
    assert got.fit("first_difference").status == "fitted"
    assert got.fit("reml", covariance="CR1").estimated
    del got
    gc.collect()
    assert files_of_ours() == set()
