"""Rows that are worked on where they are: in the partitions of a Dask DataFrame, or in a database."""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import TYPE_CHECKING, Any, Literal, TypedDict, Unpack

from mixbridge.errors import OptionError
from mixbridge.sources.chunk_options import ChunkOptions
from mixbridge.sources.chunks import CHUNK_ROWS
from mixbridge.sources.dask_source import DaskSource, is_dask
from mixbridge.sources.duckdb_source import RelationSource, is_relation

if TYPE_CHECKING:
    from mixbridge.moments import Moments, OpenMoments
    from mixbridge.panel import Panel

__all__ = ["Elsewhere", "from_elsewhere"]

_CALLER = 3
"""Calls between a builder here and the caller of `mixbridge.crosscheck`, whose names a formula may use."""


@dataclass(frozen=True, slots=True, eq=False)
class Elsewhere:
    """A panel whose rows are elsewhere, and the moments taken there; unit records where they were fetched."""

    panel: Panel
    opened: OpenMoments | None
    moments: Moments


class Reading(TypedDict):
    """How rows are read."""

    unit: str
    period: str | None
    incomplete_rows: Literal["drop", "refuse"]
    trusted: bool


def from_elsewhere(
    formula: str, data: object, chunks: bool | ChunkOptions | None, **reading: Unpack[Reading]
) -> Elsewhere | object:
    """Take moments where the rows are, if they are elsewhere.

    Parameters
    ----------
    formula, data, chunks
        As for `mixbridge.crosscheck`. Unless `chunks` is given, rows elsewhere are worked on there.
    **reading
        Its `unit`, `period`, `incomplete_rows` and `trusted`.

    Returns
    -------
    Elsewhere or object
        Moments; or what is to be read in this process: the data as they are, or as a source of chunks.
    """
    if is_dask(data):
        if chunks is False:
            raise OptionError(
                "chunks=False asks for all rows at once, and a Dask DataFrame is not held together. Pass "
                "data.compute() for that, or leave chunks out."
            )
        if chunks is None:
            return _from_dask(formula, data, **reading)
        return DaskSource(data, "the partitions of a Dask DataFrame, read one after the other")
    if is_relation(data) and chunks is not False:
        if chunks is None:
            return _from_relation(formula, data, **reading)
        rows = chunks.rows if isinstance(chunks, ChunkOptions) else CHUNK_ROWS
        return RelationSource(data, rows, "the rows of a DuckDB relation, streamed")
    return data


def _from_relation(formula: str, data: Any, **reading: Unpack[Reading]) -> Elsewhere | RelationSource:
    """Let a database take the sums per unit; where the formula needs more than SQL has, return its rows."""
    from mixbridge.moments.pushed import pushed_moments
    from mixbridge.panel.pushed import PushedPanel
    from mixbridge.panel.pushed_query import build_query
    from mixbridge.panel.pushed_sql import NotInSQLError

    try:
        query = build_query(formula, RelationSource(data), env=_CALLER, **reading)
    except NotInSQLError as reason:
        return RelationSource(data, note=f"the rows of a DuckDB relation, streamed because {reason}")
    taken = pushed_moments(query, ChunkOptions().memory_limit)
    keys = None if taken.opened is None else taken.opened.keys
    kept = (
        "units closed as they came, too many to keep" if keys is None else "counts and means of units fetched"
    )
    note = f"a DuckDB relation, summed per unit in the database; {kept}"
    opened = None if taken.opened is None else replace(taken.opened, coding=query.coding)
    moments = replace(taken.moments, coding=query.coding)
    return Elsewhere(PushedPanel(formula, query, taken.units, keys, note), opened, moments)


def _from_dask(formula: str, data: Any, **reading: Unpack[Reading]) -> Elsewhere:
    """Take closed moments in the partitions of a Dask DataFrame."""
    from mixbridge.moments.distributed import Looks, distributed_moments
    from mixbridge.panel.parted_panel import PartedPanel, learn_parted

    source = DaskSource(data)
    looks = Looks(source)
    found = learn_parted(formula, source, env=_CALLER, read=looks.read, **reading)
    taken = distributed_moments(source, found, looks)
    count = len(found.books)
    note = (
        f"{count} partition{'s' if count > 1 else ''} of a Dask DataFrame, worked on where they are; units "
        f"merged in {taken.buckets} bucket{'s' if taken.buckets > 1 else ''}"
        + ("; rows read once more for the within factor" if taken.second else "")
    )
    panel = PartedPanel(
        formula=formula,
        outcome=found.outcome,
        names=found.names,
        terms=found.terms,
        constant=found.constant,
        unit_name=reading["unit"],
        period_name=reading["period"],
        accounting=found.accounting,
        n=found.accounting.rows_used,
        N=taken.moments.units,
        source_note=note,
    )
    return Elsewhere(panel, None, replace(taken.moments, coding=found.coding))
