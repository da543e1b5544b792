"""The progress line: nothing before two seconds, nothing off a terminal, one line that ends."""

import io
import sys
import types

import pytest

from mixbridge.report.progress import progress_line


class Terminal(io.StringIO):
    def isatty(self):
        return True


def drawn(stream, times):
    clock = iter([0.0, *times])
    show = progress_line("replicates", stream, lambda: next(clock))
    for done in range(1, len(times) + 1):
        show(done, len(times))
    return stream.getvalue()


def test_a_quick_task_shows_nothing():
    assert drawn(Terminal(), [0.5, 1.0, 1.9]) == ""


def test_a_task_that_ends_just_after_two_seconds_shows_nothing():
    assert drawn(Terminal(), [0.5, 1.0, 2.1]) == ""


@pytest.mark.parametrize(("stream", "lines"), [(Terminal(), 2), (io.StringIO(), 0)])
def test_a_slow_task_is_drawn_on_a_terminal_only(stream, lines):
    text = drawn(stream, [1.0, 3.0, 4.0])
    assert text.count("\r") == lines
    if lines:
        assert "2 of 3, 2 s left" in text
        assert text.endswith("\n")


def test_a_slow_task_is_drawn_in_a_notebook_too(monkeypatch):
    shell = type("ZMQInteractiveShell", (), {})()
    monkeypatch.setitem(sys.modules, "IPython", types.SimpleNamespace(get_ipython=lambda: shell))
    assert drawn(io.StringIO(), [1.0, 3.0, 4.0]).count("\r") == 2
    monkeypatch.setitem(sys.modules, "IPython", types.SimpleNamespace(get_ipython=lambda: None))
    assert drawn(io.StringIO(), [1.0, 3.0, 4.0]) == ""
