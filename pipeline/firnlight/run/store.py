"""Which file holds which layer of which tile and day?"""

from __future__ import annotations

import datetime as dt
import os
import shutil
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass
from pathlib import Path

from filelock import FileLock, Timeout

from firnlight.core.errors import NoRoom, SettingsProblem, StoreBusy

BUDGET = "budget"
ITEM = "scene.json"


@dataclass(frozen=True)
class Store:
    """The folder of all results. Paths only; what is in them is nobody's business here."""

    root: Path

    @property
    def ledger(self) -> Path:
        return self.root / "ledger.db"

    def strata(self, tile: str) -> Path:
        return self.root / "terrain" / tile / "strata.tif"

    def relief(self, tile: str) -> Path:
        """Folder of a tile's slope, aspect, sky view and horizon."""
        return self.root / "terrain" / tile

    def maps(self, tile: str, day: dt.date) -> Path:
        return self.root / "maps" / tile / day.isoformat()

    def product(self, tile: str, day: dt.date, name: str) -> Path:
        """File of one product: a map layer, the item of a tile-day, or its budget totals."""
        if name == BUDGET:
            return self.root / "budget" / f"year={day.year}" / f"{tile}_{day.isoformat()}.parquet"
        return self.maps(tile, day) / (name if name == ITEM else f"{name}.tif")

    def budget_files(self) -> list[Path]:
        return sorted((self.root / "budget").glob("year=*/[!.]*.parquet"))

    def tile_days(self) -> list[tuple[str, dt.date]]:
        """Tile-days that have a folder of maps."""
        found = []
        for folder in sorted((self.root / "maps").glob("*/????-??-??")):
            try:
                found.append((folder.parent.name, dt.date.fromisoformat(folder.name)))
            except ValueError:
                continue
        return found

    def make(self) -> None:
        """Make the folder and see that it can be written to.

        Raises
        ------
        SettingsProblem : the folder cannot be made or written.
        """
        try:
            self.root.mkdir(parents=True, exist_ok=True)
            if not os.access(self.root, os.W_OK | os.X_OK):
                raise PermissionError(f"no permission to write in {self.root}")
        except OSError as error:
            raise SettingsProblem(
                "workflow",
                "store.path",
                str(error),
                "a folder that can be written",
                "correct store.path or its rights",
            ) from error

    def need_room(self, needed_bytes: int) -> None:
        """Refuse to start where the disk has less than `needed_bytes` free."""
        free = shutil.disk_usage(self.root).free
        if free < needed_bytes:
            raise NoRoom(
                str(self.root), "free disk space", f"{free / 2**20:.1f} MiB", f"at least {needed_bytes / 2**20:.1f} MiB",
                "make room, or set store.path to a larger disk",
            )  # fmt: skip

    @contextmanager
    def held(self, wait: bool = False) -> Iterator[None]:
        """Hold the store against other runs; the operating system frees it when the process dies.

        Raises
        ------
        StoreBusy : another run holds it and `wait` is False.
        """
        lock = FileLock(self.root / ".lock", timeout=-1 if wait else 0)
        try:
            lock.acquire()
        except Timeout:
            raise StoreBusy(
                f"{self.root}: another run holds this store; try again when it has ended, or use --wait"
            ) from None
        try:
            yield
        finally:
            lock.release()
