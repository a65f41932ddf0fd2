"""Value change dumps (IEEE Std 1364-2005 clause 18), as simulators and some analysers write them, to spans.

A dump says only what changes, and when. A line keeps its level until its next value and is unknown before its first,
so silence is no gap here; where dumping is switched off, the dump itself says x. All times count for the grid, those
at which only other lines changed too: they show how finely the writer could tell. Several changes of a line at one
time stay in their order, as a pulse shorter than the grid.

The text is read in pieces, each scanned at once (`decode.capture.vcd_changes`); what a piece ends with and does not
complete is put ahead of the next. A last word without white space behind it may be cut short. It is taken where that
cannot change what it says: a time not before the last, a value whose code begins no other code.
"""

from __future__ import annotations

from collections.abc import Iterable, Iterator, Mapping, Sequence
from contextlib import suppress
from dataclasses import dataclass, field, replace
from fractions import Fraction
from itertools import pairwise

import numpy as np

from decode.anomalies import Anomalies
from decode.capture.sampling import Intervals
from decode.capture.stepping import Stepping, window_note
from decode.capture.stream import Source
from decode.capture.vcd_changes import FARTHEST, PADDING, SECTIONS, ChangeError, ChangeScanner, Places, Scanned
from decode.capture.vcd_definitions import Definitions, Line, Names, listed, read_definitions, refuse_binary
from decode.capture.window import Window
from decode.errors import InputError
from decode.sheet import CaptureKeys
from decode.spans import UNKNOWN, Edges, IntArray, LevelArray, Span

MOST_REVERSALS = 1000
"""Times that fall more often than this are no times."""

LONGEST_WORD = 1 << 20

_PIECE = 1 << 19
_SPACES = (b"\n", b" ", b"\r", b"\t", b"\v", b"\f")

Changes = Mapping[str, tuple[IntArray, LevelArray]]


class ChangeBuilder:
    """Changes of lines in order of time to consecutive spans, without a break between them.

    A change at the last time seen waits, since others may share that time: a span ends before it. levels: those of
    the lines before `start`, the first time; a line whose first change comes at that very time begins with it.
    """

    def __init__(self, start: int, levels: Mapping[str, int], joined: bool) -> None:
        self._first = self._start = self._last = start
        self._joined = joined
        self._levels = dict(levels)
        self._fresh = set(levels)
        nothing = (np.empty(0, np.int64), np.empty(0, np.int8))
        self._waiting: dict[str, tuple[IntArray, LevelArray]] = dict.fromkeys(levels, nothing)

    def spans(self, changes: Changes, last: int, cuts: IntArray) -> Iterator[Span]:
        """Take in changes up to `last`, the last time seen; the spans that end at each of `cuts` and at `last`."""
        for name, (times, levels) in changes.items():
            waiting = self._waiting[name]
            self._waiting[name] = (np.concatenate([waiting[0], times]), np.concatenate([waiting[1], levels]))
        self._last = last
        for stop in np.unique(np.append(cuts, last)).tolist():
            if stop > self._start:
                yield self._span(stop)

    def _span(self, stop: int) -> Span:
        span = Span(self._start, stop, {name: self._edges(name, stop) for name in self._waiting}, self._joined)
        self._start, self._joined = stop, True
        return span

    def _edges(self, name: str, stop: int) -> Edges:
        times, levels = self._waiting[name]
        count = int(np.searchsorted(times, stop))
        before: int | None = self._levels[name]
        if name in self._fresh:
            self._fresh.remove(name)
            before = None if count and times[0] == self._first else before
        edges = Edges.from_samples(times[:count], levels[:count], before)
        self._waiting[name] = (times[count:], levels[count:])
        self._levels[name] = edges.final
        return edges

    def last_span(self) -> Span:
        """What is left when the changes end, up to and with the last time seen."""
        return self._span(self._last + 1)

    def levels(self) -> dict[str, int]:
        """The level of each line behind the last span."""
        return self._levels


@dataclass(frozen=True, slots=True)
class _Reversal:
    """time: that before it, ticks. row: the physical line in which time goes back."""

    time: int
    ticks: int
    row: int


@dataclass(slots=True)
class _Tally:
    """What reading found out so far."""

    rows: int = 0
    values: int = 0
    first: int | None = None
    last: int = 0
    intervals: Intervals = field(default_factory=Intervals)
    off: list[int] = field(default_factory=list)
    silent: set[str] = field(default_factory=set)
    reversals: list[_Reversal] = field(default_factory=list)
    cut_short: str | None = None
    used: set[str] = field(default_factory=set)
    part: float = 0.0


class VcdCapture:
    """A value change dump. See `decode.capture.source.Capture` for what the attributes are; `rows` are the values of
    the lines asked for."""

    def __init__(self, source: Source, keys: CaptureKeys, rows_per_span: int) -> None:
        self.file = source.file
        self._source = source
        self._rows_per_span = rows_per_span
        self._keys = keys
        self._definitions = read_definitions(source, keys)
        self._names = Names(self._definitions.variables, self.file)
        self.layout = f"value change dump, times in {self._definitions.timescale}"
        self.tick: Fraction = self._definitions.tick
        self._window = Window.of(keys, self.tick)
        rate = None if self._definitions.counts_samples else keys.sample_rate_hz
        self._stepping = Stepping(self.tick, rate=None if rate is None else Fraction(repr(float(rate))))
        self._tally = _Tally()
        self._head = self._intervals_of_head()
        self.digest = ""

    @property
    def columns(self) -> tuple[str, ...]:
        return self._names.columns

    def column(self, line: str | int) -> str:
        """The line that an entry of [lines] means. Raises InputError where it means none, or several."""
        return self._names.column(line)

    def _intervals_of_head(self) -> Intervals:
        """The differences of the first times."""
        head = self._source.head(self._definitions.size + _PIECE)
        reading = _Reading(self.file, self._definitions, {}, self._rows_per_span, Window())
        # a fault in them is told when the spans are read
        with suppress(InputError):
            for _ in reading.feed(head[self._definitions.size :]):
                pass
        return reading.tally.intervals

    # --- known once the spans are exhausted ---

    @property
    def rows(self) -> int:
        return self._tally.rows

    @property
    def part_read(self) -> float:
        return self._tally.part

    @property
    def first(self) -> int:
        return self._tally.first or 0

    @property
    def last(self) -> int:
        return self._tally.last

    @property
    def grid(self) -> int:
        return self._stepping.grid(self._intervals)

    @property
    def _intervals(self) -> Intervals:
        return self._tally.intervals if self._tally.intervals.shortest.size else self._head

    @property
    def notes(self) -> list[str]:
        tally = self._tally
        notes = [*self._definitions.notes, *self._stepping.notes(self._intervals)]
        notes += window_note(self._keys, self._window)
        unused = [column for column in self.columns if column not in tally.used]
        if tally.used and unused:
            notes.append(f"lines not used: {listed(unused)}")
        if self._names.unlisted:
            notes.append(f"{self._names.unlisted} bits of vectors are not listed; they can be named, such as bus[3]")
        kinds = sorted(self._definitions.without_levels.items())
        if kinds:
            notes.append(f"variables without levels, not read: {', '.join(f'{count} {kind}' for kind, count in kinds)}")
        if tally.silent:
            silent = [column for column in self.columns if column in tally.silent]
            notes.append(f"no value at all for: {listed(silent)}")
        if tally.off:
            first = f"{float(tally.off[0] * self.tick):.6g}"
            times = "once" if len(tally.off) == 1 else f"{len(tally.off)} times, first"
            notes.append(f"dumping was switched off {times} at {first} s: lines are unknown until it is on again")
        if tally.cut_short is not None:
            notes.append(tally.cut_short)
        return notes

    @property
    def anomalies(self) -> list[Anomalies]:
        found = [one for one in self._tally.reversals if self._window.holds(one.time)]
        if not found:
            return []
        return [
            Anomalies(
                "time_reversal",
                np.array([one.time for one in found], np.int64),
                evidence={
                    "file_line": np.array([one.row for one in found], np.int64),
                    "back_s": np.array([float(one.ticks * self.tick) for one in found]),
                },
            )
        ]

    # --- reading ---

    def spans(self, columns: Sequence[str]) -> Iterator[Span]:
        """The capture as consecutive spans with the edges of `columns` (names as `column` gives them).

        Each call reads the file anew. Raises InputError, at the latest when the word at fault is reached.
        """
        lines = {name: self._names.line(name) for name in (self.column(name) for name in columns)}
        reading = _Reading(self.file, self._definitions, lines, self._rows_per_span, self._window)
        self._tally = reading.tally
        stream = self._source.open()
        try:
            skip = self._definitions.size
            while not reading.is_over and (piece := stream.read(_PIECE)):
                self._tally.part = self._source.part(stream)
                yield from reading.feed(piece[skip:])
                skip = max(0, skip - len(piece))
            yield from reading.finish()
            stream.drain()
            self.digest = stream.digest
        finally:
            stream.close()


class _Reading:
    """One pass over the value changes of a dump, for `lines` by their columns."""

    def __init__(
        self, file: str, definitions: Definitions, lines: Mapping[str, Line], rows_per_span: int, window: Window
    ) -> None:
        self._file = file
        self._tick = definitions.tick
        self._window = window
        self._had_span = False
        self._is_joined = True
        """Whether the next span within the window continues the one before it."""
        self.is_over = False
        self._codes = definitions.codes
        self._scanner = ChangeScanner(definitions.codes, lines)
        self._rows_per_span = rows_per_span
        self._row = definitions.row
        """The physical line in which what is left of the text begins."""
        self._left = b""
        self._builder: ChangeBuilder | None = None
        self.tally = _Tally(silent=set(lines), used=set(lines))

    def feed(self, piece: bytes) -> Iterator[Span]:
        """Take in the next piece of the file."""
        text = self._left + piece
        stop = max(text.rfind(space) for space in _SPACES) + 1
        self._left = text[stop:]
        if stop:
            yield from self._told(self._take(text[:stop]))
        if len(self._left) > LONGEST_WORD:
            raise InputError(
                "a word without an end: this is not a value change dump",
                file=self._file,
                row=self._row,
                found=f"more than {LONGEST_WORD} bytes",
                expected="times and values between white space",
                hint="write the dump again",
            )

    def finish(self) -> Iterator[Span]:
        """The file is over."""
        words = [] if self.is_over else self._left.split()
        if words and (words == [b"$end"] if self._scanner.in_comment else self._is_whole(words)):
            yield from self._told(self._take(self._left + b"\n"))
        elif words:
            shown = words[0].decode("utf-8", "replace")[:40]
            self.tally.cut_short = f"the last word, {shown!r} in line {self._row}, is cut short and was dropped"
        elif self._scanner.in_comment:
            self.tally.cut_short = "the dump ends within a comment"
        if not self.tally.values or self._builder is None:
            raise InputError(
                "the dump holds no value change",
                file=self._file,
                expected="times and values behind the definitions",
                hint="run the simulation or the capture again, for longer",
            )
        yield from self._told([self._builder.last_span()])
        if not self._had_span:
            raise self._outside()
        self.tally.first, self.tally.last = map(self._window.clipped, (self.tally.first or 0, self.tally.last))

    def _told(self, spans: Iterable[Span]) -> Iterator[Span]:
        """What the window leaves of the spans."""
        for span in spans:
            self._is_joined &= span.joined
            cut = self._window.maybe_cut(span)
            if cut is not None:
                yield replace(cut, joined=self._is_joined or not self._had_span)
                self._had_span = self._is_joined = True

    def _outside(self) -> InputError:
        first, last = (float((end or 0) * self._tick) for end in (self.tally.first, self.tally.last))
        return InputError(
            "no time of the dump lies in the window",
            file=self._file,
            found=f"times from {first:.12g} s on" if self.is_over else f"times from {first:.12g} s to {last:.12g} s",
            expected="a window, --from and --to, in which there are times",
            hint="times are those of the dump's own axis",
        )

    def _is_whole(self, words: Sequence[bytes]) -> bool:
        """Whether these last words of the file, without white space behind them, can hardly be part of longer ones."""
        first, last = words[0], words[-1]
        if self._left[-1:] in _SPACES:  # a value whose code never came
            return False
        if len(words) == 1 and first.startswith(b"#"):
            return first[1:].isdigit() and int(first[1:20]) >= self._scanner.time
        if len(words) == 1 and first.startswith(b"$"):
            return first in (b"$end", *SECTIONS)
        code = last if len(words) > 1 else last[1:]
        longer = any(other != code and other.startswith(code) for other in self._codes)
        return code in self._codes and not longer

    def _take(self, text: bytes) -> Iterator[Span]:
        """Take in whole words."""
        refuse_binary(text, self._row, self._file)
        try:
            scanned = self._scanner.scan(PADDING[:1] + text + PADDING)
        except ChangeError as error:
            raise self._fault(error, text) from None
        row, used = self._row, scanned.used - 1
        self._left = text[used:] + self._left
        self._row += text.count(b"\n", 0, used)
        yield from self._spans(scanned, text, row)

    def _fault(self, error: ChangeError, text: bytes) -> InputError:
        word = text[error.place - 1 :].split(maxsplit=1)[0]
        return InputError(
            error.problem,
            file=self._file,
            row=self._row + text.count(b"\n", 0, error.place - 1),
            found=repr(word.decode("utf-8", "replace")[:60]),
            expected=error.expected,
            hint=error.hint,
        )

    # --- to spans ---

    def _spans(self, scanned: Scanned, text: bytes, row: int) -> Iterator[Span]:
        moments, tally = scanned.moments, self.tally
        start = 0 if self._builder is not None or scanned.early else 1
        if start == moments.size:
            return
        tally.values += scanned.count
        if self._builder is None:
            tally.first = tally.last = int(moments[start])
            self._builder = ChangeBuilder(tally.first, dict.fromkeys(scanned.changes, UNKNOWN), joined=True)
        if self._window.stop is not None and (moments[start:] >= self._window.stop).any():
            moments = moments[: start + int(np.argmax(moments[start:] >= self._window.stop)) + 1]
            self.is_over = True
        steps = np.diff(moments[start:])
        tally.intervals.add(np.maximum(steps, 0))
        tally.first = min(tally.first or 0, int(moments[start:].min()))
        tally.last = max(tally.last, int(moments[start:].max()))
        tally.off += [int(moments[place]) for place in scanned.off if place < moments.size]
        falls = np.flatnonzero(steps < 0) + start + 1
        for begin, end in pairwise([start, *falls.tolist(), moments.size]):
            if begin != start:
                self._note_reversal(moments, begin, row + text.count(b"\n", 0, int(scanned.places[begin])))
                yield self._builder.last_span()
                self._builder = ChangeBuilder(int(moments[begin]), self._builder.levels(), joined=False)
            changes = {name: _among(begin, end, moments, *known) for name, known in scanned.changes.items()}
            yield from self._builder.spans(changes, int(moments[end - 1]), self._cuts(changes))

    def _cuts(self, changes: Changes) -> IntArray:
        """The times of every so many changes, counted through the whole capture."""
        times = np.sort(np.concatenate([np.empty(0, np.int64), *(times for times, _ in changes.values())]))
        if not self._window.is_open:
            times = times[slice(*np.searchsorted(times, [self._window.start or 0, self._window.clipped(FARTHEST)]))]
        first = (-self.tally.rows - 1) % self._rows_per_span
        self.tally.rows += times.size
        self.tally.silent -= {name for name, (times, _) in changes.items() if times.size}
        return times[first :: self._rows_per_span]

    def _note_reversal(self, moments: IntArray, place: int, row: int) -> None:
        time = int(moments[place - 1])
        self.tally.reversals.append(_Reversal(time, time - int(moments[place]), row))
        if len(self.tally.reversals) > MOST_REVERSALS:
            raise InputError(
                f"the time goes back again and again, {len(self.tally.reversals)} times up to here",
                file=self._file,
                row=row,
                expected="times that rise",
                hint="write the dump again",
            )


def _among(begin: int, end: int, moments: IntArray, at: Places, levels: LevelArray) -> tuple[IntArray, LevelArray]:
    """(times, levels) of the changes at the moments from `begin` up to `end`."""
    first, last = np.searchsorted(at, [begin, end])
    return moments[at[first:last]], levels[first:last]
