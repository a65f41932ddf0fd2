"""The pages in docs/ that are made from tables are the ones that the tables give now."""

from __future__ import annotations

from pathlib import Path

import pytest

from decode.rules.kinds import KINDS
from decode.rules.measurements import MEASUREMENTS
from decode.rules.pages import PAGES, write

DOCS = Path(__file__).parent.parent / "docs"


@pytest.mark.parametrize("name", PAGES)
def test_the_file_is_the_generated_page(name: str) -> None:
    """Where this fails: python -m decode.rules.pages docs"""
    assert (DOCS / name).read_text(encoding="utf-8") == PAGES[name]()


def test_every_kind_is_told_in_full() -> None:
    """Each kind has its heading once, and under it its severity, what it looks like and what causes it."""
    page = PAGES["findings.md"]()
    headings = [line for line in page.splitlines() if line.startswith("### ")]
    assert sorted(headings) == sorted(f"### `{name}`" for name in KINDS)
    for kind in KINDS.values():
        told = page.split(f"### `{kind.name}`\n")[1].split("\n#")[0]
        assert f"Severity: {kind.severity}." in told
        assert kind.meaning[1:] in told
        assert kind.looks_like in told
        assert kind.comes_from in told


def test_every_measurement_has_its_row() -> None:
    """Each row has the five cells of the heading, none of them empty but the line."""
    rows = [line for line in PAGES["measurements.md"]().splitlines() if line.startswith("| `")]
    assert len(rows) == len(MEASUREMENTS)
    for row, definition in zip(rows, MEASUREMENTS.values(), strict=True):
        cells = [cell.strip() for cell in row.strip("|").split(" | ")]
        assert cells == [
            f"`{definition.name}`",
            definition.unit,
            definition.role,
            definition.meaning,
            definition.source,
        ]
        assert all(cell for cell in (cells[0], cells[1], cells[3], cells[4]))


def test_both_are_written(tmp_path: Path) -> None:
    write(tmp_path)
    assert {file.name: file.read_text(encoding="utf-8") for file in tmp_path.iterdir()} == {
        name: page() for name, page in PAGES.items()
    }
