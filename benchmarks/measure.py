"""Time tasks against each other, and measure the memory that a task takes at its peak."""

from __future__ import annotations

import ctypes
import gc
import multiprocessing
import statistics
import time
import tracemalloc
from collections.abc import Callable, Mapping
from dataclasses import dataclass
from pathlib import Path

STATUS = Path("/proc/self/status")
RESET = Path("/proc/self/clear_refs")
SMALL = 200


@dataclass(frozen=True, slots=True)
class Timing:
    """Seconds of one task over the rounds.

    Attributes
    ----------
    processor : tuple of float
        Processor time of the process. With one thread it is the time on the clock of an idle machine, and it does not
        count the time that other programs take from a busy one.
    clock : tuple of float
        Time on the clock.
    """

    processor: tuple[float, ...]
    clock: tuple[float, ...]

    @property
    def best(self) -> float:
        return min(self.processor)

    @property
    def median(self) -> float:
        return statistics.median(self.processor)

    def cells(self) -> tuple[str, str, str]:
        """Return best and median processor time and the best time on the clock, with units."""
        return text(self.best), text(self.median), text(min(self.clock))


COLUMNS = ("best", "median", "best on the clock")
"""Headings of `Timing.cells`."""


def described(rounds: int) -> str:
    """Return how times of so many rounds are to be read."""
    return (
        f"processor time, best of {rounds} interleaved rounds, the median and the best time on the clock beside it; "
        "ratios are of the best processor times"
    )


def text(seconds: float) -> str:
    """Return a duration with three digits and a unit."""
    return f"{seconds:.3g} s" if seconds >= 1.0 else f"{seconds * 1e3:.3g} ms"


def interleaved(tasks: Mapping[str, Callable[[], object]], rounds: int) -> dict[str, Timing]:
    """Run every task once per round, so that a busy spell of the machine meets all of them.

    The first round is run and not counted when there is more than one: it pays for imports and first-touched memory.
    """
    spent: dict[str, list[tuple[float, float]]] = {name: [] for name in tasks}
    for turn in range(rounds + 1 if rounds > 1 else 1):
        for name, task in tasks.items():
            gc.collect()
            clock, processor = time.perf_counter(), time.process_time()
            result = task()
            both = time.process_time() - processor, time.perf_counter() - clock
            del result
            if turn or rounds == 1:
                spent[name].append(both)
    return {name: Timing(*zip(*values, strict=True)) for name, values in spent.items()}


@dataclass(frozen=True, slots=True)
class Peak:
    """Bytes above what was in use before the task.

    Attributes
    ----------
    traced : int
        Peak of what Python and numpy allocated.
    resident : int or None
        Peak growth of the memory that the process held, which also sees compiled libraries; None where the system does
        not report it (it takes Linux).
    """

    traced: int
    resident: int | None


def peak(prepare: Callable[[int], Callable[[], object]], units: int) -> Peak:
    """Measure the peak memory of ``prepare(units)()`` in two processes of its own.

    Neither the preparation counts nor what a first small run loads and leaves behind.
    """
    context = multiprocessing.get_context("spawn")
    found = []
    for how in (_traced, _resident):
        receiver, sender = context.Pipe(duplex=False)
        process = context.Process(target=how, args=(sender, prepare, units))
        process.start()
        sender.close()
        try:
            found.append(receiver.recv())
        except EOFError:
            process.join()
            raise RuntimeError(
                f"the process that measures memory ended with status {process.exitcode}."
            ) from None
        process.join()
    return Peak(*found)


def _traced(sender, prepare, units) -> None:
    prepare(SMALL)()
    task = prepare(units)
    gc.collect()
    tracemalloc.start()
    before = tracemalloc.get_traced_memory()[0]
    kept = task()
    sender.send(tracemalloc.get_traced_memory()[1] - before)
    del kept


def _resident(sender, prepare, units) -> None:
    prepare(SMALL)()
    task = prepare(units)
    gc.collect()
    if not (RESET.exists() and STATUS.exists()):
        sender.send(None)
        return
    # memory that the preparation freed goes back first, or the task would use it unseen
    trim = getattr(ctypes.CDLL(None), "malloc_trim", None)
    if trim is not None:
        trim(0)
    RESET.write_text("5")  # the high-water mark starts again from here
    before = _status("VmRSS")
    kept = task()
    sender.send(_status("VmHWM") - before)
    del kept


def _status(field: str) -> int:
    for line in STATUS.read_text().splitlines():
        if line.startswith(field + ":"):
            return int(line.split()[1]) * 1024
    raise KeyError(field)
