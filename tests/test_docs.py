"""The examples in the documentation run as they stand."""

import doctest
from pathlib import Path

import pytest

DOCS = Path(__file__).parents[1] / "docs"


@pytest.mark.parametrize(("page", "least"), [("howto.md", 15), ("moments.md", 8)])
def test_examples_of_a_page(page, least):
    found = doctest.testfile(
        str(DOCS / page),
        module_relative=False,
        optionflags=doctest.NORMALIZE_WHITESPACE | doctest.ELLIPSIS | doctest.IGNORE_EXCEPTION_DETAIL,
        encoding="utf-8",
    )
    assert found.attempted > least
    assert found.failed == 0
