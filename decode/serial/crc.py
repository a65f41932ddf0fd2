"""Cyclic redundancy checks over whole tables of frames at once.

A CRC is the remainder of a division. The bits of a message are the coefficients of a polynomial M over the field of
two elements (first bit sent: highest power), the generator P has degree w, and the check value is M * x^w mod P. A
register of w bits does the division: it starts at `init`, is shifted once per message bit, and P is subtracted (an
XOR) whenever a one drops out at the top. Afterwards the register may be read backwards and a constant XOR-ed on.

All of it is linear. What r <= 8 message bits v do to a register value c depends only on c's top r bits t:

    c' = (c << r) mod x^w  XOR  T[t XOR v],    T[i] = i * x^w mod P for i = 0 ... 255

and the same table serves every r, so a message need not be a whole number of bytes: the last step is just shorter.
Nothing in this asks for w >= 8 either (with w < r, t is all of c, moved up by r - w). `crc_of_bits` does these steps
on the whole column of frames; `crc_of_bits_plain` is the shift register as described, one bit at a time, and the tests
hold one against the other.

Order of bits. Frames hold bits in the order sent. With `reflect_in` the sender's routine took each byte least
significant bit first although the line carries it most significant bit first: so each group of eight sent bits,
counted from the first bit, goes in last bit first. A shorter last group goes in last bit first as well: it is the low
end of a byte whose upper bits do not take part. A line that really sends least significant bit first needs no
`reflect_in`: its bits already come in the register's order.

Start value and XOR are those of the Catalogue of parametrised CRC algorithms (reveng.sourceforge.io): `init` is what
the register holds before the first bit, written for the register that is not reflected. (crcmod writes init XOR
xor_out instead, and Koopman's tables leave out the +1 of the polynomial; neither notation is used here.)
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache

import crcmod
import numpy as np
import numpy.typing as npt

from decode.sheet import Field

BitMatrix = npt.NDArray[np.uint8]
ValueArray = npt.NDArray[np.uint64]

NARROWEST, WIDEST = 3, 64

_TABULATED_ELSEWHERE = (8, 16, 24, 32, 64)
"""The widths for which crcmod makes tables."""


@dataclass(frozen=True, slots=True)
class CrcParameters:
    """One CRC algorithm.

    polynomial: the generator with its leading term, of degree 3 to 64.
    init: what the register holds before the first bit.
    reflect_in: each byte goes in least significant bit first. reflect_out: the register is read backwards.
    xor_out: XOR-ed onto the result, after reflect_out.

    Raises ValueError for a degree out of range, or an `init` or `xor_out` wider than the register.
    """

    polynomial: int
    init: int = 0
    reflect_in: bool = False
    reflect_out: bool = False
    xor_out: int = 0

    def __post_init__(self) -> None:
        if self.polynomial < 0 or not NARROWEST <= self.width <= WIDEST:
            raise ValueError(f"polynomial 0x{self.polynomial:X} has degree {self.width}, not {NARROWEST} to {WIDEST}")
        for name, number in (("init", self.init), ("xor_out", self.xor_out)):
            if not 0 <= number <= self.all_ones:
                raise ValueError(f"{name} 0x{number:X} does not fit into {self.width} bits")

    @property
    def width(self) -> int:
        """Bits of the check value: the polynomial's degree."""
        return self.polynomial.bit_length() - 1

    @property
    def all_ones(self) -> int:
        """The check value with every bit set."""
        return (1 << self.width) - 1


def parameters_of(field: Field) -> CrcParameters:
    """The algorithm that a sheet's crc field asks for. Raises ValueError where the field has no polynomial.

    `inverted` is an XOR with all ones, on top of the field's own `output_xor`; `reflected` holds for both ends.
    """
    if field.polynomial is None:
        raise ValueError(f"the field {field.name!r} has no polynomial")
    all_ones = (1 << (field.polynomial.bit_length() - 1)) - 1
    return CrcParameters(
        polynomial=field.polynomial,
        init=field.init,
        reflect_in=field.reflected,
        reflect_out=field.reflected,
        xor_out=field.output_xor ^ (all_ones if field.inverted else 0),
    )


def crc_of_bits(bits: BitMatrix, parameters: CrcParameters) -> ValueArray:
    """The check value of each row of bits.

    bits: (frames, n) of 0 and 1, in the order sent; any n, also 0.
    Returns (frames,) as they would be sent, most significant bit first, in a field of `parameters.width` bits.
    """
    width = parameters.width
    all_ones = np.uint64(parameters.all_ones)
    table = byte_table(parameters.polynomial)
    register = np.full(bits.shape[0], parameters.init, np.uint64)
    for size, chunk in _chunks(bits, parameters.reflect_in):
        top = register >> np.uint64(width - size) if width >= size else register << np.uint64(size - width)
        register = ((register << np.uint64(size)) & all_ones) ^ table[top ^ chunk]
    if parameters.reflect_out:
        register = _reflected(register, width)
    return register ^ np.uint64(parameters.xor_out)


def crc_of_bits_plain(bits: BitMatrix, parameters: CrcParameters) -> ValueArray:
    """What `crc_of_bits` returns, by the shift register itself, one bit at a time."""
    width = parameters.width
    result = []
    for row in bits.tolist():
        register = parameters.init
        for bit in _register_order(row) if parameters.reflect_in else row:
            subtract = (register >> (width - 1)) ^ bit
            register = (register << 1) & parameters.all_ones
            if subtract:
                register ^= parameters.polynomial & parameters.all_ones
        if parameters.reflect_out:
            register = int(f"{register:0{width}b}"[::-1], 2)
        result.append(register ^ parameters.xor_out)
    return np.array(result, np.uint64)


def own_byte_table(polynomial: int) -> list[int]:
    """i * x^w mod P for each i of 0 to 255, where P is `polynomial` (with its leading term) and w its degree."""
    width = polynomial.bit_length() - 1
    table = [0]
    for i in range(1, 256):
        # i = 2h + l: twice the entry of h, reduced once, plus that of l
        doubled = table[i >> 1] << 1
        if doubled >> width:
            doubled ^= polynomial
        table.append(doubled ^ (polynomial ^ 1 << width if i & 1 else 0))
    return table


@lru_cache(maxsize=64)
def byte_table(polynomial: int) -> ValueArray:
    """(256,) the table that `crc_of_bits` steps by: crcmod's for the widths it knows, else our own."""
    if polynomial.bit_length() - 1 in _TABULATED_ELSEWHERE:
        table = crcmod.Crc(polynomial, initCrc=0, rev=False).table
    else:
        table = own_byte_table(polynomial)
    values = np.array(table, np.uint64)
    values.setflags(write=False)
    return values


def _chunks(bits: BitMatrix, reflect: bool) -> list[tuple[int, npt.NDArray[np.uint8]]]:
    """(bits in the step, (frames,) their value as the register takes them in) for every step of up to eight bits."""
    n = bits.shape[1]
    packed = np.packbits(bits, axis=1, bitorder="little" if reflect else "big")
    sizes = [min(8, n - start) for start in range(0, n, 8)]
    # the short last group is padded with zeros at its end: at the top of a reflected byte, at the bottom of another
    return [(size, packed[:, i] if reflect else packed[:, i] >> (8 - size)) for i, size in enumerate(sizes)]


def _register_order(row: list[int]) -> list[int]:
    """A row of sent bits with every group of eight, and the shorter last one, turned round."""
    return [bit for start in range(0, len(row), 8) for bit in reversed(row[start : start + 8])]


def _reflected(values: ValueArray, width: int) -> ValueArray:
    """Each value with its `width` bits in reverse order."""
    for shift, low in (
        (1, 0x5555555555555555),
        (2, 0x3333333333333333),
        (4, 0x0F0F0F0F0F0F0F0F),
        (8, 0x00FF00FF00FF00FF),
        (16, 0x0000FFFF0000FFFF),
        (32, 0x00000000FFFFFFFF),
    ):
        step, lower = np.uint64(shift), np.uint64(low)
        values = ((values & lower) << step) | ((values >> step) & lower)
    return values >> np.uint64(64 - width)
