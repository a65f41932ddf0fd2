"""Code conversions, each against something outside: published words, independent libraries, exact arithmetic."""

from __future__ import annotations

import graycode
import numpy as np
import numpy.typing as npt
import pytest
from bitstring import Bits
from hypothesis import given, settings
from hypothesis import strategies as st
from sympy.combinatorics.graycode import bin_to_gray, gray_to_bin

from decode.serial.words import (
    binary_to_gray,
    bits_of_value,
    describe_bits,
    gray_excess_offset,
    gray_to_binary,
    hexadecimal,
    pack,
    parity_of_bits,
    value_of_bits,
)

Matrix = npt.NDArray[np.uint8]
Values = npt.NDArray[np.uint64]


def values_of(*numbers: int) -> Values:
    return np.array(numbers, np.uint64)


def bits_of_text(*texts: str) -> Matrix:
    return np.array([[int(digit) for digit in text if digit != " "] for text in texts], np.uint8)


def text_of_bits(bits: Matrix) -> list[str]:
    return ["".join(map(str, row)) for row in bits.tolist()]


def gray_text(value: int, width: int) -> str:
    """The Gray word of a value as zeros and ones."""
    return text_of_bits(bits_of_value(binary_to_gray(values_of(value)), width))[0]


@st.composite
def tables(draw: st.DrawFn, longest: int) -> Matrix:
    shape = (draw(st.integers(0, 4)), draw(st.integers(0, longest)))
    return np.random.default_rng(draw(st.integers(0, 2**32 - 1))).integers(0, 2, shape, dtype=np.uint8)


# --- bits and values ----------------------------------------------------------------------------------------------


@settings(deadline=None)
@given(tables(longest=64))
def test_values_and_bits_round_trip(bits: Matrix) -> None:
    """A row is the binary number that Python reads from its digits, and the number gives the row back."""
    values = value_of_bits(bits)
    assert values.dtype == np.uint64
    assert values.tolist() == [int(text or "0", 2) for text in text_of_bits(bits)]
    assert bits_of_value(values, bits.shape[1]).tolist() == bits.tolist()


@settings(deadline=None)
@given(tables(longest=512))
def test_packed_is_the_big_endian_number(bits: Matrix) -> None:
    """Python's own integers and hexadecimal digits, for any length up to 512 bits."""
    n = bits.shape[1]
    packed = pack(bits)
    numbers = [int(text or "0", 2) for text in text_of_bits(bits)]
    assert [row.tobytes() for row in packed] == [number.to_bytes((n + 7) // 8, "big") for number in numbers]
    if n:
        assert hexadecimal(packed, n).tolist() == [f"0x{number:0{(n + 3) // 4}X}" for number in numbers]


@pytest.mark.parametrize(
    ("text", "expected"),
    [
        ("1", "0x1"),
        ("10110", "0x16"),
        ("0000 0001 0010", "0x012"),
        ("1 0010 0011 0100 0101", "0x12345"),
    ],
)
def test_hexadecimal(text: str, expected: str) -> None:
    """Exact: groups of four bits from the right, as many digits as the word has groups."""
    bits = bits_of_text(text)
    assert hexadecimal(pack(bits), bits.shape[1]).tolist() == [expected]


def test_too_wide_is_refused() -> None:
    with pytest.raises(ValueError, match="65 bits are not 0 to 64"):
        value_of_bits(np.zeros((1, 65), np.uint8))
    with pytest.raises(ValueError, match="0x10 does not fit into 4 bits"):
        bits_of_value(values_of(3, 16), 4)
    with pytest.raises(ValueError, match="0x10 does not fit into 4 bits"):
        gray_to_binary(values_of(16), 4)
    with pytest.raises(ValueError, match="2 bytes do not hold words of 17 bits"):
        hexadecimal(np.zeros((1, 2), np.uint8), 17)
    with pytest.raises(ValueError, match="0 bytes do not hold words of 0 bits"):
        hexadecimal(np.zeros((1, 0), np.uint8), 0)
    with pytest.raises(ValueError, match="the mask 0x10 is not one of 4 bits"):
        parity_of_bits(np.zeros((1, 4), np.uint8), 0x10)


def test_describe_bits() -> None:
    """Groups of four from the first bit sent; position 178 with both flags high (exact)."""
    assert describe_bits(bits_of_text("1011001011")[0]) == "1011 0010 11"
    assert describe_bits(np.empty(0, np.uint8)) == ""


@settings(deadline=None)
@given(st.lists(st.integers(0, 1), max_size=70))
def test_describe_bits_can_be_read_back(bits: list[int]) -> None:
    """source: bitstring reads the text without its blanks as the same bits."""
    text = describe_bits(np.array(bits, np.uint8)).replace(" ", "")
    assert list(Bits(bin=text)) == [bool(bit) for bit in bits]


# --- Gray code ----------------------------------------------------------------------------------------------------

GRAY_WORDS = (
    # worked out by graycode and sympy; 4 -> 6 is printed in public notes on the algorithm
    (0, 0),
    (1, 1),
    (2, 3),
    (3, 2),
    (4, 6),
    (7, 4),
    (8, 12),
    (15, 8),
    (4095, 0x800),
    (4096, 0x1800),
    (8191, 0x1000),
    (0xABCDE, 0xFE2B1),
)


@pytest.mark.parametrize(("binary", "gray"), GRAY_WORDS)
def test_gray_words(binary: int, gray: int) -> None:
    assert binary_to_gray(values_of(binary)).tolist() == [gray]
    assert gray_to_binary(values_of(gray), 20).tolist() == [binary]


def test_gray_words_as_graycode() -> None:
    """All 13-bit numbers. source: graycode, an independent library."""
    numbers = np.arange(1 << 13, dtype=np.uint64)
    words = binary_to_gray(numbers)
    assert words.tolist() == [graycode.tc_to_gray_code(number) for number in range(1 << 13)]
    assert gray_to_binary(words, 13).tolist() == [graycode.gray_code_to_tc(word) for word in words.tolist()]


@settings(deadline=None)
@given(st.integers(1, 64), st.data())
def test_gray_words_as_sympy(width: int, data: st.DataObject) -> None:
    """source: sympy's conversions of texts of bits."""
    number = data.draw(st.integers(0, (1 << width) - 1))
    text = f"{number:0{width}b}"
    assert gray_text(number, width) == bin_to_gray(text)
    assert gray_to_binary(values_of(number), width).tolist() == [int(gray_to_bin(text), 2)]


@settings(deadline=None)
@given(st.integers(1, 64), st.data())
def test_gray_round_trip(width: int, data: st.DataObject) -> None:
    """There and back is where it was, both ways round, up to the full 64 bits."""
    numbers = values_of(*data.draw(st.lists(st.integers(0, (1 << width) - 1), min_size=1, max_size=5)))
    assert gray_to_binary(binary_to_gray(numbers), width).tolist() == numbers.tolist()
    assert binary_to_gray(gray_to_binary(numbers, width)).tolist() == numbers.tolist()


@settings(deadline=None)
@given(st.integers(1, 64), st.data())
def test_neighbours_differ_in_one_bit(width: int, data: st.DataObject) -> None:
    """One step on, also from the last word to the first, changes one bit: the definition of a cyclic Gray code."""
    number = data.draw(st.integers(0, (1 << width) - 1) | st.just((1 << width) - 1))
    words = binary_to_gray(values_of(number, (number + 1) % (1 << width)))
    assert int(words[0] ^ words[1]).bit_count() == 1


@pytest.mark.parametrize(
    ("positions", "offset"),
    # exact: (2^k - N) / 2; common practice, no source
    [(360, 76), (720, 152), (1000, 12), (1440, 304), (3600, 248), (1024, 0), (2, 0)],
)
def test_gray_excess(positions: int, offset: int) -> None:
    """The middle N words of the code are cyclic too: every step changes one bit, also the wrap."""
    assert gray_excess_offset(positions) == offset
    words = binary_to_gray(np.arange(offset, offset + positions, dtype=np.uint64))
    steps = words ^ np.roll(words, -1)
    assert np.bitwise_count(steps).tolist() == [1] * positions


@pytest.mark.parametrize("positions", [1, 0, -4, 999])
def test_gray_excess_of_an_impossible_turn(positions: int) -> None:
    with pytest.raises(ValueError, match=f"even number of positions, not {positions}"):
        gray_excess_offset(positions)


# --- SSI words ----------------------------------------------------------------------------------------------------

TURNS_5_STEPS_100 = "0000000001010000001100100"


@pytest.mark.parametrize(
    ("turns", "steps", "gray"),
    # worked out by graycode and sympy
    [
        (5, 100, "0000000001111000001010110"),
        (4095, 8191, "1" + 24 * "0"),
        (2048, 4096, "1100000000001100000000000"),
    ],
)
def test_ssi_gray_over_turns_and_steps(turns: int, steps: int, gray: str) -> None:
    """Twelve bits of turns and thirteen of steps are one word of 25 bits in the code."""
    number = turns << 13 | steps
    assert gray_text(number, 25) == gray == bin_to_gray(f"{number:025b}")
    back = gray_to_binary(value_of_bits(bits_of_text(gray)), 25)
    assert divmod(int(back[0]), 1 << 13) == (turns, steps)


def test_ssi_binary_word() -> None:
    """Exact: 5 in twelve bits, then 100 in thirteen."""
    assert text_of_bits(bits_of_value(values_of(5 << 13 | 100), 25)) == [TURNS_5_STEPS_100]


def test_ssi_parity_depends_on_the_code() -> None:
    """Five ones in binary, eight in Gray: even parity adds a 1 to the first and a 0 to the second. Exact."""
    assert parity_of_bits(bits_of_text(TURNS_5_STEPS_100)).tolist() == [1]
    assert parity_of_bits(bits_of_text("0000000001111000001010110")).tolist() == [0]


def test_ssi_ring_of_two_copies() -> None:
    """26 clocks a copy: the word, then one low bit. source of the format: POSITAL, SSI interface page."""
    ring = bits_of_text(f"{TURNS_5_STEPS_100} 0 {TURNS_5_STEPS_100} 0")
    assert ring.shape == (1, 52)
    first, second = value_of_bits(ring[:, :25]), value_of_bits(ring[:, 26:51])
    assert first.tolist() == second.tolist() == [5 << 13 | 100]
    assert parity_of_bits(ring).tolist() == [0]


def test_ssi_justified_words() -> None:
    """Ten bits of turns (0x155) and twelve of steps (0xABC) in 25 clocks, three ways.

    source: TR-Electronic TR-ECE-BA-DGB-0039-14: a tree pads turns in front and steps behind, so that the border
    between them stays after the twelfth bit; right-justified pads in front, left-justified behind.
    """
    turns, steps = bits_of_value(values_of(0x155), 10), bits_of_value(values_of(0xABC), 12)
    two, one, three = (np.zeros((1, n), np.uint8) for n in (2, 1, 3))
    assert text_of_bits(np.hstack([two, turns, steps, one])) == ["0001010101011010101111000"]
    assert text_of_bits(np.hstack([three, turns, steps])) == ["0000101010101101010111100"]
    assert text_of_bits(np.hstack([turns, steps, three])) == ["0101010101101010111100000"]
    tree = bits_of_text("0001010101011010101111000")
    assert value_of_bits(tree[:, :12]).tolist() == [0x155]
    assert value_of_bits(tree[:, 12:24]).tolist() == [0xABC]


def test_ssi_gray_does_not_shift() -> None:
    """With an odd step the Gray word of the padded number ends in ...111, the padded Gray word in ...110.

    Exact: the pad bit of the code is the last step bit XOR 0.
    """
    number = 0x155 << 12 | 0xABD
    gray_then_pad = gray_text(number, 22) + "0"
    pad_then_gray = gray_text(number << 1, 23)
    assert gray_then_pad.endswith("000110")
    assert pad_then_gray.endswith("000111")
    assert gray_then_pad[:-1] == pad_then_gray[:-1]


# --- SPI words ----------------------------------------------------------------------------------------------------

ODD_BITS, EVEN_BITS = 0x2AAA, 0x1555


@pytest.mark.parametrize(
    ("position", "word"),
    # two check bits before 14 bits of position, each odd parity over every other bit.
    # source of the rule: Same Sky / DigiKey, AMT22 sample-code article; 0x61AB is an example of such a reply
    [
        (0x21AB, 0x61AB),
        (0x0000, 0xC000),
        (0x0001, 0x8001),
        (0x0002, 0x4002),
        (0x3FFF, 0x3FFF),
        (0x2000, 0x6000),
        (0x1234, 0x9234),
    ],
)
def test_spi_two_check_bits(position: int, word: int) -> None:
    """Bit 15 makes the ones of bits 13, 11, ... 1 odd in number, bit 14 those of bits 12, 10, ... 0."""
    bits = bits_of_value(values_of(position), 14)
    check = [1 - int(parity_of_bits(bits, mask)[0]) for mask in (ODD_BITS, EVEN_BITS)]
    assert check[0] << 15 | check[1] << 14 | position == word


def test_spi_two_check_bits_see_every_single_error() -> None:
    """Each of the 16 bits is in exactly one of the two sums: any one flip breaks one of them. Exact."""
    flipped = bits_of_value(values_of(0x61AB), 16) ^ np.eye(16, dtype=np.uint8)
    odd = parity_of_bits(flipped, 0x8000 | ODD_BITS)
    even = parity_of_bits(flipped, 0x4000 | EVEN_BITS)
    assert (odd + even).tolist() == [1] * 16


@pytest.mark.parametrize(
    ("angle", "error", "word"),
    # source of the format: ams AS5055A data sheet v2-03, figures 16 and 17
    [(1, 0, 0x0005), (0x3FFF, 0, 0xFFFC), (0x1234, 0, 0x48D1), (0x1234, 1, 0x48D2), (0x2000, 0, 0x8001)],
)
def test_spi_even_parity_last(angle: int, error: int, word: int) -> None:
    """Fourteen bits of angle, the error flag, and a last bit that makes the number of ones even."""
    before = bits_of_value(values_of(angle << 1 | error), 15)
    assert (angle << 2 | error << 1 | int(parity_of_bits(before)[0])) == word
    assert parity_of_bits(bits_of_value(values_of(word), 16)).tolist() == [0]


@pytest.mark.parametrize(
    ("angle", "error", "word"),
    # common practice, no source; exact: an even number of ones in the sixteen bits
    [(0x1234, 0, 0x9234), (0x1234, 1, 0x5234), (1, 0, 0x8001), (0x2000, 0, 0xA000)],
)
def test_spi_even_parity_first(angle: int, error: int, word: int) -> None:
    """The parity bit comes first, then the error flag, then fourteen bits of angle."""
    after = bits_of_value(values_of(error << 14 | angle), 15)
    assert (int(parity_of_bits(after)[0]) << 15 | error << 14 | angle) == word
    assert parity_of_bits(bits_of_value(values_of(word), 16)).tolist() == [0]


# --- parity in general --------------------------------------------------------------------------------------------


@settings(deadline=None)
@given(tables(longest=100), st.data())
def test_parity_counts_ones(bits: Matrix, data: st.DataObject) -> None:
    """Python's count of the ones under the mask, odd or even; the mask's highest bit stands for the first sent."""
    n = bits.shape[1]
    mask = data.draw(st.none() | st.integers(0, (1 << n) - 1))
    kept = (1 << n) - 1 if mask is None else mask
    expected = [(int(text or "0", 2) & kept).bit_count() % 2 for text in text_of_bits(bits)]
    assert parity_of_bits(bits, mask).tolist() == expected
