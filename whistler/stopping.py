"""Signals that ask the program to stop, held back where an exception would be lost."""

from __future__ import annotations

import signal
from collections.abc import Iterator
from contextlib import contextmanager
from types import FrameType

from whistler.errors import Stopped

SIGNALS = (signal.SIGINT, signal.SIGTERM, signal.SIGHUP)
_depth = 0
_waiting: int | None = None


def listen() -> None:
    """Turn the signals that ask for an end into :class:`Stopped`; a second one ends at once."""
    for number in SIGNALS:
        signal.signal(number, _arrive)


@contextmanager
def undisturbed() -> Iterator[None]:
    """Hold signals back while the decoder calls back into Python: C code swallows exceptions."""
    global _depth, _waiting
    _depth += 1
    try:
        yield
    finally:
        _depth -= 1
        if not _depth and _waiting is not None:
            number, _waiting = _waiting, None
            raise Stopped(number)


def _arrive(number: int, frame: FrameType | None) -> None:
    global _waiting
    signal.signal(number, signal.SIG_DFL)
    if _depth:
        _waiting = number
    else:
        raise Stopped(number)
