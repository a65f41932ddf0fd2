"""From what an encoder means to the bits it sends: fields, Gray code, parity and CRC, for all frames at once.

Everything here is a matrix of bits, one row a frame, most significant bit first. The CRC is the plain shift register,
one step a column: slow to read twice, hard to get wrong, and not the code that the decoder uses, so that the two can
be held against each other.
"""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np
import numpy.typing as npt

from decode.errors import InputError
from decode.sheet import Field, Serial

BitMatrix = npt.NDArray[np.uint8]
WordArray = npt.NDArray[np.uint64]


def to_bits(values: npt.ArrayLike, width: int) -> BitMatrix:
    """(n, width) bits of (n,) numbers, most significant first."""
    shifts = np.arange(width - 1, -1, -1, dtype=np.uint64)
    numbers = np.asarray(values, np.uint64)
    return ((numbers[:, None] >> shifts) & np.uint64(1)).astype(np.uint8)


def to_numbers(bits: BitMatrix) -> WordArray:
    """(n,) numbers of (n, width <= 64) bits, most significant first."""
    numbers = np.zeros(bits.shape[0], np.uint64)
    for column in bits.T:
        numbers = (numbers << np.uint64(1)) | column
    return numbers


def gray(bits: BitMatrix) -> BitMatrix:
    """The Gray code of each row: every bit XOR the one before it."""
    coded = bits.copy()
    coded[:, 1:] ^= bits[:, :-1]
    return coded


def crc(bits: BitMatrix, field: Field) -> WordArray:
    """(n,) check values of the rows, as sent, by the field's parameters.

    Raises InputError for a reflected CRC over bits that are no whole bytes: which end of a byte is missing is not
    defined.
    """
    if field.polynomial is None:
        raise InputError("a crc without its polynomial", column=field.name)
    one, top, mask = np.uint64(1), np.uint64(field.bits - 1), np.uint64((1 << field.bits) - 1)
    polynomial = np.uint64(field.polynomial) & mask
    register = np.full(bits.shape[0], field.init, np.uint64)
    for column in (_bytes_turned(bits) if field.reflected else bits).T:
        out = (register >> top) ^ column
        register = ((register << one) & mask) ^ (polynomial * out)
    if field.reflected:
        register = to_numbers(np.ascontiguousarray(to_bits(register, field.bits)[:, ::-1]))
    turned_over = np.uint64(field.output_xor) ^ (mask if field.inverted else np.uint64(0))
    return np.asarray(register ^ turned_over, np.uint64)


def _bytes_turned(bits: BitMatrix) -> BitMatrix:
    if bits.shape[1] % 8:
        raise InputError("a reflected crc needs whole bytes", found=f"{bits.shape[1]} covered bits")
    return np.ascontiguousarray(bits.reshape(bits.shape[0], -1, 8)[:, :, ::-1]).reshape(bits.shape)


def parity(bits: BitMatrix, field: Field) -> WordArray:
    """(n,) parity bits of the rows, by the field's kind and mask."""
    if field.mask is not None:
        shifts = range(bits.shape[1] - 1, -1, -1)
        bits = bits & np.array([field.mask >> shift & 1 for shift in shifts], np.uint8)
    ones = bits.sum(axis=1, dtype=np.uint64) + np.uint64(field.kind == "odd")
    return np.asarray(ones & np.uint64(1), np.uint64)


def word_bits(serial: Serial, values: Mapping[str, WordArray]) -> BitMatrix:
    """(n, word_bits) the words as sent: `values` by column name for every field, crc and parity worked out.

    The checks are taken over the bits as they are sent, so over Gray code where the sheet says so.
    """
    columns = serial.columns()
    rows = next(iter(values.values())).size
    parts: dict[int, BitMatrix] = {}
    for number, field in enumerate(serial.fields):
        if field.name not in ("crc", "parity"):
            parts[number] = to_bits(values[columns[number]], field.bits)
    if serial.coding == "gray":
        _code(serial, parts)
    waiting = [number for number in range(len(serial.fields)) if number not in parts]
    while waiting:
        ready = [number for number in waiting if all(covered in parts for covered in serial.covered(number))]
        if not ready:
            raise InputError("checks that cover each other", column="serial.fields")
        for number in ready:
            field = serial.fields[number]
            covered = [parts[other] for other in serial.covered(number)]
            over = np.hstack([np.zeros((rows, 0), np.uint8), *covered])
            check = crc(over, field) if field.name == "crc" else parity(over, field)
            parts[number] = to_bits(check, field.bits)
        waiting = [number for number in waiting if number not in ready]
    return np.hstack([parts[number] for number in range(len(serial.fields))])


def _code(serial: Serial, parts: dict[int, BitMatrix]) -> None:
    """Turns and position, as one word, into Gray code in place."""
    names = [field.name for field in serial.fields]
    numbers = [names.index(name) for name in ("turns", "position") if name in names]
    coded = gray(np.hstack([parts[number] for number in numbers]))
    start = 0
    for number in numbers:
        width = serial.fields[number].bits
        parts[number] = coded[:, start : start + width]
        start += width
