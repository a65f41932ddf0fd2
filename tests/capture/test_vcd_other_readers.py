"""Every line of a dump, value by value, as two independent libraries read it.

The readers are those of pyvcd and of vcdvcd. The files are written by pyvcd's writer, by the generator below in forms
which that writer never uses, and by two simulators (../shared/captures).
"""

from __future__ import annotations

import io
from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from pathlib import Path

import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st
from vcd import VCDWriter
from vcd.reader import TokenKind, tokenize
from vcdvcd import VCDVCD

from decode.capture.source import open_capture
from decode.sheet import CaptureKeys
from decode.spans import UNKNOWN

CAPTURES = Path(__file__).parents[2].parent / "shared" / "captures"

Told = tuple[int, list[tuple[int, int]]]
"""First level of a line, and its changes."""


@dataclass
class Known:
    """A variable as a library has it: its full name without range, the index of each bit from the left (None: no
    brackets), and all its values in order."""

    name: str
    indexes: Sequence[int | None]
    values: list[tuple[int, str]]

    def lines(self, first: int) -> Iterator[tuple[str, Told]]:
        """(full name, levels) of every bit."""
        for place, index in enumerate(self.indexes):
            suffix = "" if index is None else f"[{index}]"
            levels = [(time, level(extended(value, len(self.indexes))[place])) for time, value in self.values]
            yield self.name + suffix, folded(levels, first)


def extended(value: str, size: int) -> str:
    """A value in full: 0 to the left of 0 or 1, else the leftmost digit again (IEEE Std 1364-2005 Table 18-1)."""
    return value.rjust(size, "0" if value[0] in "01" else value[0])


def level(digit: str) -> int:
    return {"0": 0, "1": 1}.get(digit, UNKNOWN)


def folded(levels: list[tuple[int, int]], first: int) -> Told:
    """Values to changes: the first of all is the first level where it comes at the first time."""
    initial = UNKNOWN
    if levels and levels[0][0] == first:
        initial = levels[0][1]
    changes: list[tuple[int, int]] = []
    for time, now in levels:
        if now != (changes[-1][1] if changes else initial):
            changes.append((time, now))
    return initial, changes


def indexes_of(size: int, bits: tuple[int, int] | int | None) -> list[int | None]:
    if bits is None:
        return [None] if size == 1 else list(reversed(range(size)))
    left, right = (bits, bits) if isinstance(bits, int) else bits
    step = 1 if left < right else -1
    return list(range(left, right + step, step))


def by_pyvcd(path: Path) -> tuple[int, int, list[Known]]:
    """(first time, last time, variables of levels) as pyvcd's tokens have them."""
    scope: list[str] = []
    known: dict[str, list[Known]] = {}
    values: dict[str, list[tuple[int, str]]] = {}
    time, times = 0, []
    for token in tokenize(io.BytesIO(path.read_bytes())):
        if token.kind is TokenKind.SCOPE:
            scope.append(token.scope.ident)
        elif token.kind is TokenKind.UPSCOPE:
            scope.pop()
        elif token.kind is TokenKind.VAR:
            told = values.setdefault(token.var.id_code, [])
            if token.var.type_.value not in ("real", "realtime", "string", "event"):
                name = ".".join([*scope, token.var.reference])
                indexes = indexes_of(token.var.size, token.var.bit_index)
                known.setdefault(token.var.id_code, []).append(Known(name, indexes, told))
        elif token.kind is TokenKind.CHANGE_TIME:
            time = token.time_change
            times.append(time)
        elif token.kind is TokenKind.CHANGE_SCALAR:
            times += [] if times else [0]
            values[token.scalar_change.id_code].append((time, token.scalar_change.value))
        elif token.kind is TokenKind.CHANGE_VECTOR:
            times += [] if times else [0]
            value = token.vector_change.value
            values[token.vector_change.id_code].append((time, value if isinstance(value, str) else f"{value:b}"))
    return times[0], times[-1], [one for variables in known.values() for one in variables]


def by_vcdvcd(path: Path) -> tuple[int, int, list[Known]]:
    """(first time, last time, variables of levels) as vcdvcd has them."""
    found = VCDVCD(str(path))
    known = []
    for reference in found.signals:
        signal = found[reference]
        if signal.var_type in ("real", "realtime", "string", "event"):
            continue
        name, bracket, bits = reference.partition("[")
        span = None
        if bracket:
            ends = [int(end) for end in bits.rstrip("]").split(":")]
            span = ends[0] if len(ends) == 1 else (ends[0], ends[1])
        known.append(Known(name, indexes_of(int(signal.size), span), signal.tv))
    return found.begintime, found.endtime, known


def compare(path: Path, known: tuple[int, int, list[Known]], rows_per_span: int) -> int:
    """Our reading against a library's; how many lines were compared."""
    first, last, variables = known
    capture = open_capture(path, CaptureKeys(), rows_per_span=rows_per_span)
    ours: dict[str, Told] = {}
    for span in capture.spans(capture.columns):
        for name, edges in span.lines.items():
            ours.setdefault(name, (edges.initial, []))[1].extend(
                zip(edges.times.tolist(), edges.levels.tolist(), strict=True)
            )
    assert (capture.first, capture.last) == (first, last)
    theirs = [line for variable in variables for line in variable.lines(first)]
    for name, told in theirs:
        assert ours[capture.column(name)] == told, name
    assert {capture.column(name) for name, _ in theirs} == set(capture.columns)
    return len(theirs)


# --- files of a writer -----------------------------------------------------------------------------------------------

DIGITS = st.text("01xz", min_size=1, max_size=4)
ACTION = st.tuples(
    st.integers(0, 5),
    st.sampled_from(["a", "b", "bus", "wide", "real", "text", "go", "off", "on"]),
    st.sampled_from("01xz"),
    DIGITS,
    st.integers(0, 2**40 - 1),
)


def write(path: Path, actions: Sequence[tuple[int, str, str, str, int]], start: int) -> None:
    """A dump of two scalars, two vectors and some variables that are no lines, in two scopes of the same names."""
    with path.open("w") as file, VCDWriter(file, timescale="1 ns", init_timestamp=start) as writer:
        variables = {
            "a": writer.register_var("tb", "a", "wire", size=1, init="x"),
            "b": writer.register_var("tb.dut", "a", "reg", size=1, init=0),
            "bus": writer.register_var("tb.dut", "bus[3:0]", "reg", size=4, init="z"),
            "wide": writer.register_var("tb", "wide", "integer", size=40, init=0),
            "real": writer.register_var("tb", "speed", "real", init=0.0),
            "text": writer.register_var("tb.dut", "state", "string", init="idle"),
            "go": writer.register_var("tb", "go", "event"),
        }
        time, is_on = start, True
        for step, name, bit, digits, number in actions:
            time += step
            if name in ("off", "on"):
                if is_on != (name == "on"):
                    (writer.dump_on if name == "on" else writer.dump_off)(time)
                    is_on = name == "on"
                continue
            value = {"a": bit, "b": bit, "bus": digits, "wide": number, "real": number / 7, "text": f"s{digits}"}
            writer.change(variables[name], time, value.get(name, True))


@settings(deadline=None, max_examples=120, suppress_health_check=[HealthCheck.function_scoped_fixture])
@given(st.lists(ACTION, max_size=60), st.integers(0, 1000), st.integers(1, 50))
def test_files_of_a_writer(
    tmp_path: Path, actions: list[tuple[int, str, str, str, int]], start: int, rows_per_span: int
) -> None:
    """Scalars, vectors with and without range, values shortened on the left, dumping off and on."""
    path = tmp_path / "written.vcd"
    write(path, actions, start)
    assert compare(path, by_pyvcd(path), rows_per_span) == 46
    assert compare(path, by_vcdvcd(path), rows_per_span) == 46


# --- files in other forms --------------------------------------------------------------------------------------------

CODES = ["!", "#", "$", "(", "{", "*", "b", "r1", "0", "#12", "bb", "s", "x!", "~~~~~~~~~", "12345678", "$e", "R"]
SPACE = st.sampled_from([" ", "\n", "\t", " \n ", "\r\n"])
WORDS = st.one_of(
    st.tuples(st.just("time"), st.integers(0, 30), st.just("")),
    st.tuples(st.just("scalar"), st.integers(0, len(CODES) - 1), st.sampled_from("01xXzZUWLH-")),
    st.tuples(st.just("vector"), st.integers(0, len(CODES) - 1), st.text("01xXzZU", min_size=1, max_size=3)),
    st.tuples(st.just("comment"), st.just(0), st.sampled_from(["b1", "0! #5", "$dumpvars", "", "b b b"])),
    st.tuples(
        st.just("section"), st.just(0), st.sampled_from(["$dumpvars", "$dumpall", "$dumpon", "$dumpoff", "$end"])
    ),
)


@settings(deadline=None, max_examples=200, suppress_health_check=[HealthCheck.function_scoped_fixture])
@given(st.lists(st.tuples(WORDS, SPACE), max_size=60), st.integers(1, 50))
def test_free_format(tmp_path: Path, words: list[tuple[tuple[str, int, str], str]], rows_per_span: int) -> None:
    """Any white space anywhere, codes that look like something else, comments between values, repeated values, several
    values of a line at one time. L and H are levels here and letters to the library, so both are written as 0 and 1
    for it (IEEE Std 1164, To_X01)."""
    head = "$timescale 10ps $end\n$scope module t $end\n"
    for number, code in enumerate(CODES):
        size = 1 + number % 3
        head += f"$var reg {size} {code} v{number}{f'[{size}:1]' if size > 1 else ''} $end\n"
    text, time = head + "$upscope $end $enddefinitions $end ", 0
    for (kind, number, value), space in [*words, (("scalar", 0, "1"), "\n")]:
        if kind == "time":
            time += number
            text += f"#{time}"
        elif kind == "scalar":
            text += f"{value}{CODES[number]}"
        elif kind == "vector":
            text += f"b{value[: 1 + number % 3]} {CODES[number]}"
        else:
            text += f"$comment {value} $end" if kind == "comment" else value
        text += space
    ours, theirs = tmp_path / "ours.vcd", tmp_path / "theirs.vcd"
    ours.write_text(text)
    values = text[len(head) :]
    theirs.write_text(head + values.replace("L", "0").replace("H", "1"))
    assert compare(ours, by_pyvcd(theirs), rows_per_span) > 30


# --- files of simulators ---------------------------------------------------------------------------------------------


@pytest.mark.parametrize("rows_per_span", [200_000, 100])
@pytest.mark.parametrize(("name", "lines"), [("biss_lines.vcd", 115), ("quadrature_knob.vcd", 18)])
def test_files_of_simulators(name: str, lines: int, rows_per_span: int) -> None:
    """All lines of both; the first has the unknown level U, times in femtoseconds and empty scopes."""
    path = CAPTURES / name
    if not path.exists():
        pytest.skip(f"{name} is not beside this checkout")
    assert compare(path, by_pyvcd(path), rows_per_span) == lines
    assert compare(path, by_vcdvcd(path), rows_per_span) == lines
