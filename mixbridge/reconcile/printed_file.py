"""Small files of printed figures: TOML or CSV."""

from __future__ import annotations

import csv
import tomllib
from pathlib import Path

from mixbridge.errors import DataError
from mixbridge.reconcile.printed import PrintedFigure, parse_figure

__all__ = ["read_figures"]


def read_figures(path: str | Path) -> tuple[PrintedFigure, ...]:
    """Read figures from a file.

    Parameters
    ----------
    path : str or Path
        ``.toml``: lines ``icc = "0.72"``, under ``[figures]`` or at the top; tables ``[b]`` and ``[se]`` hold
        terms. Numbers with a point may stand without quotes. ``.csv``: columns ``quantity`` and ``printed``.

    Returns
    -------
    tuple of PrintedFigure
        In the order of the file.

    Raises
    ------
    DataError
        With the file and the line or key of what cannot be read.
    """
    file = Path(path)
    try:
        text = file.read_text(encoding="utf-8-sig")
    except OSError as error:
        raise DataError(f"cannot read {file}: {error.strerror}.") from None
    except UnicodeDecodeError:
        raise DataError(f"cannot read {file}: it is not text in UTF-8.") from None
    if file.suffix.lower() == ".toml":
        figures = _from_toml(text, file)
    elif file.suffix.lower() == ".csv":
        figures = _from_csv(text, file)
    else:
        raise DataError(f"{file}: figures are read from .toml and .csv files, not {file.suffix or 'this'!r}.")
    if not figures:
        raise DataError(f"{file} holds no figures.")
    seen: set[str] = set()
    for figure in figures:
        if figure.quantity in seen:
            raise DataError(f"{file}: {figure.quantity!r} is given twice.")
        seen.add(figure.quantity)
    return tuple(figures)


def _from_toml(text: str, file: Path) -> list[PrintedFigure]:
    try:
        # numbers come as text, so that 0.110 keeps its last digit
        content = tomllib.loads(text, parse_float=str)
    except tomllib.TOMLDecodeError as error:
        raise DataError(f"{file}: {error}; figures such as .12 or 1,764.05 need quotes.") from None
    table = content.pop("figures", {})
    if not isinstance(table, dict):
        raise DataError(f"{file}: [figures] is {table!r}; it is a table of quantities.")
    return [parse_figure(name, value, f"{file}, {name}") for name, value in _flat({**content, **table}, file)]


def _flat(table: dict[str, object], file: Path) -> list[tuple[str, str]]:
    found: list[tuple[str, str]] = []
    for name, value in table.items():
        if isinstance(value, dict):
            found += [(f"{name}:{inner}", text) for inner, text in _flat(value, file)]
        elif isinstance(value, int) and not isinstance(value, bool):
            found.append((name, str(value)))
        elif isinstance(value, str):
            found.append((name, value))
        else:
            raise DataError(f"{file}, {name}: {value!r} is no printed figure; write it in quotes.")
    return found


def _from_csv(text: str, file: Path) -> list[PrintedFigure]:
    rows = csv.DictReader(text.splitlines())
    names = [name.strip() for name in rows.fieldnames or []]
    if not {"quantity", "printed"} <= set(names):
        raise DataError(f"{file}: the first line names the columns; needed are 'quantity' and 'printed'.")
    rows.fieldnames = names
    found = []
    for row in rows:
        quantity, printed = row["quantity"], row["printed"]
        if not (quantity and printed):
            raise DataError(f"{file}, line {rows.line_num}: a quantity or its figure is missing.")
        found.append(parse_figure(quantity, printed, f"{file}, line {rows.line_num}"))
    return found
