"""Mutated captures and sheets, as many as fit into some seconds: an answer or the clear error, never anything else.

    python tests/fuzz/fuzz_readers.py SECONDS [SEED]

Not part of the test run. What it finds is kept beside it in crashes/, and what was worth keeping stands as a test. An
input that takes longer than ten seconds counts as a hang, and more than 300 MB of growth as unbounded memory.
"""

from __future__ import annotations

import gzip
import random
import resource
import signal
import sys
import tempfile
import time
import traceback
import warnings
from collections import Counter
from collections.abc import Callable
from pathlib import Path
from typing import Any

sys.path.insert(0, str(Path(__file__).parents[1] / "capture"))

from exports import LAYOUTS, SHEET, Signal, simulated, zstandard

from decode.capture.source import open_capture
from decode.errors import InputError
from decode.sheet import CaptureKeys, from_toml

SLOWEST_S = 10
BLOCKS, SMALL = (3, 1000, 200_000), 20_000
"""Lines of a block; the first only for inputs of so few bytes, since each block costs a millisecond."""
MOST_GROWTH_KB = 300_000
PAGE = (Path(__file__).parents[2] / "docs" / "the-sheet.md").read_text(encoding="utf-8")
CRASHES = Path(__file__).parent / "crashes"

VCD = b"""$date today $end $timescale 1 ns $end $scope module top $end
$var wire 1 ! MA $end $var wire 1 " SLO $end $var reg 8 # bus [7:0] $end $upscope $end $enddefinitions $end
#0 $dumpvars 0! 1" b00000000 # $end #10 1! #20 0! b1010 # #30 x! $dumpoff x! $end #40 $dumpon 1! $end
"""

TOKENS = [
    b",", b";", b"\t", b" ", b"\n", b"\r\n", b"\r", b"\n\n", b'"', b'""', b"#", b"//", b"%", b"\0", b"\xff",
    b"\xfe\xff",
    b"0", b"1", b"x", b"U", b"-", b"nan", b"NaN", b"inf", b"1e300", b"-1e-300", b"9" * 40, b"0.5", b"0,5", b"1e",
    b"0x1f",
    b"0b1", b"7h", b"low", b"true", b"2024-05-31T12:00:00Z", b"9999-99-99T99:99:99", b"Sample rate: 24 MHz\n", b"[s]",
    b"Time [ns]", b"time,line,level\n", b"--- window ---\n", b"\xc2\xb5s", b"\xef\xbb\xbf", b"[7]", b"A" * 300,
    b"$end", b"$var", b"$scope", b"#-1", b"b", b"$dumpoff", b"$comment", b"[", b"]", b"{", b"}", b"=", b"1_000",
]  # fmt: skip

KEYS = [
    CaptureKeys(),
    CaptureKeys(sample_rate_hz=1e6),
    CaptureKeys(time_unit="ns"),
    CaptureKeys(threshold_v=(0.8, 2.0)),
    CaptureKeys(window_s=(1e-6, 1e-3)),
    CaptureKeys(port_base="hexadecimal", sample_rate_hz=33.3e6),
]


def seeds() -> list[bytes]:
    """The head of each tested layout, and a dump."""
    signal_ = Signal.of_changes(simulated(faulty=False))
    short = Signal(signal_.ticks[:60], signal_.levels[:60], signal_.step)
    return [layout.write(short) for layout in LAYOUTS] + [VCD]


def mutated(content: bytes, other: bytes, dice: random.Random) -> bytes:
    """Bytes changed, tokens put in, parts removed, repeated, moved, or taken from another input."""
    for _ in range(dice.choice([1, 1, 2, 3, 5, 10, 30])):
        at, to = sorted((dice.randrange(len(content) + 1), dice.randrange(len(content) + 1)))
        to = min(to, at + dice.choice([1, 3, 20, 200]))
        what = dice.randrange(8)
        if what <= 2:
            content = content[:at] + dice.choice(TOKENS) + content[to if what else at :]
        elif what == 3:
            content = content[:at] + content[to:]
        elif what == 4:
            content = content[:to] + content[at:to] * dice.choice([1, 2, 50]) + content[to:]
        elif what == 5:
            content = content[:at] + bytes([dice.randrange(256)]) + content[at + 1 :]
        elif what == 6:
            start = dice.randrange(len(other) + 1)
            content = content[:at] + other[start : start + dice.choice([5, 50, 500])] + content[at:]
        else:
            lines = content.split(b"\n")
            dice.shuffle(lines) if dice.random() < 0.2 else lines.insert(dice.randrange(len(lines)), dice.choice(lines))
            content = b"\n".join(lines)
    return content[: 1 << 18]


def read(path: Path, content: bytes, dice: random.Random) -> str:
    """Reads it as the command does. The outcome in one word."""
    packed, blocks = dice.random(), BLOCKS if len(content) < SMALL else BLOCKS[1:]
    content = gzip.compress(content) if packed < 0.05 else zstandard(content) if packed < 0.1 else content
    if 0.1 < packed < 0.12 or 0.03 < packed < 0.04:
        content = content[: dice.randrange(len(content) + 1)]
    path.write_bytes(content)
    try:
        capture = open_capture(path, dice.choice(KEYS), rows_per_span=dice.choice(blocks))
        names = [name for name in capture.columns if dice.random() < 0.9]
        usable = []
        for name in names:
            try:
                usable.append(capture.column(name if dice.random() < 0.8 else f"{name}[{dice.randrange(9)}]"))
            except InputError as error:
                assert str(error)
        for span in capture.spans(list(dict.fromkeys(usable))):
            assert span.start < span.stop
            for edges in span.lines.values():
                assert edges.times.size == edges.levels.size
                assert not edges.times.size or span.start <= edges.times.min() <= edges.times.max() < span.stop
        assert capture.grid > 0 and capture.rows >= 0 and len(capture.digest) == 64
        assert all(capture.notes) and all(len(found) for found in capture.anomalies)
    except InputError as error:
        assert str(error) and error.problem
        return "refused"
    return "read"


def load(text: bytes) -> str:
    try:
        from_toml(text.decode("utf-8", "replace"))
    except InputError as error:
        assert str(error)
        return "sheet refused"
    return "sheet loaded"


def guarded(job: Callable[[], str]) -> tuple[str, str | None]:
    """(outcome, traceback or None)."""

    def late(*_: Any) -> None:
        raise TimeoutError(f"longer than {SLOWEST_S} s")

    signal.signal(signal.SIGALRM, late)
    signal.alarm(SLOWEST_S)
    try:
        return job(), None
    except (Exception, Warning):
        return "CRASH", traceback.format_exc()
    finally:
        signal.alarm(0)


def main(seconds: float, seed: int) -> int:
    warnings.simplefilter("error")
    dice, outcomes, found = random.Random(seed), Counter[str](), dict[str, bytes]()
    pool = seeds()
    sheets = [block.split("```")[0].encode() for block in PAGE.split("```toml\n")[1:]]
    assert SHEET.lines
    began = time.monotonic()
    before = 0
    with tempfile.TemporaryDirectory() as folder:
        path = Path(folder) / "x"
        while time.monotonic() - began < seconds:
            if dice.random() < 0.15:
                content = mutated(dice.choice(sheets), dice.choice(sheets), dice)
                outcome, trace = guarded(lambda content=content: load(content))
            else:
                content = mutated(dice.choice(pool), dice.choice(pool), dice)
                outcome, trace = guarded(lambda content=content: read(path, content, dice))
                content = path.read_bytes()
            outcomes[outcome] += 1
            if trace is not None and trace.splitlines()[-1] not in found:
                found[trace.splitlines()[-1]] = content
                CRASHES.mkdir(exist_ok=True)
                (CRASHES / f"{seed}-{len(found)}").write_bytes(content)
                print(trace, f"kept as crashes/{seed}-{len(found)}", sep="\n", flush=True)
            if sum(outcomes.values()) == 500:
                before = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss
    growth = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss - before if before else 0
    print(
        f"{sum(outcomes.values())} inputs in {seconds:g} s, seed {seed}: {dict(outcomes)}; memory grew by {growth} kB"
    )
    print(f"{len(found)} different crashes")
    return int(bool(found) or growth > MOST_GROWTH_KB)


if __name__ == "__main__":
    sys.exit(main(float(sys.argv[1]), int(sys.argv[2]) if len(sys.argv) > 2 else 0))
