"""What is a stage? A named step with a version, the layers it needs and the layers it makes."""

from __future__ import annotations

from dataclasses import dataclass


@dataclass(frozen=True)
class Stage:
    """One step of the chain, as data: the order of work and what must be redone follow from it.

    Attributes
    ----------
    name : shown in the ledger and in task names.
    version : raised whenever the stage's numbers change.
    needs : layers (or inputs of the tile-day) that it reads.
    makes : layers that it writes.
    facts : names of the settings groups that its numbers depend on.
    """

    name: str
    version: int
    needs: tuple[str, ...]
    makes: tuple[str, ...]
    facts: tuple[str, ...]
