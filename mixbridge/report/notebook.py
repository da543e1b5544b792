"""What a notebook shows: the first screen of a study, and tables."""

from __future__ import annotations

import numbers
from typing import Any

import numpy as np
import pandas as pd

from mixbridge.display import fragment, preformatted, table
from mixbridge.report.cells import cell_text
from mixbridge.report.screen import study_screen

__all__ = ["study_html", "table_html"]

MOST = 1000
"""A table of more rows than this is named, not shown."""


def study_html(study: Any) -> str:
    """Return the first screen of a study, with its ledger and components to unfold.

    Parameters
    ----------
    study : Study

    Returns
    -------
    str
        A fragment of HTML without script.
    """
    parts = [preformatted(study_screen(study))]
    for name, title in (
        ("ledger", "Every term by every route"),
        ("components", "Variance components by route"),
    ):
        frame = getattr(study, name)
        if len(frame) <= MOST:
            shown = _table(frame, f"study.{name}", 4)
            parts.append(f"<details><summary>{title}: {len(frame)} rows</summary>{shown}</details>")
        else:
            parts.append(f"<p>{title}: study.{name}, {len(frame)} rows.</p>")
    return fragment(*parts)


def table_html(frame: pd.DataFrame, caption: str, digits: int = 4) -> str:
    """Return a table for a notebook.

    Parameters
    ----------
    frame : DataFrame
        Its index comes first, unless it only counts the rows.
    caption : str
        Plain text.
    digits : int
        Significant digits.

    Returns
    -------
    str
        A fragment of HTML without script. What the cells hold is shown and never read as markup.

    Examples
    --------
    >>> import pandas as pd
    >>> page = table_html(pd.DataFrame({"term": ["a<b"], "estimate": [0.123456]}), "Slopes")
    >>> "a&lt;b" in page, "0.1235" in page
    (True, True)
    """
    return fragment(_table(frame, caption, digits))


def _table(frame: pd.DataFrame, caption: str, digits: int) -> str:
    counted = isinstance(frame.index, pd.RangeIndex) and frame.index.name is None
    whole = frame if counted else frame.reset_index()
    header = [str(name) for name in whole.columns]
    right = [at for at, kind in enumerate(whole.dtypes) if pd.api.types.is_numeric_dtype(kind)]
    rows = [[_shown(cell, digits) for cell in row] for row in whole.itertuples(index=False, name=None)]
    return table(caption, header, rows, right)


def _shown(cell: object, digits: int) -> str:
    if cell is None or cell is pd.NA:
        return "-"
    if isinstance(cell, bool | np.bool_):
        return cell_text(bool(cell), digits)
    if isinstance(cell, numbers.Integral):
        return cell_text(int(cell), digits)
    if isinstance(cell, numbers.Real):
        return cell_text(float(cell), digits)
    return cell_text(str(cell), digits)
