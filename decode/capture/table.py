"""The head of a delimited file as a table: separator, preamble, header, units, and the first rows.

What is known beforehand is only that rows repeat. So the rows are found first, and what stands above them is explained
afterwards:

    separator   of tab, semicolon, comma and space the one that divides nine in ten of the lines from the first row on
                into the same number of cells, and makes values of the most of them; where two do, the first of these
                four, since a comma may be a decimal mark, and a space may follow a comma
    first row   the first line with that many cells in which no cell is a word where the column below holds data
    units       a line of nothing but units right above the rows, with names above it
    header      the line above; or, where there is none, the last comment line, if it has as many cells, each a
                different name
    preamble    everything above that, as comments, keys with values, or free text

A line right above the rows that has another number of cells and is no key with a value is refused: which name belongs
to which column would be a guess.
"""

from __future__ import annotations

import csv
import re
from collections import Counter
from collections.abc import Sequence
from dataclasses import dataclass, field
from decimal import Decimal

from decode.capture.levels import LEVEL_TEXTS, is_level, is_missing
from decode.capture.names import is_time_name, is_unit_cell
from decode.capture.preamble import Preamble, read_preamble
from decode.capture.stream import Source
from decode.capture.text import Shape
from decode.capture.time_axis import is_date, maybe_decimal
from decode.errors import InputError

HEAD_BYTES = 1 << 18
HEAD_ROWS = 2000
MOST_HEAD_BYTES = 1 << 23
"""A preamble longer than this is not looked through."""

DELIMITERS = {"\t": "tab", ";": "semicolon", ",": "comma", " ": "space"}
"""By falling precedence."""

_SPACES = re.compile(r"[ \t]+(?![\[(])")
_COMMENT = ("#", ";", "%", "//")
_KEY_AND_VALUE = re.compile(r"\s*[^\d\s,;\t][^,;\t:=]*\s*([:=]|[,;\t]\s*\"?[+-]?\d)")
_PORT = re.compile(r"0x[0-9a-f]+|0b[01]+|[0-9][0-9a-f]*h?", re.IGNORECASE | re.ASCII)

CONSISTENT = 0.9
_MOST = 0.5


@dataclass(frozen=True, slots=True)
class _Line:
    number: int
    text: str

    @property
    def is_blank(self) -> bool:
        return not self.text.strip()

    @property
    def is_comment(self) -> bool:
        return self.text.lstrip().startswith(_COMMENT)


@dataclass(frozen=True, slots=True)
class Table:
    """The head of a file.

    header: the physical line of the names, or None; is_comment: it begins with a comment sign. units: the cells of a
    row of units, else empty; units_line: its physical line. rows: the cells of each row; lines: the physical line of
    each.
    """

    shape: Shape
    header: int | None
    is_comment: bool
    names: tuple[str, ...]
    units: tuple[str, ...]
    units_line: int | None
    rows: list[list[str]]
    lines: list[int]
    preamble: Preamble
    preamble_lines: int
    columns: dict[int, list[str]] = field(default_factory=dict)

    @property
    def decimal(self) -> str:
        return self.shape.decimal

    def column(self, index: int) -> list[str]:
        """The cells of a column."""
        if index not in self.columns:
            self.columns[index] = [row[index] for row in self.rows]
        return self.columns[index]

    def number(self, cell: str) -> Decimal | None:
        """The number that a cell is, or None."""
        return maybe_decimal(cell.replace(self.decimal, "."))

    def present(self, index: int) -> list[str]:
        """The cells of a column that have a value."""
        return [cell for cell in self.column(index) if not is_missing(cell)]

    def share_of_numbers(self, index: int) -> float:
        """How many of the column's values are numbers, 0 to 1."""
        cells = self.present(index)
        return sum(self.number(cell) is not None for cell in cells) / len(cells) if cells else 0.0


def read_table(source: Source, rows: int = HEAD_ROWS, size: int = HEAD_BYTES) -> Table:
    """The head of a capture, up to so many rows. Raises InputError where it is none."""
    while True:
        head = source.head(size)
        lines, carriage_returns, is_whole = _lines(head, size, source)
        content = [line for line in lines if not line.is_blank and not line.is_comment]
        if is_whole or size >= MOST_HEAD_BYTES or len(content) > 2:
            return _table(content, lines, carriage_returns, is_whole, rows, source)
        size *= 8


def _lines(head: bytes, size: int, source: Source) -> tuple[list[_Line], bool, bool]:
    """(the first lines, whether they end with bare carriage returns, whether they are the whole file)."""
    is_whole = len(head) < size
    _refuse_binary(head, source.file)
    carriage_returns = b"\n" not in head and b"\r" in head
    if carriage_returns:
        head = head.replace(b"\r", b"\n")
    if not is_whole and b"\n" in head:
        head = head[: head.rindex(b"\n") + 1]
    try:
        text = head.decode("utf-8-sig")
    except UnicodeDecodeError:
        text = head.decode("latin-1").removeprefix("\xef\xbb\xbf")
    texts = text.split("\n")
    if not texts[-1]:
        texts.pop()
    return [_Line(number, line.rstrip("\r")) for number, line in enumerate(texts, 1)], carriage_returns, is_whole


def _refuse_binary(head: bytes, file: str) -> None:
    """Raises InputError where the first bytes are no text: a NUL, or control characters in one byte of ten."""
    start = head[:4096]
    control = sum(byte < 32 and byte not in b"\t\n\r\x0b\x0c\x1a" for byte in start)
    place = start.find(b"\0")
    if place >= 0 or control > len(start) / 10:
        raise InputError(
            "binary data: this is not a CSV capture",
            file=file,
            row=1 + start.count(b"\n", 0, max(place, 0)),
            found="a NUL byte" if place >= 0 else "control characters",
            expected="plain text in UTF-8 or UTF-16",
            hint="export the capture as CSV",
        )


def _table(
    content: list[_Line], lines: list[_Line], carriage_returns: bool, is_whole: bool, most: int, source: Source
) -> Table:
    file = source.file
    if not content:
        raise InputError(
            "the capture is empty" if not lines else "the capture holds no rows, only comments or blank lines",
            file=file,
            found=f"{len(lines)} lines",
            expected="a row per change or per sample",
            hint="export the capture again",
        )
    if is_whole and len(content) > 2:
        content = content[:-1] if _is_cut(content) else content
    delimiter, start = _delimiter_and_start(content, file)
    content = content[: start + most]
    split = [split_line(line.text, delimiter) for line in content]
    cells = Counter(len(row) for row in split[start:]).most_common(1)[0][0]
    start = _first_row(split, start, cells)
    body = [(line, row) for line, row in zip(content[start:], split[start:], strict=True) if len(row) == cells]
    if start == len(content) or not body:
        raise InputError(
            "the capture holds a header and no rows",
            file=file,
            row=content[0].number,
            found=content[0].text.strip()[:60],
            expected="rows of times and levels below the header",
            hint="export the capture again",
        )
    rows = [row for _, row in body]
    first = body[0][0].number
    above = _Above([line for line in lines if line.number < first and not line.is_blank], delimiter, rows, file)
    decimal = _decimal_mark(rows, delimiter)
    shape = Shape(delimiter, cells, above.trailing, carriage_returns, skip=first - 1, decimal=decimal)
    return Table(
        shape=shape,
        header=None if above.header is None else above.header.number,
        is_comment=above.header is not None and above.header.is_comment,
        names=above.names,
        units=above.units,
        units_line=above.units_line,
        rows=rows,
        lines=[line.number for line, _ in body],
        preamble=read_preamble([(line.number, line.text) for line in above.preamble]),
        preamble_lines=len(above.preamble),
    )


def _is_cut(content: Sequence[_Line]) -> bool:
    """Whether the last of all lines is shorter than the others by more than a cell: it would mislead."""
    marks = [sum(line.text.count(mark) for mark in DELIMITERS if mark != " ") for line in content[-3:]]
    return marks[-1] < marks[-2] == marks[-3]


# --- separator and first row -----------------------------------------------------------------------------------------


def _delimiter_and_start(content: Sequence[_Line], file: str) -> tuple[str, int]:
    """(separator, index of the first line that may be a row)."""
    sample = content[: HEAD_ROWS * 2]
    found = [division for delimiter in DELIMITERS if (division := _maybe_division(sample, delimiter)) is not None]
    even = [division for division in found if division.share >= CONSISTENT]
    if even:
        chosen = max(even, key=lambda division: round(division.data, 2))
        return chosen.delimiter, chosen.start
    if found:
        chosen = max(found, key=lambda division: division.share)
        return chosen.delimiter, chosen.start
    single = [index for index, line in enumerate(sample) if is_datum(line.text.strip())]
    if single and len(single) >= _MOST * (len(sample) - single[0]):
        return ",", single[0]
    return _delimiter_of_words([line.text for line in sample], content[0].number, file), 0


@dataclass(frozen=True, slots=True)
class _Division:
    """What a separator makes of the lines. start: index of the first that may be a row. share: of the lines from there
    on that have as many cells. data: of the cells in these that are values."""

    delimiter: str
    start: int
    share: float
    data: float


def _maybe_division(sample: Sequence[_Line], delimiter: str) -> _Division | None:
    """What a separator makes of the lines, where it makes rows of most of them."""
    split = [split_line(line.text, delimiter) for line in sample]
    likely = [index for index, row in enumerate(split) if len(row) > 1 and _is_likely_row(row)]
    if not likely:
        return None
    cells = Counter(len(split[index]) for index in likely).most_common(1)[0][0]
    rows = [index for index in likely if len(split[index]) == cells]
    share = sum(len(row) == cells for row in split[rows[0] :]) / (len(sample) - rows[0])
    values = [is_datum(cell) or is_missing(cell) for index in rows for cell in split[index]]
    return _Division(delimiter, rows[0], share, sum(values) / len(values)) if share > _MOST else None


def _delimiter_of_words(lines: Sequence[str], number: int, file: str) -> str:
    """The separator of a table that holds no data, so that it can be refused for what it is."""
    body = lines[1:] or lines
    for delimiter in DELIMITERS:
        cells, times = Counter(len(split_line(line, delimiter)) for line in body).most_common(1)[0]
        if cells > 1 and times >= CONSISTENT * len(body):
            return delimiter
    if all(len(split_line(line, " ")) == 1 for line in lines):
        return ","
    raise InputError(
        "this does not look like a capture: no separator divides its rows into the same number of cells",
        file=file,
        row=number,
        found=lines[0].strip()[:60],
        expected="columns separated by commas, semicolons, tabs or spaces",
        hint="export the capture as CSV",
    )


def split_line(line: str, delimiter: str) -> list[str]:
    """The cells of a line, without the white space and the quotes around them."""
    if delimiter == " ":
        return [cell.strip('"') for cell in _SPACES.split(line.strip(" \t"))]
    if '"' not in line:
        return [cell.strip() for cell in line.split(delimiter)]
    try:
        return [cell.strip() for cell in next(csv.reader([line], delimiter=delimiter, skipinitialspace=True))]
    except (csv.Error, StopIteration):
        return [cell.strip() for cell in line.replace('"', "").split(delimiter)]


def is_datum(cell: str) -> bool:
    """Whether a cell is a value: a number, a level, a date-time or a port value."""
    plain = cell.replace(",", ".")
    return maybe_decimal(plain) is not None or is_level(cell) or is_date(cell) or bool(_PORT.fullmatch(cell))


def _is_likely_row(cells: Sequence[str]) -> bool:
    """Whether most of the cells that hold anything are values, and one of them is no single letter."""
    present = [cell for cell in cells if not is_missing(cell)]
    data = [cell for cell in present if is_datum(cell)]
    return len(data) >= max(1, _MOST * len(present)) and any(cell.lower() not in _LETTERS for cell in data)


_LETTERS = {text for text in LEVEL_TEXTS if text.isalpha() and len(text) == 1}


def _first_row(split: Sequence[Sequence[str]], start: int, cells: int) -> int:
    """Index of the first line from `start` on that is a row of the table, not the names above it."""
    rows = [row for row in split[start:] if len(row) == cells]
    below = rows[1:] or rows
    is_data = [
        sum(is_datum(row[index]) or is_missing(row[index]) for row in below) >= _MOST * len(below)
        for index in range(cells)
    ]
    if not any(is_data):
        return start + 1
    digits_only = [all(row[index].lower() not in _LETTERS for row in below) for index in range(cells)]
    for place in range(start, len(split)):
        row = split[place]
        if len(row) == cells and not _is_names(row, is_data, digits_only, below):
            return place
    return len(split)


def _is_names(
    row: Sequence[str], is_data: Sequence[bool], digits_only: Sequence[bool], below: Sequence[Sequence[str]]
) -> bool:
    """Whether a line of as many cells as a row names the columns: by a word above data, by different letters above
    digits, or by rising numbers above levels."""
    columns = [index for index, data in enumerate(is_data) if data]
    if any(not is_datum(row[index]) and not is_missing(row[index]) for index in columns):
        return True
    named = [row[index].lower() for index in columns if row[index]]
    letters = all(name in _LETTERS for name in named) and len(set(named)) == len(named)
    if named and letters and all(digits_only[index] for index in columns):
        return True
    return _is_numbered([row[index] for index in columns], [[cells[index] for index in columns] for cells in below])


def _is_numbered(row: Sequence[str], below: Sequence[Sequence[str]]) -> bool:
    """Whether a line holds the rising numbers of columns that hold levels: beside them only an empty cell."""
    numbers = [int(cell) for cell in row if re.fullmatch(r"\d{1,3}", cell)]
    if len(numbers) < 2 or sorted(set(numbers)) != numbers or numbers[-1] < 2:
        return False
    places = [index for index, cell in enumerate(row) if cell]
    return len(places) == len(numbers) and all(is_level(cells[index]) for cells in below for index in places)


def _decimal_mark(rows: Sequence[Sequence[str]], delimiter: str) -> str:
    cells = (cell for row in rows for cell in row)
    if any(re.fullmatch(r"[+-]?\d*,\d+([eE][+-]?\d+)?", cell) for cell in cells):
        return ","
    return "."


# --- what stands above the rows --------------------------------------------------------------------------------------


class _Above:
    """The lines above the first row: header, units and preamble. trailing: rows end with a separator."""

    def __init__(self, lines: list[_Line], delimiter: str, rows: list[list[str]], file: str) -> None:
        self._delimiter, self._file = delimiter, file
        cells = len(rows[0])
        plain = [line for line in lines if not line.is_comment]
        self.header: _Line | None = None
        self.units: tuple[str, ...] = ()
        self.units_line: int | None = None
        empty_last = cells > 1 and all(not row[-1] for row in rows)
        named = self._maybe_header(plain, cells, empty_last)
        if named is None:
            named = self._maybe_comment_header([line for line in lines if line.is_comment], cells, empty_last, rows)
        self.trailing = empty_last and (named is None or len(_without_empty_last(named)) < cells)
        columns = cells - self.trailing
        if named is not None and len(named) > columns:
            named = _without_empty_last(named)
        if named is None:
            self.names = tuple(str(number + 1) for number in range(columns))
        else:
            self.names = _unique([*named, *[""] * (columns - len(named))])
        self.preamble = [line for line in lines if line is not self.header and line.number != self.units_line]

    def _maybe_header(self, plain: list[_Line], cells: int, empty_last: bool) -> list[str] | None:
        """The names in the line above the rows, or above a row of units; None where it is part of a preamble."""
        if not plain:
            return None
        line, named = plain[-1], split_line(plain[-1].text, self._delimiter)
        if len(plain) > 1 and _fits(named, cells, empty_last) and _is_units(named):
            above = split_line(plain[-2].text, self._delimiter)
            if _fits(above, cells, empty_last):
                self.units, self.units_line = tuple(named), line.number
                line, named = plain[-2], above
        if _fits(named, cells, empty_last):
            self.header = line
            return named
        is_free_text = _KEY_AND_VALUE.match(line.text) or len(_without_empty_last(named)) == 1 < cells
        if is_free_text and not is_time_name(named[0]):
            return None
        raise InputError(
            "the header does not fit the rows below it",
            file=self._file,
            row=line.number,
            found=f"{len(_without_empty_last(named))} names above rows of {cells - empty_last} cells",
            expected="a name for each column",
            hint="names that hold the separator must stand in double quotes",
        )

    def _maybe_comment_header(
        self, comments: list[_Line], cells: int, empty_last: bool, rows: list[list[str]]
    ) -> list[str] | None:
        """The names in the last comment line, where it has as many cells as the rows and each is a name of its own."""
        if not comments or cells - empty_last < 2:
            return None
        text = comments[-1].text.strip().lstrip("#;%/").strip(" \t")
        named = split_line(text, self._delimiter)
        present = _without_empty_last(named)
        is_list = len({name.lower() for name in present}) == len(present) and all(
            0 < len(name) <= 40 for name in present
        )
        words = any(not is_datum(name) for name in present)
        if not _fits(named, cells, empty_last) or not is_list or not words or re.search(r"[=:]\s", text):
            return None
        self.header = comments[-1]
        return named


def _fits(named: Sequence[str], cells: int, empty_last: bool) -> bool:
    """Whether a line has a name for each column of rows of so many cells, the last of them perhaps empty."""
    return cells - empty_last <= len(_without_empty_last(named)) <= cells or len(named) == cells


def _is_units(cells: Sequence[str]) -> bool:
    return all(is_unit_cell(cell) for cell in cells) and any(cell.strip(" []()-") for cell in cells)


def _without_empty_last(cells: Sequence[str]) -> list[str]:
    return list(cells[:-1]) if len(cells) > 1 and not cells[-1] else list(cells)


def _unique(names: Sequence[str]) -> tuple[str, ...]:
    """The names, an empty one replaced by its column's number, a repeated one by itself with _2, _3, ..."""
    unique: list[str] = []
    for number, name in enumerate(names, 1):
        candidate, repeat = name or str(number), 1
        while candidate in unique:
            repeat += 1
            candidate = f"{name or number}_{repeat}"
        unique.append(candidate)
    return tuple(unique)
