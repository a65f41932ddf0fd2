"""Serial lines drawn by hand: one character is half a clock period, ‾ high, _ low, ? unknown.

Every burst here is an ssi or a biss-c one, which move alike: clock and data rest high, the clock falls first, and
each rising edge drives one level of the data line.
"""

from __future__ import annotations

from typing import NamedTuple

import numpy as np

from decode.serial.frames import Frames
from decode.serial.receiver import Receiver
from decode.sheet import Serial
from decode.spans import Edges, Span

HALF = 5
"""Ticks in a character: a clock period of 10."""

LEVELS = {"_": 0, "‾": 1, "?": 2}


def line(picture: str, half: int = HALF) -> Edges:
    """The edges of a drawn line; blanks are only there to be read."""
    levels = np.array([LEVELS[one] for one in picture if one != " "], np.int8)
    return Edges.from_samples(np.arange(levels.size, dtype=np.int64) * half, levels)


class Drawing(NamedTuple):
    """Clock and data, equally long."""

    clock: str
    data: str

    def __add__(self, other: object) -> Drawing:
        assert isinstance(other, Drawing)
        return Drawing(self.clock + other.clock, self.data + other.data)

    def __mul__(self, times: object) -> Drawing:
        assert isinstance(times, int)
        return Drawing(self.clock * times, self.data * times)

    def span(self, half: int = HALF) -> Span:
        clock, data = (picture.replace(" ", "") for picture in self)
        assert len(clock) == len(data)
        return Span(0, len(clock) * half, {"clock": line(clock, half), "data": line(data, half)})


def idle(halves: int) -> Drawing:
    """Both lines at rest."""
    return Drawing("‾" * halves, "‾" * halves)


def burst(driven: str, *, clocks: int | None = None, low: int = 6, late: int = 0) -> Drawing:
    """A burst in which rising edge k drives driven[k] and every further one a low.

    clocks: pulses, one more than `driven` has levels if not told. low: halves for which the data line stays low after
    the last clock edge. late: halves by which the data line comes late.
    """
    pulses = len(driven) + 1 if clocks is None else clocks
    levels = driven[:pulses].ljust(pulses, "0")
    data = "‾" * (1 + late) + "".join("‾‾" if level == "1" else "__" for level in levels)
    data = data[: 2 * pulses + late] + "_" * low
    return Drawing("_‾" * pulses + "‾" * (low + late), data)


def received(serial: Serial, *spans: Span, select: str | None = None) -> tuple[Receiver, Frames]:
    receiver = Receiver(serial, "clock", "data", select)
    parts = [receiver.feed(span) for span in spans]
    return receiver, Frames.concatenate([*parts, receiver.finish()])


def field(frames: Frames, name: str) -> list[int]:
    values: list[int] = frames.fields[name].tolist()
    return values
