"""The definitions of a value change dump: what its times count, and which lines it holds.

A dump (IEEE Std 1364-2005 clause 18) is free text: words separated by white space. Its first part defines variables,
each with a size in bits, an identifier code that the value changes use, and a name inside nested scopes; one code may
have several names. Every bit of a variable of levels is a line here.

A code may be any printable characters and so look like a keyword; a word is therefore what its place says, never
what it looks like. A name stands without its scopes where that leaves one meaning, else with all of them, joined by
dots. The bits of a vector are numbered as its range says, down to zero where it has none.
"""

from __future__ import annotations

import re
from collections import Counter
from collections.abc import Iterator, Sequence
from dataclasses import dataclass, field
from fractions import Fraction

from decode.capture.stream import Source
from decode.errors import InputError, maybe_nearest
from decode.sheet import CaptureKeys

MOST_BYTES = 1 << 28
"""No definitions are longer, to bound memory."""

MOST_BITS = 4096
"""Where a dump holds more lines, those of its vectors are not listed; they can still be named."""

MOST_SHOWN = 12
"""Names in a message."""

KEYWORDS = (b"$date", b"$version", b"$timescale", b"$comment", b"$scope", b"$upscope", b"$var", b"$enddefinitions")
NO_LEVELS = ("real", "realtime", "string", "event")
"""Kinds of variable that are no lines (event: its values say nothing; string: an extension of simulators)."""

_UNITS = {"s": 0, "ms": 3, "us": 6, "ns": 9, "ps": 12, "fs": 15}
_HEAD = 1 << 18
_LOOK = 4096
_MARK = b"\xef\xbb\xbf"
_WORD = re.compile(rb"[^\x00-\x20]+")
_TIMESCALE = re.compile(r"(\d{1,9})(s|ms|us|ns|ps|fs)")
_RANGE = re.compile(r"(.+)\[(-?\d{1,9})(?::(-?\d{1,9}))?\]", re.DOTALL)
_SIZE = re.compile(rb"\d{1,9}")


@dataclass(frozen=True, slots=True)
class Line:
    """One bit of one variable. variable: the number of its code. bit: its place in a value, 0 the rightmost."""

    variable: int
    bit: int


@dataclass(frozen=True, slots=True)
class Variable:
    """A variable of levels. number: that of its code. first, step: index of the rightmost bit, and how the next bits
    to the left count; step 0 for a name that stands for one line as it is."""

    scope: tuple[str, ...]
    name: str
    size: int
    number: int
    first: int
    step: int

    def suffix(self, bit: int) -> str:
        return f"[{self.first + bit * self.step}]" if self.step else ""

    def maybe_bit(self, index: int) -> int | None:
        """The place of the bit with this index, counted from the right."""
        bit = (index - self.first) * self.step
        return bit if self.step and 0 <= bit < self.size else None


@dataclass(slots=True)
class Definitions:
    """What the first part of a dump says.

    tick: seconds. timescale: the same as a text. codes: the identifier code of each variable number. size: bytes of
    this part. row: the physical line in which it ends. variables: those of levels. without_levels: how many variables
    there are of each other kind. counts_samples: its times are taken for numbers of samples.
    """

    tick: Fraction = Fraction(0)
    timescale: str = ""
    codes: dict[bytes, int] = field(default_factory=dict)
    size: int = 0
    row: int = 1
    variables: list[Variable] = field(default_factory=list)
    without_levels: Counter[str] = field(default_factory=Counter)
    counts_samples: bool = False
    notes: list[str] = field(default_factory=list)

    def number(self, code: bytes) -> int:
        return self.codes.setdefault(code, len(self.codes))


def is_dump(source: Source) -> bool:
    """Whether a file is meant as a value change dump: by its first word, which is one of the keywords, or its name."""
    name = source.file.lower().removesuffix(".gz").removesuffix(".zst")
    return name.endswith(".vcd") or _maybe_first_word(source.head(_LOOK)) in KEYWORDS


def _maybe_first_word(head: bytes) -> bytes | None:
    first = _WORD.search(head.removeprefix(_MARK))
    return None if first is None else first.group()


# --- reading ---------------------------------------------------------------------------------------------------------


@dataclass(frozen=True, slots=True)
class _Word:
    """text, the physical line it stands in, and how many bytes of the file end with it."""

    text: bytes
    row: int
    stop: int


class _EndedEarlyError(Exception):
    """The definitions go on behind the bytes given."""


def _words(head: bytes, file: str) -> Iterator[_Word]:
    start = len(_MARK) if head.startswith(_MARK) else 0
    row, counted = 1, 0
    for word in _WORD.finditer(head, start):
        row += head.count(b"\n", counted, word.start())
        counted = word.start()
        yield _Word(word.group(), row, word.end())


def refuse_binary(text: bytes, row: int, file: str) -> None:
    """Raises InputError at the first NUL byte. `row`: the physical line in which the text begins."""
    place = text.find(b"\0")
    if place >= 0:
        raise InputError(
            "a byte that no text holds: this is not a value change dump",
            file=file,
            row=row + text.count(b"\n", 0, place),
            found="a NUL byte",
            expected="plain text",
            hint="convert a binary dump to VCD first",
        )


class _Parser:
    """Words to definitions. whole: whether the file ends with `head`."""

    def __init__(self, head: bytes, whole: bool, file: str) -> None:
        self._file = file
        self._whole = whole
        self._words = _words(head, file)
        self._row = 1
        self._scope: list[str] = []
        self._unread: Counter[str] = Counter()
        self.found = Definitions()

    def parse(self) -> Definitions:
        while True:
            word = self._next("the file ends within its definitions", "$enddefinitions $end ahead of the value changes")
            if word.text == b"$enddefinitions":
                _, last = self._body(word)
                self.found.size, self.found.row = last.stop, last.row
                break
            self._take(word)
        if self._unread:
            self.found.notes.append(f"definitions not read: {', '.join(sorted(self._unread))}")
        return self.found

    def _next(self, problem: str, expected: str) -> _Word:
        word = next(self._words, None)
        if word is None and not self._whole:
            raise _EndedEarlyError
        if word is None:
            raise InputError(
                problem, file=self._file, row=self._row, expected=expected, hint="write the dump again, to its end"
            )
        self._row = word.row
        return word

    def _take(self, word: _Word) -> None:
        keyword = word.text
        if keyword == b"$var":
            self._variable(word)
        elif keyword == b"$scope":
            self._scope.append(" ".join(part.decode("utf-8", "replace") for part in self._body(word)[0][1:]))
        elif keyword == b"$upscope":
            self._body(word)
            del self._scope[-1:]
        elif keyword == b"$timescale":
            self._timescale(word)
        elif keyword.startswith(b"$") and len(keyword) > 1:
            self._body(word)
            if keyword not in KEYWORDS:
                self._unread[_shown(keyword)] += 1
        else:
            raise InputError(
                "the definitions do not end: $enddefinitions is missing",
                file=self._file,
                row=word.row,
                found=_shown(keyword),
                expected="$enddefinitions $end ahead of the first time and value",
                hint="write the dump again; a part cut out of one needs its definitions",
            )

    def _body(self, keyword: _Word, code: int | None = None) -> tuple[list[bytes], _Word]:
        """(the words up to $end, that $end); the one at place `code` may be anything."""
        words: list[bytes] = []
        while True:
            word = self._next(f"{_shown(keyword.text)} in line {keyword.row} has no $end", "$end")
            if word.text == b"$end" and len(words) != code:
                return words, word
            if keyword.text != b"$comment" or not words:
                words.append(word.text)

    def _timescale(self, keyword: _Word) -> None:
        words, _ = self._body(keyword)
        text = b"".join(words).decode("latin-1")
        match = _TIMESCALE.fullmatch(text.lower())
        if match is None or int(match.group(1)) == 0:
            raise InputError(
                "a timescale that is none",
                file=self._file,
                row=keyword.row,
                found=repr(text[:40]),
                expected="1, 10 or 100 and one of s, ms, us, ns, ps, fs",
                hint="correct $timescale, for instance to 1 ns",
            )
        self.found.tick = Fraction(int(match.group(1)), 10 ** _UNITS[match.group(2)])
        self.found.timescale = f"{match.group(1)} {match.group(2)}"

    def _variable(self, keyword: _Word) -> None:
        words, _ = self._body(keyword, code=2)
        if len(words) < 4 or not _SIZE.fullmatch(words[1]):
            raise InputError(
                "a variable that is not defined in full",
                file=self._file,
                row=keyword.row,
                found=_shown(b" ".join([b"$var", *words, b"$end"])),
                expected="$var, kind, size in bits, identifier code, name, $end",
                hint="write the dump again",
            )
        kind, size, number = words[0].decode("latin-1").lower(), int(words[1]), self.found.number(words[2])
        if kind == "port":
            raise InputError(
                "this is an extended dump, of ports with their strengths",
                file=self._file,
                row=keyword.row,
                found=_shown(b" ".join([b"$var", *words, b"$end"])),
                expected="variables such as wire and reg",
                hint="write the dump with $dumpvars instead of $dumpports",
            )
        if kind in NO_LEVELS or size == 0:
            self.found.without_levels[kind] += 1
            return
        name = " ".join(word.decode("utf-8", "replace") for word in words[3:])
        self.found.variables.append(_variable(tuple(self._scope), name, size, number))


def _variable(scope: tuple[str, ...], text: str, size: int, number: int) -> Variable:
    """A variable from its name as written: a range that fits the size numbers its bits, any other is but a name."""
    name = re.sub(r"\s*([\[\]:])\s*", r"\1", text) if "[" in text else text
    match = _RANGE.fullmatch(name)
    if match is not None:
        left, right = int(match.group(2)), int(match.group(3) or match.group(2))
        if abs(left - right) + 1 == size:
            return Variable(scope, match.group(1), size, number, right, -1 if left < right else 1)
    return Variable(scope, name, size, number, 0, 1 if size > 1 else 0)


def _shown(word: bytes) -> str:
    return word.decode("utf-8", "replace")[:60]


def read_definitions(source: Source, keys: CaptureKeys) -> Definitions:
    """The definitions at the head of a dump. Raises InputError where they are none, or define no line."""
    file = source.file
    first = _maybe_first_word(source.head(_LOOK))
    if first not in KEYWORDS:
        raise InputError(
            "this is not a value change dump, as its name says",
            file=file,
            found="an empty file" if first is None else repr(_shown(first)),
            expected="$date, $timescale or another keyword as the first word",
            hint="give a delimited export another ending, such as .csv",
        )
    found = _parsed(source)
    if not found.variables:
        raise InputError(
            "the dump defines no line",
            file=file,
            found=f"{found.without_levels.total()} variables without levels"
            if found.without_levels
            else "no $var at all",
            expected="$var of a wire, a reg or the like",
            hint="dump the signals of the interface as well",
        )
    said = found.timescale
    if keys.time_unit is not None:
        found.tick, found.timescale = Fraction(1, 10 ** _UNITS[keys.time_unit]), f"1 {keys.time_unit}"
        found.notes.append(
            f"times count {found.timescale}, as given" + (f", where the dump says {said}" if said else "")
        )
    elif not said:
        found.tick, found.timescale = _sampled(keys, file)
        found.counts_samples = True
        found.notes.append(f"the dump has no $timescale: its times are taken for {found.timescale}, as given")
    return found


def _parsed(source: Source) -> Definitions:
    size = _HEAD
    while True:
        head = source.head(size)
        whole = len(head) < size
        if not whole:
            head = head[: max(head.rfind(space) for space in (b"\n", b" ", b"\t", b"\r")) + 1]
        refuse_binary(head, 1, source.file)
        try:
            return _Parser(head, whole, source.file).parse()
        except _EndedEarlyError:
            if size >= MOST_BYTES:
                raise InputError(
                    "the definitions do not end: $enddefinitions is missing",
                    file=source.file,
                    found=f"more than {MOST_BYTES} bytes without it",
                    expected="$enddefinitions $end ahead of the value changes",
                    hint="write the dump again",
                ) from None
            size *= 4


def _sampled(keys: CaptureKeys, file: str) -> tuple[Fraction, str]:
    """(seconds per tick, a text of it) for a dump that does not say, whose times may be numbers of samples."""
    if keys.sample_rate_hz is not None:
        return 1 / Fraction(repr(keys.sample_rate_hz)), f"samples at {keys.sample_rate_hz:.12g} Hz"
    raise InputError(
        "the dump does not say what its times count",
        file=file,
        found="no $timescale",
        expected="$timescale 1 ns $end or the like",
        hint='give [capture] time_unit = "ns" in the sheet',
    )


# --- names -----------------------------------------------------------------------------------------------------------


class Names:
    """The lines of a dump by name.

    columns: the names listed, in the order of the file, the leftmost bit of a vector first. unlisted: how many bits
    of vectors are not among them.
    """

    def __init__(self, variables: Sequence[Variable], file: str) -> None:
        self._file = file
        self._lines: dict[str, Line] = {}
        self._paths: dict[str, dict[str, None]] = {}
        """Columns by full name in small letters, in the order of the file."""
        self._wide: dict[str, Variable] = {}
        self.unlisted = 0
        every_bit = sum(variable.size for variable in variables) <= MOST_BITS
        plain = _plain_names(variables)
        for variable in variables:
            stem = variable.name if variable.name in plain else ".".join([*variable.scope, variable.name])
            if variable.size == 1 or every_bit:
                for bit in reversed(range(variable.size)):
                    self._list(variable, stem, bit)
            else:
                self.unlisted += variable.size
                self._wide.setdefault(".".join([*variable.scope, variable.name]).lower(), variable)
        self.columns = tuple(self._lines)

    def _list(self, variable: Variable, stem: str, bit: int) -> str:
        line = Line(variable.number, bit)
        column, repeat = stem + variable.suffix(bit), 1
        while self._lines.setdefault(column, line) != line:
            repeat += 1
            column = f"{stem}{variable.suffix(bit)} ({repeat})"
        path = ".".join([*variable.scope, variable.name]) + variable.suffix(bit)
        self._paths.setdefault(path.lower(), {})[column] = None
        return column

    def line(self, column: str) -> Line:
        return self._lines[column]

    def column(self, line: str | int) -> str:
        """See `decode.capture.source.Capture.column`."""
        if isinstance(line, int):
            if 1 <= line <= len(self.columns):
                return self.columns[line - 1]
            raise self._missing(line, [])
        if line in self._lines:
            return line
        found = self._named(line.strip().lower())
        if len(found) == 1:
            return found[0]
        raise self._missing(line, found)

    def _named(self, name: str) -> list[str]:
        """The columns that a name in small letters, with all, some or none of its scopes, can mean."""
        columns = [column for column in self.columns if column.lower() == name]
        if columns:
            return columns
        columns = [column for path, known in self._paths.items() if _ends(path, name) for column in known]
        columns += self._wide_bits(name)
        if not columns:  # the bits of a vector, or the only bit of one
            columns = [
                column
                for path, known in self._paths.items()
                if _ends(path.rpartition("[")[0], name)
                for column in known
            ]
        return columns if len({self._lines[column] for column in columns}) > 1 else columns[:1]

    def _wide_bits(self, name: str) -> list[str]:
        match = _RANGE.fullmatch(name)
        if match is None or match.group(3) is not None:
            return []
        found = [(path, wide, wide.maybe_bit(int(match.group(2)))) for path, wide in self._wide.items()]
        return [
            self._list(wide, ".".join([*wide.scope, wide.name]), bit)
            for path, wide, bit in found
            if bit is not None and _ends(path, match.group(1))
        ]

    def _missing(self, line: str | int, several: Sequence[str]) -> InputError:
        if several:
            return InputError(
                f"{line!r} can mean {len(several)} lines",
                file=self._file,
                found=listed(several),
                expected="the name of one line",
                hint=f"give it in full, for instance {several[0]!r}",
            )
        nearest = maybe_nearest(str(line), self.columns)
        return InputError(
            f"the capture has no line {line!r}",
            file=self._file,
            found=f"lines {listed(self.columns)}",
            expected="the name of a line, or its number from 1",
            hint=f"did you mean {nearest!r}?" if nearest else "correct [lines] in the sheet",
        )


def _plain_names(variables: Sequence[Variable]) -> set[str]:
    """The names that mean the same in every scope that has them."""
    found: dict[str, dict[tuple[str, ...], set[tuple[int, int, int, int]]]] = {}
    for one in variables:
        scopes = found.setdefault(one.name, {})
        scopes.setdefault(one.scope, set()).add((one.number, one.size, one.first, one.step))
    return {
        name for name, scopes in found.items() if all(one == next(iter(scopes.values())) for one in scopes.values())
    }


def _ends(path: str, name: str) -> bool:
    return path == name or path.endswith("." + name)


def listed(names: Sequence[str]) -> str:
    """Names for a message: the first few, and how many more there are."""
    more = len(names) - MOST_SHOWN
    return ", ".join(names[:MOST_SHOWN]) + (f" and {more} more" if more > 0 else "")
