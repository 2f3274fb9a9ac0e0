"""Ctrl-C and SIGTERM: the first asks for an orderly end, the second ends at once."""

import os
import signal
from collections.abc import Iterator
from contextlib import contextmanager
from types import FrameType
from typing import Any

_SIGNALS = (signal.SIGINT, signal.SIGTERM)


class GraceOver(BaseException):
    """Running points had their time after the first signal. No Exception, so that no point takes it for its own."""


class StopRequest:
    """Whether somebody asked for the end; raises GraceOver in the main thread when the grace is over."""

    def __init__(self, grace_seconds: float, announce: bool) -> None:
        self.requested = False
        self._grace_seconds = grace_seconds
        self._announce = announce
        self._armed = False

    def disarm(self) -> None:
        """Nothing is running any more: the grace can no longer end."""
        if not self._armed:
            return
        self._armed = False
        signal.setitimer(signal.ITIMER_REAL, 0)

    def _signal(self, number: int, frame: FrameType | None) -> None:
        if self.requested:
            for each in _SIGNALS:
                signal.signal(each, signal.SIG_IGN)  # the end is on its way; nothing may cut it short
            raise KeyboardInterrupt
        self.requested = self._armed = True
        signal.setitimer(signal.ITIMER_REAL, self._grace_seconds)
        if self._announce:
            text = (
                f"\nstopping: no new points, running ones have {self._grace_seconds:g} s; once more to stop at once\n"
            )
            os.write(2, text.encode())  # print is not safe here: the signal may have come in the middle of another one

    def _alarm(self, number: int, frame: FrameType | None) -> None:
        if self._armed:
            raise GraceOver


@contextmanager
def stop_signals(grace_seconds: float, announce: bool) -> Iterator[StopRequest]:
    """Turn signals into a StopRequest for the duration of the block. Main thread only."""
    request = StopRequest(grace_seconds, announce)
    before: dict[signal.Signals, Any] = {each: signal.signal(each, request._signal) for each in _SIGNALS}
    before[signal.SIGALRM] = signal.signal(signal.SIGALRM, request._alarm)
    try:
        yield request
    finally:
        request.disarm()
        for each, handler in before.items():
            signal.signal(each, handler)
