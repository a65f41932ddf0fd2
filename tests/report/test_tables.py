"""Files appear whole or not at all. They are read back by the csv module, pyarrow and numpy."""

from __future__ import annotations

import csv
import io
import os
from pathlib import Path
from typing import BinaryIO

import numpy as np
import pandas as pd
import pytest

from decode.errors import InputError
from decode.report import tables
from decode.report.tables import write_table, write_text_whole


@pytest.fixture
def frame() -> pd.DataFrame:
    """Every sort of column that a frame table has; "file" is also the name of a parameter of numpy.savez."""
    return pd.DataFrame(
        {
            "frame": np.array([0, 1, 2], np.int64),
            "time_s": [1.04e-7, 0.1 + 0.2, np.nan],
            "raw": ["0x1F", "0x2A", None],
            "crc_ok": [True, False, True],
            "file": np.array([7, 8, 9], np.uint64),
            "life": pd.array([1, None, 3], "Int64"),
            "kind": pd.Series(["", "crc_mismatch", ""], dtype="str"),
        }
    )


def test_csv_reads_back_to_the_last_bit(frame: pd.DataFrame, tmp_path: Path) -> None:
    write_table(frame, str(tmp_path / "t.csv"))
    with (tmp_path / "t.csv").open(newline="") as file:
        head, *rows = csv.reader(file)
    assert head == list(frame.columns)
    # 0.1 + 0.2 is 0.30000000000000004 (IEEE 754 binary64); what is missing is empty
    assert [row[1] for row in rows] == ["1.04e-07", "0.30000000000000004", ""]
    assert [row[2] for row in rows] == ["0x1F", "0x2A", ""]
    assert [row[5] for row in rows] == ["1", "", "3"]


def test_parquet_reads_back(frame: pd.DataFrame, tmp_path: Path) -> None:
    write_table(frame, str(tmp_path / "t.parquet"))
    pd.testing.assert_frame_equal(pd.read_parquet(tmp_path / "t.parquet"), frame)


def test_npz_reads_back_without_pickle(frame: pd.DataFrame, tmp_path: Path) -> None:
    write_table(frame, str(tmp_path / "t.npz"))
    with np.load(tmp_path / "t.npz", allow_pickle=False) as read:
        assert sorted(read.files) == sorted(frame.columns)
        assert read["frame"].dtype == np.int64
        assert read["file"].dtype == np.uint64
        assert read["crc_ok"].tolist() == [True, False, True]
        assert read["raw"].tolist() == ["0x1F", "0x2A", ""]
        assert read["kind"].tolist() == ["", "crc_mismatch", ""]
        np.testing.assert_array_equal(read["time_s"], frame["time_s"])
        np.testing.assert_array_equal(read["life"], [1.0, np.nan, 3.0])


@pytest.mark.parametrize("ending", ["csv", "parquet", "npz"])
def test_an_empty_table_is_a_table(frame: pd.DataFrame, tmp_path: Path, ending: str) -> None:
    write_table(frame.iloc[:0], str(tmp_path / f"t.{ending}"))
    assert (tmp_path / f"t.{ending}").stat().st_size > 0


def test_a_dash_is_csv_on_standard_output(frame: pd.DataFrame, capfdbinary: pytest.CaptureFixture[bytes]) -> None:
    write_table(frame, "-")
    tables.sys.stdout.flush()
    out = capfdbinary.readouterr().out
    assert out.splitlines()[0] == b"frame,time_s,raw,crc_ok,file,life,kind"
    assert len(out.splitlines()) == 4
    assert b"\r" not in out


@pytest.mark.parametrize(
    ("name", "problem", "found"),
    [
        ("t.xlsx", "the name does not say in which layout to write the table", "the ending .xlsx"),
        ("t", "the name does not say in which layout to write the table", "a name without an ending"),
        ("none/t.csv", "the folder does not exist", "none"),
        (".csv", "the name does not say in which layout to write the table", "a name without an ending"),
    ],
)
def test_a_name_that_cannot_be_used_is_refused(
    frame: pd.DataFrame, tmp_path: Path, name: str, problem: str, found: str
) -> None:
    with pytest.raises(InputError) as refused:
        write_table(frame, str(tmp_path / name))
    assert refused.value.problem == problem
    assert (refused.value.found or "").endswith(found)
    assert list(tmp_path.iterdir()) == []


def test_a_folder_is_not_a_file(tmp_path: Path) -> None:
    with pytest.raises(InputError, match="this is a folder"):
        write_text_whole(str(tmp_path), "text")


def _fail(frame: pd.DataFrame, file: BinaryIO) -> None:
    file.write(b"half")
    raise OSError(28, "No space left on device")


def test_a_full_disk_leaves_the_old_file_and_nothing_else(
    frame: pd.DataFrame, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """The write fails half way (errno 28 is ENOSPC): the name still holds what it held, and no part stays behind."""
    target = tmp_path / "t.csv"
    target.write_text("before")
    monkeypatch.setitem(tables._LAYOUTS, ".csv", _fail)
    with pytest.raises(InputError) as refused:
        write_table(frame, str(target))
    assert refused.value.problem == "the file cannot be written"
    assert refused.value.found == "No space left on device"
    assert [path.name for path in tmp_path.iterdir()] == ["t.csv"]
    assert target.read_text() == "before"


def test_an_interruption_leaves_nothing(frame: pd.DataFrame, tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    def interrupted(frame: pd.DataFrame, file: BinaryIO) -> None:
        file.write(b"half")
        raise KeyboardInterrupt

    monkeypatch.setitem(tables._LAYOUTS, ".csv", interrupted)
    with pytest.raises(KeyboardInterrupt):
        write_table(frame, str(tmp_path / "t.csv"))
    assert list(tmp_path.iterdir()) == []


@pytest.mark.skipif(not hasattr(os, "geteuid") or os.geteuid() == 0, reason="root may write anywhere")
def test_a_folder_without_permission_is_refused(tmp_path: Path) -> None:
    tmp_path.chmod(0o500)
    try:
        with pytest.raises(InputError, match="the file cannot be written"):
            write_text_whole(str(tmp_path / "t.json"), "{}")
    finally:
        tmp_path.chmod(0o700)


def test_text_is_utf_8_and_replaces_what_was_there(tmp_path: Path) -> None:
    target = tmp_path / "t.json"
    target.write_text("something longer than what comes")
    write_text_whole(str(target), "µ\n")
    assert target.read_bytes() == "µ\n".encode()


@pytest.mark.skipif(not hasattr(os, "symlink"), reason="no links here")
def test_a_link_stays_a_link(tmp_path: Path) -> None:
    (tmp_path / "real.json").write_text("old")
    (tmp_path / "link.json").symlink_to(tmp_path / "real.json")
    write_text_whole(str(tmp_path / "link.json"), "new")
    assert (tmp_path / "link.json").is_symlink()
    assert (tmp_path / "real.json").read_text() == "new"


@pytest.mark.skipif(not hasattr(os, "mkfifo"), reason="no named pipes here")
def test_a_pipe_is_written_to_and_not_replaced(tmp_path: Path) -> None:
    pipe = tmp_path / "pipe"
    os.mkfifo(pipe)
    reader = os.open(pipe, os.O_RDONLY | os.O_NONBLOCK)
    try:
        write_text_whole(str(pipe), "text")
        assert os.read(reader, 10) == b"text"
    finally:
        os.close(reader)
    assert pipe.is_fifo()


def test_a_text_goes_to_standard_output_as_utf_8(monkeypatch: pytest.MonkeyPatch) -> None:
    raw = io.BytesIO()
    monkeypatch.setattr("sys.stdout", io.TextIOWrapper(raw, encoding="ascii"))
    write_text_whole("-", "µ")
    assert raw.getvalue() == "µ".encode()
