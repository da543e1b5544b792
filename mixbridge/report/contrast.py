"""The contrast on which sentences rest: within against generalised least squares, one idiosyncratic variance."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

__all__ = ["contrast_row"]


def contrast_row(record: Mapping[str, Any]) -> Mapping[str, Any] | None:
    """Return the row of a record with this contrast; None where it has no p value.

    Parameters
    ----------
    record : mapping
        What `Study.to_dict` returns.
    """
    for row in record["contrasts"].get("rows", []):
        same = row["contrast"] == "within - gls" and row["variance"] == "one idiosyncratic variance"
        if same and isinstance(row["p_value"], float):
            found: Mapping[str, Any] = row
            return found
    return None
