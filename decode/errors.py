"""The one exception a user is meant to see: an input that cannot be used.

A fault in the captured signal is data (a finding); anything else that goes wrong is our bug. Only what lies
between, a file or a sheet that we cannot work with, becomes an `InputError`. It carries its parts as attributes so
that tests and callers need not read the sentence.
"""

from __future__ import annotations

import difflib
from collections.abc import Iterable


class InputError(Exception):
    """An input that cannot be used, with where it is, what was found, what was expected and what to try.

    Parameters
    ----------
    problem: one plain sentence without a full stop.
    file: name of the file as the user gave it.
    row: physical line in the file, from 1.
    column: the column's name, or the key's path in a sheet.
    found, expected: short texts.
    hint: what to try next.
    """

    exit_code = 2

    def __init__(
        self,
        problem: str,
        *,
        file: str | None = None,
        row: int | None = None,
        column: str | None = None,
        found: str | None = None,
        expected: str | None = None,
        hint: str | None = None,
    ) -> None:
        super().__init__(problem)
        self.problem = problem
        self.file = file
        self.row = row
        self.column = column
        self.found = found
        self.expected = expected
        self.hint = hint

    def __str__(self) -> str:
        where = [
            part
            for part in (
                self.file,
                f"line {self.row}" if self.row is not None else None,
                f"column {self.column}" if self.column is not None else None,
            )
            if part
        ]
        lines = [f"{', '.join(where)}: {self.problem}" if where else self.problem]
        if self.found is not None:
            lines.append(f"  found:    {self.found}")
        if self.expected is not None:
            lines.append(f"  expected: {self.expected}")
        if self.hint is not None:
            lines.append(f"  try:      {self.hint}")
        return "\n".join(lines)


def maybe_nearest(name: str, known: Iterable[str]) -> str | None:
    """The known name closest to a misspelt one (case ignored), or None when nothing is close."""
    by_lower = {candidate.lower(): candidate for candidate in known}
    matches = difflib.get_close_matches(name.lower(), by_lower, n=1, cutoff=0.6)
    return by_lower[matches[0]] if matches else None
