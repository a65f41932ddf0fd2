"""Every kind of finding as something that can be made to happen.

A maker changes one of the values that the simulation is made from, as the real cause would, at or after a stated
instant, and says what it did. The makers stand in one table a step, in the order of the steps; `FAULTS` is all of them.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass, field
from typing import Any, Generic, NamedTuple, TypeVar

import numpy as np

from decode.bench.bursts import Schedule, Signal, Spike
from decode.bench.line import ABSENT, PS_PER_SECOND, to_ps
from decode.bench.quadrature import Quadrature
from decode.bench.scenario import Fault
from decode.bench.stages import Angles, Flip, Recording, Segment, Settings, Wiring, Words
from decode.errors import InputError
from decode.rules.kinds import KINDS
from decode.sheet import Interface, Sheet

DEGREES = 360.0
ANY: tuple[Interface, ...] = ("ssi", "biss-c", "spi")
WITH_TIMEOUT: tuple[Interface, ...] = ("ssi", "biss-c")


class Made(NamedTuple):
    """What a maker did. time: ps from the capture's start. slots: the frame slots that have it.

    role: the line. lost: no whole word comes in these slots. since: the slot from which on, where none is faulty.
    """

    time: int
    detail: str
    slots: tuple[int, ...] = ()
    role: str | None = None
    lost: bool = False
    since: int | None = None


Stage = TypeVar("Stage")


@dataclass(frozen=True)
class Maker(Generic[Stage]):
    """make: changes the stage for the fault from an instant (ps) on. takes: the parameters it reads.

    interfaces: those whose frames it concerns; empty where it concerns no frame. quadrature: whether it needs A/B.
    """

    make: Callable[[Stage, Fault, int], Made]
    takes: tuple[str, ...] = ()
    interfaces: tuple[Interface, ...] = ()
    quadrature: bool = False


def check(fault: Fault, sheet: Sheet, number: int) -> None:
    """Refuse a fault that its kind or this board cannot have. Raises InputError."""
    where = f"faults[{number}]"
    if fault.kind not in FAULTS:
        known = ", ".join(KINDS)
        raise InputError("no such kind of fault", column=f"{where}.kind", found=fault.kind, expected=known)
    if fault.kind in SETTINGS and fault.time_s is not None:
        raise InputError(f"{fault.kind} concerns the whole capture", column=f"{where}.time_s", expected="no time")
    maker = FAULTS[fault.kind]
    allowed = {"kind", "time_s", *maker.takes}
    for name in Fault.__struct_fields__:
        if name not in allowed and getattr(fault, name) is not None:
            taken = ", ".join(maker.takes) or "none but time_s"
            raise InputError(f"{fault.kind} takes no {name}", column=f"{where}.{name}", expected=taken)
    if maker.interfaces and (sheet.serial is None or sheet.serial.interface not in maker.interfaces):
        raise InputError(f"{fault.kind} needs another interface", column=where, expected=", ".join(maker.interfaces))
    if maker.quadrature and (sheet.incremental is None or sheet.incremental.cycles_per_turn is None):
        raise InputError(f"{fault.kind} needs A and B", column=where, expected="[incremental] with cycles_per_turn")


def _none_left(fault: Fault, what: str) -> InputError:
    return InputError(f"no {what} left for {fault.kind} after its time", column="time_s", found=str(fault.time_s))


# -- settings: the whole capture ------------------------------------------------------------------------------------

_PLAIN_RATES = tuple(base * 10**power for power in range(10) for base in (1.0, 1.25, 2.0, 2.5, 4.0, 5.0, 8.0))


def _undersampled(settings: Settings, fault: Fault, at: int) -> Made:
    """The analyser is set to `samples` (3) a clock period, or a state of A and B where there is no clock."""
    shortest = 1 / settings.clock_hz if settings.clock_hz is not None else settings.state_s
    if shortest is None:
        raise InputError("undersampled needs a clock or a moving shaft", column="motion")
    wanted = (3.0 if fault.samples is None else fault.samples) / shortest
    settings.sample_rate_hz = max(rate for rate in _PLAIN_RATES if rate <= wanted)
    return Made(0, f"sampled at {settings.sample_rate_hz:g} Hz")


def _direction_opposed(settings: Settings, fault: Fault, at: int) -> Made:
    """A and B are exchanged."""
    settings.swapped = True
    return Made(0, "A and B swapped")


def _scale_wrong(settings: Settings, fault: Fault, at: int) -> Made:
    """The serial position makes `scale` (15/16) turns in one of the shaft."""
    settings.serial_scale = 15 / 16 if fault.scale is None else fault.scale
    return Made(0, f"{settings.serial_scale:g} serial turns a turn")


def _latency_high(settings: Settings, fault: Fault, at: int) -> Made:
    """The serial position is `delay_s` (100 us) old."""
    settings.latency_s = 100e-6 if fault.delay_s is None else fault.delay_s
    return Made(0, f"serial position {settings.latency_s:g} s old")


def _residual_high(settings: Settings, fault: Fault, at: int) -> Made:
    """The serial position alone has a once-per-turn error of `amplitude_deg` (1)."""
    amplitude = 1.0 if fault.amplitude_deg is None else fault.amplitude_deg
    settings.serial_ripple_turns = amplitude / DEGREES
    return Made(0, f"once-per-turn error of {amplitude:g} degrees")


SETTINGS: dict[str, Maker[Settings]] = {
    "undersampled": Maker(_undersampled, ("samples",)),
    "direction_opposed": Maker(_direction_opposed, quadrature=True),
    "scale_wrong": Maker(_scale_wrong, ("scale",), ANY),
    "latency_high": Maker(_latency_high, ("delay_s",), ANY),
    "residual_high": Maker(_residual_high, ("amplitude_deg",), ANY),
}

# -- quadrature: A, B and index -------------------------------------------------------------------------------------

_CLEAR = 16
"""Edges around a fault on A/B that must be free of the index and of a turn-around."""


def _clear_edge(quadrature: Quadrature, fault: Fault, at: int, *, before: int = _CLEAR, after: int = _CLEAR) -> int:
    """The first A/B edge from `at` on with so many others around it, all in one sense, and no index among them."""
    times = quadrature.times
    steps = np.diff(quadrature.counts, prepend=quadrature.initial)
    number = max(int(np.searchsorted(times, at)), before)
    while number + after < times.size:
        window = slice(number - before, number + after + 1)
        turned = np.flatnonzero(steps[window] != steps[number - before])
        index = quadrature.index
        met = index[(index[:, 0] <= times[number + after]) & (index[:, 1] >= times[number - before])]
        if turned.size:
            number += int(turned[0])
        elif met.size and met[-1, 1] < times[-1]:
            number = int(np.searchsorted(times, met[-1, 1], side="right")) + before
        elif met.size:
            break
        else:
            return number
    raise _none_left(fault, "stretch of A/B")


def _step(quadrature: Quadrature, number: int) -> int:
    before = quadrature.counts[number - 1] if number else quadrature.initial
    return int(quadrature.counts[number] - before)


def _illegal_transition(quadrature: Quadrature, fault: Fault, at: int) -> Made:
    """An edge comes only together with the next one on the other line: a state is missed."""
    number = _clear_edge(quadrature, fault, at)
    quadrature.times[number] = quadrature.times[number + 1]
    return Made(int(quadrature.times[number]), "two edges together")


def _edge_too_close(quadrature: Quadrature, fault: Fault, at: int) -> Made:
    """An edge comes only `share` (0.07) of a state before the next one."""
    number = _clear_edge(quadrature, fault, at)
    times = quadrature.times
    share = 0.07 if fault.share is None else fault.share
    spacing = round(share * int(times[number + 2] - times[number - 2]) / 4)
    times[number] = times[number + 1] - spacing
    return Made(int(times[number]), f"{spacing / PS_PER_SECOND:.3g} s before the next edge")


def _turn_count_wrong(quadrature: Quadrature, fault: Fault, at: int) -> Made:
    """A turn has `counts` (-4) more: lines of the code that are not seen, or more lines where there is room for fewer.

    Lost lines leave one long state; further ones press their neighbours together, ten times as many as are added.
    """
    extra = -4 if fault.counts is None else fault.counts
    if extra == 0 or extra % 4:
        raise InputError("A/B can only gain or lose whole cycles", column="counts", expected="a multiple of 4, not 0")
    stretch = -extra if extra < 0 else 10 * extra
    number = _clear_edge(quadrature, fault, at, after=stretch + _CLEAR)
    step, start = _step(quadrature, number), int(quadrature.times[number])
    stay, later = slice(None, number), slice(number + stretch, None)
    fresh = np.empty(0, np.int64)
    if extra > 0:
        places = np.linspace(number, number + stretch, stretch + extra, endpoint=False)
        fresh = np.rint(np.interp(places, np.arange(quadrature.times.size), quadrature.times)).astype(np.int64)
    first = int(quadrature.counts[number])
    quadrature.counts = np.concatenate(
        [
            quadrature.counts[stay],
            first + step * np.arange(fresh.size),
            quadrature.counts[later] + step * extra,
        ]
    )
    quadrature.times = np.concatenate([quadrature.times[stay], fresh, quadrature.times[later]])
    return Made(start, f"{extra:+d} counts")


def _pulse(quadrature: Quadrature, fault: Fault, at: int) -> int:
    """The first index pulse from `at` on that neither the capture's ends nor a turn-around cut."""
    for number in np.flatnonzero(quadrature.index[:, 0] >= at):
        rise, fall = quadrature.index[number]
        edge = int(np.searchsorted(quadrature.times, rise))
        if fall != ABSENT and edge + 1 < quadrature.times.size:
            return int(number)
    raise _none_left(fault, "index pulse")


def _later(quadrature: Quadrature, time: int, counts: int, fault: Fault) -> int:
    """The instant at which the shaft is `counts` edges further (or before) than at `time`."""
    edge = int(np.searchsorted(quadrature.times, time))
    if not 0 <= edge + counts < quadrature.times.size:
        raise _none_left(fault, "edge")
    return time + int(quadrature.times[edge + counts] - quadrature.times[edge])


def _index_missing(quadrature: Quadrature, fault: Fault, at: int) -> Made:
    """A turn's index pulse does not come."""
    number = _pulse(quadrature, fault, at)
    time = int(quadrature.index[number, 0])
    quadrature.index = np.delete(quadrature.index, number, axis=0)
    return Made(time, "no pulse", role="index")


def _index_extra(quadrature: Quadrature, fault: Fault, at: int) -> Made:
    """A pulse of the usual width and in the usual A/B state, at an angle where none belongs."""
    number = _clear_edge(quadrature, fault, at)
    width = 1
    whole = quadrature.index[(quadrature.index[:, 0] >= 0) & (quadrature.index[:, 1] != ABSENT)]
    if whole.size:
        rise, fall = whole[0]
        edge, after = (int(np.searchsorted(quadrature.times, time)) for time in (rise, fall))
        width = max(1, after - edge)
        usual = int(quadrature.counts[min(edge, quadrature.counts.size - 1)])
        number += int((usual - quadrature.counts[number]) * _step(quadrature, number)) % 4
    window = quadrature.times[[number, number + width]]
    place = int(np.searchsorted(quadrature.index[:, 0], window[0]))
    quadrature.index = np.insert(quadrature.index, place, window, axis=0)
    return Made(int(window[0]), "an extra pulse", role="index")


def _index_misplaced(quadrature: Quadrature, fault: Fault, at: int) -> Made:
    """A turn's pulse comes `counts` (8) later."""
    number = _pulse(quadrature, fault, at)
    counts = 8 if fault.counts is None else fault.counts
    rise, fall = (_later(quadrature, int(time), counts, fault) for time in quadrature.index[number])
    quadrature.index[number] = rise, fall
    return Made(rise, f"{counts:+d} counts away", role="index")


def _index_width(quadrature: Quadrature, fault: Fault, at: int) -> Made:
    """A turn's pulse is `counts` (2) longer."""
    number = _pulse(quadrature, fault, at)
    counts = 2 if fault.counts is None else fault.counts
    rise, fall = (int(time) for time in quadrature.index[number])
    quadrature.index[number, 1] = _later(quadrature, fall, counts, fault)
    return Made(rise, f"{counts:+d} counts wide", role="index")


QUADRATURE: dict[str, Maker[Quadrature]] = {
    "illegal_transition": Maker(_illegal_transition, quadrature=True),
    "turn_count_wrong": Maker(_turn_count_wrong, ("counts",), quadrature=True),
    "index_missing": Maker(_index_missing, quadrature=True),
    "index_extra": Maker(_index_extra, quadrature=True),
    "index_misplaced": Maker(_index_misplaced, ("counts",), quadrature=True),
    "index_width": Maker(_index_width, ("counts",), quadrature=True),
    "edge_too_close": Maker(_edge_too_close, ("share",), quadrature=True),
}

# -- schedule: what the master does ---------------------------------------------------------------------------------


def _slots(schedule: Schedule, fault: Fault, at: int, frames: int = 1, *, first: int = 0) -> tuple[int, ...]:
    """The first so many slots with a burst from `at` on, none before slot number `first`."""
    found = np.flatnonzero(schedule.sent & (schedule.start >= at))
    found = found[found >= first][:frames]
    if found.size < frames:
        raise _none_left(fault, "frame")
    return tuple(int(slot) for slot in found)


def _frames(fault: Fault, usual: int) -> int:
    frames = usual if fault.frames is None else fault.frames
    if frames < 1:
        raise InputError("a fault of no frames", column="frames", found=str(frames), expected="1 or more")
    return frames


def _start_of(schedule: Schedule, slots: tuple[int, ...]) -> int:
    return int(schedule.start[slots[0]])


def _frame_missing(schedule: Schedule, fault: Fault, at: int) -> Made:
    """The master leaves out `frames` (1) bursts."""
    slots = _slots(schedule, fault, at, _frames(fault, 1))
    schedule.sent[list(slots)] = False
    return Made(_start_of(schedule, slots), "no burst", slots, "clock", lost=True)


def _frame_short(schedule: Schedule, fault: Fault, at: int) -> Made:
    """A burst has `clocks` (3) too few."""
    slots = _slots(schedule, fault, at)
    clocks = 3 if fault.clocks is None else fault.clocks
    if not 0 < clocks < schedule.clocks[slots[0]] - 1:
        raise InputError("so many clocks cannot be missing", column="clocks", found=str(clocks))
    schedule.clocks[slots[0]] -= clocks
    return Made(_start_of(schedule, slots), f"{clocks} clocks too few", slots, "clock", lost=True)


def _frame_long(schedule: Schedule, fault: Fault, at: int) -> Made:
    """A burst has `clocks` (1) too many."""
    slots = _slots(schedule, fault, at)
    clocks = 1 if fault.clocks is None else fault.clocks
    if clocks < 1:
        raise InputError("a long burst has more clocks", column="clocks", found=str(clocks), expected="1 or more")
    schedule.clocks[slots[0]] += clocks
    return Made(_start_of(schedule, slots), f"{clocks} clocks too many", slots, "clock")


def _clock_glitch(schedule: Schedule, fault: Fault, at: int) -> Made:
    """Ringing behind the clock edge in mid-burst after which the line should rest: out and back for `width_s` (40 ns).

    With `seen` the encoder takes it for a clock, so the rest of its word comes one bit early.
    """
    slots = _slots(schedule, fault, at)
    period = schedule.timing.period
    width = min(to_ps(40e-9), period // 8) if fault.width_s is None else to_ps(fault.width_s)
    resting_after = 1 if schedule.serial.interface == "spi" else 0
    edge = schedule.clock_edge(slots[0], 2 * (int(schedule.clocks[slots[0]]) // 2) + resting_after)
    start = edge + period // 8
    if width >= 3 * period // 8:
        raise InputError("a glitch as long as the clock", column="width_s", expected="below 3/8 of a clock period")
    seen = bool(fault.seen)
    schedule.spikes.append(Spike(slots[0], start, start + width, seen))
    detail = "a pulse on the clock that the encoder " + ("took for one" if seen else "did not see")
    return Made(start, detail, slots, "clock", lost=seen)


def _timeout_short(schedule: Schedule, fault: Fault, at: int) -> Made:
    """A burst, and with it all later ones, comes early: when only `share` (0.5) of the time-out has run."""
    slots = _slots(schedule, fault, at, first=1)
    slot, timing = slots[0], schedule.timing
    if not schedule.sent[slot - 1]:
        raise InputError("timeout_short needs a frame before it", column="time_s", found=str(fault.time_s))
    share = 0.5 if fault.share is None else fault.share
    start = int(schedule.release[slot - 1]) - round((1 - share) * timing.timeout)
    shift = int(schedule.start[slot]) - start
    if start <= schedule.last_edge[slot - 1] + timing.period or shift <= 0:
        raise InputError("the burst before leaves no room", column="share", found=f"{share:g}")
    schedule.start[slot:] -= shift
    schedule.continued[slot] = True
    detail = f"begun when {share:.0%} of the time-out had run"
    return Made(_start_of(schedule, slots), detail, slots, "clock", lost=schedule.serial.interface == "biss-c")


SCHEDULE: dict[str, Maker[Schedule]] = {
    "frame_missing": Maker(_frame_missing, ("frames",), ANY),
    "frame_short": Maker(_frame_short, ("clocks",), ANY),
    "frame_long": Maker(_frame_long, ("clocks",), ANY),
    "clock_glitch": Maker(_clock_glitch, ("width_s", "seen"), ANY),
    "timeout_short": Maker(_timeout_short, ("share",), WITH_TIMEOUT),
}

# -- angles and words: what the encoder means -----------------------------------------------------------------------


def _offset_step(angles: Angles, fault: Fault, at: int) -> Made:
    """The serial position slips by `counts` (8) of A/B, or by `share` of a turn, and stays there."""
    slots = _slots(angles.schedule, fault, at)
    if fault.share is not None:
        turns = fault.share
    elif angles.counts_per_turn is not None:
        turns = (8 if fault.counts is None else fault.counts) / angles.counts_per_turn
    else:
        raise InputError("counts of what", column="counts", expected="share, or [incremental] with cycles_per_turn")
    angles.turns[slots[0] :] += turns
    # Not among the slots: this frame and all later ones are sound in themselves.
    detail = f"serial position {turns:+.6g} turns from here on"
    return Made(_start_of(angles.schedule, slots), detail, since=slots[0])


ANGLES: dict[str, Maker[Angles]] = {"offset_step": Maker(_offset_step, ("counts", "share"), ANY)}


def _field(words: Words, name: str, fault: Fault) -> str:
    column = words.column(name)
    if column is None:
        raise InputError(f"{fault.kind} needs a field {name!r}", column="serial.fields")
    return column


def _position_jump(words: Words, fault: Fault, at: int) -> Made:
    """For `frames` (1) the position is `share` (0.37) of a turn away, with checks that fit."""
    column = _field(words, "position", fault)
    slots = _slots(words.schedule, fault, at, _frames(fault, 1))
    share = 0.37 if fault.share is None else fault.share
    bits = words.serial.position_bits
    jump = np.uint64(round(share * 2**bits) % 2**bits)
    chosen = list(slots)
    words.values[column][chosen] = (words.values[column][chosen] + jump) & np.uint64(2**bits - 1)
    return Made(_start_of(words.schedule, slots), f"position {share:g} turns away", slots)


def _position_stale(words: Words, fault: Fault, at: int) -> Made:
    """For `frames` (8) the word of the frame before is sent again, whole."""
    slots = _slots(words.schedule, fault, at, _frames(fault, 8), first=1)
    source = int(np.flatnonzero(words.schedule.sent[: slots[0]])[-1])
    for values in words.values.values():
        values[list(slots)] = values[source]
    return Made(_start_of(words.schedule, slots), f"the same word {len(slots)} times more", slots)


def _flag(name: str) -> Callable[[Words, Fault, int], Made]:
    def make(words: Words, fault: Fault, at: int) -> Made:
        column = _field(words, name, fault)
        slots = _slots(words.schedule, fault, at, _frames(fault, 1))
        sheet_field = next(field for field in words.serial.fields if field.name == name)
        active = words.serial.active_level(sheet_field)
        words.values[column][list(slots)] = active * (2**sheet_field.bits - 1)
        return Made(_start_of(words.schedule, slots), f"{name} bit {active}", slots)

    make.__doc__ = f"For `frames` (1) the {name} bit has its active level, with checks that fit."
    return make


def _life_break(words: Words, fault: Fault, at: int) -> Made:
    """The sign-of-life counter makes `counts` (1) steps too many, or one too few with -1, and goes on from there."""
    column = _field(words, "life", fault)
    slots = _slots(words.schedule, fault, at, first=1)
    counts = 1 if fault.counts is None else fault.counts
    bits = next(field.bits for field in words.serial.fields if field.name == "life")
    later = words.values[column][slots[0] :]
    words.values[column][slots[0] :] = (later + np.uint64(counts % 2**bits)) & np.uint64(2**bits - 1)
    return Made(_start_of(words.schedule, slots), f"counter {counts:+d}", slots)


def _crc_mismatch(words: Words, fault: Fault, at: int) -> Made:
    """`bits` (the middle one of the position) arrive wrong; in the first copy where the word is sent more than once."""
    _field(words, "crc", fault)
    return _flipped(words, fault, at, fault.bits or (_middle(words, "position"),))


def _parity_mismatch(words: Words, fault: Fault, at: int) -> Made:
    """One bit under the parity arrives wrong: `bits`, else the middle one of those it is taken over."""
    _field(words, "parity", fault)
    return _flipped(words, fault, at, fault.bits or (_under_parity(words),))


def _fixed_mismatch(words: Words, fault: Fault, at: int) -> Made:
    """The encoder sends one bit of a fixed field wrong, with checks that fit; or, in a word of copies, one bit of the
    second copy arrives wrong."""
    column = words.column("fixed")
    if column is None:
        if words.serial.copies < 2:
            raise InputError("fixed_mismatch needs a fixed field or copies", column="serial")
        second = words.serial.word_bits + words.serial.separator_bits
        return _flipped(words, fault, at, (second + _middle(words, "position"),))
    slots = _slots(words.schedule, fault, at)
    words.values[column][slots[0]] ^= np.uint64(1)
    return Made(_start_of(words.schedule, slots), "last bit of the fixed field wrong", slots)


def _flipped(words: Words, fault: Fault, at: int, bits: tuple[int, ...]) -> Made:
    slots = _slots(words.schedule, fault, at)
    for bit in bits:
        if not 0 <= bit < words.serial.sent_bits:
            raise InputError(
                "no such bit", column="bits", found=str(bit), expected=f"0 to {words.serial.sent_bits - 1}"
            )
        words.flips.append(Flip(slots[0], bit))
    names = ", ".join(str(bit) for bit in bits)
    return Made(_start_of(words.schedule, slots), f"bit {names} flipped", slots, "data")


def _middle(words: Words, name: str) -> int:
    start = words.first_bit(name)
    if start is None:
        return 0
    return start + next(field.bits for field in words.serial.fields if field.name == name) // 2


def _under_parity(words: Words) -> int:
    fields = words.serial.fields
    number = next(i for i, field in enumerate(fields) if field.name == "parity")
    starts = np.cumsum([0, *(field.bits for field in fields)])
    covered = [int(starts[i]) + bit for i in words.serial.covered(number) for bit in range(fields[i].bits)]
    mask = fields[number].mask
    if mask is not None:
        covered = [bit for place, bit in enumerate(covered) if mask >> (len(covered) - 1 - place) & 1]
    if not covered:
        raise InputError("a parity over nothing", column="serial.fields")
    return covered[len(covered) // 2]


WORDS: dict[str, Maker[Words]] = {
    "position_jump": Maker(_position_jump, ("frames", "share"), ANY),
    "position_stale": Maker(_position_stale, ("frames",), ANY),
    "error_flag": Maker(_flag("error"), ("frames",), ANY),
    "warning_flag": Maker(_flag("warning"), ("frames",), ANY),
    "life_break": Maker(_life_break, ("counts",), ANY),
    "crc_mismatch": Maker(_crc_mismatch, ("bits",), ANY),
    "parity_mismatch": Maker(_parity_mismatch, ("bits",), ANY),
    "fixed_mismatch": Maker(_fixed_mismatch, (), ANY),
}

# -- signal: how the encoder answers --------------------------------------------------------------------------------


def _no_acknowledge(signal: Signal, fault: Fault, at: int) -> Made:
    """For `frames` (1) nobody answers: data stays high."""
    slots = _slots(signal.schedule, fault, at, _frames(fault, 1))
    signal.levels[list(slots)] = 1
    return Made(_start_of(signal.schedule, slots), "data stayed high", slots, "data", lost=True)


def _no_start_bit(signal: Signal, fault: Fault, at: int) -> Made:
    """For `frames` (1) the encoder acknowledges and stays busy to the end of the burst."""
    slots = _slots(signal.schedule, fault, at, _frames(fault, 1))
    signal.levels[list(slots), 1:] = 0
    return Made(_start_of(signal.schedule, slots), "data stayed low", slots, "data", lost=True)


LATE_PHASE = 0.4
"""Where the reply comes later than this part of a clock period a biss-c master samples half a period after it."""


def _setup_violation(signal: Signal, fault: Fault, at: int) -> Made:
    """The word's bits change only `margin_s` (0.04 of a clock period) before they are sampled; they still read right.

    Only the word is late: an acknowledge that is late too would be compensated for as line delay.
    """
    slots = _slots(signal.schedule, fault, at)
    timing = signal.schedule.timing
    margin = round(0.04 * timing.period) if fault.margin_s is None else to_ps(fault.margin_s)
    sampled = timing.period // 2
    if signal.schedule.serial.interface == "biss-c":
        late, phase = divmod(timing.reply, timing.period)
        sampled += late * timing.period + (phase if phase > LATE_PHASE * timing.period else 0)
    if not 0 < margin < sampled - timing.reply:
        raise InputError("no such margin", column="margin_s", expected="above 0, below that of the other frames")
    signal.reply[slots[0], signal.first_bit :] = sampled - margin
    detail = f"data {margin / PS_PER_SECOND:.3g} s before the sampling edge"
    return Made(_start_of(signal.schedule, slots), detail, slots, "data")


SIGNAL: dict[str, Maker[Signal]] = {
    "no_acknowledge": Maker(_no_acknowledge, ("frames",), ("biss-c",)),
    "no_start_bit": Maker(_no_start_bit, ("frames",), ("biss-c",)),
    "setup_violation": Maker(_setup_violation, ("margin_s",), ANY),
}

# -- drivers: a line before it becomes a pair; wires: after ---------------------------------------------------------


def _line(wiring: Wiring, role: str) -> str:
    if role not in wiring.lines:
        raise InputError(f"this board has no line {role!r}", column="role", expected=", ".join(wiring.lines))
    return role


def _line_stuck(wiring: Wiring, fault: Fault, at: int) -> Made:
    """A line (b, else data) stands still at `level` (the one it has) from then on; without a time, throughout."""
    role = _line(wiring, fault.role or ("b" if "b" in wiring.lines else "data"))
    start = -1 if fault.time_s is None else at
    wiring.lines[role] = wiring.lines[role].held(start, None, fault.level)
    slots: tuple[int, ...] = ()
    if wiring.schedule is not None and role in ("clock", "data"):
        slots = tuple(int(slot) for slot in np.flatnonzero(wiring.schedule.sent & (wiring.schedule.end > start)))
    return Made(max(start, 0), f"{role} stands still", slots, role, lost=True)


def _data_stuck(wiring: Wiring, fault: Fault, at: int) -> Made:
    """Data is held at `level` (0) for `frames` (3), from the middle of the pause before to that of the pause after."""
    schedule = wiring.schedule
    if schedule is None:
        raise InputError("data_stuck needs a serial line", column="serial")
    slots = _slots(schedule, fault, at, _frames(fault, 3))
    sent = np.flatnonzero(schedule.sent)
    before, after = sent[sent < slots[0]], sent[sent > slots[-1]]
    begin = int(schedule.end[before[-1]]) if before.size else 0
    finish = int(schedule.start[after[0]]) if after.size else wiring.stop
    start = (begin + int(schedule.start[slots[0]])) // 2
    stop = (int(schedule.end[slots[-1]]) + finish) // 2
    level = 0 if fault.level is None else fault.level
    wiring.lines["data"] = wiring.lines["data"].held(start, stop, level)
    return Made(_start_of(schedule, slots), f"data held at {level}", slots, "data", lost=True)


DRIVERS: dict[str, Maker[Wiring]] = {
    "line_stuck": Maker(_line_stuck, ("role", "level")),
    "data_stuck": Maker(_data_stuck, ("frames", "level"), ANY),
}


def _glitch(wiring: Wiring, fault: Fault, at: int) -> Made:
    """A line (a) goes out and back for `width_s` (60 ns) in the middle of an A/B state."""
    role = _line(wiring, fault.role or "a")
    width = to_ps(60e-9 if fault.width_s is None else fault.width_s)
    quadrature = wiring.quadrature
    if role not in ("a", "b", "index") or quadrature is None:
        raise InputError("a glitch on this line is another fault", column="role", expected="a, b, index")
    centre = at + width
    if quadrature.times.size:
        number = _clear_edge(quadrature, fault, at, before=2, after=2)
        first, last = (int(time) for time in quadrature.times[number : number + 2])
        if last - first < 4 * width:
            raise InputError("the shaft is too fast for this glitch", column="width_s", expected="a quarter of a state")
        centre = (first + last) // 2
    start = centre - width // 2
    wiring.lines[role] = wiring.lines[role].toggled_at(start, start + width)
    return Made(start, f"out and back for {width / PS_PER_SECOND:.3g} s", role=role)


def _pair_mismatch(wiring: Wiring, fault: Fault, at: int) -> Made:
    """For `duration_s` (5 us) a line's complement follows the line itself."""
    pairs = [role for role in wiring.lines if f"{role}_n" in wiring.lines]
    if not pairs:
        raise InputError("pair_mismatch needs a complement", column="complements")
    role = fault.role or pairs[0]
    complement = _line(wiring, f"{role}_n")
    duration = to_ps(5e-6 if fault.duration_s is None else fault.duration_s)
    wiring.lines[complement] = wiring.lines[complement].toggled_at(at, at + duration)
    return Made(at, f"both legs alike for {duration / PS_PER_SECOND:.3g} s", role=role)


WIRES: dict[str, Maker[Wiring]] = {
    "glitch": Maker(_glitch, ("role", "width_s"), quadrature=True),
    "pair_mismatch": Maker(_pair_mismatch, ("role", "duration_s")),
}

# -- recording: what the analyser's file makes of it ----------------------------------------------------------------


def _split(recording: Recording, tick: int) -> int:
    """Cut the segment that holds `tick` in two there; the number of the one that then begins with it."""
    for number, (start, stop, shift) in enumerate(recording.segments):
        if start < tick < stop:
            recording.segments[number : number + 1] = [Segment(start, tick, shift), Segment(tick, stop, shift)]
            return number + 1
    raise InputError("not inside the capture", column="time_s")


def _time_gap(recording: Recording, fault: Fault, at: int) -> Made:
    """`duration_s` (1 ms) of the capture are lost."""
    duration = to_ps(1e-3 if fault.duration_s is None else fault.duration_s)
    ticks = recording.grid.tick_of(np.array([at, at + duration]))
    lost = _split(recording, int(ticks[0]))
    _split(recording, int(ticks[1]))
    del recording.segments[lost]
    return Made(at, f"{duration / PS_PER_SECOND:.3g} s lost")


def _time_reversal(recording: Recording, fault: Fault, at: int) -> Made:
    """The part from then on stands in the file before the part up to then; or, with `duration_s`, the time column
    steps back by so much and goes on from there."""
    tick = int(recording.grid.tick_of(np.array([at]))[0])
    later = _split(recording, tick)
    if fault.duration_s is None:
        recording.segments[:] = recording.segments[later:] + recording.segments[:later]
        return Made(at, "the two parts stand in the wrong order")
    back = int(recording.grid.tick_of(np.array([to_ps(fault.duration_s)]))[0]) - recording.grid.first
    if back < 1:
        raise InputError("no step back", column="duration_s", expected="one sample or more")
    moved = [Segment(start, stop, shift - back) for start, stop, shift in recording.segments[later:]]
    recording.segments[later:] = moved
    return Made(at, f"the time steps back by {fault.duration_s:g} s")


RECORDING: dict[str, Maker[Recording]] = {
    "time_gap": Maker(_time_gap, ("duration_s",)),
    "time_reversal": Maker(_time_reversal, ("duration_s",)),
}

FAULTS: Mapping[str, Maker[Any]] = {
    **SETTINGS,
    **QUADRATURE,
    **SCHEDULE,
    **ANGLES,
    **WORDS,
    **SIGNAL,
    **DRIVERS,
    **WIRES,
    **RECORDING,
}


@dataclass
class Log:
    """What has been made so far. start: ps of the capture's start on its own axis. duration: ps."""

    faults: tuple[Fault, ...]
    start: int
    duration: int
    made: dict[int, Made] = field(default_factory=dict)

    def apply(self, table: Mapping[str, Maker[Stage]], stage: Stage) -> None:
        """Make the faults that belong to one step, in the order given."""
        for number, fault in enumerate(self.faults):
            if fault.kind in table:
                at = 0 if fault.time_s is None else to_ps(fault.time_s) - self.start
                made = table[fault.kind].make(stage, fault, at)
                if not 0 <= at < self.duration or not 0 <= made.time < self.duration:
                    raise _none_left(fault, "capture")
                self.made[number] = made
