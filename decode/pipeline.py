"""The main job, end to end: a capture and its sheet to a report.

The rooms are put in a row here and nowhere else. The capture goes by once, span by span; what stays behind is one row
a frame and the machines' own small memories.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, field
from functools import cached_property
from importlib.metadata import PackageNotFoundError, version
from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np

from decode.agreement.fit import Agreement, agree
from decode.agreement.latch import Joined, LatchJoin
from decode.agreement.silence import silent_channels
from decode.capture.source import Capture, open_capture
from decode.errors import InputError
from decode.incremental.decoder import QuadratureDecoder
from decode.incremental.quadrature import Counts
from decode.incremental.result import IncrementalResult
from decode.judgement.evidence import CaptureFacts, Evidence, SerialFacts, modulus, positions_per_turn
from decode.judgement.faults import SAMPLES_NEEDED
from decode.judgement.judge import judge
from decode.judgement.records import Report
from decode.lines.activity import Activity, LineActivity
from decode.lines.pairs import PairCombiner, default_skew
from decode.serial.continuity import absorbed, cadence, jumped_alone, stood_still, with_breaks
from decode.serial.frames import Frames
from decode.serial.receiver import Receiver
from decode.sheet import COMPLEMENTS, Sheet, load
from decode.spans import FloatArray, IntArray, Span

if TYPE_CHECKING:
    import pandas as pd

Progress = Callable[[float, str], None]


class Checked:
    """A report, and the tables behind it (see `decode.report.columns`), which are made when first asked for."""

    def __init__(self, report: Report, evidence: Evidence, edges: tuple[IntArray, IntArray] | None) -> None:
        self.report = report
        self._evidence = evidence
        self._edges = edges

    @cached_property
    def frames(self) -> pd.DataFrame:
        """One row a frame."""
        from decode.report.columns import frames_table

        return frames_table(self._evidence)

    @cached_property
    def angles(self) -> pd.DataFrame:
        """One row a frame, or an edge where there is no serial line."""
        from decode.report.columns import angles_table

        return angles_table(self._evidence, self._edges)


def check(
    path: str | Path, sheet: Sheet | str | Path, *, progress: Progress | None = None, command: str = ""
) -> Checked:
    """Check the capture at `path` against `sheet` (a Sheet, or the path of one).

    Raises InputError where either cannot be used. progress: called with the part done, 0 to 1, and what is going on.
    """
    board = sheet if isinstance(sheet, Sheet) else load(sheet)
    return check_capture(open_capture(path, board.capture), board, progress=progress, command=command)


def check_capture(capture: Capture, board: Sheet, *, progress: Progress | None = None, command: str = "") -> Checked:
    """Check an opened capture; see `check`. Its spans go by once."""
    lines = _lines(board, capture)
    bench = _Bench(board, lines, capture)
    for span in capture.spans(list(dict.fromkeys(lines.values()))):
        bench.feed(span)
        if progress is not None:
            progress(capture.part_read, f"reading {capture.file}")
    if progress is not None:
        progress(1.0, "judging")
    evidence = bench.evidence()
    return Checked(judge(evidence, version=_version(), command=command), evidence, bench.edges())


def _version() -> str:
    try:
        return version("shaftproof")
    except PackageNotFoundError:
        return "from source"


def _lines(sheet: Sheet, capture: Capture) -> dict[str, str]:
    """Column by role. Raises InputError for a line that is not there, or for one that serves two roles."""
    if not sheet.lines:
        raise InputError(
            "the sheet does not say which line is what",
            file=capture.file,
            expected='[lines] with entries such as clock = "MA"',
            hint=f"the capture's columns are: {', '.join(capture.columns)}",
        )
    lines: dict[str, str] = {}
    for role, line in sheet.lines.items():
        column = capture.column(line)
        if column in lines.values():
            other = next(taken for taken, name in lines.items() if name == column)
            raise InputError(
                "one column cannot be two lines", file=capture.file, column=column, found=f"{other} and {role}"
            )
        lines[role] = column
    return lines


@dataclass(slots=True, eq=False)
class _Parts:
    """Tables of one capture as they come."""

    frames: list[Frames] = field(default_factory=list)
    joined: list[Joined] = field(default_factory=list)
    counts: list[Counts] = field(default_factory=list)


class _Bench:
    """The machines for one board, fed one capture."""

    def __init__(self, sheet: Sheet, lines: dict[str, str], capture: Capture) -> None:
        self._sheet, self._lines, self._capture = sheet, lines, capture
        tick = float(capture.tick)
        pairs = {lines[role]: lines[complement] for complement, role in COMPLEMENTS.items() if complement in lines}
        self._pairs = PairCombiner(pairs, default_skew(capture.tick, max(1, capture.grid)))
        self._plain = {role: column for role, column in lines.items() if role not in COMPLEMENTS}
        partners = [
            (self._plain[one], self._plain[other])
            for one, other in (("clock", "data"), ("a", "b"))
            if one in self._plain and other in self._plain
        ]
        self._activity = Activity(self._plain.values(), partners)
        self._receiver = self._decoder = None
        if sheet.serial is not None:
            least = sheet.limit("setup_time_s")
            self._receiver = Receiver(
                sheet.serial,
                lines["clock"],
                lines["data"],
                lines.get("select"),
                least_setup=None if least is None or least[0] is None else round(least[0] / tick),
            )
        if "a" in lines and "b" in lines:
            spacing = sheet.limit("edge_spacing_s")
            self._decoder = QuadratureDecoder(
                lines["a"],
                lines["b"],
                lines.get("index"),
                sheet.incremental,
                tick,
                None if spacing is None or spacing[0] is None else spacing[0] / tick,
            )
        self._join: LatchJoin | None = None
        self._count = 0
        self._parts = _Parts()

    def feed(self, span: Span) -> None:
        if not span.joined:
            self._end_stretch()
        span = self._pairs.feed(span)
        self._activity.feed(span)
        frames = None if self._receiver is None else self._receiver.feed(span)
        counts = None if self._decoder is None else self._decoder.feed(span)
        if counts is not None and self._receiver is None:
            self._parts.counts.append(counts)
        if frames is None or self._receiver is None:
            return
        self._parts.frames.append(frames)
        if counts is not None:
            if self._join is None:
                self._join = LatchJoin(span.start, counts.start)
            told = self._join.feed(counts.times, counts.counts, span.stop, frames.latch, self._receiver.settled)
            self._parts.joined.append(told)

    def _end_stretch(self) -> None:
        """The capture ends, or is broken: what waits is told as it stands."""
        if self._receiver is None:
            return
        frames = self._receiver.finish()
        self._parts.frames.append(frames)
        if self._join is not None:
            nothing = np.empty(0, np.int64)
            self._parts.joined.append(
                self._join.feed(nothing, nothing, self._receiver.settled, frames.latch, self._receiver.settled)
            )
            self._parts.joined.append(self._join.finish())
            self._join = None

    def edges(self) -> tuple[IntArray, IntArray] | None:
        """Every A/B edge with the count after it, where there is no serial line to make a shorter table of."""
        parts = self._parts.counts
        if not parts:
            return None
        return np.concatenate([part.times for part in parts]), np.concatenate([part.counts for part in parts])

    def evidence(self) -> Evidence:
        """All that is known once the capture is over."""
        self._end_stretch()
        incremental = None if self._decoder is None else self._decoder.finish()
        pair_anomalies = self._pairs.finish()
        frames = joined = agreement = serial = None
        activity = self._activity.result()
        if self._receiver is not None and self._sheet.serial is not None:
            frames = Frames.concatenate([Frames.none(self._sheet.serial), *self._parts.frames])
        silent = self._silent(frames, activity)
        if frames is not None:
            joined = _together(self._parts.joined, silent) if self._parts.joined else None
            serial, agreement = self._continued(frames, joined, incremental)
        capture = self._capture
        return Evidence(
            sheet=self._sheet,
            lines=self._lines,
            capture=CaptureFacts(
                file=capture.file,
                layout=capture.layout,
                rows=capture.rows,
                tick_s=float(capture.tick),
                grid=max(1, capture.grid),
                first=capture.first,
                last=capture.last,
                digest=capture.digest,
                notes=list(capture.notes),
                anomalies=list(capture.anomalies),
            ),
            activity=activity,
            pair_anomalies=pair_anomalies,
            serial=serial,
            silent=silent,
            incremental=incremental,
            agreement=agreement,
            joined=joined,
        )

    def _silent(self, frames: Frames | None, activity: dict[str, LineActivity]) -> dict[str, int]:
        if self._decoder is None or any(one.kind == "time_reversal" for one in self._capture.anomalies):
            return {}
        sheet = self._sheet.serial
        told = frames if sheet is not None and sheet.position_bits else None
        per_turn, word = (1, 1) if sheet is None else (positions_per_turn(sheet), modulus(sheet))
        return silent_channels(self._lines, activity, self._capture.first, told, per_turn, word)

    def _continued(
        self, frames: Frames, joined: Joined | None, incremental: IncrementalResult | None
    ) -> tuple[SerialFacts, Agreement | None]:
        """What shows from frame to frame, with the count's help where there is one."""
        sheet, receiver = self._sheet.serial, self._receiver
        assert sheet is not None and receiver is not None
        tick = float(self._capture.tick)
        if receiver.rhythm is not None and receiver.rhythm.period < SAMPLES_NEEDED * max(1, self._capture.grid):
            frames = frames.without("setup_violation", "clock_glitch")
        stated = None if sheet.frame_rate_hz is None else 1 / (sheet.frame_rate_hz * tick)
        rhythm = cadence(frames, stated)
        turn = self._counts_per_turn(incremental)
        moved = None
        if joined is not None and turn is not None:
            moved = np.asarray(joined.counted * positions_per_turn(sheet) / turn, np.float64)
        frames = stood_still(frames, sheet, modulus(sheet), moved, _count_step(sheet.position_bits, turn))
        agreement = self._compared(frames, joined, turn, _illegal(incremental)) if sheet.position_bits else None
        frames = _with_outliers(frames, agreement) if agreement is not None else jumped_alone(frames, modulus(sheet))
        frames = absorbed(with_breaks(frames, sheet, rhythm))
        facts = SerialFacts(
            frames=frames,
            cadence=rhythm,
            timings=receiver.timings,
            rhythm=receiver.rhythm,
            habit=receiver.habit,
            notes=receiver.notes(),
            anomalies=receiver.anomalies(),
        )
        return facts, agreement

    def _counts_per_turn(self, incremental: IncrementalResult | None) -> int | None:
        stated = self._sheet.incremental.counts_per_turn if self._sheet.incremental is not None else None
        return stated if stated is not None or incremental is None else incremental.counts_per_turn

    def _compared(self, frames: Frames, joined: Joined | None, turn: int | None, illegal: IntArray) -> Agreement | None:
        if joined is None or self._sheet.serial is None:
            return None
        return agree(
            frames.latch,
            frames.position,
            frames.usable,
            joined.counted,
            joined.speed,
            joined.uncertainty,
            modulus=modulus(self._sheet.serial),
            positions_per_turn=positions_per_turn(self._sheet.serial),
            counts_per_turn=turn,
            direction=self._sheet.incremental.direction if self._sheet.incremental is not None else 1,
            tick_s=float(self._capture.tick),
            grid_ticks=max(1, self._capture.grid),
            stretch=frames.segment,
            breaks=illegal,
        )


def _illegal(incremental: IncrementalResult | None) -> IntArray:
    """Ticks at which A and B changed together, so that counts were lost there."""
    found = [] if incremental is None else incremental.anomalies
    return np.concatenate([np.empty(0, np.int64), *(one.times for one in found if one.kind == "illegal_transition")])


def _count_step(position_bits: int, turn: int | None) -> float:
    """One count in steps of the serial position."""
    return 0.0 if turn is None else (1 << position_bits) / turn


def _together(parts: list[Joined], silent: dict[str, int]) -> Joined:
    """All of them; the count is not known from where a channel fell silent."""

    def column(name: str) -> FloatArray:
        return np.concatenate([getattr(part, name) for part in parts])

    latches = np.concatenate([part.latches for part in parts])
    counted, speed = column("counted"), column("speed")
    if silent:
        counted[latches >= min(silent.values())] = np.nan
    return Joined(latches, counted, speed, column("uncertainty"))


def _with_outliers(frames: Frames, agreement: Agreement) -> Frames:
    """Frames that leave the count's course and come back: a repeated word, else a jump."""
    for name, which in (
        ("position_stale", agreement.outliers[agreement.outlier_stale]),
        ("position_jump", agreement.outliers[~agreement.outlier_stale]),
    ):
        rows = np.zeros(len(frames), np.bool_)
        rows[which] = True
        frames = frames.with_kind(rows, name)
    return frames
