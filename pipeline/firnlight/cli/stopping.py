"""How does a signal stop a command, wherever it strikes?"""

from __future__ import annotations

import os
import signal
import sys
import threading
from collections.abc import Iterator
from contextlib import contextmanager
from types import FrameType
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from sys import UnraisableHookArgs

_AGAIN_S = 0.02


def _stop(number: int, frame: FrameType | None) -> None:
    if number == signal.SIGINT:
        raise KeyboardInterrupt
    raise SystemExit(128 + number)


@contextmanager
def stoppable() -> Iterator[None]:
    """Turn SIGINT and SIGTERM into KeyboardInterrupt and SystemExit that cannot be lost.

    Python drops what is raised inside a finalizer or a callback from C (the loader of compiled kernels has one) with
    "Exception ignored": the run would go on as if nobody had asked it to stop. Such a signal is sent again.
    """
    usual = sys.unraisablehook

    def hook(dropped: UnraisableHookArgs) -> None:
        kind = dropped.exc_type
        if not issubclass(kind, KeyboardInterrupt | SystemExit):
            usual(dropped)
            return
        number = signal.SIGINT if issubclass(kind, KeyboardInterrupt) else signal.SIGTERM
        again = threading.Timer(_AGAIN_S, os.kill, (os.getpid(), number))
        again.daemon = True
        again.start()

    for number in (signal.SIGINT, signal.SIGTERM):
        signal.signal(number, _stop)
    sys.unraisablehook = hook
    try:
        yield
    finally:
        sys.unraisablehook = usual
