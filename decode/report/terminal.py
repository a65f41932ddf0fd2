"""The report on a terminal: the answers first, within the first screenful, and the details after them.

A page is made of plain lines that fit the console's width; where a table is too wide for it, its further columns go
to a second line under each row. Colour and bold only repeat what the words say, so nothing is lost on paper, in a
log file, with NO_COLOR, or to eyes that do not tell red from green.
"""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from typing import NamedTuple

from rich.console import Console
from rich.text import Text

from decode.judgement.records import Measurement, Report
from decode.report.quantities import (
    ELECTRICAL,
    NOT_KNOWN,
    bounds,
    counted,
    decimals_beside,
    fixed,
    quantity,
    scale,
    unit_of,
)
from decode.report.summary import Answer, Group, groups, margin, summary
from decode.report.text import aligned, in_ascii, visible, wrapped
from decode.rules.kinds import KINDS

SCREENFUL = 24
"""Lines of the smallest usual terminal, 80 columns wide: the summary is written to fit them."""

CAUTIONS = (
    "Rotating machinery: fix the motor, guard the shaft, keep a hard-wired stop in reach; check direction, scale and "
    "index with the drive disabled. A pass here is no reason to close the loop.",
    "Ground: an analyser may tie the circuit's ground to the computer's and to mains earth. Measure before you "
    "connect, use an isolator near inverters, and never probe what is referenced to the mains.",
    "This is not a certified functional-safety instrument. A pass is a statement about this capture only: these "
    "seconds, this speed, this temperature, this probe point.",
    "Local codes and licensed practice come first.",
)

_TONES = {"good": "green", "care": "yellow", "bad": "red"}
_LABEL_WIDTH = 11
_NARROWEST_TEXT = 20


class _Row(NamedTuple):
    """One measurement, ready for either layout of the table."""

    values: list[str]
    """name, unit, n, min, median, max, uncertainty"""
    judgement: list[str]
    """limit, margin, verdict"""
    remarks: list[str]

    @property
    def style(self) -> str:
        return {"fail": "red", "undecided": "yellow"}.get(self.judgement[-1], "")


def render(report: Report, console: Console, *, short: bool = False) -> None:
    """Print the report; `short` leaves it at the summary."""
    page = _Page(console)
    _print_summary(page, report)
    if short:
        return
    _print_measurements(page, report.measurements)
    _print_diagnosis(page, report)
    _print_findings(page, report)
    _print_totals(page, report)
    _print_list(page, "Notes on the capture", report.capture.notes)
    _print_list(page, "What to capture next", report.next_capture)
    _print_list(page, "Cautions", CAUTIONS)
    _print_record(page, report)


class _Page:
    """Lines onto a console: wrapped to its width, in characters that its encoding has."""

    def __init__(self, console: Console) -> None:
        self.console = console
        self.width = max(console.width, 20)
        self._ascii = not (console.encoding or "").lower().startswith("utf")

    def plain(self, text: str) -> str:
        """The text without control characters, and without symbols where the encoding has none."""
        return in_ascii(visible(text)) if self._ascii else visible(text)

    def line(self, text: str, *, style: str = "", indent: int = 0, hanging: int | None = None) -> None:
        """A paragraph, its first line indented by `indent` and the others by `hanging`."""
        self.labelled(" " * indent, text, style=style, hanging=hanging)

    def labelled(
        self, label: str, text: str, *, style: str = "", label_style: str = "", hanging: int | None = None
    ) -> None:
        """A paragraph that begins with a label; the following lines stand under its text."""
        label = self.plain(label)
        if self.width - len(label) < _NARROWEST_TEXT:
            self.print(Text(label, label_style))
            label, hanging = " " * 6, None
        indent = len(label) if hanging is None else hanging
        for number, content in enumerate(wrapped(self.plain(text), self.width, len(label), indent)):
            head = Text(label, label_style) if number == 0 else Text(" " * indent)
            self.print(head.append(content, style))

    def aligned(self, rows: Sequence[Sequence[str]], left: Iterable[int] = (0,), gap: int = 2) -> list[str]:
        """The lines of a table, its columns as wide as what this page will show in them."""
        return aligned([[self.plain(cell) for cell in row] for row in rows], left, gap)

    def row(self, text: str, style: str = "") -> None:
        """A line of a table, kept as it is if it fits."""
        if len(text) <= self.width:
            self.print(Text(text, style))
        else:
            self.line(text.strip(), indent=2, hanging=4, style=style)

    def heading(self, title: str, more: str = "") -> None:
        self.print(Text())
        self.labelled(f"{title}  ", more, label_style="bold", hanging=2)

    def print(self, text: Text) -> None:
        text.rstrip()
        self.console.print(text, soft_wrap=True, highlight=False)


def _print_summary(page: _Page, report: Report) -> None:
    board = report.provenance.sheet.get("board")
    name = board.get("name") if isinstance(board, dict) else None
    title = f"{report.capture.file}{f': {name}' if name else ''}"
    page.line(title, style="bold", hanging=2)
    for answer in summary(report):
        _print_answer(page, answer)


def _print_answer(page: _Page, answer: Answer) -> None:
    tone = _TONES.get(answer.tone, "")
    for number, sentence in enumerate(answer.sentences):
        label = answer.label.ljust(_LABEL_WIDTH) if number == 0 else " " * _LABEL_WIDTH
        style = f"bold {tone}" if answer.label == "Verdict" and number == 0 else ""
        page.labelled(label, sentence, style=style, label_style=f"bold {tone}".strip())


_HEAD = _Row(["name", "unit", "n", "min", "median", "max", "±"], ["limit", "margin", "verdict"], [])


def _print_measurements(page: _Page, measurements: Sequence[Measurement]) -> None:
    page.heading("Measurements", "± uncertainty; margin: worst value to its limit, + is inside")
    if not measurements:
        page.line("none", indent=2)
        return
    rows = [_measurement_row(one) for one in measurements]
    wide = page.aligned([[*row.values, *row.judgement] for row in (_HEAD, *rows)], left=(0, 1, 9))
    if len(wide[0]) + 2 <= page.width:
        _print_rows(page, wide, rows)
    else:
        narrow = [row.values for row in (_HEAD, *rows)]
        lines = page.aligned(narrow, left=(0, 1))
        fits = len(lines[0]) + 2 <= page.width
        _print_rows(page, lines if fits else page.aligned(narrow, left=(0, 1), gap=1), rows)
    if any(one.name in ELECTRICAL for one in measurements):
        page.line("°e: electrical degrees, 360 to a cycle of A; ° alone: degrees of the shaft.", indent=2)
    for source, names in _sources(measurements).items():
        page.line(f"limits from {source}: {', '.join(names)}", indent=2, hanging=4)


def _print_rows(page: _Page, lines: Sequence[str], rows: Sequence[_Row]) -> None:
    """The table; where its lines do not hold the judgement, that stands under each row which has one."""
    page.row(f"  {lines[0]}", "dim")
    judged_in_line = lines[0].rstrip().endswith(_HEAD.judgement[-1])
    for line, row in zip(lines[1:], rows, strict=True):
        page.row(f"  {line}", row.style)
        limit, distance, verdict = row.judgement
        if limit != NOT_KNOWN and not judged_in_line:
            page.line(f"{verdict}: limit {limit}; margin {distance}", indent=6, style=row.style)
        for remark in row.remarks:
            page.line(remark, indent=6)


def _measurement_row(one: Measurement) -> _Row:
    """One row, its values in one scale and to the digits that the uncertainty leaves."""
    unit = unit_of(one.name, one.unit)
    factor, symbol = scale([one.min, one.median, one.max, one.uncertainty], unit)
    values = [None if value is None else value * factor for value in (one.min, one.median, one.max)]
    doubt = None if one.uncertainty is None else one.uncertainty * factor
    decimals = decimals_beside(doubt, values)
    numbers = [fixed(value, decimals) for value in (*values, doubt)]
    limit = NOT_KNOWN if one.limit is None else bounds(one.limit.min, one.limit.max, unit)
    distance = quantity(margin(one), unit, signed=True)
    cells = [one.name, symbol or "1", str(one.n), *numbers]
    judgement = [limit, distance, one.verdict or NOT_KNOWN]
    remarks = [f"{one.verdict or 'not judged'}: {one.reason}"] if one.reason and one.verdict != "pass" else []
    return _Row(cells, judgement, remarks)


def _sources(measurements: Iterable[Measurement]) -> dict[str, list[str]]:
    """Which limits come from where."""
    found: dict[str, list[str]] = {}
    for one in measurements:
        if one.limit is not None and one.name not in found.setdefault(one.limit.source, []):
            found[one.limit.source].append(one.name)
    return found


def _print_diagnosis(page: _Page, report: Report) -> None:
    if not report.diagnosis:
        return
    page.heading("Diagnosis")
    for one in report.diagnosis:
        sentence = one.sentence.rstrip(". ")
        page.line(f"{one.case}: {sentence} ({one.confidence}; origin: {one.origin}).", indent=2, hanging=4)
        for other in one.instead_of:
            page.line(f"not {other.case}: {other.why_not}", indent=6)


def _print_findings(page: _Page, report: Report) -> None:
    found = groups(report)
    occurrences = sum(len(group.findings) for group in found)
    page.heading("Findings", f"{counted(occurrences, 'finding')} of {counted(len(found), 'kind')}" if found else "none")
    if not found:
        return
    heads = page.aligned([[group.severity, group.kind, f"{len(group.findings)} x"] for group in found], left=(0, 1))
    for head, group in zip(heads, found, strict=True):
        times = group.first_times(report.capture.tick_s)
        style = {"fault": "red", "warning": "yellow"}.get(group.severity, "")
        page.labelled(f"  {head}  ", f"at {times}{_where(group)}", label_style=style)
        page.line(KINDS[group.kind].meaning, indent=11)
        if group.first_cause:
            page.line(f"first cause: {group.first_cause}", indent=11)
        elif group.findings[0].detail:
            page.line(f"first: {group.findings[0].detail}", indent=11)


def _where(group: Group) -> str:
    frames = [str(finding.frame) for finding in group.findings[:3] if finding.frame is not None]
    lines = sorted({finding.line for finding in group.findings if finding.line})
    parts = [f"frame {', '.join(frames)}"] if frames else []
    parts += [f"on {', '.join(lines)}"] if lines else []
    return f" ({'; '.join(parts)})" if parts else ""


def _print_totals(page: _Page, report: Report) -> None:
    if report.incremental is None:
        return
    totals = report.incremental.totals
    page.heading("Counts over the whole capture", f"{counted(report.incremental.edges, 'edge')} of A and B")
    least = quantity(totals.short_pulse_s, "s")
    without = f"x4, pulses under {least} dropped" if totals.short_pulse_s else "x4, short pulses dropped"
    rows = [
        ["x4, every edge with its direction", f"{totals.x4:+d} counts"],
        ["x1, a naive counter of A's rising edges", f"{totals.x1_naive:+d} counts"],
        [without, f"{totals.x4_without_short_pulses:+d} counts"],
        ["A and B changed together", counted(report.incremental.illegal, "time")],
    ]
    for line in page.aligned(rows):
        page.row(f"  {line}")


def _print_list(page: _Page, title: str, sentences: Sequence[str]) -> None:
    if not sentences:
        return
    page.heading(title)
    for sentence in sentences:
        page.labelled("  - ", sentence)


def _print_record(page: _Page, report: Report) -> None:
    lines = ", ".join(f"{role}={column}" for role, column in report.capture.lines.items())
    record = report.provenance
    page.heading("Record", f"shaftproof {record.version}")
    pairs = (
        ("layout", report.capture.layout),
        ("lines", lines),
        ("digest", record.capture_digest),
        ("command", record.command),
    )
    for name, text in pairs:
        if text:
            page.labelled(f"  {name:<9}", text)
