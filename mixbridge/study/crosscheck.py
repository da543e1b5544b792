"""`crosscheck`: the one call."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace
from typing import Literal

from mixbridge.errors import OptionError
from mixbridge.moments import OpenMoments, collect
from mixbridge.panel import Panel, build_panel
from mixbridge.panel.coding import coding_of
from mixbridge.routes import LEDGER_ROUTES, named_route
from mixbridge.sources.chunk_options import ChunkOptions, comes_in_chunks
from mixbridge.study.elsewhere import Elsewhere, from_elsewhere
from mixbridge.study.record import Study
from mixbridge.study.streamed import stream

__all__ = ["crosscheck"]


def crosscheck(
    formula: str,
    data: object,
    *,
    unit: str,
    period: str | None = None,
    primary: str = "reml",
    routes: Sequence[str] | None = None,
    confidence: float = 0.95,
    incomplete_rows: Literal["drop", "refuse"] = "drop",
    trusted: bool = True,
    chunks: bool | ChunkOptions | None = None,
) -> Study:
    """Fit one random-intercept model by every route and set the results side by side.

    Parameters
    ----------
    formula : str
        Fixed part in patsy's notation, ``"honey ~ forage + feeding"``; the grouping factor is `unit`, never
        part of it.
    data : DataFrame, object with an Arrow stream, path, or source of chunks
        One row per unit and period. Beyond memory: a folder of Parquet files, a large Parquet or text file, an
        Arrow dataset or reader, an iterable of frames, a function that returns one; a Dask DataFrame and a DuckDB
        relation are worked on where they are, on the workers and by the database.
    unit : str
        Column of the grouping factor (apiary, firm, school, patient).
    period : str, optional
        Column that orders the rows of a unit; needed by ``first_difference``.
    primary : str
        The route that is reported.
    routes : sequence of str, optional
        Routes shown; all of `mixbridge.routes.LEDGER_ROUTES` unless given. The primary one is always among
        them.
    confidence : float
        Level of the intervals, between 0 and 1.
    incomplete_rows : {"drop", "refuse"}
        Whether rows with missing values are dropped and counted, or refused.
    trusted : bool
        False restricts the formula to column names and a fixed list of transforms.
    chunks : bool or ChunkOptions, optional
        Whether rows are read in chunks and never held together, and how. Unless given, what is not one table is,
        and so are files beyond `mixbridge.sources.chunk_options.IN_ONE_PIECE`. True brings rows of a Dask DataFrame
        or a DuckDB relation into this process, chunk by chunk. The results are the same.

    Returns
    -------
    Study

    Raises
    ------
    DataError, FormulaError, OptionError, IdentificationError
        Each says what is wrong, where, and what to do.

    Examples
    --------
    >>> import mixbridge
    >>> data = mixbridge.demo.apiaries()
    >>> study = mixbridge.crosscheck("honey ~ forage + feeding + altitude", data, unit="apiary")
    >>> study.fit("reml").status
    'fitted'
    """
    if not (isinstance(confidence, (int, float)) and 0.0 < confidence < 1.0):
        raise OptionError(
            f"confidence={confidence!r} is not allowed; allowed: a number between 0 and 1, such as 0.95."
        )
    chosen = tuple(dict.fromkeys(LEDGER_ROUTES if routes is None else routes))
    for key in (*chosen, primary):
        named_route(key)
    panel: Panel
    opened: OpenMoments | None
    data = from_elsewhere(
        formula,
        data,
        chunks,
        unit=unit,
        period=period,
        incomplete_rows=incomplete_rows,
        trusted=trusted,
    )
    reading = comes_in_chunks(data) if chunks is None else chunks
    if isinstance(data, Elsewhere):
        panel, opened, moments = data.panel, data.opened, data.moments
    elif reading is False:
        panel = build_panel(
            formula, data, unit=unit, period=period, incomplete_rows=incomplete_rows, trusted=trusted, env=1
        )
        opened, moments = collect(panel.blocks_with_codes, (*panel.names, panel.outcome), panel.unit_keys)
    else:
        panel, opened, moments = stream(
            formula,
            data,
            unit=unit,
            period=period,
            incomplete_rows=incomplete_rows,
            trusted=trusted,
            chunks=reading,
        )
    coding = coding_of(panel)
    if coding is not None:
        opened, moments = (
            None if opened is None else replace(opened, coding=coding),
            replace(moments, coding=coding),
        )
    study = Study(
        panel, opened, moments, primary, chosen if primary in chosen else (*chosen, primary), confidence
    )
    _ = study.curve  # an unidentified design is refused here, not at the first question
    return study
