"""A capture as text."""

import csv
import json
from fractions import Fraction
from pathlib import Path

import msgspec
import numpy as np
import pandas as pd
import pytest

from decode.bench import writer
from decode.bench.board import Fault, Scenario, Simulation, simulate
from decode.bench.truth import Truth
from decode.bench.writer import Unit, write_csv, write_truth
from decode.errors import InputError
from decode.sheet import Field, Incremental, Serial, Sheet

SERIAL = Serial(interface="ssi", fields=(Field(name="position", bits=13),))
BOARD = Sheet(
    lines={"clock": "C", "data": "D", "a": "A", "b": "B"},
    serial=SERIAL,
    incremental=Incremental(cycles_per_turn=64),
)
SHORT = Scenario(duration_s=1e-3)


def rows(path: Path, delimiter: str = ",") -> list[list[str]]:
    with path.open(newline="") as file:
        return list(csv.reader(file, delimiter=delimiter))


def ticks(texts: list[str], tick: Fraction, unit_s: Fraction) -> list[int]:
    return [int(Fraction(text) * unit_s / tick) for text in texts]


def expected(simulation: Simulation, at: np.ndarray) -> list[list[str]]:
    return np.array([edges.level_at(at) for edges in simulation.lines.values()]).T.astype(str).tolist()


@pytest.mark.parametrize("unit", ["s", "ms", "us", "ns"])
@pytest.mark.parametrize("start", [0.0, -3e-4])
def test_rows_where_a_line_changes(tmp_path: Path, unit: Unit, start: float) -> None:
    """Times as exact decimals, one row a change and one at each end, the levels from then on."""
    made = simulate(BOARD, Scenario(duration_s=1e-3, start_time_s=start))
    write_csv(made, tmp_path / "c.csv", unit=unit)
    header, *body = rows(tmp_path / "c.csv")
    assert header == [f"Time [{unit}]", "C", "D", "A", "B"]
    changes = np.concatenate([edges.times for edges in made.lines.values()])
    span = made.span()
    at = np.unique(np.concatenate([[span.start, span.stop - 1], changes]))
    assert ticks([row[0] for row in body], made.tick, writer.UNIT_S[unit]) == at.tolist()
    assert [row[1:] for row in body] == expected(made, at)


def test_a_row_for_every_sample(tmp_path: Path) -> None:
    made = simulate(BOARD, Scenario(duration_s=1e-3, sample_rate_hz=10e6))
    write_csv(made, tmp_path / "c.csv", every_sample=True)
    body = rows(tmp_path / "c.csv")[1:]
    assert len(body) == 10_000
    assert [row[1:] for row in body] == expected(made, np.arange(10_000))
    assert [row[0] for row in body[:3]] == ["0.0000000", "0.0000001", "0.0000002"]


def test_long_captures_are_written_in_pieces(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """The same bytes however many rows are made at a time."""
    made = simulate(BOARD, SHORT)
    write_csv(made, tmp_path / "whole.csv")
    monkeypatch.setattr(writer, "ROWS_AT_A_TIME", 7)
    write_csv(made, tmp_path / "pieces.csv")
    assert (tmp_path / "whole.csv").read_bytes() == (tmp_path / "pieces.csv").read_bytes()


def test_dialect(tmp_path: Path) -> None:
    """At 0.1 turns of 256 counts the count is 25: state 10. Clock and data rest high. Source: exact arithmetic."""
    made = simulate(BOARD, SHORT)
    write_csv(made, tmp_path / "c.txt", header=False, delimiter="\t", unit="us", preamble=("; bench",), newline="\r\n")
    lines = (tmp_path / "c.txt").read_bytes().split(b"\r\n")
    assert lines[0] == b"; bench"
    assert lines[1].split(b"\t") == [b"0.00", b"1", b"1", b"1", b"0"]


def test_levels_only(tmp_path: Path) -> None:
    made = simulate(BOARD, Scenario(duration_s=1e-4, sample_rate_hz=1e6))
    write_csv(made, tmp_path / "c.csv", every_sample=True, time_column=False)
    header, *body = rows(tmp_path / "c.csv")
    assert header == ["C", "D", "A", "B"]
    assert body == expected(made, np.arange(100))


def test_a_grid_without_exact_decimals_is_rounded_to_the_picosecond(tmp_path: Path) -> None:
    """24 MHz: sample k at k / 24 us. Source: exact arithmetic, 1/24 us = 41 666.67 ps."""
    made = simulate(BOARD, Scenario(duration_s=1e-5, sample_rate_hz=24e6))
    write_csv(made, tmp_path / "c.csv", every_sample=True, unit="us")
    assert [row[0] for row in rows(tmp_path / "c.csv")[1:5]] == ["0.000000", "0.041667", "0.083333", "0.125000"]


def test_columns_by_number(tmp_path: Path) -> None:
    """A sheet that numbers its columns finds each line there; the time is column 1, and gaps are filled."""
    sheet = Sheet(lines={"clock": 5, "data": 2}, serial=SERIAL)
    made = simulate(sheet, SHORT)
    write_csv(made, tmp_path / "c.csv", header=False)
    table = pd.read_csv(tmp_path / "c.csv", header=None)
    assert table.shape[1] == 5
    assert table[4].sum() != table[1].sum()
    assert table[4].diff().abs().sum() == made.lines["clock"].times.size
    assert table[1].diff().abs().sum() == made.lines["data"].times.size
    with pytest.raises(InputError):
        write_csv(simulate(Sheet(lines={"clock": 1, "data": 2}, serial=SERIAL), SHORT), tmp_path / "d.csv")
    assert not (tmp_path / "d.csv").exists()


def test_a_gap_is_left_out(tmp_path: Path) -> None:
    """1 ms of 5 ms lost from 2 ms on: no row in it, one just before and one just after."""
    made = simulate(BOARD, Scenario(duration_s=5e-3, faults=(Fault("time_gap", 2e-3),)))
    write_csv(made, tmp_path / "c.csv")
    at = np.array(ticks([row[0] for row in rows(tmp_path / "c.csv")[1:]], made.tick, Fraction(1)))
    assert not np.any((at >= 200_000) & (at < 300_000))
    assert {199_999, 300_000} <= set(at.tolist())
    first, second = made.spans()
    assert (first.stop, second.start, second.joined) == (200_000, 300_000, False)


def test_parts_in_the_wrong_order(tmp_path: Path) -> None:
    made = simulate(BOARD, Scenario(duration_s=5e-3, faults=(Fault("time_reversal", 2e-3),)))
    write_csv(made, tmp_path / "c.csv")
    at = np.array(ticks([row[0] for row in rows(tmp_path / "c.csv")[1:]], made.tick, Fraction(1)))
    back = np.flatnonzero(np.diff(at) < 0)
    assert back.size == 1
    assert (at[0], at[back[0]], at[back[0] + 1], at[-1]) == (200_000, 499_999, 0, 199_999)


def test_a_clock_that_steps_back(tmp_path: Path) -> None:
    made = simulate(BOARD, Scenario(duration_s=5e-3, faults=(Fault("time_reversal", 2e-3, duration_s=1e-3),)))
    write_csv(made, tmp_path / "c.csv")
    at = np.array(ticks([row[0] for row in rows(tmp_path / "c.csv")[1:]], made.tick, Fraction(1)))
    back = np.flatnonzero(np.diff(at) < 0)
    assert (at[back[0]], at[back[0] + 1], at[-1]) == (199_999, 100_000, 399_999)
    with pytest.raises(ValueError, match="goes back"):
        made.span()


def test_the_same_bytes_again(tmp_path: Path) -> None:
    scenario = Scenario(duration_s=5e-3, edge_jitter_s=20e-9, seed=3, faults=(Fault("glitch", 1e-3),))
    for name in ("one", "two"):
        made = simulate(BOARD, scenario)
        write_csv(made, tmp_path / f"{name}.csv")
        write_truth(made, tmp_path / f"{name}.json")
    assert (tmp_path / "one.csv").read_bytes() == (tmp_path / "two.csv").read_bytes()
    assert (tmp_path / "one.json").read_bytes() == (tmp_path / "two.json").read_bytes()


def test_truth_as_json(tmp_path: Path) -> None:
    """It reads back as it was, frames included; also when there is no frame."""
    for sheet in (BOARD, Sheet(lines={"a": "A", "b": "B"}, incremental=BOARD.incremental)):
        made = simulate(sheet, SHORT)
        write_truth(made, tmp_path / "t.json")
        text = (tmp_path / "t.json").read_bytes()
        assert len(json.loads(text)["frames"]) == len(made.truth.frames)
        assert msgspec.json.decode(text, type=Truth).frames == made.truth.frames


def test_a_file_is_whole_or_not_there(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    (tmp_path / "c.csv").write_text("before")

    def broken(*_: object) -> None:
        raise OSError("disk full")

    monkeypatch.setattr(writer, "_write_rows", broken)
    with pytest.raises(InputError, match="cannot be written"):
        write_csv(simulate(BOARD, SHORT), tmp_path / "c.csv")
    assert [path.name for path in tmp_path.iterdir()] == ["c.csv"]
    assert (tmp_path / "c.csv").read_text() == "before"
