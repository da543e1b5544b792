"""The examples of the page on data beyond memory run as they stand."""

import doctest
from pathlib import Path

import pytest

pytest.importorskip("pyarrow")
PAGE = Path(__file__).parents[1] / "docs" / "bigdata.md"


def test_examples():
    found = doctest.testfile(
        str(PAGE),
        module_relative=False,
        optionflags=doctest.NORMALIZE_WHITESPACE | doctest.ELLIPSIS,
        encoding="utf-8",
    )
    assert found.attempted > 15
    assert found.failed == 0
