"""Tables and texts to files, in the layout that the file's name ends in. `-` stands for standard output."""

from __future__ import annotations

import io
import sys
import zipfile
from collections.abc import Callable
from pathlib import Path
from typing import TYPE_CHECKING, BinaryIO

import numpy as np
import numpy.typing as npt

from decode.errors import InputError
from decode.files import expect_folder, whole

if TYPE_CHECKING:
    import pandas

STANDARD_OUTPUT = "-"


def write_table(frame: pandas.DataFrame, path: str) -> None:
    """Write a table in the layout its name ends in: .csv, .parquet or .npz (one array a column); `-` is CSV.

    Raises InputError for another ending and where the file cannot be written; then nothing is left behind.
    """
    write = expect_layout(path)
    if path == STANDARD_OUTPUT:
        _to_standard_output(frame.to_csv(index=False, lineterminator="\n"))
        return
    with whole(path) as file:
        write(frame, file)


def write_text_whole(path: str, text: str) -> None:
    """Write a text as UTF-8; `-` is standard output. Raises InputError where the file cannot be written."""
    if path == STANDARD_OUTPUT:
        _to_standard_output(text)
        return
    with whole(path) as file:
        file.write(text.encode())


def expect_place(path: str) -> None:
    """Raise InputError unless something could be written at `path`; it always can on standard output."""
    if path != STANDARD_OUTPUT:
        expect_folder(path)


def expect_layout(path: str) -> Callable[[pandas.DataFrame, BinaryIO], None]:
    """What writes the table layout that the name ends in. Raises InputError for an ending that is none of them."""
    if path == STANDARD_OUTPUT:
        return _LAYOUTS[".csv"]
    ending = Path(path).suffix.lower()
    if ending not in _LAYOUTS:
        raise InputError(
            "the name does not say in which layout to write the table",
            file=path,
            found=f"the ending {ending}" if ending else "a name without an ending",
            expected=", ".join(_LAYOUTS),
        )
    return _LAYOUTS[ending]


def _write_csv(frame: pandas.DataFrame, file: BinaryIO) -> None:
    frame.to_csv(file, index=False, lineterminator="\n", encoding="utf-8")


def _write_parquet(frame: pandas.DataFrame, file: BinaryIO) -> None:
    # pyarrow closes the handle that it is given, and ours still has to be forced to the disk.
    buffer = io.BytesIO()
    frame.to_parquet(buffer, engine="pyarrow", index=False)
    file.write(buffer.getbuffer())


def _write_npz(frame: pandas.DataFrame, file: BinaryIO) -> None:
    """numpy.savez by hand, because a field may be named as one of its parameters is ("file")."""
    with zipfile.ZipFile(file, "w", zipfile.ZIP_DEFLATED) as archive:
        for name in frame.columns:
            with archive.open(f"{name}.npy", "w", force_zip64=True) as member:
                np.lib.format.write_array(member, _plain_array(frame[name]), allow_pickle=False)


def _plain_array(column: pandas.Series) -> npt.NDArray[np.generic]:
    """A column as an array that needs no pickle: numbers (missing ones NaN), else text (missing ones empty)."""
    import pandas.api.types as types

    if types.is_bool_dtype(column.dtype) and not column.hasnans:
        return column.to_numpy(np.bool_)
    if types.is_numeric_dtype(column.dtype):
        if column.hasnans:
            return column.to_numpy(np.float64, na_value=np.nan)
        return np.asarray(column.array)
    texts = ["" if missing else str(value) for value, missing in zip(column, column.isna(), strict=True)]
    return np.array(texts, np.str_)


_LAYOUTS: dict[str, Callable[[pandas.DataFrame, BinaryIO], None]] = {
    ".csv": _write_csv,
    ".parquet": _write_parquet,
    ".npz": _write_npz,
}


def _to_standard_output(text: str) -> None:
    """As UTF-8, whatever the terminal speaks: this is for other programs."""
    sys.stdout.flush()
    sys.stdout.buffer.write(text.encode())
