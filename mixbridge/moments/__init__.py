"""Moments of a panel: what is left of the rows once they have been read."""

from mixbridge.moments.closed import Moments, close, collect, merge_closed
from mixbridge.moments.columns import Span, column_table, dependency_text, noise, span_of
from mixbridge.moments.factors import factor_from_rows, stack_factors, upper_factor
from mixbridge.moments.opened import Block, Blocks, OpenMoments, gather, within_factor

__all__ = [
    "Block",
    "Blocks",
    "Moments",
    "OpenMoments",
    "Span",
    "close",
    "collect",
    "column_table",
    "dependency_text",
    "factor_from_rows",
    "gather",
    "merge_closed",
    "noise",
    "span_of",
    "stack_factors",
    "upper_factor",
    "within_factor",
]
