"""What is in each input? Its content id, taken once and kept against size, time and inode."""

from __future__ import annotations

import os
from collections.abc import Iterable
from concurrent.futures import ThreadPoolExecutor
from pathlib import Path

from firnlight.core.errors import InputProblem
from firnlight.io.fingerprints import checked_content_id, content_id
from firnlight.run.ledger import Ledger

_Row = tuple[str, int, int, int, str, str]


def _take(path: str, stated: str) -> _Row | InputProblem:
    """Stat a file and read it whole; the problem instead, where there is one."""
    try:
        found = os.stat(path)
        if not Path(path).is_file():
            return InputProblem(path, "file", "a folder or device", "a plain file", "replace it by the file itself")
        taken = checked_content_id(Path(path), stated, path) if stated else content_id(Path(path))
        return path, found.st_size, found.st_mtime_ns, found.st_ino, stated, taken
    except OSError as error:
        return InputProblem(
            path,
            "file",
            error.strerror or str(error),
            "a readable file",
            "deliver the file, or correct its path",
        )
    except InputProblem as problem:
        return problem


class Contents:
    """Content ids of input files, from the ledger where a file has not changed since."""

    def __init__(self, ledger: Ledger) -> None:
        self._ledger = ledger
        self._new: list[_Row] = []
        self._known: dict[tuple[str, str], str | InputProblem] = {}

    def take(self, wanted: Iterable[tuple[str, str]], workers: int = 1) -> None:
        """Find the ids of (path, stated checksum) pairs, reading new or changed files on several threads."""
        unread = []
        for path, stated in dict.fromkeys(wanted):
            if (path, stated) in self._known:
                continue
            try:
                found = os.stat(path)
                kept = self._ledger.content(path, found.st_size, found.st_mtime_ns, found.st_ino, stated)
            except OSError:
                kept = None
            if kept is None:
                unread.append((path, stated))
            else:
                self._known[path, stated] = kept
        with ThreadPoolExecutor(workers) as pool:
            for (path, stated), row in zip(
                unread, pool.map(_take, *zip(*unread, strict=True)) if unread else (), strict=True
            ):
                if isinstance(row, InputProblem):
                    self._known[path, stated] = row
                else:
                    self._known[path, stated] = row[-1]
                    self._new.append(row)

    def of(self, path: str | Path, stated: str = "") -> str:
        """The content id of a file; a stated checksum has been checked against the bytes.

        Raises
        ------
        InputProblem : no such file, not a plain file, or bytes other than stated.
        """
        pair = (str(path), stated)
        self.take([pair])
        known = self._known[pair]
        if isinstance(known, InputProblem):
            raise known
        return known

    def keep(self) -> None:
        """Write the new ids to the ledger; nothing is written where nothing is new."""
        self._ledger.record_contents(self._new)
        self._new.clear()
