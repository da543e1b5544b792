"""From a formula and rows in chunks to a panel that never holds all rows."""

from __future__ import annotations

from typing import Literal

from patsy import EvalEnvironment

from mixbridge.errors import DataError, OptionError
from mixbridge.panel.formula import Formula, parse_formula
from mixbridge.panel.keys import encode
from mixbridge.panel.readings import factor_columns, make_environment
from mixbridge.panel.roles import check_role
from mixbridge.panel.streaming_attempts import Attempts
from mixbridge.panel.streaming_checkpoint import checkpoint_of
from mixbridge.panel.streaming_learn import Lesson
from mixbridge.panel.streaming_panel import StreamedPanel, UnitKeys
from mixbridge.panel.streaming_passes import Passes
from mixbridge.panel.streaming_rows import Gather
from mixbridge.panel.streaming_values import Distinct
from mixbridge.panel.streaming_walk import Plan
from mixbridge.sources.chunk_options import ChunkOptions
from mixbridge.sources.chunks import ChunkedSource
from mixbridge.sources.chunks_opening import open_chunks

__all__ = ["StreamedPanel", "build_streaming_panel"]


def build_streaming_panel(
    formula: str,
    source: object,
    *,
    unit: str,
    period: str | None = None,
    incomplete_rows: Literal["drop", "refuse"] = "drop",
    trusted: bool = True,
    env: int | EvalEnvironment = 0,
    options: ChunkOptions | None = None,
    gather: Gather | None = None,
) -> StreamedPanel:
    """Validate rows that come in chunks and lay out the design of a formula.

    Memory grows with units times columns and with the rows of a chunk, not with the number of rows; where units are
    not kept, because rows are sorted by unit, not with their number either.

    Parameters
    ----------
    formula : str
        The fixed part in patsy's notation, with one outcome. What has to see all rows at once (splines, functions
        of whole columns) is refused.
    source : object
        What `mixbridge.sources.chunks_opening.open_chunks` takes: a Parquet file or a folder of them, a text file,
        an Arrow dataset, a function that returns frames, or a stream that can be read once, which is written to a
        temporary file.
    unit, period : str
        Columns of the grouping factor and of the periods within units.
    incomplete_rows : {"drop", "refuse"}
        Whether rows with missing values are dropped and counted, or refused.
    trusted : bool
        Whether the formula may name what the caller can see.
    env : int or patsy.EvalEnvironment
        Where the caller's names are.
    options : ChunkOptions, optional
        How the rows are read.
    gather : Gather, optional
        Takes moments while the rows are read, if one pass suffices for the formula.

    Returns
    -------
    StreamedPanel

    Raises
    ------
    FormulaError, DataError, OptionError
        As `mixbridge.panel.build_panel`; a DataError also where the parts of the data do not go together or the
        moments would not fit, with the estimate.

    Examples
    --------
    >>> import pandas as pd
    >>> from mixbridge.panel.streaming import build_streaming_panel
    >>> honey = pd.DataFrame({"hive": [1, 2, 1, 2], "kg": [3, 6, 4, None], "forage": [1, 2, 2, 3]})
    >>> panel = build_streaming_panel("kg ~ forage", lambda: [honey[:2], honey[2:]], unit="hive")
    >>> [codes.tolist() for codes, x, y in panel.blocks_with_codes()]
    [[0, 1], [0]]
    """
    if incomplete_rows not in ("drop", "refuse"):
        raise OptionError.not_among("incomplete_rows", incomplete_rows, ("drop", "refuse"))
    environment = make_environment(env if trusted else None, reference=1)
    parsed = parse_formula(formula)
    options = options or ChunkOptions()
    opened = open_chunks(source, options.rows)
    try:
        return _built(
            parsed,
            opened,
            keys=(unit,) if period is None else (unit, period),
            incomplete_rows=incomplete_rows,
            trusted=trusted,
            environment=environment,
            options=options,
            gather=gather,
        )
    except BaseException:
        if opened is not source and hasattr(opened, "remove"):
            opened.remove()  # what a stream was written to
        raise


def _built(
    parsed: Formula,
    opened: ChunkedSource,
    *,
    keys: tuple[str, ...],
    incomplete_rows: Literal["drop", "refuse"],
    trusted: bool,
    environment: EvalEnvironment,
    options: ChunkOptions,
    gather: Gather | None,
) -> StreamedPanel:
    unit, period = keys[0], keys[1] if len(keys) > 1 else None
    check_role("unit", unit, opened.names, ())
    if period is not None:
        check_role("period", period, opened.names, ())
        if period == unit:
            raise DataError(
                f"unit and period both name {unit!r}: each row would be a unit of its own, or repeat one."
            )
    reads = factor_columns(parsed, opened.names, environment, trusted=trusted)
    plan = Plan(parsed, reads, keys, environment, trusted)
    for name in plan.wanted:
        times = opened.names.count(name)
        if times > 1:
            raise DataError(f"The data have {times} columns named {name!r}. Rename or remove all but one.")
    saver = checkpoint_of(plan, opened, options, incomplete_rows)
    found = Attempts(plan, Passes(opened, options, checkpoint=saver), incomplete_rows, gather).learn()
    lesson, design = found.lesson, found.design
    return StreamedPanel(
        formula=parsed.text,
        outcome=parsed.outcome.name(),
        names=design.names,
        terms=design.terms,
        constant=design.constant,
        unit_name=unit,
        period_name=period,
        accounting=lesson.account,
        known=_known(unit, lesson),
        grouped=found.grouped,
        plan=found.plan,
        lesson=lesson,
        design=design,
        rows_read=found.passes,
    )


def _known(name: str, lesson: Lesson) -> UnitKeys | None:
    """Return the code of each distinct unit in order of first appearance, and the keys by code; if they were kept."""
    if isinstance(lesson.units, Distinct):
        codes, keys = encode(name, lesson.units.series())
        if len(keys) > 1:
            return UnitKeys(codes, keys)
    elif len(lesson.units) > 1:
        return None
    raise DataError(
        f"All {lesson.account.rows_used} rows used belong to one unit{_of(name, lesson)}: a variance between units is "
        "not defined. Check that unit= names the grouping column."
    )


def _of(name: str, lesson: Lesson) -> str:
    return f" ({name} {lesson.units.series().iloc[0]})" if isinstance(lesson.units, Distinct) else ""
