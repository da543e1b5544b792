"""Where rows come from: every adapter turns what it is given into a pandas frame of the columns asked for."""

from mixbridge.sources.arrow import ArrowSource
from mixbridge.sources.files import CsvSource, ParquetSource, read_table
from mixbridge.sources.frame import FrameSource
from mixbridge.sources.opening import open_source
from mixbridge.sources.protocol import Source

__all__ = [
    "ArrowSource",
    "CsvSource",
    "FrameSource",
    "ParquetSource",
    "Source",
    "open_source",
    "read_table",
]
