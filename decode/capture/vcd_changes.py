"""The value changes of a dump: a piece of text to times and levels, all of its words at once.

What a word means depends on the words before it, since an identifier code may look like anything. Only two kinds of
word say more than themselves: one that begins with b, r or s is a value whose code is the next word, and $comment
takes all words up to $end. So comments are taken out first; then, in a run of words that each begin with such a
letter, every second one is a code; and what is left of the words is what its first character says:

    0! 1! x!      a level and, without a space, the code of its line
    b10x "        a value of several bits, and the code
    r1.5 "        a number, and the code: no level
    #100          the time of what follows
    $dumpvars     values of all lines follow, up to $end

A value is written without the bits on the left that follow from its first one: 0 after 0 or 1, else that one again
(IEEE Std 1364-2005 clause 18.2.2). Of the nine levels of std_logic_1164, which some simulators write, L and H are
read as 0 and 1, as that package's To_X01 does; whatever is neither is unknown.
"""

from __future__ import annotations

from bisect import bisect_right
from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from decode.capture.vcd_definitions import Line
from decode.spans import UNKNOWN, BoolArray, IntArray, LevelArray

PADDING = b" " * 9
"""What must stand ahead of (one byte) and behind (all) the text that is scanned."""

FARTHEST = 2**62
"""No time is this many ticks or more, so that the difference of two times fits an int64."""

SECTIONS = (b"$dumpvars", b"$dumpall", b"$dumpoff", b"$dumpon")

_BAD, _LEVEL, _VECTOR, _OTHER, _TIME, _KEYWORD = range(6)
_NONE = 3
"""Not a level."""

_PLAIN_DIGITS = 18
_SHORT = 8
_TINY = 2

Characters = npt.NDArray[np.uint8]
Places = npt.NDArray[np.intp]


def _table(default: int, entries: Mapping[str, int]) -> npt.NDArray[np.int8]:
    table = np.full(256, default, np.int8)
    for letters, value in entries.items():
        table[np.frombuffer(letters.encode(), np.uint8)] = value
    return table


_LEVELS = _table(_NONE, {"0Ll": 0, "1Hh": 1, "xXzZuUwW-": UNKNOWN})
_EXTENSIONS = _table(_NONE, {"01LlHh": 0, "xXzZuUwW-": UNKNOWN})
_KINDS = _table(_BAD, {"01xXzZuUwWlLhH-": _LEVEL, "bB": _VECTOR, "rRsS": _OTHER, "#": _TIME, "$": _KEYWORD})
_MASKS = np.array([(1 << 8 * count) - 1 for count in range(_SHORT + 1)], np.uint64)


@dataclass(frozen=True, slots=True)
class Scanned:
    """What a piece of text says.

    moments: (m + 1,) the time at its beginning, then each time it sets, in ticks and in order. places: (m + 1,) where
    in the text each of these stands. changes: by column, for each of its values in order, at which of the moments it
    came, and the level. count: values of all variables.
    early: whether one of them comes ahead of the first time. off: moments at which dumping was switched off. used: how
    much of the text was taken; what is left of it must come again, with what follows.
    """

    moments: IntArray
    places: Places
    changes: dict[str, tuple[Places, LevelArray]]
    count: int
    early: bool
    off: list[int]
    used: int


class ChangeError(ValueError):
    """A word that cannot be there. place: where in the text it stands; the others as in an InputError."""

    def __init__(self, place: int, problem: str, expected: str, hint: str) -> None:
        super().__init__(problem)
        self.place = place
        self.problem = problem
        self.expected = expected
        self.hint = hint


class ChangeScanner:
    """Reads the value changes of `lines`, by their columns, piece by piece; `codes` are those of all variables.

    time: the last time set; 0 before there was one. in_comment: whether the text so far ends within a comment.
    """

    def __init__(self, codes: Mapping[bytes, int], lines: Mapping[str, Line]) -> None:
        self.time = 0
        self.in_comment = False
        self._codes = _Codes(codes)
        self._lines = lines

    def scan(self, text: bytes) -> Scanned:
        """What `text`, whole words between spaces (see PADDING), says. Raises ChangeError with the first bad word."""
        words = self._words(text)
        faults = list(words.faults())
        moments = self._moments(words, faults)
        numbers = self._codes.look_up(text, *words.codes())
        if (numbers < 0).any():
            faults.append(words.unknown(int(np.argmax(numbers < 0))))
        at = np.cumsum(words.is_time)[words.changes]
        changes = {}
        for column, line in self._lines.items():
            mine = np.flatnonzero(numbers == line.variable)
            levels = words.levels(words.changes[mine], line.bit)
            if (levels == _NONE).any():
                faults.append(words.no_level(int(words.changes[mine[np.argmax(levels == _NONE)]]), column))
            changes[column] = (at[mine], levels)
        if faults:
            raise min(faults, key=lambda fault: fault.place)
        self.time = int(moments[-1])
        places = np.concatenate([[0], words.starts[words.is_time]])
        return Scanned(
            moments, places, changes, int(numbers.size), bool((at[:1] == 0).any()), words.switched_off(), words.used
        )

    def _words(self, text: bytes) -> _Words:
        characters = np.frombuffer(text, np.uint8)
        space = characters <= ord(" ")
        bounds = np.flatnonzero(space[1:] != space[:-1]) + 1
        starts, stops = bounds[::2], bounds[1::2]
        if self.in_comment or b"$comment" in text:
            kept = self._without_comments(text, starts, stops)
            starts, stops = starts[kept], stops[kept]
        return _Words(text, characters, starts, stops)

    def _without_comments(self, text: bytes, starts: Places, stops: Places) -> BoolArray:
        """(n,) whether each word belongs to no comment."""
        kinds = _KINDS[np.frombuffer(text, np.uint8)[starts]]
        opens, closes = _spelt(text, starts, stops, kinds, b"$comment"), _spelt(text, starts, stops, kinds, b"$end")
        kept = np.ones(starts.size, np.bool_)
        begin = 0
        """The first word behind the comments so far."""
        for word in [-1, *opens] if self.in_comment else opens:
            if word >= 0 and (word < begin or _is_code(kinds, begin, word)):
                continue
            close = bisect_right(closes, word)
            self.in_comment = close == len(closes)
            begin = starts.size if self.in_comment else closes[close] + 1
            kept[max(word, 0) : begin] = False
        return kept

    def _moments(self, words: _Words, faults: list[ChangeError]) -> IntArray:
        which = np.flatnonzero(words.is_time)
        times = _decimals(words.characters, words.starts[which] + 1, words.stops[which])
        if (times < 0).any():
            faults.append(words.bad_time(int(which[np.argmax(times < 0)])))
        return np.concatenate([[self.time], times])


def _spelt(text: bytes, starts: Places, stops: Places, kinds: npt.NDArray[np.int8], word: bytes) -> list[int]:
    """Which of the words are `word`, a keyword."""
    alike = np.flatnonzero((kinds == _KEYWORD) & (stops - starts == len(word)))
    return [int(one) for one in alike if text[starts[one] : stops[one]] == word]


def _is_code(kinds: npt.NDArray[np.int8], begin: int, word: int) -> bool:
    """Whether the word is the code of the value before it: behind an odd run of words that look like values."""
    before = word
    while before > begin and kinds[before - 1] in (_VECTOR, _OTHER):
        before -= 1
    return bool((word - before) % 2)


class _Words:
    """The words of a text without comments. changes: which of them end a value change, with its code."""

    def __init__(self, text: bytes, characters: Characters, starts: Places, stops: Places) -> None:
        kinds = _KINDS[characters[starts]]
        opening = (kinds == _VECTOR) | (kinds == _OTHER)
        is_code = np.zeros(starts.size, np.bool_)
        is_code[1:] = opening[:-1]
        if (is_code & opening).any():
            number = np.arange(starts.size)
            run = number - np.maximum.accumulate(np.where(opening, -1, number))
            is_code[1:] = opening[:-1] & (run[:-1] % 2 == 1)
        self.used = len(text) - len(PADDING)
        if starts.size and opening[-1] and not is_code[-1]:  # its code is still to come
            self.used = int(starts[-1])
            starts, stops, kinds, is_code = starts[:-1], stops[:-1], kinds[:-1], is_code[:-1]
        self.text, self.characters, self.starts, self.stops = text, characters, starts, stops
        self._kinds, self._is_code = np.where(is_code, np.int8(_VECTOR), kinds), is_code
        self._is_level = (kinds == _LEVEL) & ~is_code
        self._before = kinds
        self.is_time = (kinds == _TIME) & ~is_code
        self.changes = np.flatnonzero(self._is_level | is_code)
        self._keywords = np.flatnonzero((kinds == _KEYWORD) & ~is_code)

    def word(self, number: int) -> str:
        return self.text[self.starts[number] : self.stops[number]].decode("utf-8", "replace")

    def codes(self) -> tuple[Places, Places]:
        """Where the code of each change begins and ends."""
        return self.starts[self.changes] + self._is_level[self.changes], self.stops[self.changes]

    def levels(self, changes: Places, bit: int) -> LevelArray:
        """(n,) the level of a bit, counted from the right, after each of n of the changes; _NONE where it is none."""
        begin, end = self.starts[changes], self.starts[changes] + 1
        vector = np.flatnonzero(~self._is_level[changes])
        value = changes[vector] - 1
        begin[vector], end[vector] = self.starts[value] + 1, self.stops[value]
        place = end - 1 - bit
        written = place >= begin
        character = self.characters[np.where(written, place, begin)]
        levels = np.where(written, _LEVELS[character], _EXTENSIONS[character])
        levels[vector[(self._before[value] == _OTHER) | (end[vector] == begin[vector])]] = _NONE
        return levels

    def switched_off(self) -> list[int]:
        """At which moments (0: the beginning of the text) dumping was switched off."""
        off = [int(word) for word in self._keywords if self.word(int(word)) == "$dumpoff"]
        return [int(np.count_nonzero(self.is_time[:word])) for word in off]

    # what cannot be there

    def faults(self) -> Sequence[ChangeError]:
        """The first word that is nothing, and the first keyword that has no place here."""
        nothing = np.flatnonzero(self._kinds == _BAD)[:1]
        known = (b"$end", *SECTIONS)
        wrong = [one for one in self._keywords if self.text[self.starts[one] : self.stops[one]] not in known][:1]
        return [
            *(
                ChangeError(
                    int(self.starts[word]),
                    "a word that is no value change",
                    "a time such as #100, a value such as 0! or b10 !, or $dumpvars and the like",
                    "repair or remove it",
                )
                for word in nothing
            ),
            *(
                ChangeError(
                    int(self.starts[word]),
                    "a keyword that has no place among value changes",
                    "$comment, $dumpvars, $dumpall, $dumpoff, $dumpon, $end",
                    "two dumps put one behind the other must be checked one by one",
                )
                for word in wrong
            ),
        ]

    def unknown(self, change: int) -> ChangeError:
        word = int(self.changes[change])
        begin, end = (int(one[change]) for one in self.codes())
        if begin == end:
            return ChangeError(
                int(self.starts[word]),
                "a value without the code of its line",
                "a value such as 0!",
                "write the dump again",
            )
        code = self.text[begin:end].decode("utf-8", "replace")[:60]
        return ChangeError(
            begin,
            f"a value for a code that no $var defines: {code}",
            "a code from the definitions",
            "write the dump again",
        )

    def no_level(self, word: int, column: str) -> ChangeError:
        place = int(self.starts[word if self._is_level[word] else word - 1])
        return ChangeError(
            place, f"a value of line {column} that is no level", "0, 1, x or z", "name another line in [lines]"
        )

    def bad_time(self, word: int) -> ChangeError:
        begin, end = int(self.starts[word]) + 1, int(self.stops[word])
        if self.text[begin:end].isdigit():
            return ChangeError(
                begin - 1,
                "a time too far from zero",
                f"fewer than {FARTHEST} of its units",
                "write the dump with a coarser timescale",
            )
        return ChangeError(begin - 1, "a time that is not a whole number", "a time such as #100", "repair or remove it")


class _Codes:
    """Identifier codes to variable numbers. Codes of up to eight bytes are compared as one integer."""

    def __init__(self, codes: Mapping[bytes, int]) -> None:
        self._known = codes
        short = sorted(
            (int.from_bytes(code, "little"), number) for code, number in codes.items() if len(code) <= _SHORT
        )
        self._keys = np.array([key for key, _ in short] or [0], np.uint64)
        self._numbers = np.array([number for _, number in short] or [-1], np.int32)
        self._tiny = np.full(1 << 8 * _TINY, -1, np.int32)
        tiny = [(key, number) for key, number in short if key < self._tiny.size]
        self._tiny[[key for key, _ in tiny]] = [number for _, number in tiny]

    def look_up(self, text: bytes, begins: Places, ends: Places) -> npt.NDArray[np.int32]:
        """(n,) the number of each of n codes in `text`, -1 for one that is not known."""
        lengths = ends - begins
        eights: npt.NDArray[np.uint64] = np.ndarray((len(text) - _SHORT + 1,), "<u8", text, 0, (1,))
        keys = eights[begins] & _MASKS[np.minimum(lengths, _SHORT)]
        if lengths.max(initial=0) <= _TINY:
            tiny: npt.NDArray[np.int32] = self._tiny[keys.astype(np.intp)]
            return tiny
        found = np.minimum(np.searchsorted(self._keys, keys), self._keys.size - 1)
        numbers = np.where((self._keys[found] == keys) & (lengths <= _SHORT), self._numbers[found], np.int32(-1))
        for one in np.flatnonzero(lengths > _SHORT):
            numbers[one] = self._known.get(text[begins[one] : ends[one]], -1)
        return numbers.astype(np.int32)


def _decimals(characters: Characters, begins: Places, ends: Places) -> IntArray:
    """(n,) the whole numbers written at n places; -1 for what is none, or too far from zero."""
    lengths = ends - begins
    total = np.zeros(begins.size, np.int64)
    good = lengths > 0
    for digit in range(min(int(lengths.max(initial=0)), _PLAIN_DIGITS)):
        here = digit < lengths
        values = characters[begins + np.where(here, digit, 0)] - np.uint8(ord("0"))
        good &= ~here | (values <= 9)
        total = np.where(here, 10 * total + values, total)
    for one in np.flatnonzero(good & (lengths > _PLAIN_DIGITS)):
        text = characters[begins[one] : ends[one]].tobytes()
        is_number = text.isdigit() and len(text.lstrip(b"0")) <= _PLAIN_DIGITS + 1
        number = int(text) if is_number else FARTHEST
        good[one] = number < FARTHEST
        total[one] = min(number, FARTHEST)
    return np.where(good, total, np.int64(-1))
