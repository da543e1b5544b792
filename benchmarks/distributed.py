"""Rows on several workers and in a database, against the same files streamed by one process."""

from __future__ import annotations

import tempfile
import time
from collections.abc import Callable, Iterator, Mapping
from contextlib import contextmanager
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np

from benchmarks.measure import text
from benchmarks.profiles import Profile
from benchmarks.results import Agreement, Ratio, Result, Table
from mixbridge.moments.distributed import BUCKET_BYTES, MOST_BUCKETS
from mixbridge.study import crosscheck

COVARIATES = 5
FORMULA = "y ~ " + " + ".join(f"x{j}" for j in range(COVARIATES))
WIDTH = COVARIATES + 2  # what the moments hold of a unit: its means, the constant and the outcome among them
ROWS_PER_UNIT = 100
FILES = 8
ROWS = {"tiny": 8_000, "quick": 1_000_000, "full": 10_000_000}
WORKERS = 2


@dataclass(frozen=True, slots=True)
class Projection:
    """What a run on several machines would take, on paper.

    Attributes
    ----------
    machines, workers : int
        Machines, and worker processes on all of them.
    reading, moving : float
        Seconds in which workers read rows and take moments, and in which units travel to their bucket.
    scheduling : float
        Seconds that the scheduler takes for its tasks.
    moved : float
        Bytes that travel between machines.
    tasks : float
    """

    machines: int
    workers: int
    reading: float
    moving: float
    scheduling: float
    moved: float
    tasks: float

    @property
    def seconds(self) -> float:
        return self.reading + self.moving + self.scheduling


def project(
    rows: float,
    units: float,
    machines: int,
    *,
    rate: float,
    per_task: float,
    workers_each: int = 8,
    rows_per_part: float = 5e6,
    network: float = 1.25e9,
) -> Projection:
    """Project a run on k machines from a measured rate.

    Rows lie in random order, so a part of m rows holds ``N (1 - exp(-m / N))`` of N units on average (Poisson), each of
    which travels as a key, a count and the means. A share ``1 - 1/k`` goes to another machine. Each part makes a task
    for each bucket and a few of its own, and pieces are merged eight at a time. Reading, moving and scheduling are
    counted one after the other.

    Parameters
    ----------
    rows, units : float
    machines : int
    rate : float
        Rows per second of one worker, measured, both passes and all merging included.
    per_task : float
        Seconds of the scheduler for a task, measured.
    workers_each : int
        Worker processes of a machine.
    rows_per_part : float
    network : float
        Bytes per second into one machine.
    """
    workers = machines * workers_each
    parts = rows / rows_per_part
    per_part = units * -np.expm1(-rows_per_part / units)
    bytes_of_part = per_part * 8 * (WIDTH + 2)
    moved = parts * bytes_of_part * (1 - 1 / machines)
    buckets = min(parts * bytes_of_part / BUCKET_BYTES, MOST_BUCKETS)
    tasks = parts * (4 + buckets * 8 / 7)
    reading, moving = rows / (rate * workers), moved / (machines * network)
    return Projection(machines, workers, reading, moving, tasks * per_task, moved, tasks)


def distributed(profile: Profile) -> Result:
    """Time the same cross-check streamed, on two workers, and in a database."""
    rows = ROWS[profile.name]
    rounds = {"tiny": 1, "quick": 3, "full": 3}[profile.name]
    with tempfile.TemporaryDirectory() as folder:
        units = _write(Path(folder), rows)
        with _tasks(Path(folder), processes=profile.name != "tiny") as (tasks, processor):
            spent, found = _interleaved(tasks, rounds, processor)
            per_task = _scheduling({"tiny": 50}.get(profile.name, 4_000))
    clock = {name: min(clock for clock, _ in times) for name, times in spent.items()}
    busy = {name: min(busy for _, busy in times) for name, times in spent.items()}
    streamed, on_workers, *in_database = tasks
    ratios = [
        Ratio(f"{on_workers} / {streamed}", clock[on_workers] / clock[streamed], 1.5),
        Ratio("the same, processor time of all processes", busy[on_workers] / busy[streamed]),
    ]
    ratios += [Ratio(f"{name} / {streamed}", clock[name] / clock[streamed]) for name in in_database]
    largest = np.abs(found[streamed]).max()
    return Result(
        problem=f"{rows:,} rows × {COVARIATES} covariates in {FILES} Parquet files, {units:,} units of about "
        f"{ROWS_PER_UNIT} rows, rows in random order; Dask reads them with filesystem='arrow'",
        method=f"time on the clock, best of {rounds} interleaved rounds, since workers and databases use processors of "
        "their own: each task may use two; beside it the least processor time of all processes together, which other "
        "programs on the machine disturb less",
        table=Table(
            ("task", "best on the clock", "processors", "rows per second"),
            tuple(
                (name, text(clock[name]), text(busy[name]), f"{rows / clock[name]:,.0f}") for name in tasks
            ),
        ),
        ratios=tuple(ratios),
        agreements=tuple(
            Agreement(
                f"coefficients by REML, {name} against {streamed}",
                float(np.abs(found[name] - found[streamed]).max() / largest),
                1e-10,
                "the search for the ratio stops at 1e-12",
            )
            for name in (on_workers, *in_database)
        ),
        notes=(projected(rows / clock[on_workers] / WORKERS, per_task),),
    )


def projected(rate: float, per_task: float) -> str:
    """Return the projection to ten thousand million rows as text."""
    rows, units = 1e10, 1e8
    lines = []
    for machines in (4, 16, 64):
        p = project(rows, units, machines, rate=rate, per_task=per_task)
        lines.append(
            f"{machines} machines, {p.workers} workers: {p.seconds / 60:.1f} minutes ({p.reading / 60:.1f} reading and "
            f"taking moments, {p.moving / 60:.1f} moving {p.moved / 1e9:,.0f} GB between machines, "
            f"{p.scheduling / 60:.1f} scheduling {p.tasks:,.0f} tasks)"
        )
    return (
        f"On paper, 10^10 rows of 10^8 units in random order, {rate:,.0f} rows per second of one worker and "
        f"{1e3 * per_task:.2g} ms of the scheduler for a task, both as measured here, 8 workers and a network of "
        "10 Gbit/s per machine, parts of 5 million rows; slower storage is not counted: "
        + "; ".join(lines)
        + ". Rows that lie together by unit move a hundredth of that."
    )


def _scheduling(count: int) -> float:
    """Return the seconds that the scheduler in force takes for a task that does nothing."""
    import dask  # noqa: PLC0415

    tasks = [dask.delayed(bool, pure=False)(number) for number in range(count)]
    start = time.perf_counter()
    dask.compute(*tasks)
    return (time.perf_counter() - start) / count


def _write(folder: Path, rows: int) -> int:
    """Write the files, one at a time, and return the number of units."""
    import pyarrow as pa  # noqa: PLC0415 (the package does not need it)
    import pyarrow.parquet as pq  # noqa: PLC0415

    rng = np.random.default_rng(20240)
    units = rows // ROWS_PER_UNIT
    effects = rng.normal(size=units)
    (folder / "rows").mkdir()
    for number in range(FILES):
        unit = rng.integers(0, units, rows // FILES)
        x = rng.normal(size=(len(unit), COVARIATES)) + 0.5 * effects[unit, None]
        columns = {"unit": unit, **{f"x{j}": x[:, j] for j in range(COVARIATES)}}
        columns["y"] = x.sum(axis=1) + effects[unit] + rng.normal(size=len(unit))
        pq.write_table(pa.table(columns), folder / "rows" / f"part-{number}.parquet", row_group_size=2**17)
    return units


@contextmanager
def _tasks(
    folder: Path, *, processes: bool
) -> Iterator[tuple[Mapping[str, Callable[[], Any]], Callable[[], float]]]:
    """Yield the tasks by name, and what tells the processor time so far: streaming first, then on workers."""
    import dask  # noqa: PLC0415
    import dask.dataframe as dd  # noqa: PLC0415
    import duckdb  # noqa: PLC0415
    from distributed import Client, LocalCluster  # noqa: PLC0415

    where = str(folder / "rows")
    database = duckdb.connect()
    database.execute(f"CREATE TABLE held AS SELECT * FROM '{where}/*.parquet'")
    tasks = {
        "streamed from Parquet": lambda: _fit(where, chunks=True),
        f"Dask, {WORKERS} worker {'processes' if processes else 'threads'}": lambda: _fit(
            dd.read_parquet(where, filesystem="arrow")
        ),
        "DuckDB over Parquet, summed there": lambda: _fit(database.sql(f"SELECT * FROM '{where}/*.parquet'")),
        "DuckDB table, summed there": lambda: _fit(database.sql("FROM held")),
        "DuckDB table, streamed": lambda: _fit(database.sql("FROM held"), chunks=True),
    }
    if not processes:
        with dask.config.set(scheduler="threads", num_workers=WORKERS):
            yield tasks, time.process_time
    else:
        with (
            LocalCluster(n_workers=WORKERS, threads_per_worker=1, dashboard_address=None) as cluster,
            Client(cluster) as client,
        ):
            yield tasks, lambda: time.process_time() + sum(client.run(time.process_time).values())
    database.close()


def _fit(data: object, chunks: bool | None = None) -> np.ndarray:
    return crosscheck(FORMULA, data, unit="unit", chunks=chunks).fit("reml").beta


def _interleaved(
    tasks: Mapping[str, Callable[[], np.ndarray]], rounds: int, processor: Callable[[], float]
) -> tuple[dict[str, list[tuple[float, float]]], dict[str, np.ndarray]]:
    """Run every task once per round; the first of several rounds pays for imports and is not counted."""
    spent: dict[str, list[tuple[float, float]]] = {name: [] for name in tasks}
    found = {}
    for turn in range(rounds + 1 if rounds > 1 else 1):
        for name, task in tasks.items():
            busy, start = processor(), time.perf_counter()
            found[name] = task()
            clock = time.perf_counter() - start
            if turn or rounds == 1:
                spent[name].append((clock, processor() - busy))
    return spent, found
