"""The command: what it takes, and the one place that prints errors and sets the exit code.

Exit codes: 0 all judged limits hold and no fault was found; 1 a fault or a broken limit; 2 the input or the sheet
cannot be used, or the command was called wrongly; 3 nothing fails, but something was undecided; 70 a bug of ours;
130 interrupted; 141 nobody reads our output any more.

Whatever takes long to import is imported where it is used, so that `--help` is there at once.
"""

from __future__ import annotations

import errno
import math
import os
import shlex
import sys
import traceback
from collections.abc import Iterator, Sequence
from contextlib import contextmanager, suppress
from enum import StrEnum
from pathlib import Path
from typing import TYPE_CHECKING, Annotated, Any

import typer

from decode.errors import InputError

if TYPE_CHECKING:
    from rich.console import Console

    from decode.bench.motion import Motion
    from decode.bench.scenario import Fault
    from decode.judgement.records import Report
    from decode.pipeline import Checked
    from decode.sheet import Sheet

PASS, FAIL, USAGE, UNDECIDED, BUG, INTERRUPTED, PIPE_CLOSED = 0, 1, InputError.exit_code, 3, 70, 130, 141
EXIT_CODES = {"pass": PASS, "fail": FAIL, "undecided": UNDECIDED}
DEBUG = "SHAFTPROOF_DEBUG"
STANDARD_OUTPUT = STANDARD_INPUT = "-"
UNITS = ("s", "ms", "us", "ns", "ps")

TEMPLATE = """\
[board]
name = "my encoder"
[lines]                      # role = the column's name, or its number from 1
clock = "MA"
data = "SLO"
a = "A"
b = "B"
index = "Z"
[serial]
interface = "biss-c"         # or "ssi", "spi"
fields = [                   # in the order sent
  { name = "position", bits = 19 },
  { name = "error", bits = 1 },
  { name = "warning", bits = 1 },
  { name = "crc", bits = 6, polynomial = 0x43, inverted = true },
]
[incremental]
cycles_per_turn = 1024
"""
"""A sheet to begin with, shown to whoever has none."""

# typer vendors its parser or not, by version; the class of all its usage errors is an ancestor of this one in both.
_UsageProblem: Any = typer.BadParameter.__mro__[2]

app = typer.Typer(
    add_completion=False,
    rich_markup_mode=None,
    pretty_exceptions_enable=False,
    no_args_is_help=True,
    help="Checks a rotary encoder's serial and incremental interface from a logic analyser's export.",
    epilog="Exit codes: 0 pass, 1 a fault or a broken limit, 2 unusable input, 3 undecided.",
)


def main(arguments: Sequence[str] | None = None) -> int:
    """Run the command with `arguments` (default: the process's own) and give its exit code."""
    given = list(sys.argv[1:] if arguments is None else arguments)
    try:
        code = _run(given)
        sys.stdout.flush()
        return code
    except InputError as error:
        _say(str(error))
        return error.exit_code
    except _UsageProblem as error:
        error.show()
        return USAGE
    except (KeyboardInterrupt, typer.Abort):
        return INTERRUPTED
    except BrokenPipeError:
        _drop_output()
        return PIPE_CLOSED
    except OSError as error:
        if error.errno != errno.ENOSPC:
            return _own_bug(error)
        _drop_output()
        _say("the output cannot be written: there is no room left where it goes")
        return USAGE
    except Exception as error:
        return _own_bug(error)


def _run(arguments: list[str]) -> int:
    command = typer.main.get_command(app)
    try:
        with command.make_context("shaftproof", list(arguments), obj=shlex.join(["shaftproof", *arguments])) as context:
            return int(command.invoke(context) or PASS)
    except typer.Exit as done:
        return done.exit_code


def _own_bug(error: Exception) -> int:
    _say(f"this is a bug in shaftproof: {type(error).__name__}: {error}")
    if os.environ.get(DEBUG) == "1":
        traceback.print_exc()
    else:
        _say(f"to see where, run it again with {DEBUG}=1 in the environment")
    return BUG


def _say(text: str) -> None:
    from decode.report.text import visible

    print(visible(text), file=sys.stderr)


def _drop_output() -> None:
    """Send what is still in standard output's buffer nowhere, so that the interpreter's end does not try again."""
    with suppress(OSError, ValueError):
        nowhere = os.open(os.devnull, os.O_WRONLY)
        os.dup2(nowhere, sys.stdout.fileno())
        os.close(nowhere)


def _print_version(wanted: bool) -> None:
    if wanted:
        from importlib.metadata import version

        print(f"shaftproof {version('shaftproof')}")
        raise typer.Exit(PASS)


@app.callback()
def _options(
    version: Annotated[
        bool, typer.Option("--version", callback=_print_version, is_eager=True, help="Print the version.")
    ] = False,
) -> None:
    pass


_Width = Annotated[int | None, typer.Option("--width", min=40, help="Columns of the report (default: the terminal's).")]


@app.command()
def check(
    context: typer.Context,
    capture: Annotated[
        str, typer.Argument(metavar="CAPTURE", help="The analyser's export, gzip and zstd too; - is standard input.")
    ],
    sheet: Annotated[
        str | None,
        typer.Option("--sheet", metavar="S.toml", help="What the board is meant to do (default: beside CAPTURE)."),
    ] = None,
    json: Annotated[str | None, typer.Option("--json", metavar="FILE", help="Write the report as JSON.")] = None,
    frames: Annotated[
        str | None, typer.Option("--frames", metavar="FILE", help="Write one row a frame: .csv, .parquet or .npz.")
    ] = None,
    angles: Annotated[
        str | None,
        typer.Option("--angles", metavar="FILE", help="Write serial and counted angle: .csv, .parquet or .npz."),
    ] = None,
    start_s: Annotated[
        str | None, typer.Option("--from", metavar="SECONDS", help="Look at the capture from this time on.")
    ] = None,
    stop_s: Annotated[str | None, typer.Option("--to", metavar="SECONDS", help="Look at it up to this time.")] = None,
    rate: Annotated[
        str | None, typer.Option("--rate", metavar="HZ", help="Samples per second, where the file has no times.")
    ] = None,
    unit: Annotated[
        str | None, typer.Option("--unit", metavar="UNIT", help="Unit of the times: s ms us ns ps.")
    ] = None,
    threshold: Annotated[
        str | None,
        typer.Option("--threshold", metavar="LOW,HIGH", help="Volts: low at or below LOW, high at or above HIGH."),
    ] = None,
    width: _Width = None,
) -> int:
    """Check a capture against its sheet: the main job. A FILE named - is standard output."""
    from decode.report.tables import expect_layout, expect_place
    from decode.sheet import load

    if capture != STANDARD_INPUT and not Path(capture).exists():
        raise InputError("there is no such capture", file=capture)
    if capture == STANDARD_INPUT and sheet is None:
        raise InputError(
            "nothing stands beside standard input", expected="--sheet S.toml", hint="name the sheet of the board"
        )
    chosen = Path(sheet) if sheet is not None else expect_sheet_beside(Path(capture))
    targets = [target for target in (json, frames, angles) if target is not None]
    for target in targets:
        expect_place(target)
    for table in (frames, angles):
        if table is not None:
            expect_layout(table)
    _expect_apart(targets, [capture, str(chosen)])

    options = {"start_s": start_s, "stop_s": stop_s, "rate": rate, "unit": unit, "threshold": threshold}
    is_changed = any(option is not None for option in options.values())
    board = with_options(load(chosen), **options) if is_changed else chosen
    with _showing_progress() as progress:
        from decode.pipeline import check as run

        checked = run(capture, board, progress=progress, command=context.obj)
    report = checked.report if sheet is not None else _with_note(checked.report, chosen)
    _write(checked, report, json=json, frames=frames, angles=angles)
    if STANDARD_OUTPUT not in targets:
        from decode.report.terminal import render

        render(report, _console(width))
    return EXIT_CODES[report.verdict]


def with_options(
    sheet: Sheet,
    *,
    start_s: str | None = None,
    stop_s: str | None = None,
    rate: str | None = None,
    unit: str | None = None,
    threshold: str | None = None,
) -> Sheet:
    """The sheet with what the command says of the capture in place of its own [capture].

    Raises InputError for an option that cannot be read, or that the sheet could not say either.
    """
    from msgspec.structs import replace

    from decode.sheet import expect_possible_capture

    given: dict[str, Any] = {}
    if start_s is not None or stop_s is not None:
        old = sheet.capture.window_s or ("none", "none")
        given["window_s"] = tuple(
            kept if text is None else _expect_number(f"--{name}", text)
            for name, text, kept in (("from", start_s, old[0]), ("to", stop_s, old[1]))
        )
    if rate is not None:
        given["sample_rate_hz"] = _expect_number("--rate", rate)
    if unit is not None:
        if unit not in UNITS:
            raise InputError("--unit is no unit of time", found=unit, expected=", ".join(UNITS))
        given["time_unit"] = unit
    if threshold is not None:
        parts = threshold.split(",")
        if len(parts) != 2:
            raise InputError("--threshold needs two voltages", found=threshold, expected="LOW,HIGH, such as 1.2,1.8")
        given["threshold_v"] = tuple(_expect_number("--threshold", part) for part in parts)
    capture = replace(sheet.capture, **given)
    expect_possible_capture(capture)
    return replace(sheet, capture=capture)


def _expect_number(option: str, text: str) -> float:
    """A finite number. Raises InputError for anything else."""
    try:
        number = float(text)
    except ValueError:
        number = math.nan
    if not math.isfinite(number):
        raise InputError(f"{option} is not a number", found=text, expected="a decimal number such as 0.25 or 24e6")
    return number


def expect_sheet_beside(capture: Path) -> Path:
    """The sheet with the capture's own name beside it. Raises InputError, with how to write one, without it."""
    names = [capture.with_suffix(".toml")]
    if capture.suffix in (".gz", ".bz2", ".xz", ".zst"):
        names.insert(0, capture.with_suffix("").with_suffix(".toml"))
    for name in names:
        if name.is_file():
            return name
    indented = "".join(f"    {line}\n" for line in TEMPLATE.splitlines())
    raise InputError(
        "there is no sheet that says what the board is meant to do",
        file=str(capture),
        expected=f"{names[0]} beside it, or --sheet S.toml",
        hint=f"write {names[0].name} from the board's data sheet, beginning with\n{indented.rstrip()}",
    )


def _with_note(report: Report, sheet: Path) -> Report:
    from msgspec.structs import replace

    note = f"no sheet was named, so {sheet.name} was taken, which stands beside the capture"
    return replace(report, capture=replace(report.capture, notes=[note, *report.capture.notes]))


def _expect_apart(targets: Sequence[str], inputs: Sequence[str]) -> None:
    """Raise InputError where two outputs, or an output and an input, are the same file."""
    taken = {os.path.realpath(path): "an input of this command" for path in inputs if path != STANDARD_INPUT}
    for target in targets:
        place = STANDARD_OUTPUT if target == STANDARD_OUTPUT else os.path.realpath(target)
        if place in taken:
            raise InputError("this name is taken", file=target, found=taken[place], hint="give each file its own name")
        taken[place] = "another output of this command"


def _write(checked: Checked, report: Report, *, json: str | None, frames: str | None, angles: str | None) -> None:
    from decode.report.document import to_json
    from decode.report.tables import write_table, write_text_whole

    if frames is not None:
        write_table(checked.frames, frames)
    if angles is not None:
        write_table(checked.angles, angles)
    if json is not None:
        write_text_whole(json, to_json(report))


def _console(width: int | None) -> Console:
    from rich.console import Console

    class Page(Console):
        def on_broken_pipe(self) -> None:
            """rich would leave with 1, which is our exit code for a fault; `main` knows better."""
            raise

    return Page(width=width, highlight=False, markup=False, emoji=False)


@contextmanager
def _showing_progress() -> Iterator[Any]:
    from decode.report.progress import Progress

    progress = Progress(sys.stderr)
    try:
        yield progress
    finally:
        progress.done()


class MotionName(StrEnum):
    """How the shaft moves in a simulation."""

    CONSTANT = "constant"
    RAMP = "ramp"
    REVERSE = "reverse"
    SWAY = "sway"
    STANDSTILL = "standstill"


@app.command()
def simulate(
    sheet: Annotated[str, typer.Argument(metavar="S.toml", help="The board to simulate.")],
    output: Annotated[str, typer.Option("--output", "-o", metavar="C.csv", help="The capture to write.")],
    truth: Annotated[
        str | None, typer.Option("--truth", metavar="T.json", help="What it holds (default: C.truth.json).")
    ] = None,
    motion: Annotated[MotionName, typer.Option(help="How the shaft moves.")] = MotionName.CONSTANT,
    speed_rpm: Annotated[float, typer.Option(help="Speed; of a ramp the last one, of a sway the highest.")] = 600.0,
    from_rpm: Annotated[float, typer.Option(help="First speed of a ramp.")] = 0.0,
    sway_hz: Annotated[
        float | None, typer.Option(min=1e-3, help="Swings a second (default: two in the capture).")
    ] = None,
    duration_s: Annotated[float, typer.Option(min=1e-6, help="Length of the capture.")] = 0.1,
    sample_rate_hz: Annotated[float, typer.Option(help="The analyser's rate.")] = 100e6,
    clock_hz: Annotated[float | None, typer.Option(help="Clock of the serial line (default: by interface).")] = None,
    frame_rate_hz: Annotated[float | None, typer.Option(help="Frames a second (default: the sheet's).")] = None,
    latency_s: Annotated[float, typer.Option(help="How much older than the count the position is.")] = 0.0,
    line_delay_s: Annotated[float, typer.Option(help="Delay of the cable, one way.")] = 0.0,
    edge_jitter_s: Annotated[float, typer.Option(help="Jitter of the A/B edges, rms.")] = 0.0,
    complement: Annotated[
        list[str] | None, typer.Option(metavar="ROLE", help="A line that also gets its complement. Repeatable.")
    ] = None,
    fault: Annotated[
        list[str] | None,
        typer.Option(metavar="KIND@SECONDS", help="A fault; more of it as ,name=value. Repeatable."),
    ] = None,
    seed: Annotated[int, typer.Option(help="The same seed gives the same capture.")] = 0,
    every_sample: Annotated[bool, typer.Option("--every-sample", help="A row a sample, not one a change.")] = False,
) -> int:
    """Make a capture of a board, with motion and faults on demand, and the truth beside it."""
    from decode.bench.board import simulate as run
    from decode.bench.scenario import Scenario
    from decode.bench.writer import write_csv, write_truth
    from decode.report.tables import expect_place
    from decode.sheet import load

    beside = str(Path(output).with_suffix(".truth.json")) if truth is None else truth
    for target in (output, beside):
        if target == STANDARD_OUTPUT:
            raise InputError("a simulation is written to files", file=target, expected="the name of a file")
        expect_place(target)
    _expect_apart([output, beside], [sheet])
    scenario = Scenario(
        motion=_motion(motion, speed_rpm, from_rpm, sway_hz or 2 / duration_s),
        duration_s=duration_s,
        sample_rate_hz=sample_rate_hz,
        clock_hz=clock_hz,
        frame_rate_hz=frame_rate_hz,
        latency_s=latency_s,
        line_delay_s=line_delay_s,
        edge_jitter_s=edge_jitter_s,
        complements=tuple(complement or ()),
        faults=tuple(parse_fault(text) for text in fault or ()),
        seed=seed,
    )
    simulation = run(load(sheet), scenario)
    write_csv(simulation, output, every_sample=every_sample)
    write_truth(simulation, beside)
    print(f"{output} and {beside} written")
    return PASS


def _motion(name: MotionName, speed_rpm: float, from_rpm: float, sway_hz: float) -> Motion:
    from decode.bench.motion import SECONDS_PER_MINUTE, constant, ramp, reverse, standstill, sway

    if name is MotionName.RAMP:
        return ramp(from_rpm, speed_rpm)
    if name is MotionName.REVERSE:
        return reverse(speed_rpm)
    if name is MotionName.SWAY:
        # The speed of x = a sin(2 pi f t) is highest as it passes the middle: 2 pi f a.
        return sway(speed_rpm / SECONDS_PER_MINUTE / (2 * math.pi * sway_hz), sway_hz)
    return standstill() if name is MotionName.STANDSTILL else constant(speed_rpm)


def parse_fault(text: str) -> Fault:
    """A fault written as KIND, KIND@SECONDS, or either with further parameters: "crc_mismatch@0.1,bits=7+9".

    Raises InputError for what cannot be read so.
    """
    import msgspec

    from decode.bench import scenario

    head, *parameters = text.split(",")
    kind, _, seconds = head.partition("@")
    given: dict[str, Any] = {"kind": kind}
    if "@" in head:
        given["time_s"] = seconds
    for parameter in parameters:
        name, _, value = parameter.partition("=")
        if name not in scenario.Fault.__struct_fields__ or name in given:
            raise InputError("--fault has an unknown or a repeated parameter", found=parameter)
        given[name] = value.split("+") if name == "bits" else value
    try:
        return msgspec.convert(given, scenario.Fault, strict=False)
    except msgspec.ValidationError as error:
        raise InputError(
            "--fault cannot be read",
            found=text,
            expected=f"KIND@SECONDS, then ,name=value for each parameter ({error})",
        ) from None


@app.command()
def demo(context: typer.Context, width: _Width = None) -> int:
    """Check the captures that come along, and say what to try next. One of them is sick on purpose."""
    from decode.report.terminal import render

    captures = expect_demo_captures()
    console = _console(width)
    for number, capture in enumerate(captures, 1):
        with _showing_progress() as progress:
            from decode.pipeline import check as run

            checked = run(_nearer(capture), expect_sheet_beside(capture), progress=progress, command=context.obj)
        print(f"Demo capture {number} of {len(captures)}\n")
        render(checked.report, console, short=True)
        print("\n")
    print(_what_next(captures))
    return PASS


def _nearer(path: Path) -> str:
    """The path as seen from here, where that is shorter."""
    return min(str(path), os.path.relpath(path), key=len)


def expect_demo_captures() -> list[Path]:
    """The captures that travel with the package, or those of the checkout. Raises InputError where both are absent."""
    from importlib.resources import files

    package = Path(str(files("decode")))
    for folder in (package / "bench" / "captures", package.parent / "captures"):
        found = sorted(path for path in folder.glob("*.csv") if path.with_suffix(".toml").is_file())
        if found:
            return found
    raise InputError(
        "the demo's captures are not there",
        file=str(package / "bench" / "captures"),
        hint="install the package from its wheel, or run from a checkout",
    )


def _what_next(captures: Sequence[Path]) -> str:
    one = next((path for path in captures if "sick" in path.stem), captures[0])
    commands = (
        ("the whole report of one of them", f"shaftproof check {shlex.quote(str(one))}"),
        ("its frames as a table", f"shaftproof check {shlex.quote(str(one))} --frames frames.csv"),
        ("a board of your own: copy the sheet beside that capture, change it, and", "shaftproof check YOURS.csv"),
        (
            "a capture with a fault of your choice, to train the eye",
            f"shaftproof simulate {shlex.quote(str(one.with_suffix('.toml')))} -o mine.csv --fault crc_mismatch@0.05",
        ),
    )
    return "What to try next\n" + "\n".join(f"  {what}:\n    {command}" for what, command in commands)
