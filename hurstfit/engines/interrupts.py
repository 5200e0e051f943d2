"""Ctrl-C at a moment when nothing is half done.

An interrupt in the middle of a move would leave a chain between two steps, and emcee answers any exception from within the
posterior with a traceback of its own.  So the signal is kept until the engine asks for it; a second one is not.
"""

from __future__ import annotations

import signal
import threading
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from types import FrameType

__all__ = ["interrupts_when_asked"]


@contextmanager
def interrupts_when_asked() -> Iterator[Callable[[], None]]:
    """Hold Ctrl-C back inside the block.

    Yields
    ------
    callable
        Raises KeyboardInterrupt if the user has pressed Ctrl-C since the block began.  Outside the main thread, and where Ctrl-C
        has another meaning already, it does nothing and signals are left alone.
    """
    pressed = False

    def keep(signum: int, frame: FrameType | None) -> None:
        nonlocal pressed
        if pressed:
            signal.default_int_handler(signum, frame)
        pressed = True

    def ask() -> None:
        if pressed:
            raise KeyboardInterrupt

    ours = threading.current_thread() is threading.main_thread() and signal.getsignal(signal.SIGINT) is signal.default_int_handler
    if not ours:
        yield ask
        return
    signal.signal(signal.SIGINT, keep)
    try:
        yield ask
    finally:
        signal.signal(signal.SIGINT, signal.default_int_handler)
