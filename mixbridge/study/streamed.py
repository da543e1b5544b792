"""A panel and its moments from rows that are read in chunks."""

from __future__ import annotations

from dataclasses import replace
from typing import Literal

from mixbridge.moments import Moments, OpenMoments
from mixbridge.moments.streamed import Gathering, collect_streamed
from mixbridge.panel.streaming import StreamedPanel, build_streaming_panel
from mixbridge.report.progress_rows import rows_line
from mixbridge.sources.chunk_options import ChunkOptions

__all__ = ["stream"]


def stream(
    formula: str,
    data: object,
    *,
    unit: str,
    period: str | None,
    incomplete_rows: Literal["drop", "refuse"],
    trusted: bool,
    chunks: bool | ChunkOptions,
) -> tuple[StreamedPanel, OpenMoments | None, Moments]:
    """Read rows in chunks and take their moments.

    Parameters
    ----------
    formula, data, unit, period, incomplete_rows, trusted, chunks
        As for `mixbridge.crosscheck`, whose caller's names the formula may use.

    Returns
    -------
    StreamedPanel, OpenMoments or None, and Moments
    """
    options = chunks if isinstance(chunks, ChunkOptions) else ChunkOptions()
    if options.progress is None:
        options = replace(options, progress=rows_line())
    gathering = Gathering()
    panel = build_streaming_panel(
        formula,
        data,
        unit=unit,
        period=period,
        incomplete_rows=incomplete_rows,
        trusted=trusted,
        env=2,
        options=options,
        gather=gathering,
    )
    return (panel, *collect_streamed(panel, gathering))
