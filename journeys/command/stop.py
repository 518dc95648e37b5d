"""Being asked to stop: Ctrl-C and SIGTERM end a command in one line, once what is half written has been taken away."""

from __future__ import annotations

import signal
import threading
from collections.abc import Iterator
from contextlib import contextmanager
from types import FrameType

_SIGNALS = (signal.SIGINT, signal.SIGTERM)
# What shells return for a program that a signal ended.
_ABOVE = 128


class StoppedError(BaseException):
    """Somebody asked the program to stop; no fault of it, so that nothing takes it for one."""

    def __init__(self, number: int = signal.SIGINT) -> None:
        how = "interrupted" if number == signal.SIGINT else f"stopped by {signal.Signals(number).name}"
        super().__init__(f"{how}; files are whole or as they were before, run again to do the rest")
        self.code = _ABOVE + number


@contextmanager
def stoppable() -> Iterator[None]:
    """Raise a StoppedError in the block when the program is asked to stop; asked again, it ends at once.

    The system lets a program ask for that in its main thread only; elsewhere nothing changes.
    """
    if threading.current_thread() is not threading.main_thread():
        yield
        return
    before = {number: signal.getsignal(number) for number in _SIGNALS}

    def stop(number: int, _: FrameType | None) -> None:
        for one in _SIGNALS:
            signal.signal(one, signal.SIG_DFL)
        raise StoppedError(number)

    try:
        for number in _SIGNALS:
            # Where it is ignored, as by nohup, that stands.
            if before[number] is not signal.SIG_IGN:
                signal.signal(number, stop)
        yield
    finally:
        for number, handler in before.items():
            signal.signal(number, signal.SIG_DFL if handler is None else handler)
