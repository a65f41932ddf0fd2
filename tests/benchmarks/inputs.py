"""The captures that are measured, each made once and kept with its truth beside it.

One board, turning steadily at 60 turns a second with 20 ns of jitter on its A/B edges: 97 change rows a frame. A long
capture is a simulated stretch written several times over, each time later. The stretch holds whole turns and whole
frame periods, so every line ends at the level it began with, nothing happens at a joint, and every count is the
stretch's times the number of repeats, exactly.

    python inputs.py FOLDER KEY...        makes them; the measuring process has this done in another one

What is large is imported only where a capture is made: on Linux a process begins its life with the peak memory of the
one that started it, so the one that measures has to stay small.
"""

from __future__ import annotations

import hashlib
import json
import os
import sys
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any

ROOT = Path(__file__).resolve().parents[2]
SIMULATOR = ROOT / "decode" / "bench"

SPEED_RPM = 3600.0
SAMPLE_RATE_HZ = 200e6
JITTER_S = 20e-9
POSITION_BITS = 19
SHEET = f"""\
[board]
name = "benchmark board"

[lines]
clock = "MA"
data = "SLO"
a = "A"
b = "B"
index = "Z"

[serial]
interface = "biss-c"
frame_rate_hz = 16000
fields = [
  {{ name = "position", bits = {POSITION_BITS} }},
  {{ name = "error", bits = 1, active = "low" }},
  {{ name = "warning", bits = 1, active = "low" }},
  {{ name = "crc", bits = 6, polynomial = 0x43, inverted = true }},
]

[incremental]
cycles_per_turn = 1024
index_width_counts = 1
index_states = "a=1 b=1"
"""

SMALL = 8
"""How many times shorter everything is in a trial run; whole turns and frames remain."""


@dataclass(frozen=True)
class Recipe:
    """seconds: length of the simulated stretch. repeats: how often it is written. every_sample: a row each sample.
    shrinks: whether a trial run has it shorter."""

    seconds: float
    repeats: int = 1
    every_sample: bool = False
    shrinks: bool = True

    @property
    def digest(self) -> str:
        """Changes with anything that the file depends on."""
        told = repr((self, SPEED_RPM, SAMPLE_RATE_HZ, JITTER_S, SHEET)).encode()
        code = [path.read_bytes() for path in (Path(__file__), *sorted(SIMULATOR.glob("*.py")))]
        return hashlib.sha256(b"\0".join([told, *code])).hexdigest()[:10]


RECIPES = {
    "tenth": Recipe(0.4),
    "once": Recipe(4.0),
    "ten-times": Recipe(4.0, repeats=10),
    "5-gb-tenth": Recipe(4.0, repeats=4),
    "5-gb": Recipe(4.0, repeats=40),
    "every-sample": Recipe(0.1, every_sample=True),
    "1-mb": Recipe(0.03, shrinks=False),
}


@dataclass(frozen=True)
class Input:
    """A capture, its sheet, and what it holds: frames, edges, net_counts, index_pulses, counts_per_turn, rows."""

    capture: Path
    sheet: Path
    truth: dict[str, Any]

    @property
    def megabytes(self) -> float:
        return self.capture.stat().st_size / 1e6


def recipe(key: str, small: bool) -> Recipe:
    """`small`: for a trial run. The one of 1 MB is that small already."""
    full = RECIPES[key]
    return replace(full, seconds=full.seconds / SMALL) if small and full.shrinks else full


def path_of(folder: Path, key: str, small: bool) -> Path:
    return folder / f"{key}{'-small' if small else ''}-{recipe(key, small).digest}.csv"


def kept(folder: Path, key: str, small: bool) -> Input | None:
    """The capture if it is there, whole: its truth is written last."""
    capture = path_of(folder, key, small)
    sheet, truth = capture.with_suffix(".toml"), capture.with_suffix(".truth.json")
    if not (capture.is_file() and sheet.is_file() and truth.is_file()):
        return None
    return Input(capture, sheet, json.loads(truth.read_text(encoding="utf-8")))


def make(folder: Path, key: str, small: bool) -> None:
    """Write the capture, its sheet and its truth, in place of any older ones of that key."""
    from decode.bench.board import simulate
    from decode.bench.motion import Constant
    from decode.bench.scenario import Scenario
    from decode.bench.writer import write_csv
    from decode.sheet import load

    wanted, capture = recipe(key, small), path_of(folder, key, small)
    ending = "-??????????.*"
    for old in folder.glob(key + ("-small" if small else "") + ending):
        old.unlink()
    sheet = capture.with_suffix(".toml")
    sheet.write_text(SHEET, encoding="utf-8")
    scenario = Scenario(
        motion=Constant(SPEED_RPM),
        duration_s=wanted.seconds,
        sample_rate_hz=SAMPLE_RATE_HZ,
        edge_jitter_s=JITTER_S,
    )
    simulation = simulate(load(sheet), scenario)
    (stretch,) = simulation.segments
    if wanted.repeats > 1 and any(line.initial != line.final for line in simulation.lines.values()):
        raise ValueError(f"{key}: the stretch cannot be repeated, a line does not end as it began")
    length = stretch.stop - stretch.start
    segments = tuple(stretch._replace(shift=number * length) for number in range(wanted.repeats))
    write_csv(replace(simulation, segments=segments), capture, every_sample=wanted.every_sample)
    once = simulation.truth
    pulses = once.index_pulses * wanted.repeats
    truth = {
        "rows": _rows(capture),
        "frames": len(once.frames) * wanted.repeats,
        "edges": once.edges * wanted.repeats,
        "net_counts": once.net_counts * wanted.repeats,
        "index_pulses": pulses,
        # A capture without a turn from index to index cannot tell.
        "counts_per_turn": once.counts_per_turn if pulses > 1 else None,
    }
    waiting = capture.with_suffix(".part")
    waiting.write_text(json.dumps(truth), encoding="utf-8")
    os.replace(waiting, capture.with_suffix(".truth.json"))


def _rows(capture: Path) -> int:
    """Lines below the header."""
    with capture.open("rb") as file:
        return sum(block.count(b"\n") for block in iter(lambda: file.read(1 << 24), b"")) - 1


if __name__ == "__main__":
    sys.path.insert(0, str(ROOT))
    make(Path(sys.argv[1]), sys.argv[2], "--small" in sys.argv[3:])
