"""From a formula and rows to a panel."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace
from typing import Any, Literal

import numpy as np
import numpy.typing as npt
import pandas as pd
from patsy import EvalEnvironment, EvalFactor

from mixbridge.errors import DataError, FormulaError, OptionError
from mixbridge.panel.accounting import Accounting
from mixbridge.panel.attempt import Attempt, Reading, attempt, refuse_infinite
from mixbridge.panel.categories import Coded
from mixbridge.panel.columns import Column, Rows, read_column
from mixbridge.panel.design import lay_out
from mixbridge.panel.factors import Numeric
from mixbridge.panel.formula import parse_formula
from mixbridge.panel.readings import factor_columns, make_environment, read_factors
from mixbridge.panel.record import HeldPanel
from mixbridge.panel.roles import check_role, periods_of, units_of
from mixbridge.panel.unit_losses import losses_by_unit
from mixbridge.sources import Source, open_source

__all__ = ["build_panel"]

_MOST_ROUNDS = 20


def build_panel(
    formula: str,
    data: object,
    *,
    unit: str,
    period: str | None = None,
    incomplete_rows: Literal["drop", "refuse"] = "drop",
    trusted: bool = True,
    env: int | EvalEnvironment = 0,
) -> HeldPanel:
    """Validate rows and lay out the design of a formula.

    Parameters
    ----------
    formula : str
        The fixed part in patsy's notation, with one outcome.
    data : object
        A pandas frame, anything with an Arrow stream, or what `mixbridge.sources.read_table` returns.
    unit : str
        Column of the grouping factor.
    period : str, optional
        Column of the periods within units.
    incomplete_rows : {"drop", "refuse"}
        Whether rows with missing values are dropped and counted, or refused.
    trusted : bool
        Whether the formula may name what the caller can see and call any function. Where it comes from
        another
        place than the caller's own code, say False: then it may hold columns, numbers, arithmetic,
        comparisons
        and a fixed list of transforms.
    env : int or patsy.EvalEnvironment
        Where the caller's names are: 0 for the function that calls this one, 1 for that one's caller.

    Returns
    -------
    HeldPanel
        Rows in the order of the data.

    Raises
    ------
    FormulaError
        If the formula cannot be read or names what is not there.
    DataError
        If the rows cannot be used as they are.
    OptionError
        If an argument is not allowed.

    Examples
    --------
    >>> import pandas as pd
    >>> from mixbridge.panel import build_panel
    >>> honey = pd.DataFrame({"hive": [1, 1, 2, 2], "kg": [3, 4, 6, None], "forage": [1, 2, 2, 3]})
    >>> panel = build_panel("kg ~ forage", honey, unit="hive")
    >>> panel.names, panel.n, panel.N
    (('Intercept', 'forage'), 3, 2)
    >>> for line in panel.accounting.lines():
    ...     print(line)
    4 rows given, 3 used, 1 dropped:
      missing outcome (kg): 1
    """
    if incomplete_rows not in ("drop", "refuse"):
        raise OptionError.not_among("incomplete_rows", incomplete_rows, ("drop", "refuse"))
    environment = make_environment(env if trusted else None, reference=1)
    parsed = parse_formula(formula)
    source = open_source(data)
    check_role("unit", unit, source.names, source.index_names)
    if period is not None:
        check_role("period", period, source.names, source.index_names)
        if period == unit:
            raise DataError(
                f"unit and period both name {unit!r}: each row would be a unit of its own, or repeat one."
            )
    reads = factor_columns(parsed, source.names, environment, trusted=trusted)
    keys = [unit] if period is None else [unit, period]
    frame = _needed(source, keys, reads.values())
    columns = {name: read_column(name, frame[name]) for names in reads.values() for name in names}
    readings = read_factors(reads, columns, environment, trusted=trusted)
    _check_outcome(readings[0])

    rows, account = _complete_rows(frame, keys, readings, columns)
    _check_left(account, incomplete_rows)
    labels = frame.index if rows is None else frame.index[rows]
    for column in columns.values():
        refuse_infinite(column, rows, labels)
    rows, labels, found, account = _usable_rows(
        readings=readings,
        rows=rows,
        labels=labels,
        environment=environment,
        outcome=parsed.outcome,
        account=account,
        incomplete_rows=incomplete_rows,
    )
    response = found.learned[parsed.outcome]
    if isinstance(response, Coded) or response.width != 1:
        shape = "categories" if isinstance(response, Coded) else f"{response.width} columns"
        raise FormulaError(
            f"The outcome {parsed.outcome.code} yields {shape}; needed is one column of numbers."
        )
    covariates = {factor: found.learned[factor] for factor in parsed.factors}
    design = lay_out(parsed.terms, covariates, formula)

    codes, unit_keys = units_of(unit, frame[unit] if rows is None else frame[unit].iloc[rows])
    ordinals, note = None, None
    if period is not None:
        series = frame[period] if rows is None else frame[period].iloc[rows]
        ordinals, note = periods_of(period, series, codes, unit, unit_keys)
    for array in (codes, ordinals):
        if array is not None:
            array.setflags(write=False)
    return HeldPanel(
        formula=formula,
        outcome=parsed.outcome.name(),
        names=design.names,
        terms=design.terms,
        constant=design.constant,
        codes=codes,
        unit_keys=unit_keys,
        unit_name=unit,
        period_name=period,
        period_ordinals=ordinals,
        period_note=note,
        row_labels=labels,
        accounting=replace(
            account,
            notes=_notes(columns, covariates),
            by_unit=losses_by_unit(frame[unit], rows, unit_keys),
        ),
        design=design,
        response=response,
    )


def _needed(source: Source, keys: Sequence[str], reads: Any) -> pd.DataFrame:
    """Fetch the columns needed, each of which must exist once."""
    wanted = list(dict.fromkeys([*keys, *(name for names in reads for name in names)]))
    for name in wanted:
        times = source.names.count(name)
        if times > 1:
            raise DataError(f"The data have {times} columns named {name!r}. Rename or remove all but one.")
    frame = source.frame(wanted, keys)
    if not len(frame):
        raise DataError("The data have no rows.")
    return frame


def _check_outcome(reading: Reading) -> None:
    """Refuse an outcome column that does not hold numbers."""
    if reading.single is None or reading.coded:
        return
    column = reading.columns[reading.single]
    if column.kind == "number":
        return
    what = {
        "text": "text",
        "category": "categories",
        "truth": "truth values",
        "moment": "dates or times",
    }[column.kind]
    hint = {
        "text": f"Convert it: data[{column.name!r}] = pandas.to_numeric(data[{column.name!r}]).",
        "category": "Convert it to numbers if its categories are amounts.",
        "truth": f"Write I({column.name} * 1) for a linear probability model.",
        "moment": "Write the outcome as a number, for example of days.",
    }[column.kind]
    raise DataError(f"The outcome {column.name!r} holds {what} ({column.series.dtype}), not numbers. {hint}")


def _complete_rows(
    frame: pd.DataFrame, keys: Sequence[str], readings: Sequence[Reading], columns: dict[str, Column]
) -> tuple[Rows, Accounting]:
    """Find the rows without missing values; count the others under their first cause."""
    holes: list[tuple[str, str, npt.NDArray[np.bool_] | None]] = []
    for cause, name in zip(("missing unit", "missing period"), keys, strict=False):
        absent = frame[name].isna().to_numpy(dtype=bool)
        holes.append((cause, name, absent if absent.any() else None))
    holes += [("missing outcome", name, columns[name].missing) for name in readings[0].columns]
    seen = set(readings[0].columns)
    for reading in readings[1:]:
        holes += [
            ("missing covariate", name, columns[name].missing) for name in reading.columns if name not in seen
        ]
        seen.update(reading.columns)
    kept: npt.NDArray[np.bool_] | None = None
    dropped: list[tuple[str, str, int]] = []
    missing: dict[str, int] = {}
    for cause, name, mask in holes:
        if mask is None:
            missing.setdefault(name, 0)
            continue
        missing[name] = int(np.count_nonzero(mask))
        if kept is None:
            kept = np.ones(len(frame), dtype=bool)
        new = int(np.count_nonzero(mask & kept))
        kept &= ~mask
        if new:
            dropped.append((cause, name, new))
    rows = None if kept is None else np.flatnonzero(kept)
    used = len(frame) if rows is None else len(rows)
    return rows, Accounting(len(frame), used, tuple(dropped), tuple(missing.items()))


def _check_left(account: Accounting, incomplete_rows: str) -> None:
    """Refuse to go on without rows or, if so asked, with rows dropped."""
    if account.rows_dropped and incomplete_rows == "refuse":
        raise DataError(f"Incomplete rows are refused (incomplete_rows='refuse'). {_in_a_sentence(account)}")
    if not account.rows_used:
        raise DataError(f"No row is left. {_in_a_sentence(account)}")


def _in_a_sentence(account: Accounting) -> str:
    """Return the account on one line."""
    first, *causes = account.lines()
    return f"{first} {'; '.join(cause.strip() for cause in causes)}."


def _usable_rows(
    *,
    readings: list[Reading],
    rows: Rows,
    labels: pd.Index,
    environment: EvalEnvironment,
    outcome: EvalFactor,
    account: Accounting,
    incomplete_rows: str,
) -> tuple[Rows, pd.Index, Attempt, Accounting]:
    """Learn the factors, dropping and counting rows on which one is not a number, until none is left."""
    for _ in range(_MOST_ROUNDS):
        found = attempt(readings, rows, labels, environment, outcome)
        if not found.bad:
            return rows, labels, found, account
        keep = np.ones(len(labels), dtype=bool)
        counts = {(cause, name): count for cause, name, count in account.dropped}
        for name, positions in found.bad:
            new = int(np.count_nonzero(keep[positions]))
            keep[positions] = False
            if new:
                key = (f"not a number in {name}", name)
                counts[key] = counts.get(key, 0) + new
        rows = np.flatnonzero(keep) if rows is None else rows[keep]
        labels = labels[keep]
        dropped = tuple((cause, name, count) for (cause, name), count in counts.items())
        account = replace(account, rows_used=len(labels), dropped=dropped)
        _check_left(account, incomplete_rows)
    raise DataError(
        f"After {_MOST_ROUNDS} rounds a term still yields values that are not numbers each time it is "
        "learned on the rows left: "
        + ", ".join(name for name, _ in found.bad)
        + ". Compute it as a column of the data first."
    )


def _notes(columns: dict[str, Column], covariates: dict[EvalFactor, Numeric | Coded]) -> tuple[str, ...]:
    """Gather what was done with columns and levels on the way."""
    notes = [column.note for column in columns.values() if column.note is not None]
    for value in covariates.values():
        if isinstance(value, Coded):
            notes += value.notes
    return tuple(notes)
