"""docs/the-sheet.md tells every key, with the default that the code has and an example that the code takes."""

from __future__ import annotations

import re
import tomllib
import typing
from pathlib import Path
from typing import NamedTuple

import msgspec
import pytest

from decode import sheet
from decode.errors import InputError

PAGE = (Path(__file__).parent.parent / "docs" / "the-sheet.md").read_text(encoding="utf-8")

SECTIONS: dict[str, type[msgspec.Struct]] = {
    "The parts": sheet.Sheet,
    "[board]": sheet.Board,
    "[capture]": sheet.CaptureKeys,
    "[serial]": sheet.Serial,
    "A field": sheet.Field,
    "[incremental]": sheet.Incremental,
}


class Row(NamedTuple):
    meaning: str
    default: str
    example: str


def section(title: str) -> str:
    return PAGE.split(f"\n## {title}\n")[1].split("\n## ")[0]


def names_in_first_column(text: str, columns: int) -> list[str]:
    """The names in backquotes in the first cells of every table of so many columns."""
    rows = [line for line in text.splitlines() if line.startswith("| `") and line.count(" | ") == columns - 1]
    return [name for row in rows for name in re.findall(r"`(\w+)`", row.split(" | ")[0])]


def key_rows(title: str) -> dict[str, Row]:
    rows = [line.strip("| ").split(" | ") for line in section(title).splitlines() if line.startswith("| `")]
    return {cells[0].strip("`"): Row(*cells[1:]) for cells in rows if len(cells) == 4}


def blocks(kind: str) -> list[str]:
    return re.findall(rf"^```{kind}\n(.*?)^```$", PAGE, re.DOTALL | re.MULTILINE)


def written_default(field: msgspec.structs.FieldInfo) -> str:
    """A key's default as the page writes it."""
    if field.required:
        return "required"
    if field.default is None or field.default_factory is dict:
        return "none"
    if isinstance(field.default, msgspec.Struct):
        return "an empty part"
    return f"`{msgspec.json.encode(field.default).decode()}`"  # a lone number, text or truth value is the same in TOML


EVERY_KEY = [(title, name) for title, part in SECTIONS.items() for name in part.__struct_fields__]


def test_no_part_of_the_sheet_is_left_out() -> None:
    """The sections are all the structures that decode/sheet.py has."""
    parts = {
        member for member in vars(sheet).values() if isinstance(member, type) and issubclass(member, msgspec.Struct)
    }
    assert {part for part in parts if part.__struct_fields__} == set(SECTIONS.values())


@pytest.mark.parametrize("title", SECTIONS)
def test_a_section_has_the_keys_of_its_part(title: str) -> None:
    """All of them, in one row each, and none that is gone."""
    assert sorted(key_rows(title)) == sorted(SECTIONS[title].__struct_fields__)


@pytest.mark.parametrize(("title", "name"), EVERY_KEY)
def test_default_and_example(title: str, name: str) -> None:
    """The default is the code's own; the example sets that key to a value of its type."""
    part, row = SECTIONS[title], key_rows(title)[name]
    field = next(field for field in msgspec.structs.fields(part) if field.name == name)
    assert row.default == written_default(field)
    tree = tomllib.loads(row.example.strip("`"))
    assert list(tree) == [name]
    msgspec.convert(tree[name], typing.get_type_hints(part)[name])


def test_every_role_and_field_name_is_told() -> None:
    roles = names_in_first_column(section("[lines]"), columns=2)
    assert sorted(roles) == sorted((*sheet.ROLES, *sheet.COMPLEMENTS))
    fields = names_in_first_column(section("A field"), columns=3)
    assert sorted(fields) == sorted(sheet.KNOWN_FIELDS)
    often = re.findall(r"^\| `(\w+)` \|.*\| any number \|$", section("A field"), re.MULTILINE)
    assert sorted(often) == sorted(sheet.REPEATABLE_FIELDS)


@pytest.mark.parametrize("text", blocks("toml"))
def test_every_sheet_on_the_page_loads(text: str) -> None:
    assert sheet.from_toml(text) != sheet.Sheet()


def test_the_page_has_its_sheets() -> None:
    """Guards the test above against a pattern that finds nothing."""
    assert len(blocks("toml")) == PAGE.count("```toml") == 8


def test_the_refusal_on_the_page_is_the_one_that_is_given() -> None:
    with pytest.raises(InputError) as refusal:
        sheet.from_toml("\n[incremental]\ncycles_per_tern = 1024\n", file="larkspur.toml")
    assert blocks("text") == [f"{refusal.value}\n"]


def test_the_numbers_on_the_page() -> None:
    """The bounds told in words are those of the code."""
    assert f"at most {sheet.LONGEST_FRAME} bits" in PAGE
    assert f"its width, 1 to {sheet.LONGEST_FIELD};" in PAGE
    assert f"together at most {sheet.LONGEST_FIELD - 1}" in PAGE


def test_what_the_traps_say_of_default_cover() -> None:
    """The second of two check bits in front covers the first alone; with `covers` both are over the position."""
    fields = [sheet.Field(name="parity", bits=1), sheet.Field(name="parity", bits=1)]
    bare = sheet.Serial(interface="spi", fields=(*fields, sheet.Field(name="position", bits=14)))
    assert [bare.covered(0), bare.covered(1)] == [(1, 2), (0,)]
    told = next(text for text in blocks("toml") if "0x2AAA" in text)
    serial = sheet.from_toml(told).serial
    assert serial is not None
    assert [serial.covered(0), serial.covered(1)] == [(2,), (2,)]


def test_what_the_traps_say_of_polynomials() -> None:
    """Koopman's 0x21 is 0x43 without its +1; 0x97 is 0x197 without its leading term and 0x12F without its +1."""
    assert 0x43 == 0x21 << 1 | 1
    assert 0x97.bit_length() - 1 == 7
    assert 0x197 == 1 << 8 | 0x97
    assert 0x12F == 0x97 << 1 | 1
    with pytest.raises(InputError, match="degree 1 in a field of 6 bits"):
        sheet.from_toml(
            '[serial]\ninterface = "biss-c"\nfields = [\n{ name = "crc", bits = 6, polynomial = 0x03 },\n]\n'
        )
