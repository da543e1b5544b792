"""Rows read in chunks from Parquet: against the time that reading alone takes, with the memory it takes at its peak."""

from __future__ import annotations

import multiprocessing
import resource
import sys
import tempfile
import time
from collections.abc import Callable
from dataclasses import dataclass
from functools import partial
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd

from benchmarks.arrays import CURVE_ROUTES
from benchmarks.measure import STATUS, text
from benchmarks.profiles import Profile
from benchmarks.results import Agreement, Ratio, Result, Table
from mixbridge.sources.chunk_options import ChunkOptions
from mixbridge.study import crosscheck

THREADS = 2
COVARIATES = 5
NAMES = ("y", *(f"x{j}" for j in range(COVARIATES)))
FORMULA = "y ~ " + " + ".join(NAMES[1:])
STEP = 2**20
MIB = 2**20


@dataclass(frozen=True, slots=True)
class Sizes:
    """What a profile reads.

    Attributes
    ----------
    rows : tuple of int
        Of files with rows in random order, growing.
    units : int
        In each of them.
    sorted_rows : int
        Of the files sorted by unit.
    sorted_units : tuple of int
    rounds : int
        Rounds in which reading alone and the cross-check take turns.
    """

    rows: tuple[int, int, int]
    units: int
    sorted_rows: int
    sorted_units: tuple[int, int]
    rounds: int


SIZES = {
    "tiny": Sizes((2_000, 4_000, 8_000), 100, 6_000, (100, 1_000), 1),
    "quick": Sizes((100_000, 1_000_000, 10_000_000), 100_000, 4_000_000, (20_000, 1_000_000), 3),
    "full": Sizes((1_000_000, 10_000_000, 100_000_000), 1_000_000, 50_000_000, (100_000, 10_000_000), 5),
}


@dataclass(frozen=True, slots=True)
class Reading:
    """What one process measured.

    Attributes
    ----------
    read, check : list of float
        Seconds on the clock of reading the columns alone, and of the cross-check, by round.
    parts : dict of str to float
        Seconds of the parts of the cross-check in one thread.
    peak : int
        Bytes that the process held at its peak, imports included.
    beta : ndarray
        Coefficients by REML.
    same : bool
        Whether one thread and two gave the same moments bit for bit.
    """

    read: list[float]
    check: list[float]
    parts: dict[str, float]
    peak: int
    beta: np.ndarray
    same: bool


def streaming(profile: Profile) -> Result:
    """Time the cross-check of rows in chunks, and measure its memory."""
    sizes = SIZES[profile.name]
    run = _here if profile.name == "tiny" else _in_a_process
    with tempfile.TemporaryDirectory(prefix="benchmark-") as folder:
        place = Path(folder)
        shuffled = {}
        for n in sizes.rows:
            write(place / "rows.parquet", n, sizes.units, ordered=False)
            shuffled[n] = run(place / "rows.parquet", sizes.rounds, _timed)
            if n == max(sizes.rows):
                peak = run(place / "rows.parquet", 1, _peak).peak
        ordered = {}
        for units in sizes.sorted_units:
            write(place / "rows.parquet", sizes.sorted_rows, units, ordered=True)
            ordered[units] = run(place / "rows.parquet", 1, partial(_peak, sorted_by_unit=True))
    return _result(sizes, shuffled, peak, ordered)


def write(path: Path, rows: int, units: int, *, ordered: bool) -> None:
    """Write rows as pyarrow does unless told otherwise, a million at a time, so that memory never holds them.

    In random order every row draws its unit; sorted by unit all units have about the same number of rows.
    """
    import pyarrow as pa  # noqa: PLC0415 (the package does not need it)
    import pyarrow.parquet as pq  # noqa: PLC0415

    rng = np.random.default_rng(20_241)
    effects = 0.7 * rng.standard_normal(units)
    schema = pa.schema([("unit", pa.int64()), *((name, pa.float64()) for name in NAMES)])
    with pq.ParquetWriter(path, schema) as writer:
        for start in range(0, rows, STEP):
            count = min(STEP, rows - start)
            unit = (
                np.arange(start, start + count) * units // rows if ordered else rng.integers(0, units, count)
            )
            x = rng.standard_normal((COVARIATES, count)) + 0.5 * effects[unit]
            y = x.sum(axis=0) + effects[unit] + rng.standard_normal(count)
            writer.write_table(pa.table([unit, y, *x], schema=schema))


def _in_a_process(path: Path, rounds: int, task: Callable[[Path, int], Reading]) -> Reading:
    """Measure in a process of its own, whose peak is then that of the task."""
    context = multiprocessing.get_context("spawn")
    receiver, sender = context.Pipe(duplex=False)
    process = context.Process(target=_sends, args=(sender, task, path, rounds))
    process.start()
    sender.close()
    try:
        found: Reading = receiver.recv()
    except EOFError:
        process.join()
        raise RuntimeError(f"the process that measures ended with status {process.exitcode}.") from None
    process.join()
    return found


def _here(path: Path, rounds: int, task: Callable[[Path, int], Reading]) -> Reading:
    return task(path, rounds)


def _sends(sender: Any, task: Callable[[Path, int], Reading], path: Path, rounds: int) -> None:
    sender.send(task(path, rounds))


def _timed(path: Path, rounds: int) -> Reading:
    """Let reading alone and the cross-check take turns."""
    _warm()
    read, check = [], []
    for _ in range(rounds):
        read.append(_seconds(lambda: read_only(path))[0])
        spent, study = _seconds(lambda: whole(path, ChunkOptions(workers=THREADS)))
        check.append(spent)
    parts, same = _parts(path, study.moments)
    return Reading(read, check, parts, 0, study.fit("reml").beta, same)


def _peak(path: Path, rounds: int, **options: Any) -> Reading:
    """Run the cross-check and nothing else."""
    check = []
    for _ in range(rounds):
        spent, study = _seconds(lambda: whole(path, ChunkOptions(workers=THREADS, **options)))
        check.append(spent)
    return Reading([], check, {}, _highest(), study.fit("reml").beta, True)


def _highest() -> int:
    """Return the bytes that this process held at its peak.

    The system's own account of a process begins with what its parent held when it was started; the status does not.
    """
    if STATUS.exists():
        line = next(line for line in STATUS.read_text().splitlines() if line.startswith("VmHWM:"))
        return int(line.split()[1]) * 1024
    return resource.getrusage(resource.RUSAGE_SELF).ru_maxrss * (1 if sys.platform == "darwin" else 1024)


def _warm() -> None:
    """Pay for imports before anything is timed."""
    rng = np.random.default_rng(1)
    frame = pd.DataFrame(rng.standard_normal((300, len(NAMES))), columns=list(NAMES))
    frame["unit"] = np.arange(300) % 30
    _ = crosscheck(FORMULA, lambda: [frame], unit="unit").ledger


def _seconds(task: Callable[[], Any]) -> tuple[float, Any]:
    start = time.perf_counter()
    found = task()
    return time.perf_counter() - start, found


def read_only(path: Path) -> int:
    """Read the same columns with pyarrow and the same number of threads; return the number of rows."""
    import pyarrow as pa  # noqa: PLC0415
    import pyarrow.dataset as ds  # noqa: PLC0415

    pa.set_cpu_count(THREADS)
    pa.set_io_thread_count(THREADS)
    batches = ds.dataset(path).to_batches(columns=["unit", *NAMES], use_threads=True)
    return sum(batch.num_rows for batch in batches)


def whole(path: Path, options: ChunkOptions) -> Any:
    """Cross-check the curve routes."""
    study = crosscheck(FORMULA, path, unit="unit", routes=CURVE_ROUTES, chunks=options)
    _ = study.ledger
    return study


def _parts(path: Path, moments: Any) -> tuple[dict[str, float], bool]:
    """Time the parts one after the other in one thread."""
    from mixbridge.panel.streaming import build_streaming_panel  # noqa: PLC0415

    alone = ChunkOptions(workers=1)
    spent, study = _seconds(lambda: crosscheck(FORMULA, path, unit="unit", chunks=alone))
    source = study.panel.rows_read.source
    wanted = ["unit", *NAMES]
    decoded = _seconds(lambda: sum(len(chunk.frame) for chunk in source.chunks(wanted, ["unit"])))[0]
    learned = _seconds(lambda: build_streaming_panel(FORMULA, path, unit="unit", options=alone))[0]
    fitted = _seconds(lambda: study.ledger)[0]
    parts = {
        "decoding Parquet": decoded,
        "checks, missing values, unit codes": learned - decoded,
        "laying out rows and adding them up by unit": spent - learned,
        "all routes after the moments": fitted,
    }
    same = all(
        np.array_equal(getattr(study.moments, name), getattr(moments, name))
        for name in ("within", "between", "shift", "scale")
    )
    return parts, same


def _result(sizes: Sizes, shuffled: dict[int, Reading], peak: int, ordered: dict[int, Reading]) -> Result:
    few, _, most = sizes.rows
    best = {n: min(found.check) for n, found in shuffled.items()}
    rows = []
    for n, found in shuffled.items():
        read = min(found.read)
        rows.append(
            (
                "reading the columns alone",
                f"{n:,}",
                f"{sizes.units:,}",
                text(read),
                _rate(n, read),
                "not measured",
            )
        )
        memory = f"{peak / MIB:,.0f} MiB" if n == most else "not measured"
        rows.append(("cross-check", f"{n:,}", f"{sizes.units:,}", text(best[n]), _rate(n, best[n]), memory))
    for units, found in ordered.items():
        spent = min(found.check)
        rows.append(
            (
                "cross-check, sorted by unit",
                f"{sizes.sorted_rows:,}",
                f"{units:,}",
                text(spent),
                _rate(sizes.sorted_rows, spent),
                f"{found.peak / MIB:,.0f} MiB",
            )
        )
    few_units, many_units = sizes.sorted_units
    small, large = (ordered[units].peak for units in sizes.sorted_units)
    growth = (best[most] / most) / (best[few] / few)
    parts = shuffled[most].parts
    total = sum(parts.values())
    shares = "; ".join(f"{name} {1e9 * spent / most:.0f} ns" for name, spent in parts.items())
    return Result(
        problem=f"Parquet as pyarrow writes it, {len(NAMES)} columns of doubles and an integer key; "
        f"{len(CURVE_ROUTES)} curve routes and their ledger",
        method=f"Time on the clock, best of {sizes.rounds} interleaved rounds, {THREADS} threads each for reading "
        "alone and for the cross-check; peak memory of a whole process, imports included",
        table=Table(
            ("task", "rows", "units", "best on the clock", "rows per second", "peak memory"), tuple(rows)
        ),
        ratios=(
            Ratio(
                f"cross-check / reading the columns alone, {most:,} rows",
                best[most] / min(shuffled[most].read),
                3.0,
            ),
            Ratio(f"peak memory, {sizes.units:,} units in random order", peak / MIB, 1536.0, unit="MiB"),
            Ratio(
                f"peak memory, sorted by unit, the larger at {few_units:,} and {many_units:,} units",
                max(small, large) / MIB,
                500.0,
                unit="MiB",
            ),
            Ratio(
                f"time per row, {most:,} rows / {few:,} rows",
                growth,
                1.1,
            ),
            Ratio("peak memory sorted by unit, many units / few units", large / small),
        ),
        agreements=(
            Agreement(
                "moments by one thread and by two",
                float(sum(not found.same for found in shuffled.values())),
                0.0,
                "the same bit for bit",
            ),
        ),
        notes=(
            f"Where the time goes, per row of {most:,} in one thread, {1e9 * total / most:.0f} ns in all: {shares}. "
            "Two threads share it: one decodes and lays out, the other adds up.",
            "Files that were just written are read from the memory of the system, not from a disk: a disk that is "
            "slower than decoding makes both tasks slower by the same time, and their ratio smaller.",
        ),
    )


def _rate(rows: int, seconds: float) -> str:
    return f"{rows / seconds / 1e6:.3g} million"
