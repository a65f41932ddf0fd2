"""Files that are written whole, or not at all.

A file appears under its name only once everything stands in it: it is written beside its place under another name,
forced to the disk, and then moved there in one step (POSIX rename, and its like on other systems). Whoever reads the
folder meanwhile sees the file before or the file after, never a half of one.
"""

from __future__ import annotations

import os
import stat
from collections.abc import Iterator
from contextlib import contextmanager, suppress
from pathlib import Path
from typing import BinaryIO

from decode.errors import InputError


def expect_folder(path: str) -> None:
    """Raise InputError unless a file could stand at `path`: asked before long work, not after it."""
    folder = Path(path).parent
    if not folder.is_dir():
        raise InputError("the folder does not exist", file=path, found=str(folder), hint="make the folder first")
    if Path(path).is_dir():
        raise InputError("this is a folder, not a file", file=path, expected="the name of a file")


@contextmanager
def whole(path: str | Path) -> Iterator[BinaryIO]:
    """A file to write that takes its place only when all of it is there. Raises InputError where it cannot."""
    expect_folder(str(path))
    # Through a link to the file it stands for, which is then replaced, and the link stays.
    target = Path(os.path.realpath(path))
    try:
        # A pipe or a device is written to, not replaced.
        special = target.exists() and not stat.S_ISREG(target.stat().st_mode)
        with target.open("wb") if special else _replacing(target) as file:
            yield file
    except OSError as error:
        raise InputError(
            "the file cannot be written",
            file=str(path),
            found=error.strerror or str(error),
            hint="a folder you may write to, with room on its disk",
        ) from error


@contextmanager
def _replacing(target: Path) -> Iterator[BinaryIO]:
    part = target.with_name(f".{target.name[:100]}.{os.getpid()}.part")
    try:
        with part.open("xb") as file:
            yield file
            file.flush()
            os.fsync(file.fileno())
        os.replace(part, target)
    except BaseException:
        with suppress(OSError):
            part.unlink()
        raise
