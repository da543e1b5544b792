"""Passes over rows that come in chunks: in several threads, with progress, and counted."""

from __future__ import annotations

import time
from collections.abc import Callable, Generator, Sequence
from contextlib import closing
from dataclasses import dataclass, field
from typing import Protocol, TypeVar

from mixbridge.panel.streaming_walk import Plan, Stage, Step, step_of
from mixbridge.sources.checkpoint import Checkpoint, State
from mixbridge.sources.chunk_options import ChunkOptions
from mixbridge.sources.chunks import Chunk, ChunkedSource, drawn_anywhere, rows_in
from mixbridge.sources.in_order import in_order

__all__ = ["Keeper", "Pass", "Passes"]

Result = TypeVar("Result")


@dataclass(frozen=True, slots=True)
class Pass:
    """One pass over the rows.

    Parameters
    ----------
    what : str
        What it was made for.
    rows : int
        Rows read; fewer than there are if it was broken off.
    seconds : float
        Time on the clock.
    complete : bool
        Whether it came to the end.
    """

    what: str
    rows: int
    seconds: float
    complete: bool


class Keeper(Protocol):
    """What takes in the results of a pass, and can be saved."""

    @property
    def stage(self) -> str:
        """Name of the pass among those of a run."""
        ...

    def state(self) -> State | None:
        """Return what was taken in; None if it cannot be saved in this pass."""
        ...

    def restore(self, state: State) -> int:
        """Go on from a state; return the number of rows read so far."""
        ...


@dataclass(frozen=True, slots=True, eq=False)
class Passes:
    """A source, and how it is passed over.

    Parameters
    ----------
    source : ChunkedSource
    options : ChunkOptions
    made : list of Pass
        The passes so far, in order.
    checkpoint : Checkpoint or None
        Where the state of passes is saved.
    for_moments : list of int
        Number of passes made when the moments had been taken, once they were.
    """

    source: ChunkedSource
    options: ChunkOptions
    made: list[Pass] = field(default_factory=list)
    checkpoint: Checkpoint | None = None
    for_moments: list[int] = field(default_factory=list)

    def moments_taken(self) -> None:
        """Note that further passes are made for questions asked later."""
        self.for_moments.append(len(self.made))
        if self.checkpoint is not None:
            self.checkpoint.clear()

    def over(
        self,
        plan: Plan,
        stages: Sequence[Stage],
        then: Callable[[Step], Result],
        what: object,
        *,
        skip: int = 0,
        rows: int = 0,
    ) -> Generator[Result, None, None]:
        """Pass over the chunks that have rows and yield what is made of each, in order.

        Parameters
        ----------
        plan : Plan
        stages : sequence of Stage
            As for `mixbridge.panel.streaming_walk.walk`.
        then : callable
            What is made of a step; it may run in another thread, for several chunks at the same time, except for
            the chunks up to the first one with rows used.
        what : object
            What the pass is for, as text when it is over.
        skip : int
            Chunks with rows at the beginning that are left out.
        rows : int
            Rows in these.
        """
        self._look_at_keys(plan)
        progress = self.options.progress
        total = None if progress is None else rows_in(self.source)
        start, complete = time.monotonic(), False
        results = self._results(plan, lambda step: (step.account.rows_given, then(step)), stages, skip)
        try:
            for count, result in results:
                yield result
                rows += count
                if progress is not None:
                    progress(rows, total)
            complete = True
            if progress is not None and total != rows:
                progress(rows, rows)
        finally:
            results.close()
            self.made.append(Pass(str(what), rows, time.monotonic() - start, complete))

    def saved_over(
        self,
        plan: Plan,
        stages: Sequence[Stage],
        then: Callable[[Step], Result],
        what: object,
        keeper: Keeper,
    ) -> Generator[Result, None, None]:
        """Pass over the chunks as `over`; save what has become of them now and then, where that was asked for.

        Parameters
        ----------
        plan, stages, then, what
            As for `over`.
        keeper : Keeper
            Gives the state after the results yielded so far, and takes one to go on from.
        """
        saver, done, rows = self.checkpoint, 0, 0
        found = None if saver is None else saver.load(keeper.stage)
        if found is not None:
            done = found[0]
            rows = keeper.restore(found[1])
        with closing(self.over(plan, stages, then, what, skip=done, rows=rows)) as results:
            for result in results:
                first = not done
                yield result
                done += 1
                if saver is not None and (first or saver.due()):
                    state = (
                        keeper.state()
                    )  # asked for at the first chunk too: what cannot be saved is said at once
                    if state is not None and (not first or saver.due()):
                        saver.save(keeper.stage, done, state)

    def _results(
        self, plan: Plan, then: Callable[[Step], Result], stages: Sequence[Stage], skip: int
    ) -> Generator[Result, None, None]:
        def work(chunk: Chunk) -> Result:
            return then(step_of(plan, chunk, stages))

        chunks = self._with_rows(plan, skip)
        try:
            while not plan.forms:
                chunk = next(chunks, None)
                if chunk is None:
                    return
                yield work(chunk)
            yield from in_order(chunks, work, self.options.threads, anywhere=drawn_anywhere(self.source))
        finally:
            chunks.close()

    def _look_at_keys(self, plan: Plan) -> None:
        """Let the source find out what the keys are, where that takes a pass of its own."""
        look = getattr(self.source, "look_at_keys", None)
        if look is not None:
            start = time.monotonic()
            rows = look(plan.keys)
            if rows:
                self.made.append(Pass("what keys in text are", rows, time.monotonic() - start, True))

    def _with_rows(self, plan: Plan, skip: int) -> Generator[Chunk, None, None]:
        later = getattr(self.source, "chunks_after", None) if skip else None
        if later is not None:
            yield from later(skip, plan.wanted, plan.keys)
            return
        for chunk in self.source.chunks(plan.wanted, plan.keys):
            if len(chunk.frame):
                if skip:
                    skip -= 1
                    continue
                yield chunk
