"""Text in a width. Expected texts are worked out by hand."""

from __future__ import annotations

from hypothesis import given
from hypothesis import strategies as st

from decode.report.progress import Progress
from decode.report.text import aligned, in_ascii, visible, wrapped


@given(st.text(st.characters(codec="ascii", exclude_categories=["Cc"])), st.integers(20, 120), st.integers(0, 12))
def test_wrapping_keeps_to_the_width_and_loses_nothing(text: str, width: int, indent: int) -> None:
    """Every line fits beside its indent, and the words without their spaces are all there in order."""
    lines = wrapped(text, width, indent, indent)
    assert all(len(line) + indent <= width for line in lines)
    assert "".join("".join(lines).split()) == "".join(text.split())


def test_a_number_and_its_unit_stay_on_one_line() -> None:
    """ "delay of 104 ns" at 12 columns would break after 104."""
    assert wrapped("delay of 104 ns ± 10 ns", 12, 0, 0) == ["delay of", "104 ns", "± 10 ns"]
    assert wrapped("below 0.015 % here", 11, 0, 0) == ["below", "0.015 %", "here"]


def test_columns_are_as_wide_as_their_widest_cell() -> None:
    assert aligned([["a", "1"], ["bcd", "22"]]) == ["a     1", "bcd  22"]
    assert aligned([["a", "1"], ["bcd", "22"]], left=(0, 1), gap=1) == ["a   1 ", "bcd 22"]
    assert aligned([]) == []


def test_symbols_are_spelt_out() -> None:
    assert in_ascii("1 µs ± 2°, 90°e, 3° é") == "1 us +/- 2 deg, 90 el.deg, 3 deg ?"


def test_control_characters_become_visible_and_line_feeds_stay() -> None:
    assert visible("a\x1b[0m\tb\nc") == "a?[0m?b\nc"


class _Stream:
    """A stream that is a terminal or not."""

    def __init__(self, terminal: bool) -> None:
        self.terminal = terminal
        self.text = ""

    def isatty(self) -> bool:
        return self.terminal

    def write(self, text: str) -> int:
        self.text += text
        return len(text)

    def flush(self) -> None:
        pass


def _told(stream: _Stream, times: list[float]) -> str:
    """What stands on the stream after a report of 10 %, 20 %, ... at each of `times` after the start at 0 s."""
    clock = iter([0.0, *times])
    progress = Progress(stream, lambda: next(clock))  # type: ignore[arg-type]
    for number, _ in enumerate(times, 1):
        progress(number / 10, "reading")
    progress.done()
    return stream.text


def test_progress_is_silent_for_the_first_second() -> None:
    assert _told(_Stream(True), [0.2, 0.5, 0.9]) == ""


def test_progress_on_a_terminal_writes_over_one_line_and_wipes_it() -> None:
    """1.1 s is shown, 1.2 s comes too soon after it, 1.4 s is shown."""
    text = _told(_Stream(True), [1.1, 1.2, 1.4])
    assert text.split("\r")[1].strip() == "10% reading"
    assert text.split("\r")[2].strip() == "30% reading"
    assert text.endswith(" \r")
    assert "20%" not in text
    assert "\n" not in text


def test_progress_in_a_log_file_is_a_line_every_ten_seconds() -> None:
    assert _told(_Stream(False), [5.0, 10.0, 15.0, 20.0]) == " 20% reading\n 40% reading\n"
