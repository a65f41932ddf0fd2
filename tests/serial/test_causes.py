"""The cause of a faulty frame: named where the bits allow one reading, and never guessed."""

from __future__ import annotations

import itertools

import anycrc
import numpy as np
import pytest
from bitarray import bitarray
from tables import table

from decode.serial.causes import LEFT_OUT, frame_anomalies, missing_anomalies, unpacked
from decode.serial.continuity import Cadence
from decode.serial.frames import CODE
from decode.serial.interfaces import Habit
from decode.sheet import Field, Serial

BITS = 12
MODULUS = 1 << BITS
BISS = Serial(
    interface="biss-c",
    fields=(
        Field(name="position", bits=BITS),
        Field(name="error", bits=1),
        Field(name="warning", bits=1),
        Field(name="crc", bits=6, polynomial=0x43, inverted=True),
    ),
)
WIDTH = BITS + 8
NAMES = [
    *[f"bit {BITS - 1 - place} of position" for place in range(BITS)],
    "bit 0 of error",
    "bit 0 of warning",
    *[f"bit {5 - place} of crc" for place in range(6)],
]
"""Each bit of the word in the order sent, as a sentence names it."""

LINES = {"clock": "MA", "data": "SLO"}
CRC6 = anycrc.CRC(6, 0x03, 0, False, False, 0x3F)
"""Source: the library anycrc, polynomial 0x43 inverted."""


def word(position: int) -> int:
    """A word without error and warning, as sent."""
    sent = f"{position:0{BITS}b}11"
    return int(sent, 2) << 6 | CRC6.calc_bits(bitarray(sent))


def course(*spoilt: int, at: int = 0x5A3) -> list[int]:
    """Seven words, the shaft going on by two steps each; the fourth with these bits turned."""
    raw = [word(at + 2 * number) for number in range(7)]
    for bit in spoilt:
        raw[3] ^= 1 << WIDTH - 1 - bit
    return raw


def causes_of(raw: list[int]) -> list[str | None]:
    """Causes of the CRC mismatches of seven frames."""
    frames = table(BISS, np.arange(7) * 1000, raw)
    bad = frames.crc_ok == 0
    frames = table(BISS, np.arange(7) * 1000, raw, usable=~bad, kind=bad * CODE["crc_mismatch"])
    found = {one.kind: one for one in frame_anomalies(frames, BISS, None, LINES, MODULUS)}
    if "crc_mismatch" not in found:
        return []
    causes = found["crc_mismatch"].causes
    assert causes is not None
    return list(causes)


@pytest.mark.parametrize("bit", range(WIDTH))
def test_the_one_flipped_bit_is_named(bit: int) -> None:
    """Every bit of the word, the check's own among them."""
    (cause,) = causes_of(course(bit))
    assert cause is not None
    assert cause.startswith(f"{NAMES[bit]} alone is wrong")


def fits(bit: int, position: int) -> bool:
    """Whether turning `bit` of a word with `position` lands within the neighbours' reach: they are 4 steps apart."""
    mended = position ^ (1 << BITS - 1 - bit) if bit < BITS else position
    away = [min((mended - one) % MODULUS, (one - mended) % MODULUS) for one in (0x5A7, 0x5AB)]
    return max(away) <= 4 + 16


def test_of_two_flipped_bits_only_what_fits_is_named() -> None:
    """All pairs. Two bits have the remainder of a third one, or of none; the third is named only if the word with that
    one turned fits the neighbours, which the true position with two other bits turned seldom does."""
    named = 0
    for one, other in itertools.combinations(range(WIDTH), 2):
        (cause,) = causes_of(course(one, other))
        spoilt = int(f"{course(one, other)[3]:0{WIDTH}b}"[:BITS], 2)
        if cause is None:
            continue
        named += 1
        bit = next(place for place, name in enumerate(NAMES) if cause.startswith(name))
        assert bit not in (one, other)
        assert fits(bit, spoilt)
    assert named < 40  # of 190, where the wrong bits are among the lowest or in the check


@pytest.mark.parametrize("pair", [(0, 1), (1, 3), (0, 5)])
def test_two_high_bits_that_look_like_one_are_not_named(pair: tuple[int, int]) -> None:
    """With the two highest bits of the position turned no single bit puts the position right."""
    assert causes_of(course(*pair)) == [None]


def test_nothing_is_named_at_the_ends_or_among_faulty_frames() -> None:
    """There is no good frame on either side to fit."""
    for number in (0, 6):
        raw = course()
        raw[number] ^= 1 << WIDTH - 4
        assert causes_of(raw) == [None]
    raw = [one ^ 1 << WIDTH - 4 for one in course()]
    assert causes_of(raw) == [None] * 7


def test_bits_that_share_a_remainder_are_not_named() -> None:
    """Past 63 bits the remainders of this polynomial begin again, so the first of 64 and more has another's (exact
    arithmetic: x is of order 63 modulo x^6 + x + 1). The eighth of 64 has a remainder of its own."""
    fields = (Field(name="position", bits=56), *BISS.fields[1:])
    wide = Serial(interface="biss-c", fields=fields)
    sent = [f"{1 << 40 | number:056b}11" for number in range(7)]
    for bit, named in ((0, False), (7, True)):
        raw = [int(one, 2) << 6 | CRC6.calc_bits(bitarray(one)) for one in sent]
        raw[3] ^= 1 << 63 - bit
        bad = np.arange(7) == 3
        frames = table(wide, np.arange(7) * 1000, raw, usable=~bad, kind=bad * CODE["crc_mismatch"])
        (found,) = frame_anomalies(frames, wide, None, LINES, 1 << 56)
        assert [cause is not None for cause in found.causes or ()] == [named]


def test_the_remainder_is_told() -> None:
    """The lowest bit of the check turned leaves the remainder 1 (exact arithmetic)."""
    raw = course(WIDTH - 1)
    frames = table(BISS, np.arange(7) * 1000, raw, kind=[0, 0, 0, CODE["crc_mismatch"], 0, 0, 0])
    (found,) = frame_anomalies(frames, BISS, None, LINES, MODULUS)
    assert found.evidence["syndrome"] == ["0x01"]
    assert (found.line, found.times.tolist()) == ("SLO", [3000])
    assert found.evidence["raw"] == [f"0x{raw[3]:05X}"]


def one_of(kind: str, n: int = 1, **columns: object) -> list[str | None]:
    """The causes of n frames of one kind, beside a habit of 22 clocks."""
    frames = table(BISS, np.arange(n) * 1000, [word(5)] * n, kind=[CODE[kind]] * n, **columns)
    (found,) = frame_anomalies(frames, BISS, Habit(clocks=22), LINES, MODULUS)
    return list(found.causes or [None] * n)


@pytest.mark.parametrize(
    ("kind", "clocks", "gap", "cause"),
    [
        ("frame_short", 21, 0, "one clock pulse too few"),
        ("frame_short", 20, 0, "2 clock pulses too few"),
        ("frame_long", 23, 0, "one clock pulse too many"),
        ("frame_long", 30, 0, "8 clock pulses too many"),
        ("frame_short", 22, 90, "the clock paused inside the word for longer than a pause between frames needs"),
    ],
)
def test_clocks_too_many_and_too_few(kind: str, clocks: int, gap: int, cause: str) -> None:
    assert one_of(kind, clocks=[clocks], gap=[gap]) == [cause]


@pytest.mark.parametrize(("crc_ok", "cause"), [(1, LEFT_OUT), (0, None), (-1, None)])
def test_a_short_clock_pulse_is_explained_only_where_the_check_holds(crc_ok: int, cause: str | None) -> None:
    assert one_of("clock_glitch", crc_ok=[crc_ok]) == [cause]


@pytest.mark.parametrize("kind", ["no_acknowledge", "no_start_bit", "error_flag", "life_break", "position_jump"])
def test_no_cause_where_the_bits_tell_none(kind: str) -> None:
    assert one_of(kind) == [None]


@pytest.mark.parametrize("kind", ["data_stuck", "position_stale"])
def test_neighbours_that_are_one_fault(kind: str) -> None:
    """Frames 1 to 3 and 5: two faults, of three frames and of one."""
    kinds = [CODE[kind] if number in (1, 2, 3, 5) else 0 for number in range(7)]
    (found,) = frame_anomalies(table(BISS, np.arange(7) * 1000, course(), kind=kinds), BISS, None, LINES, MODULUS)
    assert found.frames is not None
    assert (found.frames.tolist(), list(found.evidence["frames"])) == ([1, 5], [3, 1])


def test_warnings_stand_beside_faults() -> None:
    frames = table(BISS, [0, 1000], [word(1), word(2)], warned=[False, True], kind=[0, CODE["position_jump"]])
    found = frame_anomalies(frames, BISS, None, LINES, MODULUS)
    assert [(one.kind, one.times.tolist()) for one in found] == [("position_jump", [1000]), ("warning_flag", [1000])]


def test_frames_that_are_missing() -> None:
    assert (
        missing_anomalies(Cadence(1000.0, np.empty(0, np.int64), np.empty(0, np.int64), np.empty(0, np.int64)), {})
        == []
    )
    some = Cadence(1000.0, np.array([1000]), np.array([4000, 5000]), np.array([3, 3]))
    (found,) = missing_anomalies(some, LINES)
    assert (found.kind, found.line, found.times.tolist()) == ("frame_missing", "MA", [4000, 5000])


def test_packed_words_unpacked() -> None:
    """0x0B2D right-aligned in two bytes: 12 bits from the fifth on."""
    assert "".join(map(str, unpacked(np.array([[0x0B, 0x2D]], np.uint8), 12)[0])) == "101100101101"
