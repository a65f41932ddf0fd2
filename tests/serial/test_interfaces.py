"""Words drawn by hand and read back: ssi, biss-c and spi, each with its own ways to go wrong."""

from __future__ import annotations

from functools import reduce
from operator import add

import pytest
from waves import HALF, Drawing, burst, field, idle, line, received

from decode.serial.frames import FRAME_KINDS, Frames
from decode.sheet import Field, Serial
from decode.spans import Span


def kinds(frames: Frames) -> list[str]:
    return [FRAME_KINDS[code] for code in frames.kind]


def in_a_row(*bursts: Drawing, gap: int = 20) -> Span:
    """Bursts with `gap` halves of rest before, between and after them."""
    return reduce(add, [idle(gap), *(part for one in bursts for part in (one, idle(gap)))]).span()


def ssi(*fields: tuple[str, int], coding: str = "binary", copies: int = 1) -> Serial:
    return Serial(
        interface="ssi",
        coding=coding,  # type: ignore[arg-type]
        copies=copies,
        fields=tuple(Field(name=name, bits=bits, value=0 if name == "fixed" else None) for name, bits in fields),
    )


TURNS = (("turns", 12), ("position", 13))


# ---- ssi ----------------------------------------------------------------------------------------------------------


def test_an_ssi_word_drawn_out() -> None:
    """
                 latch, then rising edge k drives bit k and the fall after it reads it
    clock  ‾‾‾‾‾‾_‾_‾_‾_‾_‾‾‾‾‾‾‾‾‾‾‾‾‾‾
    data   ‾‾‾‾‾‾‾‾‾__‾‾__________‾‾‾‾‾‾
                  1 0 1 0 low while the monoflop runs

    The word is 1010, the fifth rising edge drives the low. Source: TR-Electronic TR-ECE-BA-DGB-0131, 4.3.3.
    """
    drawing = Drawing(
        "‾‾‾‾‾‾_‾_‾_‾_‾_‾‾‾‾‾‾‾‾‾‾‾‾‾‾",
        "‾‾‾‾‾‾‾‾‾__‾‾__________‾‾‾‾‾‾",
    )
    receiver, frames = received(ssi(("position", 4)), drawing.span())
    assert field(frames, "position") == [0b1010]
    assert (frames.clocks.tolist(), frames.latch.tolist(), kinds(frames)) == ([5], [6 * HALF], [""])
    assert receiver.timings["timeout_s"].values.tolist() == [9 * HALF]  # from the last fall to the rise of data


@pytest.mark.parametrize(
    ("coding", "word"), [("binary", "0000000001010000001100100"), ("gray", "0000000001111000001010110")]
)
@pytest.mark.parametrize("clocks", [25, 26])
def test_turns_and_position(coding: str, word: str, clocks: int) -> None:
    """Turns 5 and step 100 of 12 and 13 bits, with as many clocks as bits and with one more (exact arithmetic: the
    Gray word is the 25-bit word XOR itself moved down by one)."""
    number = int("0000000001010000001100100", 2)
    assert int("0000000001111000001010110", 2) == number ^ number >> 1
    _, frames = received(ssi(*TURNS, coding=coding), in_a_row(*[burst(word, clocks=clocks)] * 3))
    assert (field(frames, "turns"), field(frames, "position")) == ([5] * 3, [100] * 3)
    assert (kinds(frames), frames.clocks.tolist()) == ([""] * 3, [clocks] * 3)


@pytest.mark.parametrize(
    ("word", "turns", "steps"),
    [("1" + "0" * 24, 4095, 8191), ("1100000000001100000000000", 2048, 4096), ("0" * 25, 0, 0)],
)
def test_gray_words_at_the_ends(word: str, turns: int, steps: int) -> None:
    """Exact arithmetic: each is the reflected code of turns times 8192 plus steps."""
    number = turns * 8192 + steps
    assert int(word, 2) == number ^ number >> 1
    moving = burst("0000000001111000001010110")
    _, frames = received(ssi(*TURNS, coding="gray"), in_a_row(moving, burst(word), moving))
    assert (field(frames, "turns")[1], field(frames, "position")[1]) == (turns, steps)


WORD = "0000000001010000001100100"


def test_a_ring_sends_the_word_twice() -> None:
    """25 bits, a low bit, the same 25 bits: 51 bits and one clock more.

    Source: ring transmission with one separator, TR-Electronic TR-ECE-BA-DGB-0131.
    """
    _, frames = received(ssi(*TURNS, copies=2), in_a_row(*[burst(f"{WORD}0{WORD}", clocks=52)] * 3))
    assert (field(frames, "turns"), field(frames, "position")) == ([5] * 3, [100] * 3)
    assert (kinds(frames), frames.clocks.tolist()) == ([""] * 3, [52] * 3)


@pytest.mark.parametrize("spoilt", [f"{WORD}0{WORD[:-1]}1", f"{WORD}1{WORD}", f"1{WORD[1:]}0{WORD}"])
def test_copies_that_differ_or_a_high_separator(spoilt: str) -> None:
    good = burst(f"{WORD}0{WORD}")
    _, frames = received(ssi(*TURNS, copies=2), in_a_row(good, burst(spoilt), good))
    assert kinds(frames) == ["", "fixed_mismatch", ""]


@pytest.mark.parametrize(
    ("word", "fields"),
    [
        ("0001010101011010101111000", (("fixed", 2), ("turns", 10), ("position", 12), ("fixed", 1))),
        ("0000101010101101010111100", (("fixed", 3), ("turns", 10), ("position", 12))),
        ("0101010101101010111100000", (("turns", 10), ("position", 12), ("fixed", 3))),
    ],
    ids=["fir tree", "right-justified", "left-justified"],
)
def test_where_the_word_lies_in_its_slot(word: str, fields: tuple[tuple[str, int], ...]) -> None:
    """Turns 0x155 of 10 bits and step 0xABC of 12 in 25 bits: fixed zeros say where they lie.

    Source: the padding rule of fir-tree words, leading zeros for turns and trailing ones for steps (exact arithmetic).
    """
    _, frames = received(ssi(*fields), in_a_row(*[burst(word)] * 3))
    assert (field(frames, "turns"), field(frames, "position")) == ([0x155] * 3, [0xABC] * 3)
    assert kinds(frames) == [""] * 3


def test_a_word_slipped_by_a_bit_breaks_its_fixed_zeros() -> None:
    """The fir tree's trailing zero after 0xABD, one bit late: a one where the zero belongs."""
    good, slipped = (burst(word) for word in ("0001010101011010101111010", "0000101010101101010111101"))
    tree = ssi(("fixed", 2), ("turns", 10), ("position", 12), ("fixed", 1))
    _, frames = received(tree, in_a_row(good, slipped, good))
    assert kinds(frames) == ["", "fixed_mismatch", ""]


# ---- biss-c -------------------------------------------------------------------------------------------------------

BISS = Serial(
    interface="biss-c",
    fields=(
        Field(name="position", bits=8),
        Field(name="error", bits=1),
        Field(name="warning", bits=1),
        Field(name="crc", bits=6, polynomial=0x43, inverted=True),
    ),
)
PAYLOAD = "10110010" + "11" + "000101"
"""Position 178, neither error nor warning, and their CRC as sent.
Source: the unit tests of an open motor-controller firmware (mjbots)."""


def biss(*, busy: int = 1, cds: str = "0", payload: str = PAYLOAD, late: int = 0, clocks: int | None = None) -> Drawing:
    """Latch high, acknowledge and busy lows, start, control bit, word, and a low to end."""
    return burst("1" + "0" * busy + "1" + cds + payload, late=late, clocks=clocks)


def assert_178(frames: Frames, n: int) -> None:
    assert kinds(frames) == [""] * n
    assert field(frames, "position") == [178] * n
    assert field(frames, "crc") == [0b000101] * n
    assert frames.crc_ok.tolist() == [1] * n


def test_a_biss_frame_drawn_out() -> None:
    """
               latch Ack   start CDS  178             nE nW  CRC          low until the time-out
    clock  ‾‾‾ _‾    _‾ _‾ _‾    _‾   _‾_‾_‾_‾_‾_‾_‾_‾ _‾_‾  _‾_‾_‾_‾_‾_‾ _‾ ‾‾‾‾‾
    data   ‾‾‾ ‾‾    ‾_ __ _‾    ‾_   _‾‾__‾‾‾‾____‾‾_ _‾‾‾  ‾_______‾‾__ ‾_ __‾‾‾
                            1 0 0 1 0 10110010 11 000101 0 after each rising edge

    Source: position 178 with SL 1 1, 0 0 (Ack), 1, 0, 10110010, 1 1, 000101 after idle, from the unit tests of an open
    motor-controller firmware (mjbots).
    """
    drawing = Drawing(
        "‾‾‾‾ _‾ _‾ _‾ _‾ _‾ _‾_‾_‾_‾_‾_‾_‾_‾ _‾_‾ _‾_‾_‾_‾_‾_‾ _‾ ‾‾‾‾‾‾",
        "‾‾‾‾ ‾‾ ‾_ __ _‾ ‾_ _‾‾__‾‾‾‾____‾‾_ _‾‾‾ ‾______‾‾__‾ ‾_ __‾‾‾‾",
    )
    receiver, frames = received(BISS, drawing.span())
    assert_178(frames, 1)
    assert (field(frames, "error"), field(frames, "warning")) == ([1], [1])
    assert (field(frames, "cds"), field(frames, "cdm"), field(frames, "acknowledge_clocks")) == ([0], [0], [2])
    assert frames.latch.tolist() == [5 * HALF]
    assert frames.clocks.tolist() == [22]
    assert receiver.timings["acknowledge_time_s"].values.tolist() == [4 * HALF]


@pytest.mark.parametrize("busy", [1, 2, 10, 40])
def test_a_busy_encoder_holds_its_start_bit_back(busy: int) -> None:
    """1 to 40 clocks, all alike. Source: 40 us at 1 MHz, Texas Instruments motor-control-sdk."""
    _, frames = received(BISS, in_a_row(*[biss(busy=busy)] * 4))
    assert_178(frames, 4)
    assert field(frames, "acknowledge_clocks") == [busy] * 4


def test_an_encoder_busy_for_another_time_in_each_frame() -> None:
    """The reply is found, not counted: masters clock on until the word is in."""
    busy = [1, 3, 1, 7, 2, 1, 1]
    _, frames = received(BISS, in_a_row(*[biss(busy=clocks) for clocks in busy]))
    assert_178(frames, len(busy))
    assert field(frames, "acknowledge_clocks") == busy


@pytest.mark.parametrize("late", range(25))
def test_a_late_reply(late: int) -> None:
    """Every half clock from none to twelve: a long cable, seen at the master. Source: exact arithmetic, 100 m at 5 ns/m
    there and back are ten clocks at 10 MHz."""
    _, frames = received(BISS, in_a_row(*[biss(late=late)] * 4, gap=60))
    assert_178(frames, 4)
    assert field(frames, "acknowledge_clocks") == [1] * 4


@pytest.mark.parametrize("share", [1, 2, 3, 4, 5, 6, 7, 8, 9, 11, 13, 17, 19])
def test_a_reply_late_by_parts_of_a_half_clock(share: int) -> None:
    """A clock of 20 ticks and a data line late by 1 to 19 of them."""
    drawn = reduce(add, [idle(20), *[biss() + idle(20)] * 4])
    spans = drawn.span(half=10)
    data = spans.lines["data"]
    moved = type(data)(data.initial, data.times + share, data.levels)
    _, frames = received(BISS, Span(0, spans.stop + share, {"clock": spans.lines["clock"], "data": moved}))
    assert_178(frames, 4)


@pytest.mark.parametrize("cds", ["0", "1"])
def test_the_encoder_s_control_bit(cds: str) -> None:
    _, frames = received(BISS, in_a_row(*[biss(cds=cds)] * 3))
    assert_178(frames, 3)
    assert field(frames, "cds") == [int(cds)] * 3


def with_control_level(drawing: Drawing, halves: int) -> Drawing:
    """The clock falls half a period after its last edge and stays low for so many halves: CDM = 1."""
    last = len(drawing.clock.rstrip("‾")) + 1
    clock = drawing.clock[:last] + "_" * halves
    return Drawing(clock + "‾" * (len(drawing.data) - len(clock)), drawing.data)


@pytest.mark.parametrize(("low", "held"), [(2, 2), (2, 3), (6, 6), (30, 30)])
def test_the_master_s_control_bit(low: int, held: int) -> None:
    """
    clock  _‾_‾_____‾‾‾    held low until the data line is high again: no clock of the frame, CDM = 1
    data   _________‾‾‾

    Shortest is the adaptive time-out: 1.5 periods from the last rising edge, so low for one period at least. Source:
    BiSS Association application note AN23 as restated in a slave data sheet.
    """
    plain = biss()
    plain = Drawing(plain.clock[:-6] + "‾" * low + "‾‾", plain.data[:-6] + "_" * low + "‾‾")
    _, frames = received(BISS, in_a_row(plain, with_control_level(plain, held), plain, plain))
    assert_178(frames, 4)
    assert field(frames, "cdm") == [0, 1, 0, 0]
    assert frames.clocks.tolist() == [21] * 4


def test_the_adaptive_time_out() -> None:
    """The data line is high again 1.5 periods after the last rising edge."""
    short = biss()
    short = Drawing(short.clock[:-4] + "‾‾", short.data[:-4] + "‾‾")
    receiver, frames = received(BISS, in_a_row(short, short, short))
    assert_178(frames, 3)
    assert receiver.timings["timeout_s"].values.tolist() == [3 * HALF]


@pytest.mark.parametrize(
    ("drawing", "kind"),
    [
        (burst("1" * 21, clocks=21, low=0), "no_acknowledge"),
        (burst("1" + "0" * 20), "no_start_bit"),
        (biss(payload="10110010" + "11" + "000100"), "crc_mismatch"),
        (biss(payload="10101010" + "11" + "111111"), "crc_mismatch"),
        (biss(payload="00000000" + "01" + "111100"), "error_flag"),
        (biss(clocks=20), "frame_short"),
        (biss(clocks=19), "frame_short"),
        (biss(clocks=22), "frame_long"),
    ],
)
def test_frames_that_are_wrong(drawing: Drawing, kind: str) -> None:
    """Position 170 with a CRC of ones, and position 0 with its error bit active and the CRC 111100. Source: the unit
    tests of an open motor-controller firmware (mjbots)."""
    good = biss()
    _, frames = received(BISS, in_a_row(good, good, drawing, good, good))
    assert kinds(frames) == ["", "", kind, "", ""]


# ---- spi ----------------------------------------------------------------------------------------------------------


def spi(mode: int, *fields: Field) -> Serial:
    return Serial(interface="spi", mode=mode, fields=fields or (Field(name="position", bits=16),))


def window(mode: int, word: str, *, edges: int | None = None) -> tuple[str, str, str]:
    """(select, clock, data) of one select window.

    mode 0     select  ‾‾_____________‾‾        mode 1     select  ‾‾_____________‾‾
               clock   ____‾_‾_‾_‾_____                    clock   ____‾_‾_‾_‾_____
               data    ‾‾ 1 1 0 0 1 1 ..                   data    ‾‾‾‾1 1 0 0 1 1 ..

    Phase 0 (modes 0 and 2): select drives the first bit and the trailing edge the next, leading edges read. Phase 1:
    leading edges drive, trailing edges read. Modes 2 and 3 have the clock upside down. Source: NXP LPC800 user manual,
    SPI mode summary.
    """
    count = 2 * len(word) if edges is None else edges
    active, rest = ("_", "‾") if mode & 2 else ("‾", "_")
    clock = rest * 2 + rest * 2 + "".join((active, rest)[n % 2] for n in range(count))
    clock += clock[-1] * 2
    levels = "".join("‾‾" if bit == "1" else "__" for bit in word)
    data = "‾‾" + ("__" + levels if mode & 1 else levels[:1] + levels)
    data = data[: len(clock)].ljust(len(clock), "_")
    select = "‾‾" + "_" * (len(clock) - 2)
    return select + "‾‾", clock + rest * 2, data + "‾‾"


def windows(*drawn: tuple[str, str, str], gap: int = 20) -> Span:
    select, clock, data = ("".join(part + part[-1] * gap for part in parts) for parts in zip(*drawn, strict=True))
    return Span(0, len(clock) * HALF, {"clock": line(clock), "data": line(data), "select": line(select)})


def read(serial: Serial, *drawn: tuple[str, str, str]) -> Frames:
    return received(serial, windows(*drawn), select="select")[1]


@pytest.mark.parametrize("mode", range(4))
@pytest.mark.parametrize("value", [0xA5C3, 0x0001, 0x8000])
def test_the_four_modes(mode: int, value: int) -> None:
    word = f"{value:016b}"
    frames = read(spi(mode), *[window(mode, word)] * 3)
    assert field(frames, "position") == [value] * 3
    assert (kinds(frames), frames.clocks.tolist()) == ([""] * 3, [16] * 3)
    assert frames.latch.tolist() == [(2 + 60 * number) * HALF for number in range(3)]  # where select falls


TWO_CHECKS = (
    Field(name="parity", bits=1, kind="odd", covers=("position",), mask=0x2AAA),
    Field(name="parity", bits=1, kind="odd", covers=("position",), mask=0x1555),
    Field(name="position", bits=14),
)
EVEN_LAST = (Field(name="position", bits=14), Field(name="error", bits=1), Field(name="parity", bits=1))
EVEN_FIRST = (Field(name="parity", bits=1), Field(name="error", bits=1), Field(name="position", bits=14))


@pytest.mark.parametrize(
    ("fields", "words"),
    [
        (
            TWO_CHECKS,
            {
                0x61AB: 8619,
                0xC000: 0,
                0x8001: 1,
                0x4002: 2,
                0x3FFF: 0x3FFF,
                0x6000: 0x2000,
                0x9234: 0x1234,
            },
        ),
        (EVEN_LAST, {0x0005: 1, 0xFFFC: 0x3FFF, 0x48D1: 0x1234, 0x8001: 0x2000}),
        (EVEN_FIRST, {0x9234: 0x1234, 0x8001: 1, 0xA000: 0x2000}),
    ],
    ids=["two check bits, odd", "even, last", "even, first"],
)
def test_words_of_published_layouts(fields: tuple[Field, ...], words: dict[int, int]) -> None:
    """0x61AB is 8619: a vendor's example of two check bits. The others: exact arithmetic on the rules, odd parity over
    every second bit, even parity over the word."""
    frames = read(spi(1, *fields), *[window(1, f"{word:016b}") for word in words])
    assert field(frames, "position") == list(words.values())
    assert kinds(frames) == [""] * len(words)


@pytest.mark.parametrize("bit", range(16))
@pytest.mark.parametrize("fields", [TWO_CHECKS, EVEN_LAST, EVEN_FIRST])
def test_any_flipped_bit_of_them_is_seen(fields: tuple[Field, ...], bit: int) -> None:
    good = {id(TWO_CHECKS): 0x61AB, id(EVEN_LAST): 0x48D1, id(EVEN_FIRST): 0x9234}[id(fields)]
    drawn = [window(1, f"{word:016b}") for word in (good, good ^ 1 << bit, good)]
    assert kinds(read(spi(1, *fields), *drawn)) == ["", "parity_mismatch", ""]


@pytest.mark.parametrize(
    ("mode", "edges", "kind", "clocks"),
    [
        (0, 29, "frame_short", 15),
        (0, 30, "frame_short", 15),
        (0, 31, "", 16),
        (0, 33, "frame_long", 17),
        (0, 34, "frame_long", 17),
        (1, 30, "frame_short", 15),
        (1, 31, "frame_short", 15),
        (1, 33, "", 16),
        (1, 34, "frame_long", 17),
    ],
)
def test_a_window_with_another_number_of_clock_edges(mode: int, edges: int, kind: str, clocks: int) -> None:
    """Of 16 bits, 32 edges. What counts is the edges that read a bit: one fewer at the end of phase 0, or one more at
    the end of phase 1, reads none."""
    word = f"{0xA5C3:016b}"
    good = window(mode, word)
    frames = read(spi(mode), good, good, window(mode, word, edges=edges), good)
    assert kinds(frames) == ["", "", kind, ""]
    assert frames.clocks.tolist() == [16, 16, clocks, 16]


def test_without_a_select_line() -> None:
    """Pauses of the clock part the words."""
    spans = windows(*[window(1, f"{0xA5C3:016b}")] * 3)
    _, frames = received(spi(1), spans)
    assert field(frames, "position") == [0xA5C3] * 3


def test_a_spike_on_the_select_line_parts_no_word() -> None:
    """
    select ‾‾‾_______|_______‾‾‾    two ticks of a half clock of five
    """
    spans = windows(*[window(1, f"{0xA5C3:016b}")] * 3)
    select = spans.lines["select"]
    times = sorted([*select.times.tolist(), 81, 83])
    spoilt = type(select).from_toggles(1, times)
    _, frames = received(spi(1), Span(0, spans.stop, {**spans.lines, "select": spoilt}), select="select")
    assert field(frames, "position") == [0xA5C3] * 3
    assert kinds(frames) == [""] * 3


# ---- cut ends -----------------------------------------------------------------------------------------------------


def shifted(span: Span, start: int, stop: int) -> Span:
    return Span(start, stop, {name: edges.between(start, stop) for name, edges in span.lines.items()})


@pytest.mark.parametrize("mode", [0, 1])
@pytest.mark.parametrize("inside", [3, 7, 20, 34])
def test_a_capture_cut_inside_a_select_window(mode: int, inside: int) -> None:
    """At either end: such a word is counted as cut off and blamed for nothing. `inside` halves into the window, which
    is 40 halves with the pauses around it; 60 from one to the next."""
    whole = windows(*[window(mode, f"{0xA5C3:016b}")] * 4)
    receiver, frames = received(spi(mode), shifted(whole, inside * HALF, (180 + inside) * HALF), select="select")
    assert kinds(frames) == [""] * len(frames)
    assert len(frames) + receiver.partial == (3 if inside == 3 else 4)  # three halves in, no clock has come yet
    assert field(frames, "position") == [0xA5C3] * len(frames)


@pytest.mark.parametrize("inside", [21, 23, 30, 45, 60])
def test_a_capture_cut_inside_a_biss_frame(inside: int) -> None:
    """The bursts have 21 clocks, 42 halves, and begin 20 halves after the start and every 68."""
    whole = in_a_row(*[biss()] * 4)
    receiver, frames = received(BISS, shifted(whole, inside * HALF, (204 + inside) * HALF))
    assert kinds(frames) == [""] * len(frames)
    assert len(frames) + receiver.partial == 4
    assert receiver.partial >= 1


@pytest.mark.parametrize("inside", [21, 23, 30, 45, 60])
def test_a_capture_cut_inside_an_ssi_frame(inside: int) -> None:
    """The bursts have 26 clocks, 52 halves, and begin 20 halves after the start and every 78."""
    whole = in_a_row(*[burst(WORD)] * 4)
    receiver, frames = received(ssi(*TURNS), shifted(whole, inside * HALF, (234 + inside) * HALF))
    assert kinds(frames) == [""] * len(frames)
    assert len(frames) + receiver.partial == 4
    assert receiver.partial >= 1
