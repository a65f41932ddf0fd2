"""Text in a given width: pure functions that know nothing of what the text is about."""

from __future__ import annotations

import re
import textwrap
from collections.abc import Iterable, Sequence

_UNBROKEN = re.compile(r"(?<=\d) (?=(?:[fpnµumkMGT]?(?:s|Hz|V|°)|%|ppm|counts?|rpm)(?![A-Za-z]))|(?<=±) (?=\d)")


def visible(text: str) -> str:
    """The text with `?` for what a terminal might take for a command: names come from files that others wrote."""
    return "".join(character if character.isprintable() or character == "\n" else "?" for character in text)


def in_ascii(text: str) -> str:
    """The text with each symbol of ours spelt out, for terminals that have none."""
    for symbol, spelling in (("µ", "u"), ("°e", " el.deg"), ("°", " deg"), ("±", "+/-")):
        text = text.replace(symbol, spelling)
    return text.encode("ascii", "replace").decode()


def wrapped(text: str, width: int, first: int, following: int) -> list[str]:
    """The text in lines that fit `width` after so many columns; a number and its unit stay together."""
    kept = _UNBROKEN.sub("\N{NO-BREAK SPACE}", text)
    placeholder = " " * following
    lines = textwrap.wrap(
        kept,
        width,
        initial_indent="." * first,
        subsequent_indent=placeholder,
        break_on_hyphens=False,
        break_long_words=True,
    )
    if not lines:
        return [""]
    texts = [lines[0][first:], *(line[following:] for line in lines[1:])]
    return [line.replace("\N{NO-BREAK SPACE}", " ") for line in texts]


def aligned(rows: Sequence[Sequence[str]], left: Iterable[int] = (0,), gap: int = 2) -> list[str]:
    """The rows as lines, each column as wide as its widest cell; columns in `left` stand left, the others right."""
    if not rows:
        return []
    widths = [max(len(row[number]) for row in rows) for number in range(len(rows[0]))]
    to_left = set(left)
    return [
        (" " * gap).join(
            cell.ljust(width) if number in to_left else cell.rjust(width)
            for number, (cell, width) in enumerate(zip(row, widths, strict=True))
        )
        for row in rows
    ]
