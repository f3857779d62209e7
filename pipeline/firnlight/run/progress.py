"""How does a run say how far it is? A bar on a terminal, plain counted lines elsewhere; always on stderr."""

from __future__ import annotations

import sys
from collections.abc import Callable
from dataclasses import dataclass
from types import TracebackType
from typing import Any


@dataclass(frozen=True)
class Step:
    """One finished piece of work; the plan fixes `total` before anything runs."""

    subject: str
    done: int
    total: int
    outcome: str  # "made", "already done", "refused", "failed"
    seconds: float
    detail: str = ""

    def __str__(self) -> str:
        detail = f": {self.detail}" if self.detail else ""
        return f"[{self.done}/{self.total}] {self.subject}: {self.outcome}{detail} ({self.seconds:.1f} s)"


Listener = Callable[[Step], None]


def silent(step: Step) -> None:
    """Say nothing."""


class Teller:
    """Writes steps to stderr; a closed stderr never stops the work."""

    def __init__(self, quiet: bool = False) -> None:
        self._quiet = quiet
        self._bar: Any = None

    def __enter__(self) -> Teller:
        return self

    def __exit__(self, kind: type[BaseException] | None, value: BaseException | None, trace: TracebackType | None) -> None:
        if self._bar is not None:
            self._bar.close()

    def say(self, text: str) -> None:
        """One line of talk."""
        if self._quiet:
            return
        try:
            if self._bar is not None:
                self._bar.write(text, file=sys.stderr)
            else:
                print(text, file=sys.stderr, flush=True)
        except (OSError, ValueError):
            self._quiet = True

    def __call__(self, step: Step) -> None:
        if self._quiet:
            return
        try:
            if not sys.stderr.isatty():
                print(step, file=sys.stderr, flush=True)
                return
            if self._bar is None:
                from tqdm import tqdm

                self._bar = tqdm(total=step.total, unit="tile-day", file=sys.stderr, leave=False)
            if step.outcome in ("refused", "failed"):
                self._bar.write(str(step), file=sys.stderr)
            self._bar.set_postfix_str(step.subject, refresh=False)
            self._bar.update(step.done - self._bar.n)
        except (OSError, ValueError):
            self._quiet = True
