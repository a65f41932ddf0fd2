"""Tables of frames made directly, where a test is about what comes after the edges."""

from __future__ import annotations

from typing import Any

import numpy as np
import numpy.typing as npt

from decode.serial.frames import Frames, words
from decode.serial.words import bits_of_value
from decode.sheet import Serial
from decode.spans import NO_TICK


def table(serial: Serial, times: npt.ArrayLike, raw: npt.ArrayLike, **columns: Any) -> Frames:
    """Frames of whole words `raw` (numbers, as sent) whose first clock edge and latch is at `times`, all believed but
    where `columns` says otherwise."""
    first = np.asarray(times, np.int64)
    n = first.size
    word = words(bits_of_value(np.asarray(raw, np.uint64), serial.sent_bits), serial)
    zero, no = np.zeros(n, np.int64), np.zeros(n, np.bool_)
    plain: dict[str, Any] = {
        "first_edge": first,
        "last_edge": first + 1,
        "latch": first,
        "clocks": zero,
        "raw": word.raw,
        "position": word.position,
        "usable": ~no,
        "crc_ok": word.crc_ok,
        "kind": np.zeros(n, np.int8),
        "segment": zero,
        "least_setup": zero - 1,
        "pause": zero - 1,
        "glitch_time": np.full(n, NO_TICK),
        "gap": zero,
        "wrong": word.wrong,
        "warned": no,
        "quiet": no,
    }
    plain |= {name: np.asarray(values, plain[name].dtype) for name, values in columns.items()}
    return Frames(**plain, fields=word.fields)
