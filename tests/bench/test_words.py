"""Words as bits, held against independent libraries and published vectors."""

import anycrc
import graycode
import numpy as np
import pytest
from bitarray import bitarray
from hypothesis import given, settings
from hypothesis import strategies as st

from decode.bench.words import crc, gray, parity, to_bits, to_numbers, word_bits
from decode.errors import InputError
from decode.sheet import Field, Serial

TURNS_AND_STEPS = (Field(name="turns", bits=12), Field(name="position", bits=13))


def as_text(bits: np.ndarray) -> list[str]:
    return ["".join(map(str, row)) for row in bits.tolist()]


def word(serial: Serial, **values: int) -> str:
    return as_text(word_bits(serial, {name: np.array([value], np.uint64) for name, value in values.items()}))[0]


def test_25_bit_binary_word() -> None:
    """Turns 5, steps 100 in 12 + 13 bits. Source: exact arithmetic, 5 * 8192 + 100 in binary."""
    assert word(Serial(interface="ssi", fields=TURNS_AND_STEPS), turns=5, position=100) == "0000000001010000001100100"


def test_25_bit_gray_word() -> None:
    """The same as one Gray word. Source: w XOR (w >> 1), checked with the library graycode."""
    serial = Serial(interface="ssi", coding="gray", fields=TURNS_AND_STEPS)
    sent = word(serial, turns=5, position=100)
    assert sent == "0000000001111000001010110"
    assert int(sent, 2) == graycode.tc_to_gray_code(5 * 8192 + 100)


@given(st.lists(st.integers(0, 2**40 - 1), min_size=1, max_size=20))
def test_gray_is_that_of_the_library(numbers: list[int]) -> None:
    """Source: the library graycode."""
    coded = to_numbers(gray(to_bits(np.array(numbers, np.uint64), 40)))
    assert coded.tolist() == [graycode.tc_to_gray_code(number) for number in numbers]


@pytest.mark.parametrize(
    ("width", "position", "error", "warning", "sent"),
    [
        # Source: open motor-controller firmware's unit tests of BiSS frames (Apache-2.0, 2025).
        (8, 178, 1, 1, 0b000101),
        (8, 0, 0, 1, 0b111100),
        (8, 170, 1, 1, 0x23),
        # Source: a public HDL project's BiSS C test.
        (8, 0x9B, 1, 1, 0x20),
    ],
)
def test_biss_crc(width: int, position: int, error: int, warning: int, sent: int) -> None:
    fields = (
        Field(name="position", bits=width),
        Field(name="error", bits=1),
        Field(name="warning", bits=1),
        Field(name="crc", bits=6, polynomial=0x43, inverted=True),
    )
    bits = word(Serial(interface="biss-c", fields=fields), position=position, error=error, warning=warning)
    assert int(bits[-6:], 2) == sent


@settings(deadline=None)
@given(data=st.data())
def test_crc_is_that_of_the_library(data: st.DataObject) -> None:
    """Any width, start value, reflection and output XOR, over any bits. Source: the library anycrc."""
    width = data.draw(st.integers(3, 32))
    reflected = data.draw(st.booleans())
    polynomial, init, output = (data.draw(st.integers(0, 2**width - 1)) for _ in range(3))
    length = 8 * data.draw(st.integers(1, 8)) if reflected else data.draw(st.integers(1, 80))
    bits = data.draw(st.lists(st.integers(0, 1), min_size=length, max_size=length))
    field = Field(
        name="crc",
        bits=width,
        polynomial=polynomial | 1 << width,
        init=init,
        reflected=reflected,
        output_xor=output,
    )
    library = anycrc.CRC(width, polynomial, init, reflected, reflected, output)
    expected = library.calc(bitarray(bits).tobytes()) if reflected else library.calc_bits(bitarray(bits))
    assert crc(np.array([bits], np.uint8), field).tolist() == [expected]


def test_reflected_crc_over_broken_bytes_is_refused() -> None:
    field = Field(name="crc", bits=8, polynomial=0x107, reflected=True)
    with pytest.raises(InputError, match="whole bytes"):
        crc(np.zeros((1, 13), np.uint8), field)


def test_two_check_bits_over_every_other_bit() -> None:
    """Odd parity over the odd bits first, over the even ones second: position 0x21AB gives the word 0x61AB.

    Source: an encoder maker's example word; parity worked out by hand: bits 13 8 7 5 3 1 0 of 0x21AB are set, of which
    13 7 5 3 1 are odd (five ones: check bit 0) and 8 0 even (two ones: check bit 1).
    """
    fields = (
        Field(name="parity", bits=1, kind="odd", covers=("position",), mask=0b10101010101010),
        Field(name="parity", bits=1, kind="odd", covers=("position",), mask=0b01010101010101),
        Field(name="position", bits=14),
    )
    assert int(word(Serial(interface="spi", fields=fields), position=0x21AB), 2) == 0x61AB


def test_parity_is_taken_over_the_bits_as_sent() -> None:
    """Even parity of turns 5, steps 100: 1 over the binary word (5 ones), 0 over the Gray word (8 ones).

    Source: ones counted in the two words above.
    """
    fields = (*TURNS_AND_STEPS, Field(name="parity", bits=1))
    assert word(Serial(interface="ssi", fields=fields), turns=5, position=100)[-1] == "1"
    assert word(Serial(interface="ssi", coding="gray", fields=fields), turns=5, position=100)[-1] == "0"


def test_parity_kinds() -> None:
    """Three ones: an even parity adds one, an odd one none. Source: definition."""
    bits = np.array([[1, 1, 1, 0]], np.uint8)
    assert parity(bits, Field(name="parity", bits=1, kind="even")).tolist() == [1]
    assert parity(bits, Field(name="parity", bits=1, kind="odd")).tolist() == [0]


def test_checks_may_cover_checks() -> None:
    """A CRC over position and parity, sent before both. Source: anycrc over the same bits."""
    fields = (
        Field(name="crc", bits=5, polynomial=0x25),
        Field(name="position", bits=7),
        Field(name="parity", bits=1, covers=("position",)),
    )
    bits = word(Serial(interface="ssi", fields=fields), position=0b1011000)
    assert bits[5:] == "10110001"
    assert int(bits[:5], 2) == anycrc.CRC(5, 0x05, 0, False, False, 0).calc_bits(bitarray("10110001"))
