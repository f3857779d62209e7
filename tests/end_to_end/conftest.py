"""A small Morrowfell area for each test, and the command line run in this process."""

import json
import shutil
from pathlib import Path

import pytest
import rasterio

from firnlight.cli import main
from firnlight.demo.area import write_demo

GAP = -32768  # stored where nothing is known


def cells(path):
    """Stored integers of the first band of a map."""
    with rasterio.open(path) as dataset:
        return dataset.read(1)


def days(area):
    """Folders of maps of every tile-day."""
    return sorted((area.store / "maps").glob("*/*"))


def rows(area, *arguments):
    """Rows of a budget as the command prints them."""
    code, out, err = area.run("budget", "--json", "--quiet", *arguments)
    assert code == 0, err
    return json.loads(out)["rows"]


@pytest.fixture(scope="session")
def made_area(tmp_path_factory):
    folder = tmp_path_factory.mktemp("morrowfell") / "area"
    write_demo(folder, tiles=2, size=80, scenes=2, seed=11)
    return folder


class Area:
    """A demo area that a test may spoil: its folder, its workflow, and the commands."""

    def __init__(self, folder: Path, capsys) -> None:
        self.folder, self.workflow, self.store, self._capsys = (
            folder,
            folder / "workflow.toml",
            folder / "store",
            capsys,
        )

    def run(self, *arguments: str) -> tuple[int, str, str]:
        """Run a command on the workflow; exit code, stdout, stderr."""
        self._capsys.readouterr()
        code = main([arguments[0], str(self.workflow), *arguments[1:]])
        out, err = self._capsys.readouterr()
        return code, out, err

    def night(self, *arguments: str) -> int:
        return self.run("night", *arguments)[0]

    def edit(self, old: str, new: str) -> None:
        """Change the workflow; the old text must be there."""
        text = self.workflow.read_text(encoding="utf-8")
        assert old in text
        self.workflow.write_text(text.replace(old, new), encoding="utf-8")

    def items(self) -> list[Path]:
        return sorted((self.folder / "scenes").rglob("*.json"))

    def files(self, pattern: str = "*") -> dict[str, bytes]:
        """Files of the store below maps, budget and terrain, by relative path."""
        return {
            path.relative_to(self.store).as_posix(): path.read_bytes()
            for part in ("maps", "budget", "terrain")
            for path in sorted((self.store / part).rglob(pattern))
            if path.is_file()
        }

    def times(self) -> dict[str, int]:
        """Modification time of every file of the store."""
        return {str(p.relative_to(self.store)): p.stat().st_mtime_ns for p in self.store.rglob("*") if p.is_file()}

    def touched_since(self, before: dict[str, int]) -> set[str]:
        """Files whose time changed, the ledger left out."""
        now = self.times()
        return {name for name in now if now[name] != before.get(name) and not name.startswith("ledger.db")}


@pytest.fixture
def area(made_area, tmp_path, capsys):
    shutil.copytree(made_area, tmp_path / "area")
    return Area(tmp_path / "area", capsys)


@pytest.fixture
def done_area(area):
    assert area.night("--quiet") == 0
    return area
