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
from rich.progress import BarColumn, TextColumn
from rich.progress import Progress as RichProgress

from kernelfit.errors import FitWarning, KernelfitWarning
from kernelfit.fitting.progress import Progress
from kernelfit.report.look import GRID, RAISING
from kernelfit.report.numbers import duration_text

PLAIN_INTERVAL_S = 10.0  # between two progress lines where the line cannot rewrite itself
NO_BREAK_SPACE = "\N{NO-BREAK SPACE}"
SECONDS_UP_TO_S = 120.0  # from there on minutes
MIN_ELAPSED_S = 1.0  # before this, or this many sweeps, no rate of progress is worth a prediction
MIN_SWEEPS = 3
ANNOUNCED_FROM_S = 30.0


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


class ProgressLine:
    """Progress of a fit on one line, with the time left; a long fit is announced with its time and memory.

    Use it as a context manager and hand it to `CouplingModel.fit`. Nothing of the line remains afterwards.

    Parameters
    ----------
    stream : where to show it; None: standard error
    """

    def __init__(self, stream: TextIO | None = None) -> None:
        self._stream = sys.stderr if stream is None else stream
        self._live = self._stream.isatty()
        self._first: tuple[int, float] | None = None  # sweeps and time of the first report
        self._last_shown = time.monotonic()
        self._announced = False
        self._bar = RichProgress(
            TextColumn("{task.description}", markup=False),
            BarColumn(bar_width=24, style=GRID, complete_style=RAISING, finished_style=RAISING, pulse_style=GRID),
            TextColumn("{task.fields[share]}", markup=False),
            TextColumn("{task.fields[left]}", markup=False),
            console=RichConsole(file=self._stream),
            transient=True,
            disable=not self._live,
        )
        self._task = self._bar.add_task("preparing", total=1.0, share="", left="")

    def __enter__(self) -> ProgressLine:
        self._bar.start()
        return self

    def __exit__(self, *_: object) -> None:
        self._bar.stop()

    def __call__(self, report: Progress) -> None:
        """Show one report of a fit."""
        now = time.monotonic()
        left_s = self._left_s(report, now)
        left = "" if left_s is None else f"{left_text(left_s)} left"
        if left_s is not None and left_s > ANNOUNCED_FROM_S and not self._announced:
            self._announced = True
            memory = f" and {report.peak_bytes / 1e9:.1f} GB of memory" if report.peak_bytes else ""
            self._line(f"The fit will take about {left_text(left_s)}{memory}. Ctrl-C stops it cleanly.")
        share = report.sweeps / max(report.expected_sweeps, 1)
        if self._live:
            self._bar.update(
                self._task, completed=share, description=report.stage, share=f"{100 * share:.0f} %", left=left
            )
        elif now - self._last_shown >= PLAIN_INTERVAL_S:
            self._last_shown = now
            self._line(f"{report.stage}: {100 * share:.0f} %" + (f", about {left}" if left else ""))

    def stage(self, what: str) -> None:
        """Show that something else than a fit is going on, for which no time can be told."""
        if self._live:
            self._bar.update(self._task, description=what, share="", left="")

    def _left_s(self, report: Progress, now: float) -> float | None:
        # The first sweep may hold the time of compilation, so time is counted from its end.
        if self._first is None:
            self._first = (report.sweeps, now)
            return None
        sweeps, elapsed_s = report.sweeps - self._first[0], now - self._first[1]
        if sweeps < MIN_SWEEPS or elapsed_s < MIN_ELAPSED_S:
            return None
        return elapsed_s / sweeps * max(report.expected_sweeps - report.sweeps, 0)

    def _line(self, text: str) -> None:
        if self._live:
            self._bar.console.print(text, markup=False, highlight=False, soft_wrap=True)
        else:
            _write(self._stream, (text,))


def left_text(left_s: float) -> str:
    """A time left as people say it, in whole seconds."""
    return f"{max(round(left_s), 1)} s" if left_s < SECONDS_UP_TO_S else duration_text(left_s)
