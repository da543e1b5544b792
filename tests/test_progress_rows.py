"""The line that counts rows: after two seconds, on a terminal, with the rate, anew for each pass."""

import io

from mixbridge.report.progress_rows import rows_line


class Terminal(io.StringIO):
    def __init__(self, tty=True):
        super().__init__()
        self.tty = tty

    def isatty(self):
        return self.tty


def drawn(calls, tty=True):
    now = [0.0]
    stream = Terminal(tty)
    show = rows_line(stream, lambda: now[0])
    for seconds, done, total in calls:
        now[0] = seconds
        show(done, total)
    return stream.getvalue()


def test_nothing_within_two_seconds_or_without_a_terminal():
    assert drawn([(1.0, 5, 10), (1.9, 10, 10)]) == ""
    assert drawn([(3.0, 5, 10), (4.0, 10, 10)], tty=False) == ""
    assert drawn([(1.0, 5, 10), (9.0, 10, 10)]) == ""  # what ends before a line was drawn needs none


def test_rows_and_rate():
    text = drawn([(2.0, 8_000_000, 16_000_000), (4.0, 16_000_000, 16_000_000)])
    first, second = text.split("\r")[1:]
    assert first == (
        "pass 1 [===============               ] 8,000,000 of 16,000,000 rows, 4 million a second, 2 s left"
    )
    assert second.startswith("pass 1 [==============================] 16,000,000 of 16,000,000 rows")
    assert text.endswith("\n")


def test_without_a_total_rows_are_counted():
    text = drawn([(2.0, 1500, None), (2.1, 1600, None), (3.0, 3000, None), (3.0, 3000, 3000)])
    assert "pass 1: 1,500 rows, 750 a second" in text
    assert "1,600" not in text  # drawn five times a second at most
    assert text.count("\n") == 1


def test_each_pass_begins_anew():
    text = drawn([(3.0, 10, 20), (4.0, 20, 20), (5.0, 10, 20), (7.0, 15, 20), (8.0, 20, 20)])
    one, two = text.strip().split("\n")
    assert "pass 1" in one
    assert "pass 2" in two
    assert "15 of 20 rows, 5 a second" in two
    assert "pass 2 [" not in one


def test_a_pass_that_was_broken_off():
    text = drawn([(3.0, 10, 20), (4.0, 5, 20), (7.0, 8, 20)])
    assert "pass 2" in text
    assert "8 of 20 rows, 3 a second" in text


def test_a_shorter_line_covers_a_longer_one():
    text = drawn([(2.0, 1, 1000), (102.0, 500, 1000)])
    first, second = text.split("\r")[1:]
    assert len(second) >= len(first)
