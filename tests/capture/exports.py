"""One signal, and the tests' own writer, which knows every layout of docs/layouts.md.

Nothing here is shared with the reader or with the simulator's writer: a layout is spelt out cell by cell.
"""

from __future__ import annotations

import gzip
from collections.abc import Callable, Sequence
from dataclasses import dataclass, field
from decimal import Decimal
from fractions import Fraction
from functools import cache
from typing import Any

import msgspec
import numpy as np
import pyarrow as pa

from decode.bench import motion
from decode.bench.board import Simulation, simulate
from decode.bench.scenario import Fault, Scenario
from decode.sheet import CaptureKeys, Sheet, from_toml

SHEET = from_toml(
    """
    [lines]
    clock = "MA"
    data = "SLO"
    a = "A"
    b = "B"
    index = "Z"
    [serial]
    interface = "biss-c"
    fields = [
      { name = "position", bits = 12 },
      { name = "error", bits = 1 },
      { name = "warning", bits = 1 },
      { name = "crc", bits = 6, polynomial = 0x43, inverted = true },
    ]
    [incremental]
    cycles_per_turn = 16
    index_width_counts = 1
    index_states = "a=1 b=1"
    """
)
ROLES = ("clock", "data", "a", "b", "index")
LINES = ("MA", "SLO", "A", "B", "Z")


@cache
def simulated(*, faulty: bool, rate: float = 12.5e6) -> Simulation:
    """Three turns of a small board in 10 ms, sampled every 80 ns; sick: one CRC is wrong, and one index is missing."""
    return simulate(
        SHEET,
        Scenario(
            motion=motion.constant(18_000.0),
            duration_s=0.010,
            sample_rate_hz=rate,
            frame_rate_hz=4000.0,
            clock_hz=1e6,
            faults=(Fault("crc_mismatch", 0.003), Fault("index_missing", 0.005)) if faulty else (),
        ),
    )


@dataclass(frozen=True)
class Signal:
    """Rows of levels. ticks: (n,) times in sampling steps. levels: (n, 5) of LINES. step: seconds."""

    ticks: np.ndarray[Any, Any]
    levels: np.ndarray[Any, Any]
    step: Fraction

    @classmethod
    def of_changes(cls, simulation: Simulation) -> Signal:
        """A row where a line changes, and the first and last sample."""
        edges = [simulation.lines[name].times for name in LINES]
        first, stop = simulation.segments[0].start, simulation.segments[-1].stop
        ticks = np.unique(np.concatenate([[first, stop - 1], *edges]))
        ticks = ticks[(ticks >= first) & (ticks < stop)]
        return cls(ticks, np.stack([simulation.lines[name].level_at(ticks) for name in LINES], 1), simulation.tick)

    @classmethod
    def of_samples(cls, simulation: Simulation) -> Signal:
        """A row a sample."""
        ticks = np.arange(simulation.segments[0].start, simulation.segments[-1].stop)
        return cls(ticks, np.stack([simulation.lines[name].level_at(ticks) for name in LINES], 1), simulation.tick)


def exact(number: Fraction, places: int) -> str:
    """A number with so many decimals, half of the last one rounded to even."""
    scaled = round(number * 10**places)
    return f"{Decimal(scaled).scaleb(-places):.{places}f}"


Times = Callable[[Fraction], str]
Cells = Callable[[int, int], list[str]]
"""(row's number, row's tick) to the cells of its levels."""


def seconds(places: int, unit: int = 0, start: Fraction = Fraction(0)) -> Times:
    """Decimals of a unit of 10**-unit seconds, counted from `start` seconds."""
    return lambda time: exact((time + start) * 10**unit, places)


def stripped(time: Fraction) -> str:
    """Seconds with nine decimals, zeros at the end left out."""
    text = exact(time, 9).rstrip("0")
    return text.removesuffix(".")


def scientific(time: Fraction) -> str:
    return f"{float(time):.9e}"


def noisy(time: Fraction) -> str:
    """What a double makes of microseconds that were added up: digits beyond the sixteenth go wrong."""
    return repr(float(time) * 1e6 * (1 - 2**-52) + 1e-9 * 0.3)


def date(zone: str = "", separator: str = "T") -> Times:
    """From noon, 31 May 2024, on."""

    def written(time: Fraction) -> str:
        nanoseconds = round(time * 10**9)
        whole, rest = divmod(nanoseconds, 10**9)
        return f"2024-05-31{separator}12:{whole // 60:02}:{whole % 60:02}.{rest:09}{zone}"

    return written


@dataclass(frozen=True)
class Export:
    """How a file is written, beside the signal. `levels` makes the cells of a row's levels from (n, 5) levels."""

    delimiter: str = ","
    header: Sequence[str] = ("Time [s]", *LINES)
    time: Times | None = field(default=seconds(9))
    levels: Callable[[np.ndarray[Any, Any]], list[list[str]]] = lambda levels: levels.astype(str).tolist()
    time_at: int = 0
    end: str = "\n"
    last_end: str | None = None
    above: str = ""
    row_end: str = ""
    header_end: str | None = None
    cell: str = "{}"
    repeat_last: bool = False
    ahead: Sequence[str] = ()
    encode: Callable[[str], bytes] = str.encode
    pack: Callable[[bytes], bytes] = lambda content: content

    def rows(self, signal: Signal) -> list[list[str]]:
        """The cells of every row."""
        cells = self.levels(signal.levels)
        if self.time is None:
            return cells
        for row, tick in zip(cells, signal.ticks.tolist(), strict=True):
            row.insert(self.time_at if self.time_at >= 0 else len(row), self.time(tick * signal.step))
        return cells

    def write(self, signal: Signal) -> bytes:
        """The file."""
        lines = [
            self.delimiter.join(self.cell.format(cell) for cell in row) + self.row_end for row in self.rows(signal)
        ]
        if self.repeat_last:
            lines.append(lines[-1])
        lines = [*self.ahead, *lines]
        if self.header:
            end = self.row_end if self.header_end is None else self.header_end
            lines.insert(0, self.delimiter.join(self.cell.format(name) for name in self.header) + end)
        last = self.end if self.last_end is None else self.last_end
        return self.pack(self.encode(self.above + self.end.join(lines) + last))


def changes_of_one_line(signal: Signal) -> bytes:
    """time, line, level: what each line is at the start, then a row for each change."""
    rows = ["time_s,line,level"]
    before = [-1] * len(LINES)
    for tick, levels in zip(signal.ticks.tolist(), signal.levels.tolist(), strict=True):
        for place, level in enumerate(levels):
            if level != before[place]:
                rows.append(f"{exact(tick * signal.step, 9)},{LINES[place]},{level}")
        before = levels
    return ("\n".join(rows) + "\n").encode()


def a_row_a_change(signal: Signal) -> bytes:
    """All levels in every row, and lines that change together in rows of their own with one time."""
    rows = ["Time [s]," + ",".join(LINES)]
    before = signal.levels[0].tolist()
    rows.append(",".join([exact(int(signal.ticks[0]) * signal.step, 9), *map(str, before)]))
    for tick, levels in zip(signal.ticks[1:].tolist(), signal.levels[1:].tolist(), strict=True):
        for place, level in enumerate(levels):
            if level != before[place]:
                before[place] = level
                rows.append(",".join([exact(tick * signal.step, 9), *map(str, before)]))
    rows.append(",".join([exact(int(signal.ticks[-1]) * signal.step, 9), *map(str, before)]))
    return ("\n".join(rows) + "\n").encode()


# --- levels ----------------------------------------------------------------------------------------------------------


def spelt(low: str, high: str) -> Callable[[np.ndarray[Any, Any]], list[list[str]]]:
    return lambda levels: np.where(levels == 1, high, low).astype(object).tolist()


def volts(levels: np.ndarray[Any, Any]) -> list[list[str]]:
    """0.05 V and 3.25 V with 60 mV rms of noise."""
    noise = np.random.default_rng(5).normal(0, 0.06, levels.shape)
    return [[f"{volt:.3f}" for volt in row] for row in (0.05 + 3.2 * levels + noise).tolist()]


def port(form: str) -> Callable[[np.ndarray[Any, Any]], list[list[str]]]:
    """One value a row: MA in bit 0, ..., Z in bit 4; bits 5 and 6 are other lines that rest high."""
    return lambda levels: [[form.format(value)] for value in (levels @ (1 << np.arange(5)) + 96).tolist()]


PORT_LINES = {role: f"port[{bit}]" for bit, role in enumerate(ROLES)}


# --- all of them -----------------------------------------------------------------------------------------------------


@dataclass(frozen=True)
class Layout:
    """A row of the table in docs/layouts.md. lines, keys: what the sheet has to say. resolution: what is lost of a
    time, seconds; shift: what the file's axis is ahead of the signal's. rate: of the signal."""

    group: str
    name: str
    write: Callable[[Signal], bytes]
    lines: dict[str, str | int] = field(default_factory=dict)
    keys: CaptureKeys = field(default_factory=CaptureKeys)
    resolution: float = 1e-9
    shift: float = 0.0
    every_sample: bool = False
    rate: float = 12.5e6
    edges_from_unknown: int = 0
    """A and B from unknown to a level, which the count of edges includes."""

    @property
    def sheet(self) -> Sheet:
        lines = self.lines or SHEET.lines
        return msgspec.structs.replace(SHEET, lines=lines, capture=self.keys)


def zstandard(content: bytes) -> bytes:
    sink = pa.BufferOutputStream()
    with pa.CompressedOutputStream(sink, "zstd") as stream:
        stream.write(content)
    return bytes(sink.getvalue().to_pybytes())


def members(content: bytes) -> bytes:
    middle = len(content) // 2
    return gzip.compress(content[:middle], mtime=0) + gzip.compress(content[middle:], mtime=0)


RATE = CaptureKeys(sample_rate_hz=12.5e6)
NUMBERED: dict[str, str | int] = dict(zip(ROLES, range(2, 7), strict=True))
BRACKETS = ("MA+ (clk)", "SLO #1", "A [V]", "/B", "Z-0_V")
HALF_A_STEP = 41e-9
"""Where a tick is a whole step, the middle between two edges is known to half of one."""
FAR = Fraction(1_700_000_000)


def _d(name: str, **changes: Any) -> Layout:
    return Layout("Separators and lines", name, Export(**changes).write)


def _h(name: str, lines: dict[str, str | int] | None = None, keys: CaptureKeys | None = None, **changes: Any) -> Layout:
    return Layout("Headers", name, Export(**changes).write, lines or {}, keys or CaptureKeys())


def _t(name: str, time: Times | None, **changes: Any) -> Layout:
    own = {key: changes.pop(key) for key in ("keys", "resolution", "shift", "every_sample", "rate") if key in changes}
    return Layout("Time", name, Export(time=time, **changes).write, **own)


def _v(name: str, levels: Any, **changes: Any) -> Layout:
    own = {key: changes.pop(key) for key in ("keys", "lines", "edges_from_unknown") if key in changes}
    return Layout("Values", name, Export(levels=levels, **changes).write, **own)


def _f(name: str, **changes: Any) -> Layout:
    return Layout("Files", name, Export(**changes).write)


def _units(unit: str) -> dict[str, Any]:
    return {"header": (f"Time [{unit}]", *LINES)}


LAYOUTS: tuple[Layout, ...] = (
    _d("comma"),
    _d("comma and space", delimiter=", "),
    _d("cells padded with spaces", cell="{:>14}"),
    _d("cells padded on the right", cell="{:<14}"),
    _d("tab", delimiter="\t"),
    _d("tab, and one at the end of each row", delimiter="\t", row_end="\t", header_end=""),
    _d("one space", delimiter=" "),
    _d("several spaces", delimiter="   ", header=("Time_s", *LINES)),
    _d("semicolon", delimiter=";"),
    _d("quoted cells", cell='"{}"'),
    _d("a separator at the end of each row", row_end=","),
    _d("LF", end="\n"),
    _d("CRLF", end="\r\n"),
    _d("bare CR", end="\r"),
    _d("no line feed at the end", last_end=""),
    _d("UTF-8 with a byte-order mark", encode=lambda text: text.encode("utf-8-sig")),
    _d("UTF-16 with a byte-order mark", encode=lambda text: text.encode("utf-16")),
    _d("UTF-16 without one", encode=lambda text: text.encode("utf-16-be")),
    _h("none", NUMBERED, header=()),
    _h("one row"),
    _h("names, then a row of units", header=("Time", *LINES), ahead=("s,V,V,V,V,V",)),
    _h("a header that begins with a comment sign", header=("# Time [s]", *LINES)),
    _h(
        "numbered columns with gaps",
        dict(zip(ROLES, ("0", "1", "4", "5", "7"), strict=True)),
        header=("Time [s]", "0", "1", "4", "5", "7"),
    ),
    _h(
        "names with spaces, signs and brackets", dict(zip(ROLES, BRACKETS, strict=True)), header=("Time [s]", *BRACKETS)
    ),
    _h("names in other letters than the sheet", header=("TIME [S]", *map(str.lower, LINES))),
    _h("unit in square brackets"),
    _h("unit in round brackets", header=("Time(s)", *LINES)),
    _h("unit behind an underscore", header=("time_s", *LINES)),
    _h("unit behind a slash", header=("t / s", *LINES)),
    _h("a preamble of comments", above="# made on a bench\n# Sample rate: 12.5 MHz\n#\n\n\n"),
    _h("a preamble of keys and values", above="Model,none\nSample Rate,12.5 MHz\nSamples,125000\nDate,2024-05-31\n\n"),
    _h("a preamble longer than the first look", above="# nothing to see here\n" * 30_000),
    _t("seconds", seconds(9)),
    _t("milliseconds", seconds(6, 3), **_units("ms")),
    _t("microseconds", seconds(3, 6), **_units("us")),
    _t("nanoseconds", seconds(0, 9), **_units("ns")),
    _t("picoseconds", seconds(0, 12), **_units("ps")),
    _t("the last column", seconds(9), time_at=-1, header=(*LINES, "Time [s]")),
    _t("any column", seconds(9), time_at=2, header=("MA", "SLO", "Time [s]", "A", "B", "Z")),
    _t(
        "whole sample numbers, rate given",
        lambda time: str(round(time * 12_500_000)),
        header=("Sample", *LINES),
        keys=RATE,
        resolution=HALF_A_STEP,
    ),
    _t(
        "whole sample numbers, rate in the preamble",
        lambda time: str(round(time * 12_500_000)),
        header=("Sample", *LINES),
        resolution=HALF_A_STEP,
        above="Sample rate: 12500 kHz\n",
    ),
    _t("none, rate given", None, header=LINES, keys=RATE, every_sample=True, resolution=HALF_A_STEP),
    _t(
        "none, rate in the preamble",
        None,
        header=LINES,
        above="; sampling period = 80 ns\n",
        every_sample=True,
        resolution=HALF_A_STEP,
    ),
    _t("seven decimals", seconds(7), resolution=1e-7),
    _t("fifteen decimals", seconds(15)),
    _t("trailing zeros stripped", stripped),
    _t("scientific notation", scientific),
    _t("float noise", noisy, **_units("us")),
    _t("decimal comma", lambda time: exact(time, 9).replace(".", ","), delimiter=";"),
    _t("decimal comma in quotes", lambda time: exact(time, 9).replace(".", ","), cell='"{}"'),
    _t("ISO 8601 date-times with nanoseconds", date(), header=("Timestamp", *LINES)),
    _t("ISO 8601 date-times with a zone", date("+02:00", " "), header=("Timestamp", *LINES)),
    _t("ISO 8601 date-times under a header that says seconds", date("Z")),
    _t("a negative start", seconds(9, 0, Fraction(-1, 200)), shift=-0.005),
    _t("a start at -0.000000000", lambda time: exact(time, 9) if time else "-0.000000000"),
    _t("a start far from zero", seconds(9, 0, FAR), shift=float(FAR), resolution=5e-7),
    _t("24 MHz printed to the nanosecond", seconds(9), rate=24e6, resolution=2e-9),
    _v("0 and 1", spelt("0", "1")),
    _v("0.0 and 1.0", spelt("0.0", "1.0")),
    _v("0 and 3.3", spelt("0", "3.3")),
    _v("voltages with noise, thresholds found", volts),
    _v("voltages with noise, thresholds given", volts, keys=CaptureKeys(threshold_v=(1.2, 1.8))),
    _v("high and low", spelt("low", "High")),
    _v("true and false", spelt("FALSE", "TRUE")),
    _v("a port value in decimal", port("{}"), header=("Time [s]", "port"), lines=PORT_LINES),
    _v("a port value in hexadecimal", port("0x{:02X}"), header=("Time [s]", "port"), lines=PORT_LINES),
    _v("a port value in hexadecimal without a mark", port("{:02x}"), header=("Time [s]", "port"), lines=PORT_LINES),
    _v("a port value in binary", port("{:08b}"), header=("Time [s]", "port"), lines=PORT_LINES),
    _v(
        "a port value whose base the sheet names",
        port("{:04X}"),
        header=("Time [s]", "port"),
        lines=PORT_LINES,
        keys=CaptureKeys(port_base="hexadecimal"),
    ),
    _v(
        "x, z and U as unknown",
        spelt("0", "1"),
        ahead=("-0.000000240,x,x,x,x,x", "-0.000000160,z,Z,z,z,z", "-0.000000080,U,U,u,U,U"),
        edges_from_unknown=2,
    ),
    Layout("Rows", "every sample", Export().write, every_sample=True),
    Layout("Rows", "only changes, lines that change together in one row", Export().write),
    Layout("Rows", "a row per change, lines that change together in rows with one time", a_row_a_change),
    Layout("Rows", "one row per change of one line", changes_of_one_line),
    Layout("Rows", "the last row repeated", Export(repeat_last=True).write),
    _f("plain"),
    _f("gzip", pack=lambda content: gzip.compress(content, mtime=0)),
    _f("gzip in several members", pack=members),
    _f("zstd", pack=zstandard),
    _f("zstd around UTF-16", encode=lambda text: text.encode("utf-16"), pack=zstandard),
)
