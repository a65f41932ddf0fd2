"""The sampling step of a capture whose times are whole numbers already, and the words for it.

The rules are those of `decode.capture.sampling`: a stated rate is believed unless two times stand closer, else the
times themselves are asked.
"""

from __future__ import annotations

from dataclasses import dataclass
from fractions import Fraction

from decode.capture.sampling import Intervals
from decode.capture.window import Window
from decode.sheet import CaptureKeys


@dataclass(frozen=True, slots=True)
class Stepping:
    """How the step of a capture is told. tick: seconds. printed: ticks that the last digit written is worth. rate:
    samples per second as given, or None."""

    tick: Fraction
    printed: int = 1
    rate: Fraction | None = None

    def _maybe_stated(self, intervals: Intervals) -> Fraction | None:
        """The step by the rate given, in ticks, unless two times stand closer."""
        if self.rate is None:
            return None
        step = 1 / (self.rate * self.tick)
        near = intervals.shortest.size and intervals.shortest[0] + self.printed < step
        return None if near else step

    def grid(self, intervals: Intervals) -> int:
        """The sampling step in whole ticks, one at least."""
        stated = self._maybe_stated(intervals)
        return max(1, round(intervals.step(self.printed).ticks if stated is None else stated))

    def notes(self, intervals: Intervals) -> list[str]:
        """What the step was found from, where it is not the common divisor of the times."""
        if self.rate is not None:
            rate = f"{float(self.rate):.12g} Hz"
            if self._maybe_stated(intervals) is not None:
                return [f"sampled at {rate}, as given"]
            return [f"the sample rate of {rate}, as given, is not used: times stand closer"]
        step = intervals.step(self.printed)
        if step.is_exact:
            return []
        return [
            f"the sampling step is taken to be {step.ticks * float(self.tick):.4g} s: all times fit multiples of it"
        ]


def window_note(keys: CaptureKeys, window: Window) -> list[str]:
    """That there is a window, where there is one."""
    if window.is_open:
        return []
    ends = [
        f"{word} {end:.12g} s"
        for word, end in zip(("from", "to"), keys.window_s or (), strict=False)
        if not isinstance(end, str)
    ]
    return [f"only the times {' '.join(ends)} were looked at"]
