"""Progress and messages on standard error: a bar on a terminal, plain lines elsewhere, nothing when quiet.

The solver reports data, ``progress(stage, done, total, note)``; this module draws it and keeps the log.
"""

import sys
import time
from typing import Any, Protocol, Self, TextIO

__all__ = ["Log", "PlainProgress", "ProgressCallback", "Silence", "TerminalProgress", "progress_for"]


class ProgressCallback(Protocol):
    """What the solver calls."""

    def __call__(self, stage: str, done: float, total: float, note: str = "") -> None:
        """Report that ``done`` of ``total`` of a stage is finished."""


class Silence:
    """Draws nothing."""

    def __enter__(self) -> Self:
        return self

    def __exit__(self, *_: object) -> None:
        return

    def __call__(self, stage: str, done: float, total: float, note: str = "") -> None:
        """Ignore the report."""


class PlainProgress(Silence):
    """Lines for a log file or a pipe: messages, and at most one line in so many seconds about the stage at work.

    A report without a total is a message and printed as it is.

    Parameters
    ----------
    stream : TextIO
    interval : float, s
    """

    def __init__(self, stream: TextIO, interval: float = 5.0) -> None:
        self._stream, self._interval = stream, interval
        self._stage, self._started, self._shown = "", 0.0, 0.0

    def __call__(self, stage: str, done: float, total: float, note: str = "") -> None:
        """Print a line if one is due."""
        now = time.monotonic()
        if total <= 0.0:
            self._say(note or stage)
        elif stage != self._stage:
            self._stage, self._started = stage, now
            # a stage that starts soon after the last line is not worth one
            if not self._shown or now - self._shown >= self._interval:
                self._say(f"{stage}{_after(note)}")
        elif now - self._shown >= self._interval and 0 < done < total:
            left = (now - self._started) * (total - done) / done
            self._say(f"{stage}: {100 * done / total:.0f} %, about {duration(left)} left{_after(note)}")

    def _say(self, text: str) -> None:
        self._shown = time.monotonic()
        self._stream.write(text + "\n")
        self._stream.flush()


class TerminalProgress(Silence):
    """A bar per stage with the time left.

    Parameters
    ----------
    stream : TextIO
    """

    def __init__(self, stream: TextIO) -> None:
        from rich.console import Console
        from rich.progress import BarColumn, Progress, TaskProgressColumn, TextColumn, TimeRemainingColumn

        self._bars = Progress(
            TextColumn("{task.description}", markup=False),
            BarColumn(bar_width=30),
            TaskProgressColumn(),
            TimeRemainingColumn(compact=True),
            TextColumn("{task.fields[note]}", markup=False),
            console=Console(file=stream),
            transient=True,
        )
        self._stage = ""
        self._task: Any = None

    def __enter__(self) -> Self:
        self._bars.start()
        return self

    def __exit__(self, *_: object) -> None:
        self._bars.stop()

    def __call__(self, stage: str, done: float, total: float, note: str = "") -> None:
        """Move the bar, or print a line that stays if there is no total."""
        if total <= 0.0:
            self._bars.console.print(note or stage, highlight=False, markup=False)
            return
        if stage != self._stage or self._task is None:
            if self._task is not None:
                self._bars.remove_task(self._task)
            self._stage = stage
            self._task = self._bars.add_task(stage, total=total, note="")
        self._bars.update(self._task, completed=done, total=total, note=note)


class Log:
    """Keeps a line per stage with its time for `log.txt`, and passes every report on.

    Parameters
    ----------
    inner : callable or None
    """

    def __init__(self, inner: ProgressCallback | None = None) -> None:
        self._inner, self._start, self._stage = inner, time.monotonic(), ""
        self.lines: list[str] = []

    def __call__(self, stage: str, done: float, total: float, note: str = "") -> None:
        """Note a new stage and pass the report on."""
        if total <= 0.0:
            self.add(note or stage)
        elif stage != self._stage:
            self._stage = stage
            self.add(stage + _after(note))
        if self._inner is not None:
            self._inner(stage, done, total, note)

    def add(self, text: str) -> None:
        """Add a line with the seconds since the start."""
        self.lines.append(f"{time.monotonic() - self._start:9.2f} s  {text}")


def progress_for(stream: TextIO | None = None, *, quiet: bool = False) -> Any:
    """Context manager and callback that suits a stream.

    Parameters
    ----------
    stream : TextIO, optional
        Standard error by default.
    quiet : bool

    Returns
    -------
    Silence, PlainProgress or TerminalProgress
    """
    target = sys.stderr if stream is None else stream
    if quiet:
        return Silence()
    return TerminalProgress(target) if target.isatty() else PlainProgress(target)


def duration(seconds: float) -> str:
    """Time in words.

    Examples
    --------
    >>> duration(4.2), duration(200), duration(8000)
    ('4 s', '3 min', '2 h 13 min')
    """
    if seconds < 60:
        return f"{seconds:.0f} s"
    minutes = round(seconds / 60)
    return f"{minutes} min" if minutes < 60 else f"{minutes // 60} h {minutes % 60} min"


def _after(note: str) -> str:
    return f" ({note})" if note else ""
