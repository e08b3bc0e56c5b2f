"""What the commands print: results to standard output, everything else to standard error.

On a terminal progress is one line that rewrites itself; elsewhere it is a plain line now and then. A reader
who closes the pipe early (`kernelfit fit ... | head`) ends the printing and not the work.
"""

from __future__ import annotations

import os
import sys
import time
import warnings
from collections.abc import Iterator
from contextlib import contextmanager
from typing import TextIO

from rich.console import Console as RichConsole
from rich.progress import BarColumn, Progress, ProgressColumn, Task, TextColumn
from rich.text import Text

from kernelfit.errors import FitWarning, KernelfitWarning
from kernelfit.report.numbers import duration_text

PLAIN_INTERVAL_S = 10.0  # between two progress lines where the line cannot rewrite itself
NO_BREAK_SPACE = "\N{NO-BREAK SPACE}"
SECONDS_UP_TO_S = 120.0  # from there on minutes
MIN_ELAPSED_S = 1.0  # before this no rate of progress is worth a prediction


def say(*lines: str) -> None:
    """Print lines of a result on standard output, as they are: unwrapped, unmarked."""
    _write(sys.stdout, lines)


def tell(*lines: str) -> None:
    """Print lines about the work (findings, notes, errors) on standard error, as they are."""
    _write(sys.stderr, lines)


def _write(stream: TextIO, lines: tuple[str, ...]) -> None:
    try:
        for line in lines:
            stream.write(_printable(line, stream) + "\n")
        stream.flush()
    except BrokenPipeError:
        silence(stream)


def _printable(line: str, stream: TextIO) -> str:
    """The line without what this stream cannot carry: gaps of its encoding, control characters."""
    line = line.replace(NO_BREAK_SPACE, " ")  # a line of a page may hold some; these lines are never broken
    kept = "".join(c if c.isprintable() else c.encode("unicode_escape").decode("ascii") for c in line)
    encoding = stream.encoding or "utf-8"
    return kept.encode(encoding, errors="backslashreplace").decode(encoding)


def silence(stream: TextIO) -> None:
    """Send the rest of a closed pipe nowhere, so that neither a later line nor the exit fails on it."""
    nowhere = os.open(os.devnull, os.O_WRONLY)
    try:
        os.dup2(nowhere, stream.fileno())
    finally:
        os.close(nowhere)


@contextmanager
def warnings_as_lines() -> Iterator[None]:
    """Show the package's warnings as plain lines; those of a fit are left to the notes of the fit."""
    with warnings.catch_warnings():  # puts the caller's way of showing them back
        usual = warnings.showwarning

        def show(
            message: Warning | str,
            category: type[Warning],
            filename: str,
            lineno: int,
            file: TextIO | None = None,
            line: str | None = None,
        ) -> None:
            if issubclass(category, FitWarning):
                return
            if issubclass(category, KernelfitWarning):
                tell(*(f"warning: {text}" for text in str(message).splitlines()))
            else:
                usual(message, category, filename, lineno, file, line)

        warnings.showwarning = show
        yield


class _TimeLeft(ProgressColumn):
    """Time left, from the share of the work that is done."""

    def render(self, task: Task) -> Text:
        left = time_left_s(task.completed, task.elapsed or 0.0)
        return Text("" if left is None else f"{_whole_seconds(left)} left")


def time_left_s(done: float, elapsed_s: float) -> float | None:
    """Seconds left when the share `done` (0 to 1) took `elapsed_s`; None while that says nothing yet."""
    if done <= 0.0 or elapsed_s < MIN_ELAPSED_S:
        return None
    return elapsed_s * (1.0 - min(done, 1.0)) / done


def _whole_seconds(left_s: float) -> str:
    return f"{max(round(left_s), 1)} s" if left_s < SECONDS_UP_TO_S else duration_text(left_s)


class ProgressLine:
    """Progress of a long computation on one line, with the time left.

    Use it as a context manager and call it with the share of the work done, 0 to 1, and a word on what is
    being done. Nothing of it remains on the screen afterwards.
    """

    def __init__(self, stream: TextIO | None = None) -> None:
        self._stream = sys.stderr if stream is None else stream
        self._live = self._stream.isatty()
        self._started = time.monotonic()
        self._last_shown = self._started
        self._bar = Progress(
            TextColumn("{task.description}", markup=False),
            BarColumn(bar_width=24),
            TextColumn("{task.percentage:>3.0f} %"),
            _TimeLeft(),
            console=RichConsole(file=self._stream),
            transient=True,
            disable=not self._live,
        )
        self._task = self._bar.add_task("", total=1.0)

    def __enter__(self) -> ProgressLine:
        self._bar.start()
        return self

    def __exit__(self, *_: object) -> None:
        self._bar.stop()

    def __call__(self, done: float, what: str) -> None:
        """Show that the share `done` is behind us and that `what` is going on."""
        if self._live:
            self._bar.update(self._task, completed=min(max(done, 0.0), 1.0), description=what)
            return
        now = time.monotonic()
        if now - self._last_shown < PLAIN_INTERVAL_S:
            return
        self._last_shown = now
        left = time_left_s(done, now - self._started)
        rest = "" if left is None else f", about {_whole_seconds(left)} left"
        _write(self._stream, (f"{what}: {100 * done:.0f} %{rest}",))
