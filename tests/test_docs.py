"""What the pages show is what happens: commands run and end as said, outputs are the real ones, links lead somewhere.

In README.md, docs/ and captures/README.md

- a line of an `sh` block that begins with `shaftproof` and names a file in captures/ is run, the lines of one page in
  their order in one working folder; it exits with 0, or as its comment (`# exit 1`) says;
- a block after `<!-- shows: COMMAND | PART -->` is that part of the command's output at 80 columns: `summary` (up to
  the first empty line), `lines 3` (the first so many), or a heading (its section);
- a `python` block is run, and a block after `<!-- prints -->` is what the one before it prints.

`python tests/test_docs.py` writes the shown outputs anew.
"""

from __future__ import annotations

import contextlib
import io
import json
import os
import re
import shlex
import shutil
import tempfile
import tomllib
from collections.abc import Iterator
from pathlib import Path

import pytest

from decode.cli import main
from decode.report.document import SCHEMA_FILE
from decode.rules.measurements import MEASUREMENTS

ROOT = Path(__file__).parents[1]
DOCS = ROOT / "docs"
PAGES = [ROOT / "README.md", ROOT / "DEVELOPERS.md", ROOT / "captures" / "README.md", *sorted(DOCS.glob("*.md"))]
_BLOCK = r"```\w*\n)(?P<text>.*?)(?=^```$)"
SHOWN = re.compile(r"(?P<head><!-- shows: (?P<command>.+?) \| (?P<part>.+?) -->\n" + _BLOCK, re.S | re.M)
PRINTED = re.compile(r"(?P<head>^```python\n(?P<code>[^`]*?)^```\n\n<!-- prints -->\n" + _BLOCK, re.S | re.M)
EXAMPLE = re.compile(r"^```python\n(?P<code>.*?)^```$", re.S | re.M)
SHELL = re.compile(r"^```sh\n(.*?)^```$", re.S | re.M)
MADE_BY_HAND = "captures/README.md"
"""Its commands make the captures; tests/test_demo.py runs those."""


def _named(path: Path) -> str:
    return path.relative_to(ROOT).as_posix()


def _read(path: Path) -> str:
    return path.read_text(encoding="utf-8")


@contextlib.contextmanager
def _workplace() -> Iterator[None]:
    """A working folder with the demo captures in it."""
    before = Path.cwd()
    with tempfile.TemporaryDirectory() as folder:
        shutil.copytree(ROOT / "captures", Path(folder) / "captures")
        os.chdir(folder)
        try:
            yield
        finally:
            os.chdir(before)


def _run(command: str) -> tuple[int, str]:
    """(exit code, standard output) of a shaftproof command at 80 columns."""
    arguments = shlex.split(command, comments=True)[1:]
    if arguments[0] in ("check", "demo"):
        arguments += ["--width", "80"]
    told = io.TextIOWrapper(io.BytesIO(), encoding="utf-8", write_through=True)
    with contextlib.redirect_stdout(told), contextlib.redirect_stderr(io.StringIO()):
        code = main(arguments)
    return code, told.buffer.getvalue().decode()


def _part(output: str, part: str) -> str:
    """`summary`, `lines N`, or the section under a heading."""
    if part.startswith("lines "):
        return "".join(output.splitlines(keepends=True)[: int(part.split()[1])])
    sections = output.split("\n\n")
    if part == "summary":
        return sections[0] + "\n"
    return next(section for section in sections if section.startswith(part)).rstrip("\n") + "\n"


def _printed(code: str) -> str:
    """Standard output of a Python example."""
    told = io.StringIO()
    with contextlib.redirect_stdout(told):
        exec(compile(code, "example", "exec"), {})
    return told.getvalue()


def _commands(page: Path) -> list[tuple[str, int]]:
    """(command, exit code) of each line to run."""
    if _named(page) == MADE_BY_HAND:
        return []
    lines = [line for block in SHELL.findall(_read(page)) for line in block.splitlines()]
    found = [line for line in lines if re.match(r"shaftproof (demo|.*captures/)", line)]
    return [(line, int(said.group(1)) if (said := re.search(r"# exit (\d+)", line)) else 0) for line in found]


def _fresh(page: Path) -> str:
    """The page with every shown output as it is now."""
    with _workplace():
        for command, _ in _commands(page):
            _run(command)
        text = SHOWN.sub(lambda one: one["head"] + _part(_run(one["command"])[1], one["part"]), _read(page))
        return PRINTED.sub(lambda one: one["head"] + _printed(one["code"]), text)


@pytest.mark.parametrize("page", PAGES, ids=_named)
def test_every_command_ends_as_said(page: Path) -> None:
    with _workplace():
        for command, code in _commands(page):
            assert _run(command)[0] == code, command


@pytest.mark.parametrize("page", PAGES, ids=_named)
def test_every_output_is_the_real_one(page: Path) -> None:
    """Where this fails: python tests/test_docs.py"""
    assert _read(page) == _fresh(page)


@pytest.mark.parametrize("page", PAGES, ids=_named)
def test_every_python_example_runs(page: Path) -> None:
    with _workplace():
        for code in EXAMPLE.findall(_read(page)):
            _printed(code)


def test_there_is_something_to_hold_the_pages_against() -> None:
    """Guards the tests above against patterns that find nothing."""
    for name, commands in (("README.md", 3), ("docs/a-first-capture.md", 7), ("docs/the-report.md", 3)):
        assert len(_commands(ROOT / name)) == commands, name
    for page in PAGES:
        text = _read(page)
        assert len(SHOWN.findall(text)) == text.count("<!-- shows: "), page
        assert len(PRINTED.findall(text)) == text.count("<!-- prints -->"), page
        assert len(EXAMPLE.findall(text)) == text.count("```python"), page
    assert "<!-- shows: " in _read(ROOT / "README.md")
    assert "<!-- prints -->" in _read(ROOT / "README.md")


def _anchors(page: Path) -> set[str]:
    """The names by which headings can be linked to: lower case, no punctuation, hyphens for spaces."""
    headings = re.findall(r"^#+ (.+)$", re.sub(r"^```.*?^```$", "", _read(page), flags=re.S | re.M), re.M)
    return {re.sub(r"[^\w\- ]", "", heading.lower()).strip().replace(" ", "-") for heading in headings}


@pytest.mark.parametrize("page", PAGES, ids=_named)
def test_every_link_between_pages_leads_somewhere(page: Path) -> None:
    for target in re.findall(r"\]\(([^)\s]+)\)", _read(page)):
        if target.startswith("https://"):
            continue
        name, _, anchor = target.partition("#")
        linked = page if not name else (page.parent / name).resolve()
        assert linked.exists(), target
        assert not anchor or anchor in _anchors(linked), target


def test_every_path_for_contributors_is_there() -> None:
    """A path in backquotes in DEVELOPERS.md is a file or a folder; the picture names every room."""
    text = _read(ROOT / "DEVELOPERS.md")
    paths = re.findall(r"`((?:decode|tests|docs|captures)/[\w./-]*)`", text)
    assert len(paths) > 20
    for path in paths:
        assert (ROOT / path).exists(), path
    rooms = {folder.parent.name for folder in (ROOT / "decode").glob("*/__init__.py")}
    assert set(re.findall(r"\b(\w+)/  ", text.split("## The house")[1].split("## Words")[0])) == rooms


def test_the_list_of_pages_is_whole() -> None:
    """docs/README.md links every other page in docs/; README.md does as well."""
    pages = {page.name for page in DOCS.glob("*.md")} - {"README.md"}
    assert set(re.findall(r"\]\(([\w-]+\.md)\)", _read(DOCS / "README.md"))) == pages
    assert set(re.findall(r"\]\(docs/([\w-]+\.md)\)", _read(ROOT / "README.md"))) - {"README.md"} == pages


def test_every_key_of_the_report_is_told() -> None:
    """Each record of the schema has its heading in docs/the-report.md and under it a row for each of its keys."""
    schema = json.loads(_read(SCHEMA_FILE))
    page = _read(DOCS / "the-report.md")
    for record, told in schema["$defs"].items():
        section = next(part for part in page.split("\n### ") if f"`{record}`" in part.splitlines()[0])
        assert re.findall(r"^\| `(\w+)` \|", section, re.M) == list(told["properties"]), record


def test_every_column_of_the_tables_is_told() -> None:
    """docs/the-report.md has a row for each column of --frames and --angles, in order; a field's own are one row."""
    section = _read(DOCS / "the-report.md").split("\n## Tables\n")[1].split("\n## ")[0]
    frames, angles = (re.findall(r"^\| `(\w+)` \|", part, re.M) for part in section.split("\n### ")[1:])
    with _workplace():
        for option, told in (("--frames", frames), ("--angles", angles)):
            got = _run(f"shaftproof check captures/larkspur-sick.csv {option} -")[1].splitlines()[0].split(",")
            fields = {"position", "error", "warning", "crc"} if option == "--frames" else set()
            assert [name for name in got if name not in fields] == told


def test_the_libraries_page_has_each_runtime_dependency_once() -> None:
    project = tomllib.loads(_read(ROOT / "pyproject.toml"))["project"]
    wanted = [re.split(r"[<>=~!\[ ]", one)[0] for one in project["dependencies"]]
    assert sorted(re.findall(r"^\| `(\w+)` \|", _read(DOCS / "libraries.md"), re.M)) == sorted(wanted)


def test_names_of_measurements_on_the_pages_are_real() -> None:
    """A name in backquotes that ends in a unit is a measurement, or a key of the report or of the sheet."""
    known = {*MEASUREMENTS, *re.findall(r"\w+_(?:hz|deg|rpm)\b", _read(DOCS / "the-sheet.md") + _read(SCHEMA_FILE))}
    for page in PAGES:
        assert set(re.findall(r"`(\w+_(?:hz|deg|rpm))`", _read(page))) <= known, _named(page)


def test_readme_begins_with_the_two_commands() -> None:
    """Its first block is two whole commands: the demo, and all tests (which .ci/run takes from there)."""
    first = SHELL.findall(_read(ROOT / "README.md"))[0].splitlines()
    assert len(first) == 2
    assert first[0].endswith("shaftproof demo")
    assert "pytest" in first[1]


if __name__ == "__main__":
    for one in PAGES:
        one.write_text(_fresh(one), encoding="utf-8")
