"""docs/findings.md and docs/measurements.md, written from the tables that the code itself reads.

A page written by hand falls behind the table beside it. These two are made from `kinds` and `measurements`, and a test
holds the files in docs/ against what is made here; after a change to a table, `python -m decode.rules.pages docs`
writes them anew.
"""

from __future__ import annotations

import sys
from pathlib import Path

from decode.rules.kinds import KINDS, Kind
from decode.rules.measurements import MEASUREMENTS, Definition

_ROOMS = {
    "capture": ("The capture itself", "What stands in the way of trusting the rest."),
    "lines": ("Single lines", "What is wrong with a signal before anything is decoded from it."),
    "serial": ("The serial interface", "Frames, their check codes, their flags and their timing."),
    "incremental": ("A, B and index", "Counts, turns and index pulses."),
    "agreement": ("Serial against incremental", "What shows only when both tell the angle of one shaft."),
}
"""Title and first sentence of each room's section, in the order of the page."""

_FINDINGS_HEAD = """\
# Findings

A finding is one thing that is wrong, or worth knowing, at one place in a capture. Every report gives its kind, its
severity, when it happened and, where one is concerned, the frame and the line. `cause` is filled in only where the bits
leave one reading; the causes listed on this page are the usual ones, to look at first, and no verdict on your board.

One fault gives one finding of the most telling kind. What follows from it stands in that finding's `evidence`, not in
further findings.

| severity | what it does |
| --- | --- |
| fault | the verdict is `fail`, the exit code 1 |
| warning | reported; the verdict stays what it is |
| note | for information |
"""

_MEASUREMENTS_HEAD = """\
# Measurements

Every interval in a capture is a whole number of ticks, so its distribution is an exact histogram: `n`, `min`, `median`,
`mean`, `max` and `std` are taken over every occurrence. (Angles are rounded to a small unit first.) Beside them stands
`uncertainty`, at least the capture's own resolution.

A limit, from the sheet's `[limits]` or published for the interface, is decided with that uncertainty as guard band
(source: ISO 14253-1): `pass` where the values lie inside by more than it, `fail` where they lie outside by more than
it, `undecided` between, and `undecided` with a reason where the capture cannot tell.

Electrical degrees (360 to one cycle of A) are meant for state and pulse widths and for phase; every other angle is
mechanical, 360 to a turn. The line column says which line a measurement belongs to; where it is empty, several are
involved.

| name | unit | line | what it is | source |
| --- | --- | --- | --- | --- |
"""


def findings_page() -> str:
    """docs/findings.md: every kind of finding, by room."""
    parts = [_FINDINGS_HEAD]
    for room, (title, sentence) in _ROOMS.items():
        parts.append(f"\n## {title}\n\n{sentence}\n")
        parts.extend(_kind(kind) for kind in KINDS.values() if kind.room == room)
    return "".join(parts)


def measurements_page() -> str:
    """docs/measurements.md: every measurement with its unit, definition and source."""
    return _MEASUREMENTS_HEAD + "".join(_row(definition) for definition in MEASUREMENTS.values())


PAGES = {"findings.md": findings_page, "measurements.md": measurements_page}


def _kind(kind: Kind) -> str:
    return (
        f"\n### `{kind.name}`\n\n"
        f"{_sentence(kind.meaning)} Severity: {kind.severity}.\n\n"
        f"- In the capture: {kind.looks_like}.\n"
        f"- Usual causes: {kind.comes_from}.\n"
    )


def _row(definition: Definition) -> str:
    cells = (f"`{definition.name}`", definition.unit, definition.role, definition.meaning, definition.source)
    return f"| {' | '.join(cell.replace('|', chr(92) + '|') for cell in cells)} |\n"


def _sentence(words: str) -> str:
    return f"{words[0].upper()}{words[1:]}."


def write(folder: Path) -> None:
    """Write both pages into a folder that exists."""
    for name, page in PAGES.items():
        (folder / name).write_text(page(), encoding="utf-8")


if __name__ == "__main__":
    write(Path(sys.argv[1]))
