"""How does a number from a paper reach a formula, and who published it?"""

from __future__ import annotations

import tomllib
from dataclasses import dataclass
from functools import cache
from importlib.resources import files
from typing import Any

from firnlight.core.errors import InputProblem


@dataclass(frozen=True)
class Sourced:
    """One table: its name, its citation and its rows, each row with a source of its own or the table's."""

    name: str
    source: str
    rows: dict[str, dict[str, Any]]

    def row(self, key: str) -> dict[str, Any]:
        """The row `key`; an unknown one is refused with the names there are."""
        if key not in self.rows:
            import difflib

            near = difflib.get_close_matches(key, self.rows, n=1)
            raise InputProblem(
                f"table {self.name}",
                "row",
                key,
                "one of " + ", ".join(sorted(self.rows)),
                f"write {near[0]!r}" if near else f"see `firnlight methods` for what {self.name} holds",
            )
        return self.rows[key]


@cache
def load_table(name: str) -> Sourced:
    """Read `tables/<name>.toml`; a table or row without a source is refused.

    Raises
    ------
    InputProblem : no `source` at the top of the table.
    """
    path = files("firnlight.tables") / f"{name}.toml"
    raw = tomllib.loads(path.read_text(encoding="utf-8"))
    source = raw.get("source")
    if not source:
        raise InputProblem(str(path), "source", source, "a citation", 'add source = "..." at the top of the table')
    rows = {key: {"source": source, **row} for key, row in raw["rows"].items()}
    return Sourced(name, source, rows)
