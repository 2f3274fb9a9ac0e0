"""How far a run is, for people: a bar on a terminal, a plain line now and then in a log file."""

import sys
import time
from typing import Any, TextIO


class Progress:
    """What the driver tells while it runs; this one keeps it to itself."""

    def start(self, total: int, done: int, failed: int) -> None:
        """The size of the run and what earlier launches left; failed points count as done."""

    def point(self, failed: bool) -> None:
        """One more point is committed."""

    def tick(self) -> None:
        """Nothing new; called every second or so."""

    def close(self) -> None:
        """The launch has ended."""


class Lines(Progress):
    """A line at the start, one every `interval_seconds`, one at the end: log files must not fill with a bar."""

    def __init__(self, stream: TextIO, interval_seconds: float = 30.0) -> None:
        self._stream = stream
        self._interval_seconds = interval_seconds

    def start(self, total: int, done: int, failed: int) -> None:
        self._total, self._done, self._failed = total, done, failed
        self._before, self._started = done, time.monotonic()
        self._print()

    def point(self, failed: bool) -> None:
        self._done += 1
        self._failed += failed
        self.tick()

    def tick(self) -> None:
        if time.monotonic() - self._printed >= self._interval_seconds:
            self._print()

    def close(self) -> None:
        self._print()

    def _print(self) -> None:
        self._printed = time.monotonic()
        here = self._done - self._before
        pace = (self._printed - self._started) / here if here else None
        print(state_text(self._done, self._failed, self._total, pace), file=self._stream, flush=True)


class Bar(Progress):
    """A progress bar whose remaining time comes from all points of this launch, not from the last few."""

    def __init__(self, stream: TextIO) -> None:
        self._stream = stream

    def start(self, total: int, done: int, failed: int) -> None:
        from tqdm import tqdm

        self._failed = failed
        self._bar: Any = tqdm(
            total=total, initial=done, smoothing=0, unit=" points", file=self._stream, dynamic_ncols=True
        )

    def point(self, failed: bool) -> None:
        self._failed += failed
        if self._failed:
            self._bar.set_postfix(failed=self._failed, refresh=False)
        self._bar.update()

    def tick(self) -> None:
        self._bar.refresh()

    def close(self) -> None:
        self._bar.close()


def console_progress(stream: TextIO | None = None) -> Progress:
    """A bar if the stream (standard error by default) is a terminal, plain lines otherwise."""
    stream = stream or sys.stderr
    return Bar(stream) if stream.isatty() else Lines(stream)


def state_text(done: int, failed: int, total: int, seconds_per_point: float | None) -> str:
    """One line; `done` counts failed points too; the pace is None before the first point."""
    text = f"{done} of {total} points ({done / total:.0%})"
    if failed:
        text += f", {failed} failed"
    if seconds_per_point is not None:
        text += f", {duration_text(seconds_per_point)} a point"
        if done < total:
            text += f", about {duration_text((total - done) * seconds_per_point)} left"
    return text


def duration_text(seconds: float) -> str:
    """A time span with the two units that matter."""
    if seconds < 60:
        return f"{seconds:.2g} s" if seconds < 10 else f"{seconds:.0f} s"
    minutes = round(seconds / 60)
    if minutes < 60:
        return f"{minutes} min"
    hours, minutes = divmod(minutes, 60)
    return f"{hours} h {minutes} min" if hours < 24 else f"{hours // 24} d {hours % 24} h"
