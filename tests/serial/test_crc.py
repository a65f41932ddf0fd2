"""Check codes, each against something outside: a catalogue, published frames, an independent program, algebra."""

from __future__ import annotations

import functools
from collections.abc import Callable

import anycrc
import crcmod.predefined
import numpy as np
import numpy.typing as npt
import pytest
from bitarray import bitarray
from hypothesis import given, settings
from hypothesis import strategies as st

from decode.serial.crc import (
    CrcParameters,
    byte_table,
    crc_of_bits,
    crc_of_bits_plain,
    own_byte_table,
    parameters_of,
)
from decode.sheet import Field

Matrix = npt.NDArray[np.uint8]
Engine = Callable[[Matrix, CrcParameters], npt.NDArray[np.uint64]]

ENGINES = pytest.mark.parametrize("engine", [crc_of_bits, crc_of_bits_plain])

# source: Catalogue of parametrised CRC algorithms, reveng.sourceforge.io. The polynomial is written there without its
# leading term; the check value is that of the nine ASCII characters "123456789".
# (name, width, polynomial, init, refin, refout, xorout, check)
CATALOGUE = (
    ("CRC-3/GSM", 3, 0x3, 0x0, False, False, 0x7, 0x4),
    ("CRC-3/ROHC", 3, 0x3, 0x7, True, True, 0x0, 0x6),
    ("CRC-4/G-704", 4, 0x3, 0x0, True, True, 0x0, 0x7),
    ("CRC-4/INTERLAKEN", 4, 0x3, 0xF, False, False, 0xF, 0xB),
    ("CRC-5/EPC-C1G2", 5, 0x09, 0x09, False, False, 0x00, 0x00),
    ("CRC-5/G-704", 5, 0x15, 0x00, True, True, 0x00, 0x07),
    ("CRC-5/USB", 5, 0x05, 0x1F, True, True, 0x1F, 0x19),
    ("CRC-6/CDMA2000-A", 6, 0x27, 0x3F, False, False, 0x00, 0x0D),
    ("CRC-6/CDMA2000-B", 6, 0x07, 0x3F, False, False, 0x00, 0x3B),
    ("CRC-6/DARC", 6, 0x19, 0x00, True, True, 0x00, 0x26),
    ("CRC-6/G-704", 6, 0x03, 0x00, True, True, 0x00, 0x06),
    ("CRC-6/GSM", 6, 0x2F, 0x00, False, False, 0x3F, 0x13),
    ("CRC-7/MMC", 7, 0x09, 0x00, False, False, 0x00, 0x75),
    ("CRC-7/ROHC", 7, 0x4F, 0x7F, True, True, 0x00, 0x53),
    ("CRC-7/UMTS", 7, 0x45, 0x00, False, False, 0x00, 0x61),
    ("CRC-8/AUTOSAR", 8, 0x2F, 0xFF, False, False, 0xFF, 0xDF),
    ("CRC-8/BLUETOOTH", 8, 0xA7, 0x00, True, True, 0x00, 0x26),
    ("CRC-8/CDMA2000", 8, 0x9B, 0xFF, False, False, 0x00, 0xDA),
    ("CRC-8/DARC", 8, 0x39, 0x00, True, True, 0x00, 0x15),
    ("CRC-8/DVB-S2", 8, 0xD5, 0x00, False, False, 0x00, 0xBC),
    ("CRC-8/GSM-A", 8, 0x1D, 0x00, False, False, 0x00, 0x37),
    ("CRC-8/GSM-B", 8, 0x49, 0x00, False, False, 0xFF, 0x94),
    ("CRC-8/HITAG", 8, 0x1D, 0xFF, False, False, 0x00, 0xB4),
    ("CRC-8/I-432-1", 8, 0x07, 0x00, False, False, 0x55, 0xA1),
    ("CRC-8/I-CODE", 8, 0x1D, 0xFD, False, False, 0x00, 0x7E),
    ("CRC-8/LTE", 8, 0x9B, 0x00, False, False, 0x00, 0xEA),
    ("CRC-8/MAXIM-DOW", 8, 0x31, 0x00, True, True, 0x00, 0xA1),
    ("CRC-8/MIFARE-MAD", 8, 0x1D, 0xC7, False, False, 0x00, 0x99),
    ("CRC-8/NRSC-5", 8, 0x31, 0xFF, False, False, 0x00, 0xF7),
    ("CRC-8/OPENSAFETY", 8, 0x2F, 0x00, False, False, 0x00, 0x3E),
    ("CRC-8/ROHC", 8, 0x07, 0xFF, True, True, 0x00, 0xD0),
    ("CRC-8/SAE-J1850", 8, 0x1D, 0xFF, False, False, 0xFF, 0x4B),
    ("CRC-8/SMBUS", 8, 0x07, 0x00, False, False, 0x00, 0xF4),
    ("CRC-8/TECH-3250", 8, 0x1D, 0xFF, True, True, 0x00, 0x97),
    ("CRC-8/WCDMA", 8, 0x9B, 0x00, True, True, 0x00, 0x25),
    ("CRC-10/ATM", 10, 0x233, 0x000, False, False, 0x000, 0x199),
    ("CRC-10/CDMA2000", 10, 0x3D9, 0x3FF, False, False, 0x000, 0x233),
    ("CRC-10/GSM", 10, 0x175, 0x000, False, False, 0x3FF, 0x12A),
    ("CRC-11/FLEXRAY", 11, 0x385, 0x01A, False, False, 0x000, 0x5A3),
    ("CRC-11/UMTS", 11, 0x307, 0x000, False, False, 0x000, 0x061),
    ("CRC-12/CDMA2000", 12, 0xF13, 0xFFF, False, False, 0x000, 0xD4D),
    ("CRC-12/DECT", 12, 0x80F, 0x000, False, False, 0x000, 0xF5B),
    ("CRC-12/GSM", 12, 0xD31, 0x000, False, False, 0xFFF, 0xB34),
    ("CRC-12/UMTS", 12, 0x80F, 0x000, False, True, 0x000, 0xDAF),
    ("CRC-13/BBC", 13, 0x1CF5, 0x0000, False, False, 0x0000, 0x04FA),
    ("CRC-14/DARC", 14, 0x0805, 0x0000, True, True, 0x0000, 0x082D),
    ("CRC-14/GSM", 14, 0x202D, 0x0000, False, False, 0x3FFF, 0x30AE),
    ("CRC-15/CAN", 15, 0x4599, 0x0000, False, False, 0x0000, 0x059E),
    ("CRC-15/MPT1327", 15, 0x6815, 0x0000, False, False, 0x0001, 0x2566),
    ("CRC-16/ARC", 16, 0x8005, 0x0000, True, True, 0x0000, 0xBB3D),
    ("CRC-16/CMS", 16, 0x8005, 0xFFFF, False, False, 0x0000, 0xAEE7),
    ("CRC-16/DNP", 16, 0x3D65, 0x0000, True, True, 0xFFFF, 0xEA82),
    ("CRC-16/EN-13757", 16, 0x3D65, 0x0000, False, False, 0xFFFF, 0xC2B7),
    ("CRC-16/GENIBUS", 16, 0x1021, 0xFFFF, False, False, 0xFFFF, 0xD64E),
    ("CRC-16/GSM", 16, 0x1021, 0x0000, False, False, 0xFFFF, 0xCE3C),
    ("CRC-16/IBM-3740", 16, 0x1021, 0xFFFF, False, False, 0x0000, 0x29B1),
    ("CRC-16/IBM-SDLC", 16, 0x1021, 0xFFFF, True, True, 0xFFFF, 0x906E),
    ("CRC-16/KERMIT", 16, 0x1021, 0x0000, True, True, 0x0000, 0x2189),
    ("CRC-16/M17", 16, 0x5935, 0xFFFF, False, False, 0x0000, 0x772B),
    ("CRC-16/MAXIM-DOW", 16, 0x8005, 0x0000, True, True, 0xFFFF, 0x44C2),
    ("CRC-16/MCRF4XX", 16, 0x1021, 0xFFFF, True, True, 0x0000, 0x6F91),
    ("CRC-16/MODBUS", 16, 0x8005, 0xFFFF, True, True, 0x0000, 0x4B37),
    ("CRC-16/OPENSAFETY-A", 16, 0x5935, 0x0000, False, False, 0x0000, 0x5D38),
    ("CRC-16/OPENSAFETY-B", 16, 0x755B, 0x0000, False, False, 0x0000, 0x20FE),
    ("CRC-16/PROFIBUS", 16, 0x1DCF, 0xFFFF, False, False, 0xFFFF, 0xA819),
    ("CRC-16/SPI-FUJITSU", 16, 0x1021, 0x1D0F, False, False, 0x0000, 0xE5CC),
    ("CRC-16/T10-DIF", 16, 0x8BB7, 0x0000, False, False, 0x0000, 0xD0DB),
    ("CRC-16/UMTS", 16, 0x8005, 0x0000, False, False, 0x0000, 0xFEE8),
    ("CRC-16/USB", 16, 0x8005, 0xFFFF, True, True, 0xFFFF, 0xB4C8),
    ("CRC-16/XMODEM", 16, 0x1021, 0x0000, False, False, 0x0000, 0x31C3),
)
CATALOGUE_ROWS = pytest.mark.parametrize("row", CATALOGUE, ids=[row[0] for row in CATALOGUE])
Row = tuple[str, int, int, int, bool, bool, int, int]


def of_row(row: Row) -> CrcParameters:
    _, width, polynomial, init, reflect_in, reflect_out, xor_out, _ = row
    return CrcParameters(1 << width | polynomial, init, reflect_in, reflect_out, xor_out)


def catalogued(name: str) -> CrcParameters:
    return of_row(next(row for row in CATALOGUE if row[0] == name))


def bits_of_bytes(data: bytes) -> Matrix:
    """One frame: the bytes in order, each most significant bit first."""
    return np.unpackbits(np.frombuffer(data, np.uint8))[None, :]


def bits_of_text(text: str) -> Matrix:
    """One frame from zeros and ones; blanks are for the reader."""
    return np.array([[int(digit) for digit in text if digit != " "]], np.uint8)


def word(*parts: tuple[int, int]) -> str:
    """(value, bits) pairs as a text of zeros and ones, in the order sent."""
    return "".join(f"{value:0{bits}b}" for value, bits in parts)


def biss(polynomial: int) -> CrcParameters:
    """How a BiSS channel sends its CRC: start value 0, not reflected, inverted.

    source: Lika Electronic SMA1 manual, chapter BiSS C-mode; Baumer, Absolute encoders with BiSS C interface, ch. 5.
    """
    width = polynomial.bit_length() - 1
    return CrcParameters(polynomial, xor_out=(1 << width) - 1)


BISS6 = biss(0x43)


def independent(parameters: CrcParameters) -> Callable[[Matrix], int]:
    """The same algorithm by anycrc, for one row of bits.

    Where bytes go in reflected, its bit array holds the bits in the register's order, so that groups of eight, and
    the shorter last one, are turned round first.
    """
    engine = anycrc.CRC(
        width=parameters.width,
        poly=parameters.polynomial & parameters.all_ones,
        init=parameters.init,
        refin=parameters.reflect_in,
        refout=parameters.reflect_out,
        xorout=parameters.xor_out,
    )

    def calculate(row: Matrix) -> int:
        bits = row.tolist()
        if parameters.reflect_in:
            bits = [bit for start in range(0, len(bits), 8) for bit in reversed(bits[start : start + 8])]
        return int(engine.calc_bits(bitarray(bits, endian="little" if parameters.reflect_in else "big")))

    return calculate


# --- the catalogue ------------------------------------------------------------------------------------------------


@ENGINES
@CATALOGUE_ROWS
def test_catalogue_check_value(row: Row, engine: Engine) -> None:
    """source: the catalogue's own check column."""
    assert engine(bits_of_bytes(b"123456789"), of_row(row)).tolist() == [row[-1]]


def test_catalogue_table_is_whole() -> None:
    """No row is there twice and none was lost."""
    assert len({row[0] for row in CATALOGUE}) == 70
    assert len({of_row(row) for row in CATALOGUE}) == 70


@CATALOGUE_ROWS
def test_any_number_of_bits_as_anycrc(row: Row) -> None:
    """source: anycrc, an independent library that takes any number of bits; lengths at random, the seed is fixed."""
    parameters, random = of_row(row), np.random.default_rng(row[1] * 1000 + row[2])
    expected = independent(parameters)
    for length in (*range(1, 18), *random.integers(18, 512, 12)):
        bits = random.integers(0, 2, (4, length), dtype=np.uint8)
        wanted = [expected(line) for line in bits]
        assert crc_of_bits(bits, parameters).tolist() == wanted, length
        assert crc_of_bits_plain(bits, parameters).tolist() == wanted, length


@pytest.mark.parametrize("entry", crcmod.predefined._crc_definitions, ids=lambda entry: entry["name"])
def test_crcmod_predefined(entry: dict[str, int]) -> None:
    """source: the functions of crcmod's predefined table, widths 8 to 64.

    crcmod's start value is the register's XOR-ed with the output's XOR, and where bits go in reflected it is the
    reflected register's: undone here, so that the two notations are seen to differ in nothing else.
    """
    polynomial, reflected, xor_out = entry["poly"], bool(entry["reverse"]), entry["xor_out"]
    width = polynomial.bit_length() - 1
    init = entry["init"] ^ xor_out
    if reflected:
        init = int(f"{init:0{width}b}"[::-1], 2)
    parameters = CrcParameters(polynomial, init, reflected, reflected, xor_out)
    function = crcmod.predefined.mkPredefinedCrcFun(entry["name"])
    random = np.random.default_rng(width)
    for length in (1, 2, 5, 9, 64):
        data = random.bytes(length)
        assert crc_of_bits(bits_of_bytes(data), parameters).tolist() == [function(data)]
        assert crc_of_bits_plain(bits_of_bytes(data), parameters).tolist() == [function(data)]


@pytest.mark.parametrize(
    "polynomial", [0x107, 0x12F, 0x18005, 0x11021, 0x190D9, 0x1864CFB, 0x104C11DB7, 1 << 64 | 0x1B]
)
def test_own_table_is_crcmods(polynomial: int) -> None:
    """source: crcmod's table, for each width it has one for."""
    assert own_byte_table(polynomial) == byte_table(polynomial).tolist() == crcmod.Crc(polynomial, 0, False).table


# --- code words of bytes ------------------------------------------------------------------------------------------

INPUTS = ("00000000", "F20183", "0FAA0055", "00FF5511", "332255AABBCCDDEEFF", "926B55", "FFFFFFFF")

CODE_WORDS = (
    # source: AUTOSAR code words as listed with CRC-16/ARC in the catalogue (reveng.sourceforge.io)
    *zip(
        ["CRC-16/ARC"] * 7,
        INPUTS,
        (0x0000, 0xC2E1, 0x0BE3, 0x6CCF, 0xAE98, 0xE24E, 0x9401),
        strict=True,
    ),
    # worked out by two independent programs (anycrc and a shift register of our own)
    *zip(["CRC-8/SAE-J1850"] * 7, INPUTS, (0x59, 0x37, 0x79, 0xB8, 0xCB, 0x8C, 0x74), strict=True),
    *zip(["CRC-8/AUTOSAR"] * 7, INPUTS, (0x12, 0xC2, 0xC6, 0x77, 0x11, 0x33, 0x6C), strict=True),
    *zip(
        ["CRC-16/IBM-3740"] * 5,
        ("F20183", "0FAA0055", "00FF5511", "926B55", "FFFFFFFF"),
        (0xD374, 0x2023, 0xB8F9, 0x0745, 0x1D0F),
        strict=True,
    ),
    # source: Texas Instruments SNAU265C, CRC table
    ("CRC-8/NRSC-5", "ABAB", 0x72),
)


@ENGINES
@pytest.mark.parametrize(("name", "message", "expected"), CODE_WORDS)
def test_code_words(name: str, message: str, expected: int, engine: Engine) -> None:
    assert engine(bits_of_bytes(bytes.fromhex(message)), catalogued(name)).tolist() == [expected]


@ENGINES
def test_start_value_0xc4_of_a_position_sensor(engine: Engine) -> None:
    """0x1D with start value 0xC4 and output XOR 0xFF: 03 C2 gives 0x2A; the usual start value 0xFF gives 0x65.

    source: the reply quoted in Electronics Stack Exchange question 510006; 0x65 by anycrc.
    """
    message = bits_of_bytes(bytes.fromhex("03C2"))
    assert engine(message, CrcParameters(0x11D, init=0xC4, xor_out=0xFF)).tolist() == [0x2A]
    assert engine(message, catalogued("CRC-8/SAE-J1850")).tolist() == [0x65]


# --- the BiSS polynomials -----------------------------------------------------------------------------------------

# (polynomial, check inverted, check not inverted, residue): worked out by anycrc and an own program. Cross-links to
# the catalogue: 0xB inverted is CRC-3/GSM, 0x89 plain is CRC-7/MMC, 0x12F plain is CRC-8/OPENSAFETY.
# source of the polynomials by width: Microchip BiSS chapter, client configuration register (0x43: also Lika SMA1).
BISS_POLYNOMIALS = (
    (0xB, 0x4, 0x3, 0x2),
    (0x13, 0x1, 0xE, 0x2),
    (0x25, 0x09, 0x16, 0x0C),
    (0x43, 0x2E, 0x11, 0x02),
    (0x89, 0x0A, 0x75, 0x38),
    (0x12F, 0xC1, 0x3E, 0x42),
    (0x197, 0x6B, 0x94, 0x3C),
    (0x97, 0x75, 0x0A, 0x69),
    (0x190D9, 0x6EC5, 0x913A, 0xE82E),
)


@ENGINES
@pytest.mark.parametrize(("polynomial", "inverted", "plain", "residue"), BISS_POLYNOMIALS)
def test_biss_polynomials(polynomial: int, inverted: int, plain: int, residue: int, engine: Engine) -> None:
    message = bits_of_bytes(b"123456789")
    assert engine(message, biss(polynomial)).tolist() == [inverted]
    assert engine(message, CrcParameters(polynomial)).tolist() == [plain]


@ENGINES
@pytest.mark.parametrize(("polynomial", "inverted", "plain", "residue"), BISS_POLYNOMIALS)
def test_residue_is_one_constant(polynomial: int, inverted: int, plain: int, residue: int, engine: Engine) -> None:
    """Word and sent CRC through a register of start value 0 leave all ones * x^w mod P, whatever the word is."""
    width = polynomial.bit_length() - 1
    random = np.random.default_rng(polynomial)
    for length in (1, 7, 10, 20, 28, 34):
        payload = random.integers(0, 2, (8, length), dtype=np.uint8)
        sent = crc_of_bits(payload, biss(polynomial))
        tail = np.array([[value >> i & 1 for i in reversed(range(width))] for value in sent.tolist()], np.uint8)
        left = engine(np.hstack([payload, tail]), CrcParameters(polynomial))
        assert left.tolist() == [residue] * 8


BISS_FRAMES = (
    # source: mjbots open motor-controller firmware, unit tests of BiSS frame extraction
    (word((178, 8), (0b11, 2)), 0b000101),
    (word((0, 8), (0b01, 2)), 0b111100),
    (word((170, 8), (0b11, 2)), 0x23),  # there, 111111 must be refused; 0x23 by anycrc
    # source: public HDL project with a BiSS-C test (0x9B, CRC 0x20)
    (word((0x9B, 8), (0b11, 2)), 0x20),
    # worked out by two independent programs (anycrc and a shift register of our own)
    (word((0x000, 12), (0b11, 2)), 0x3A),
    (word((0xFFF, 12), (0b11, 2)), 0x2A),
    (word((0x800, 12), (0b11, 2)), 0x24),
    (word((0xABC, 12), (0b11, 2)), 0x36),
    (word((0x12345, 18), (0b11, 2)), 0x0D),
    (word((0x12345, 18), (0b01, 2)), 0x0B),
    (word((0x12345, 18), (0b10, 2)), 0x0E),
    (word((0x3FFFF, 18), (0b11, 2)), 0x02),
    (word((0x155AA, 17), (0b11, 2)), 0x27),
    (word((0x1234567, 26), (0b11, 2)), 0x2B),
    (word((0x1234567, 26), (0b01, 2)), 0x2D),
    (word((0x1234567, 26), (0b10, 2)), 0x28),
    (word((0x2AAAAAA, 26), (0b11, 2)), 0x2A),
    (word((0x89ABCDEF, 32), (0b11, 2)), 0x01),
    (word((0xABCDEF123, 36), (0b11, 2)), 0x04),
)


@ENGINES
@pytest.mark.parametrize(("payload", "sent"), BISS_FRAMES)
def test_biss_frames(payload: str, sent: int, engine: Engine) -> None:
    assert engine(bits_of_text(payload), BISS6).tolist() == [sent]


@ENGINES
def test_biss_without_flags(engine: Engine) -> None:
    """0x1234 as 16 bits has the CRC 56, sent inverted as 7. source: mjbots firmware, unit tests."""
    message = bits_of_text(word((0x1234, 16)))
    assert engine(message, CrcParameters(0x43)).tolist() == [56]
    assert engine(message, BISS6).tolist() == [7]


@ENGINES
def test_biss_published_frame_on_the_line(engine: Engine) -> None:
    """Position 178: idle 1 1, acknowledge 0 0, start, CDS, eight bits, both flags high, the CRC.

    source: mjbots firmware, unit tests of BiSS frame extraction.
    """
    line = bits_of_text("11 00 1 0 10110010 11 000101")
    payload, check = line[:, 6:16], line[:, 16:]
    assert engine(payload, BISS6).tolist() == [int("".join(map(str, check[0])), 2)]


def test_biss_line_of_the_18_bit_word() -> None:
    """Start, CDS, 0x12345, flags and CRC in one row. Worked out by anycrc and an own program."""
    sent = int(crc_of_bits(bits_of_text(word((0x12345, 18), (0b11, 2))), BISS6)[0])
    assert word((0b10, 2), (0x12345, 18), (0b11, 2), (sent, 6)) == "1001001000110100010111001101"


def test_biss_six_bit_table() -> None:
    """The first steps of the published six-bit table (source: KBRS BiSS C CRC6 template, its entries times 4)."""
    table = byte_table(0x43).tolist()
    assert table[:8] == [0, 3, 6, 5, 12, 15, 10, 9]
    assert table[32:36] == [35, 32, 37, 38]
    assert table[63] == 2


@ENGINES
@pytest.mark.parametrize(
    ("reading", "payload", "parameters", "wrong"),
    [
        ("flags left out", word((0x12345, 18)), BISS6, 0x22),
        ("start and CDS taken in", word((0b10, 2), (0x12345, 18), (0b11, 2)), BISS6, 0x03),
        ("not inverted", word((0x12345, 18), (0b11, 2)), CrcParameters(0x43), 0x32),
        ("flags taken as active high", word((0x12345, 18), (0b00, 2)), BISS6, 0x08),
    ],
)
def test_biss_wrong_readings_are_told_apart(
    reading: str, payload: str, parameters: CrcParameters, wrong: int, engine: Engine
) -> None:
    """Each wrong reading of one word gives its own value (by two independent programs), and none is the right 0x0D."""
    assert engine(bits_of_text(payload), parameters).tolist() == [wrong]
    assert engine(bits_of_text(word((0x12345, 18), (0b11, 2))), BISS6).tolist() == [0x0D]
    assert wrong != 0x0D


def test_biss_leading_zeros_are_a_blind_spot() -> None:
    """A start value of 0 does not see zeros in front: zero stays zero under division. Exact algebra."""
    right = word((0x12345, 18), (0b11, 2))
    assert crc_of_bits(bits_of_text("000" + right), BISS6) == crc_of_bits(bits_of_text(right), BISS6)
    started = CrcParameters(0x43, init=0x3F, xor_out=0x3F)
    assert crc_of_bits(bits_of_text("000" + right), started) != crc_of_bits(bits_of_text(right), started)


def passes(frames: Matrix, parameters: CrcParameters) -> npt.NDArray[np.bool_]:
    """(frames,) whether the last bits of each row are the CRC of the bits before them."""
    payload, check = frames[:, : -parameters.width], frames[:, -parameters.width :]
    received = [int("".join(map(str, row)), 2) for row in check.tolist()]
    return crc_of_bits(payload, parameters) == np.array(received, np.uint64)


def test_biss_stuck_line() -> None:
    """A line stuck low never passes; one stuck high passes for a 61-bit position alone.

    Exact: x has order 63 modulo the primitive x^6 + x + 1, and the whole code word of ones (n + 2 + 6 bits) must leave
    the residue of ones, which it does when the payload's own remainder is 0: n + 2 a multiple of 63.
    """
    low = [n for n in range(1, 101) if passes(np.zeros((1, n + 8), np.uint8), BISS6)[0]]
    high = [n for n in range(1, 101) if passes(np.ones((1, n + 8), np.uint8), BISS6)[0]]
    assert low == []
    assert high == [61]


# sent CRC of 0x12345 in 18 bits and of 0xABC in 12, both flags high: by two independent programs
OTHER_POLYNOMIALS = ((0x25, 0x05, 0x17), (0x12F, 0x1A, 0x64), (0x197, 0x08, 0xB0), (0x190D9, 0x83D7, 0xD9E8))


@ENGINES
@pytest.mark.parametrize(("polynomial", "of_18_bits", "of_12_bits"), OTHER_POLYNOMIALS)
def test_biss_other_polynomials(polynomial: int, of_18_bits: int, of_12_bits: int, engine: Engine) -> None:
    assert engine(bits_of_text(word((0x12345, 18), (0b11, 2))), biss(polynomial)).tolist() == [of_18_bits]
    assert engine(bits_of_text(word((0xABC, 12), (0b11, 2))), biss(polynomial)).tolist() == [of_12_bits]


def all_errors_of_two(length: int) -> Matrix:
    """(length + length over 2, length) every pattern of one and of two ones."""
    single = np.eye(length, dtype=np.uint8)
    first, second = np.triu_indices(length, 1)
    return np.vstack([single, single[first] ^ single[second]])


@pytest.mark.parametrize("payload_bits", range(1, 58))
def test_biss_every_one_and_two_bit_error_is_seen(payload_bits: int) -> None:
    """Up to 57 bits of payload (2^6 - 6 - 1) no error of one or two bits passes.

    source: Koopman, CRC selection tables, HD 3 column: 0x43 is primitive.
    """
    payload = np.random.default_rng(payload_bits).integers(0, 2, (1, payload_bits), dtype=np.uint8)
    sent = word((int(crc_of_bits(payload, BISS6)[0]), 6))
    right = np.hstack([payload, bits_of_text(sent)])
    assert passes(right, BISS6).all()
    assert not passes(right ^ all_errors_of_two(payload_bits + 6), BISS6).any()


def test_biss_one_bit_more_and_one_double_error_passes() -> None:
    """58 bits of payload make a code word of 64: its first and last bit together are x^63 + 1, which P divides."""
    right = np.hstack([np.zeros((1, 58), np.uint8), bits_of_text("111111")])
    errors = all_errors_of_two(64)
    unseen = errors[passes(right ^ errors, BISS6)]
    assert np.flatnonzero(unseen[0]).tolist() == [0, 63]
    assert len(unseen) == 1


# --- BiSS safety word and register access -------------------------------------------------------------------------


@ENGINES
@pytest.mark.parametrize(
    ("position", "bits", "life", "sent"),
    [
        (0x1234, 16, 0, 0x6F0D),
        (0x1234, 16, 1, 0xFFD4),
        (0x1234, 16, 63, 0x623C),
        (0xFFFF, 16, 5, 0x842B),
        (0x000000, 24, 1, 0x7761),
        (0xABCDEF, 24, 42, 0x48C0),
    ],
)
def test_biss_safety_word(position: int, bits: int, life: int, sent: int, engine: Engine) -> None:
    """Position, flags and the six-bit counter under the 16-bit CRC. Worked out by an own program, the last by anycrc.

    source of the layout: Texas Instruments motor-control-sdk, BiSS-C safety CRC.
    """
    assert engine(bits_of_text(word((position, bits), (0b11, 2), (life, 6))), biss(0x190D9)).tolist() == [sent]


@ENGINES
@pytest.mark.parametrize(
    ("identifier", "address", "sent"),
    [(0, 0x00, 0x6), (0, 0x42, 0x7), (0, 0x50, 0x4), (0, 0x78, 0x5), (1, 0x7F, 0x2), (7, 0x00, 0xA), (2, 0x40, 0xE)],
)
def test_biss_register_address(identifier: int, address: int, sent: int, engine: Engine) -> None:
    """CTS, three bits of identifier and seven of address under the four-bit CRC. Worked out by anycrc and our own.

    source of the layout: Microchip BiSS tutorial, ch. 15; Texas Instruments motor-control-sdk, BiSS-C.
    """
    assert engine(bits_of_text(word((1, 1), (identifier, 3), (address, 7))), biss(0x13)).tolist() == [sent]


@ENGINES
@pytest.mark.parametrize(
    ("data", "sent"), [(0x00, 0xF), (0x01, 0xC), (0x55, 0x2), (0xA5, 0x4), (0x80, 0x1), (0xFF, 0xB)]
)
def test_biss_register_data(data: int, sent: int, engine: Engine) -> None:
    """Eight bits of register data under the same CRC. Worked out by anycrc and our own."""
    assert engine(bits_of_text(word((data, 8))), biss(0x13)).tolist() == [sent]


# --- properties ---------------------------------------------------------------------------------------------------


@st.composite
def algorithms(draw: st.DrawFn) -> CrcParameters:
    width = draw(st.integers(3, 64))
    value = st.integers(0, (1 << width) - 1)
    return CrcParameters(
        1 << width | draw(value) | 1, draw(value), draw(st.booleans()), draw(st.booleans()), draw(value)
    )


@st.composite
def tables(draw: st.DrawFn, rows: int) -> Matrix:
    length = draw(st.integers(0, 130))
    seed = draw(st.integers(0, 2**32 - 1))
    return np.random.default_rng(seed).integers(0, 2, (rows, length), dtype=np.uint8)


@settings(deadline=None, max_examples=300)
@given(algorithms(), tables(rows=3))
def test_fast_is_plain(parameters: CrcParameters, bits: Matrix) -> None:
    """The table steps give what the shift register gives: any width, start value, reflection, XOR and length."""
    assert crc_of_bits(bits, parameters).tolist() == crc_of_bits_plain(bits, parameters).tolist()


@settings(deadline=None, max_examples=200)
@given(algorithms(), tables(rows=2))
def test_both_are_anycrc(parameters: CrcParameters, bits: Matrix) -> None:
    """source: anycrc, for algorithms nobody has published. (It does not define the empty message.)"""
    if bits.shape[1]:
        expected = independent(parameters)
        assert crc_of_bits(bits, parameters).tolist() == [expected(row) for row in bits]


@settings(deadline=None)
@given(algorithms(), tables(rows=2))
def test_linear(parameters: CrcParameters, bits: Matrix) -> None:
    """crc(a) XOR crc(b) XOR crc(zeros) is crc(a XOR b): start value and output XOR cancel, division is linear."""
    rows = np.vstack([bits, np.zeros_like(bits[:1]), bits[:1] ^ bits[1:]])
    a, b, zeros, both = crc_of_bits(rows, parameters)
    assert a ^ b ^ zeros == both


@settings(deadline=None)
@given(algorithms())
def test_the_empty_message_leaves_the_start_value(parameters: CrcParameters) -> None:
    """No bits: the register as it was, read and XOR-ed as any other."""
    read = parameters.init
    if parameters.reflect_out:
        read = int(f"{read:0{parameters.width}b}"[::-1], 2)
    assert crc_of_bits(np.empty((2, 0), np.uint8), parameters).tolist() == [read ^ parameters.xor_out] * 2


@ENGINES
def test_no_frames(engine: Engine) -> None:
    result = engine(np.empty((0, 28), np.uint8), BISS6)
    assert result.shape == (0,)
    assert result.dtype == np.uint64


def test_a_strided_view_is_taken_as_it_reads() -> None:
    """Columns cut out of a wider table give what a copy of them gives."""
    wide = np.random.default_rng(5).integers(0, 2, (20, 90), dtype=np.uint8)
    view = wide[::2, 3:80:3]
    assert crc_of_bits(view, BISS6).tolist() == crc_of_bits_plain(np.ascontiguousarray(view), BISS6).tolist()


# --- parameters ---------------------------------------------------------------------------------------------------


def test_parameters_of_a_sheets_field() -> None:
    """`inverted` is an XOR with all ones on top of output_xor; `reflected` is at both ends."""
    crc = functools.partial(Field, name="crc", bits=6, polynomial=0x43)
    assert parameters_of(crc()) == CrcParameters(0x43)
    assert parameters_of(crc(inverted=True)) == CrcParameters(0x43, xor_out=0x3F)
    assert parameters_of(crc(output_xor=0x0F)) == CrcParameters(0x43, xor_out=0x0F)
    assert parameters_of(crc(inverted=True, output_xor=0x0F)) == CrcParameters(0x43, xor_out=0x30)
    assert parameters_of(crc(init=5, reflected=True)) == CrcParameters(0x43, 5, True, True)


def test_a_field_without_polynomial_is_refused() -> None:
    with pytest.raises(ValueError, match="no polynomial"):
        parameters_of(Field(name="crc", bits=6))


@pytest.mark.parametrize(
    ("arguments", "message"),
    [
        ({"polynomial": 0x7}, "degree 2, not 3 to 64"),
        ({"polynomial": 1 << 65}, "degree 65, not 3 to 64"),
        ({"polynomial": 0}, "degree -1"),
        ({"polynomial": -0x43}, "polynomial 0x-43"),
        ({"polynomial": 0x43, "init": 0x40}, "init 0x40 does not fit into 6 bits"),
        ({"polynomial": 0x43, "xor_out": 0x40}, "xor_out 0x40 does not fit into 6 bits"),
        ({"polynomial": 0x43, "init": -1}, "init 0x-1 does not fit"),
    ],
)
def test_impossible_parameters(arguments: dict[str, int], message: str) -> None:
    with pytest.raises(ValueError, match=message):
        CrcParameters(**arguments)  # type: ignore[arg-type]
