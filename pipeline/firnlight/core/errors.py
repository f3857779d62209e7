"""What went wrong, where, and what the user does about it."""

from __future__ import annotations

from dataclasses import dataclass


@dataclass
class InputProblem(Exception):
    """Something in the user's data or settings that only the user can put right.

    Attributes
    ----------
    where : file, or settings file and key
    what : band, column or key
    found : the value met
    wanted : what would have been accepted
    fix : the cure, as an instruction
    """

    where: str
    what: str
    found: object
    wanted: str
    fix: str

    def __str__(self) -> str:
        found = self.found if isinstance(self.found, str) else repr(self.found)
        return f"{self.where}: {self.what}: found {found}, wanted {self.wanted}.\n  Fix: {self.fix}"

    def __reduce__(self) -> tuple[type, tuple[object, ...]]:
        # errors travel between worker processes
        return type(self), (self.where, self.what, self.found, self.wanted, self.fix)


class SettingsProblem(InputProblem):
    """The workflow or the command line cannot be used as it is (exit code 2)."""


class StoreBusy(Exception):
    """Another run holds the store (exit code 5)."""


class NoRoom(InputProblem):
    """Not enough disk or memory (exit code 6)."""
