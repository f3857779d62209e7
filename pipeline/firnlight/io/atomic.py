"""How is a file replaced so that a reader sees the old one or the new one, never a part?"""

from __future__ import annotations

import os
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path

SCRATCH_MARK = ".part"


def scratch_path(path: Path) -> Path:
    """A hidden name beside `path` with the same suffix (GDAL looks at it), marked as a scratch file."""
    return path.with_name(f".{path.stem}.{os.getpid()}.{os.urandom(4).hex()}{SCRATCH_MARK}{path.suffix}")


def move_into_place(scratch: Path, path: Path) -> None:
    """Sync a finished scratch file, rename it over `path`, and sync the folder."""
    with scratch.open("rb+") as stream:
        os.fsync(stream.fileno())
    scratch.replace(path)
    folder = os.open(path.parent, os.O_RDONLY)
    try:
        os.fsync(folder)
    finally:
        os.close(folder)


@contextmanager
def replacing(path: Path) -> Iterator[Path]:
    """Yield a scratch path beside `path`; move it into place on success, remove it on failure."""
    path.parent.mkdir(parents=True, exist_ok=True)
    scratch = scratch_path(path)
    try:
        yield scratch
        move_into_place(scratch, path)
    finally:
        scratch.unlink(missing_ok=True)


def write_text(path: Path, text: str) -> None:
    """Replace a text file as a whole."""
    with replacing(path) as scratch:
        scratch.write_text(text, encoding="utf-8")


def sweep(folder: Path) -> int:
    """Remove scratch files that a killed run left below `folder`; the caller holds the store. Returns their number."""
    count = 0
    for path in folder.rglob(f".*{SCRATCH_MARK}.*"):
        path.unlink(missing_ok=True)
        count += 1
    return count
