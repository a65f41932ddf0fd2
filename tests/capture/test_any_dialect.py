"""Captures in random dialects: the same edges come out; with random damage: an answer or a message, wherever cut."""

from __future__ import annotations

from dataclasses import dataclass
from itertools import pairwise
from pathlib import Path

from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from decode.capture.source import open_capture
from decode.errors import InputError
from decode.sheet import CaptureKeys

UNITS = {"s": 9, "ms": 6, "us": 3, "ns": 0}
WORDS = {"digits": "01", "decimals": ("0.0", "1.0"), "words": ("low", "HIGH"), "volts": ("0", "3.3")}


@dataclass(frozen=True)
class Way:
    """How a file is written."""

    delimiter: str
    unit: str
    header: str
    preamble: str
    end: str
    comma: bool
    quoted: bool
    trailing: bool
    padded: bool
    last: bool
    words: str
    encoding: str

    def time(self, nanoseconds: int) -> str:
        places = UNITS[self.unit]
        whole, rest = divmod(abs(nanoseconds), 10**places)
        text = ("-" if nanoseconds < 0 else "") + (f"{whole}.{rest:0{places}}" if places else str(whole))
        return text.replace(".", ",") if self.comma else text

    def line(self, time: str, levels: list[str]) -> str:
        cells = [*levels, time] if self.last else [time, *levels]
        if self.quoted:
            cells = [f'"{cell}"' for cell in cells]
        if self.padded:
            cells = [f"{cell:>12}" for cell in cells]
        return self.delimiter.join(cells) + (self.delimiter if self.trailing else "")

    def write(self, rows: list[tuple[int, int, int]]) -> list[str]:
        names = {"brackets": f"Time [{self.unit}]", "round": f"t({self.unit})", "under": f"time_{self.unit}"}
        low_high = WORDS[self.words]
        head = self.line(names[self.header], ["A", "B"])
        point = "," if self.comma else "."
        body = [
            self.line(self.time(time), [low_high[level].replace(".", point) for level in (a, b)]) for time, a, b in rows
        ]
        return [*([self.preamble] if self.preamble else []), head, *body]

    def file(self, lines: list[str]) -> bytes:
        return (self.end.join(lines) + self.end).encode(self.encoding)


@st.composite
def ways(draw: st.DrawFn) -> Way:
    delimiter = draw(st.sampled_from([",", ", ", ";", "\t", " ", "   "]))
    spaces = delimiter.isspace() and delimiter != "\t"
    quoted = draw(st.booleans()) and not spaces
    return Way(
        delimiter=delimiter,
        unit=draw(st.sampled_from(sorted(UNITS))),
        header=draw(st.sampled_from(["round", "under"] if spaces else ["brackets", "round", "under"])),
        preamble=draw(
            st.sampled_from(["", "# made for a test\n#\n", "Model: none\n\n", "Comment,none\nDate,2024-05-31"])
        ),
        end=draw(st.sampled_from(["\n", "\r\n"])),
        comma=draw(st.booleans()) and ("," not in delimiter or quoted),
        quoted=quoted,
        trailing=draw(st.booleans()) and not spaces and delimiter != ", ",
        padded=draw(st.booleans()) and not quoted,
        last=draw(st.booleans()),
        words=draw(st.sampled_from(sorted(WORDS))),
        encoding=draw(st.sampled_from(["utf-8", "utf-8-sig", "utf-16"])),
    )


STEPS = st.lists(st.tuples(st.integers(1, 2000), st.integers(0, 1), st.integers(0, 1)), min_size=12, max_size=40)
quick = settings(deadline=None, max_examples=120, suppress_health_check=[HealthCheck.function_scoped_fixture])


def rows_of(steps: list[tuple[int, int, int]], start: int) -> list[tuple[int, int, int]]:
    """Rows in which both lines have shown both levels."""
    rows, time = [(start, 0, 1), (start + 7, 1, 0)], start + 7
    for step, a, b in steps:
        time += step
        rows.append((time, a, b))
    return rows


def edges_of(path: Path, rows_per_span: int) -> object:
    """Initial levels and (nanoseconds, level) of each line, by parts; or the message."""
    parts: list[dict[str, list[object]]] = []
    try:
        capture = open_capture(path, CaptureKeys(), rows_per_span=rows_per_span)
        for span in capture.spans(["a", "B"]):
            if not parts or not span.joined:
                parts.append({name: [edges.initial] for name, edges in span.lines.items()})
            for name, edges in span.lines.items():
                nanoseconds = [float(tick * capture.tick * 10**9) for tick in edges.times.tolist()]
                parts[-1][name] += list(zip(nanoseconds, edges.levels.tolist(), strict=True))
    except InputError as error:
        assert error.problem and str(path) in str(error)
        return str(error)
    return parts, capture.notes, capture.grid


@quick
@given(ways(), STEPS, st.integers(-(10**10), 10**10), st.integers(1, 9))
def test_any_dialect(tmp_path: Path, way: Way, steps: list[tuple[int, int, int]], start: int, size: int) -> None:
    """The edges put in, to the nanosecond."""
    rows = rows_of(steps, start)
    path = tmp_path / "x.csv"
    path.write_bytes(way.file(way.write(rows)))
    found = edges_of(path, 200_000)
    assert isinstance(found, tuple), found
    wanted: dict[str, list[object]] = {}
    for place, name in ((1, "A"), (2, "B")):
        wanted[name] = [rows[0][place]]
        for above, row in pairwise(rows):
            if row[place] != above[place]:
                wanted[name].append((float(row[0]), row[place]))
    assert [dict(zip("AB", part.values(), strict=True)) for part in found[0]] == [wanted]
    assert edges_of(path, size) == found


DAMAGE = st.sampled_from(["marker", "NaN", "glued", "cut", "back", "empty", "nul", "header", "bytes"])


@settings(quick, max_examples=60)
@given(ways(), STEPS, st.lists(st.tuples(DAMAGE, st.integers(0, 10**6)), min_size=1, max_size=3), st.integers(1, 9))
def test_any_damage(
    tmp_path: Path, way: Way, steps: list[tuple[int, int, int]], damage: list[tuple[str, int]], size: int
) -> None:
    """The same answer or the same message in any pieces."""
    lines = way.write(rows_of(steps * 2, 0))
    for kind, place in damage:
        at = 3 + place % (len(lines) - 3)
        line = lines[at]
        lines[at : at + 1] = {
            "marker": ["--- window ---", line],
            "NaN": [line.replace("1", "NaN", 1)],
            "glued": [line + line],
            "cut": [line[: len(line) // 2]],
            "back": [lines[at - 2], line],
            "empty": ["", line],
            "nul": [line[:2] + "\0\0" + line[4:]],
            "header": [lines[2], line],
            "bytes": [line[:3] + "ÿ\x07" + line[3:]],
        }[kind]
    path = tmp_path / "x.csv"
    path.write_bytes(way.file(lines))
    whole = edges_of(path, 200_000)
    assert edges_of(path, size) == whole
    assert edges_of(path, 1) == whole
