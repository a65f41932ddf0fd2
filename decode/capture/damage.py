"""Damage: rows that cannot be used, and what becomes of them.

    what                          how it is located                        what it becomes
    a wrong number of cells       cells counted in every line              the row is left out, a note
    (marker text, rows glued
    into one, a repeated header)
    a NUL within a row            searched for in every line               the row is left out, a note
    a time that is none           cell by cell, where a block does not     the row is left out, a note
    (NaN, text, beyond 64 bits)   read as decimals as a whole
    a level that is none          cell by cell, only in the columns used   the row is left out, a note
    (NaN, empty, text, 7)
    the last row cut short        the file ends without a line feed        the row is left out, a note of its own
    time going backwards          `decode.capture.breaks`                  a time_reversal finding
    a stretch missing             `decode.capture.breaks`                  a time_gap finding

After each of them but the last the next span does not continue the one before it (`joined = False`), so that no machine
blames a frame or a count for what the file lost. Where a row is missing in a capture of changes, edges are missing,
however few.

A file is refused where more than one row in ten cannot be used, or more than ten rows and one in a hundred: then it is
not damaged, but misread. So that a long file of the wrong kind is not read to its end, the tenth is also checked on the
way, from the thousandth such row on. Common practice, no source.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field

import numpy as np

from decode.errors import InputError
from decode.spans import IntArray

REFUSED_SHARE, REFUSED_ROWS, REFUSED_SMALL_SHARE = 0.01, 10, 0.1
EARLY_ROWS = 1000


@dataclass(slots=True)
class Damage:
    """The rows left out so far: how many of each kind, the first of each kind, and the first of all as an error."""

    rows: int = 0
    kinds: dict[str, tuple[int, int]] = field(default_factory=dict)
    first: InputError | None = None

    def add(self, kind: str, lines: IntArray) -> None:
        """Rows of one kind, by their physical lines, rising."""
        if lines.size:
            count, first = self.kinds.get(kind, (0, int(lines[0])))
            self.kinds[kind] = count + int(lines.size), min(first, int(lines[0]))
            self.rows += int(lines.size)

    def keep(self, faults: Sequence[InputError]) -> None:
        """Keep the fault that stands first in the file."""
        self.first = min([*faults, *([self.first] if self.first is not None else [])], key=lambda fault: fault.row or 0)

    def refuse_early(self, before: int, places: IntArray) -> None:
        """Raises InputError at the first bad row that is one too many. before: bad rows counted ahead of these;
        places: (n,) how many rows, good and bad, each of these is, counted from 1."""
        counts = before + np.arange(1, places.size + 1)
        many = (counts > EARLY_ROWS) & (counts > REFUSED_SMALL_SHARE * places)
        if many.any():
            at = int(np.argmax(many))
            raise self._refusal(int(counts[at]), int(places[at]))

    def refuse(self, good: int) -> None:
        """Raises InputError where too many rows of the whole file cannot be used."""
        rows = good + self.rows
        if self.rows > REFUSED_SMALL_SHARE * rows or self.rows > max(REFUSED_ROWS, REFUSED_SHARE * rows):
            raise self._refusal(self.rows, rows)

    def _refusal(self, bad: int, rows: int) -> InputError:
        first = self.first
        assert first is not None
        problem = (
            first.problem if bad == 1 else f"{first.problem}, the first of {bad} in {rows} rows that cannot be used"
        )
        return InputError(
            problem,
            file=first.file,
            row=first.row,
            column=first.column,
            found=first.found,
            expected=first.expected,
            hint=first.hint,
        )

    def notes(self) -> list[str]:
        """One sentence for each kind, the one that stands first in the file first."""
        return [
            f"{count} {'row' if count == 1 else 'rows'} left out: {kind}, "
            f"{'in' if count == 1 else 'the first in'} line {line}; decoding starts afresh behind"
            for kind, (count, line) in sorted(self.kinds.items(), key=lambda item: item[1][1])
        ]
