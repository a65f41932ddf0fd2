"""Words as bits, as numbers, as text: the code conversions of a serial interface, over whole tables of frames.

A frame's bits come as rows of 0 and 1 in the order sent, and every field is sent most significant bit first, so a
row read as one binary number is the field's value.

Gray code. Reflected binary code, g = b XOR (b >> 1): going on by one changes exactly one bit, also from the last
word back to the first. Read back, every bit is the XOR of the code bits from the top down to it: a running XOR, done
here in log2(width) doublings. (F. Gray, US patent 2 632 058.) A turn that is not a power of two long takes the middle
N words of the next longer code: its first and last word then differ in one bit as well. The number of words left out
in front is the Gray excess.

Parity. The XOR of the bits it is taken over: 0 for an even number of ones.
"""

from __future__ import annotations

import numpy as np
import numpy.typing as npt
from bitstring import Bits

BitMatrix = npt.NDArray[np.uint8]
ByteMatrix = npt.NDArray[np.uint8]
ValueArray = npt.NDArray[np.uint64]

WIDEST_VALUE = 64

_DIGITS = np.frombuffer(b"0123456789ABCDEF", np.uint8)


def value_of_bits(bits: BitMatrix) -> ValueArray:
    """(frames,) each row of `bits` (frames, n) read as a binary number, first bit highest.

    Raises ValueError for more than 64 bits. No bits at all are the value 0.
    """
    frames, n = bits.shape
    _expect_width(n)
    if n == 0:
        return np.zeros(frames, np.uint64)
    padded = np.zeros((frames, 8), np.uint8)
    padded[:, : -(-n // 8)] = np.packbits(bits, axis=1)
    return padded.view(">u8")[:, 0].astype(np.uint64) >> np.uint64(64 - n)


def bits_of_value(values: ValueArray, n: int) -> BitMatrix:
    """(frames, n) the bits of each value, highest first. Raises ValueError where a value needs more than n bits."""
    _expect_width(n)
    _expect_fit(values, n)
    octets = values.astype(">u8").view(np.uint8).reshape(-1, 8)
    return np.unpackbits(octets, axis=1)[:, 64 - n :]


def pack(bits: BitMatrix) -> ByteMatrix:
    """(frames, ceil(n / 8)) each row of `bits` (frames, n) as a big-endian number: zeros fill up the first byte."""
    packed = np.packbits(bits, axis=1)
    spare = -bits.shape[1] % 8
    if spare == 0:
        return packed
    # packbits fills up the last byte instead: move everything down by the spare bits
    moved = packed >> np.uint8(spare)
    moved[:, 1:] |= packed[:, :-1] << np.uint8(8 - spare)
    return moved


def hexadecimal(packed: ByteMatrix, n: int) -> npt.NDArray[np.str_]:
    """(frames,) texts such as "0x0B2D": words of n bits, from `pack`, as `0x` and ceil(n / 4) digits.

    Raises ValueError where `packed` is not as wide as n bits (1 or more) need.
    """
    if n < 1 or packed.shape[1] != -(-n // 8):
        raise ValueError(f"{packed.shape[1]} bytes do not hold words of {n} bits")
    nibbles = np.stack([packed >> 4, packed & 0x0F], axis=2).reshape(packed.shape[0], 2 * packed.shape[1])
    unused = nibbles.shape[1] - -(-n // 4)
    digits = _DIGITS[nibbles[:, unused:]]
    prefix = np.broadcast_to(np.frombuffer(b"0x", np.uint8), (packed.shape[0], 2))
    text = np.ascontiguousarray(np.concatenate([prefix, digits], axis=1))
    return text.view(f"S{text.shape[1]}")[:, 0].astype(np.str_)


def gray_to_binary(values: ValueArray, width: int) -> ValueArray:
    """(frames,) the numbers that Gray words of `width` bits (1 to 64) stand for.

    Raises ValueError where a value needs more than `width` bits.
    """
    _expect_width(width)
    _expect_fit(values, width)
    binary, shift = values, 1
    while shift < width:
        binary = binary ^ (binary >> np.uint64(shift))
        shift *= 2
    return binary


def binary_to_gray(values: ValueArray) -> ValueArray:
    """(frames,) the Gray word of each number."""
    return values ^ (values >> np.uint64(1))


def gray_excess_offset(positions_per_turn: int) -> int:
    """How many words of the next longer Gray code lie before position 0: (2^k - N) / 2, 0 for a power of two.

    Raises ValueError for an odd N or one below 2, for which no such code is cyclic.
    """
    if positions_per_turn < 2 or positions_per_turn % 2:
        raise ValueError(f"Gray excess needs an even number of positions, not {positions_per_turn}")
    longer = 1 << (positions_per_turn - 1).bit_length()
    return (longer - positions_per_turn) // 2


def parity_of_bits(bits: BitMatrix, mask: int | None = None) -> npt.NDArray[np.uint8]:
    """(frames,) 1 where an odd number of the bits in a row is one, else 0.

    bits: (frames, n). mask: which of them count, as a word of n bits whose highest stands for the first; None: all.
    Raises ValueError where the mask is wider than the row.
    """
    n = bits.shape[1]
    packed = np.packbits(bits, axis=1)
    if mask is not None:
        if not 0 <= mask < 1 << n:
            raise ValueError(f"the mask 0x{mask:X} is not one of {n} bits")
        packed &= np.frombuffer((mask << -n % 8).to_bytes(packed.shape[1], "big"), np.uint8)
    parity: npt.NDArray[np.uint8] = np.bitwise_count(np.bitwise_xor.reduce(packed, axis=1)) & np.uint8(1)
    return parity


def describe_bits(bits: npt.NDArray[np.uint8]) -> str:
    """One frame's bits (n,) for people to read, in groups of four from the first sent: "1001 0010 11"."""
    word = Bits(bin="".join(map(str, bits.tolist())))
    return " ".join(group.bin for group in word.cut(4))


def _expect_width(n: int) -> None:
    if not 0 <= n <= WIDEST_VALUE:
        raise ValueError(f"{n} bits are not 0 to {WIDEST_VALUE}")


def _expect_fit(values: ValueArray, n: int) -> None:
    if n < WIDEST_VALUE and values.size and int(values.max()) >> n:
        raise ValueError(f"0x{int(values.max()):X} does not fit into {n} bits")
