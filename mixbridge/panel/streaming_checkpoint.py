"""What the results of a run over chunks of rows depend on, for a checkpoint to be told from others."""

from __future__ import annotations

from importlib.metadata import version

from mixbridge.errors import OptionError
from mixbridge.panel.formula import names_of
from mixbridge.panel.readings import _BASE
from mixbridge.panel.streaming_walk import Plan
from mixbridge.sources.checkpoint import Checkpoint
from mixbridge.sources.chunk_options import ChunkOptions
from mixbridge.sources.chunks import ChunkedSource, identity_of

__all__ = ["checkpoint_of"]


def checkpoint_of(
    plan: Plan, source: ChunkedSource, options: ChunkOptions, incomplete_rows: str
) -> Checkpoint | None:
    """Return where the state of passes is saved; None if that was not asked for.

    Raises
    ------
    OptionError
        If it could not be told later whether the data and the formula are still the same.
    """
    if options.checkpoint is None:
        return None
    identity = identity_of(source)
    if identity is None:
        raise OptionError(
            "checkpoint= takes data in files: whether a function, a stream or a table in memory still gives the same "
            "rows cannot be told. Write them to Parquet files first, or leave checkpoint out."
        )
    for factor, columns in plan.reads.items():
        for name in names_of(factor.code):
            if name not in columns and plan.environment.namespace.get(name) is not _BASE.get(name):
                raise OptionError(
                    f"checkpoint= cannot tell whether {name!r} in {factor.code} still is what it was: it is defined in "
                    "this program. Write its value out, compute a column first, or leave checkpoint out."
                )
    facts = {
        "version": version("mixbridge"),
        "formula": plan.formula.text,
        "keys": plan.keys,
        "columns": plan.wanted,
        "incomplete_rows": incomplete_rows,
        "rows": options.rows,
        "sorted_by_unit": options.sorted_by_unit,
        "unit_records": options.unit_records,
        "source": identity,
    }
    return Checkpoint(options.checkpoint, facts, options.checkpoint_seconds)
