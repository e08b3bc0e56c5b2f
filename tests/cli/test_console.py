"""What the commands print: plain where it must be plain, one line of progress, warnings as lines.

Expected values are the rules at the head of kernelfit/cli/_console.py; times left are hand-sized.
"""

from __future__ import annotations

import io
import os
import sys
import warnings

import pytest

from kernelfit.cli import _console
from kernelfit.cli._console import ProgressLine, say, tell, time_left_s, warnings_as_lines
from kernelfit.errors import FitWarning, RecordingWarning


class Terminal(io.StringIO):
    """A stream that says it is a terminal."""

    encoding = "utf-8"

    def isatty(self) -> bool:
        return True


def test_results_and_remarks_go_to_different_streams(capsys: pytest.CaptureFixture[str]) -> None:
    say("a result", "another")
    tell("a remark")
    printed = capsys.readouterr()
    assert printed.out == "a result\nanother\n"
    assert printed.err == "a remark\n"


def test_control_characters_are_shown_as_escapes(capsys: pytest.CaptureFixture[str]) -> None:
    say("\x1b[31mred\r\n[bold]")
    assert capsys.readouterr().out == "\\x1b[31mred\\r\\n[bold]\n"


def test_what_an_encoding_lacks_is_escaped(monkeypatch: pytest.MonkeyPatch) -> None:
    raw = io.BytesIO()
    monkeypatch.setattr(sys, "stdout", io.TextIOWrapper(raw, encoding="ascii"))
    say("180 µm")
    assert raw.getvalue() == b"180 \\xb5m\n"


def test_closed_pipe_ends_the_printing_only(monkeypatch: pytest.MonkeyPatch) -> None:
    reading, writing = os.pipe()
    os.close(reading)
    with os.fdopen(writing, "w") as stream:
        monkeypatch.setattr(sys, "stdout", stream)
        say("nobody reads this")
        say("nor this")


# Source: by hand. A quarter in 10 s leaves three quarters, 30 s.
@pytest.mark.parametrize(
    ("done", "elapsed_s", "left_s"),
    [(0.25, 10.0, 30.0), (1.0, 10.0, 0.0), (0.0, 10.0, None), (0.5, 0.2, None), (1.5, 3.0, 0.0)],
)
def test_time_left(done: float, elapsed_s: float, left_s: float | None) -> None:
    assert time_left_s(done, elapsed_s) == pytest.approx(left_s)


def test_progress_is_silent_off_a_terminal_when_the_work_is_short(capsys: pytest.CaptureFixture[str]) -> None:
    with ProgressLine() as progress:
        progress(0.5, "Fitting")
    printed = capsys.readouterr()
    assert printed.out + printed.err == ""


def test_progress_off_a_terminal_is_a_plain_line_now_and_then(monkeypatch: pytest.MonkeyPatch) -> None:
    clock = iter([0.0, 11.0, 12.0, 25.0])
    monkeypatch.setattr(_console.time, "monotonic", lambda: next(clock))
    stream = io.StringIO()
    progress = ProgressLine(stream)
    progress(0.25, "Fitting")  # at 11 s
    progress(0.26, "Fitting")  # at 12 s: too soon for another line
    progress(0.50, "Fitting")  # at 25 s
    assert stream.getvalue().splitlines() == [
        "Fitting: 25 %, about 33 s left",
        "Fitting: 50 %, about 25 s left",
    ]


def test_progress_on_a_terminal_stays_on_one_line_and_vanishes() -> None:
    stream = Terminal()
    with ProgressLine(stream) as progress:
        progress(0.5, "Fitting [bold]")
        progress._bar.refresh()
    shown = stream.getvalue()
    assert "Fitting [bold]" in shown
    assert "50 %" in shown
    assert shown.rstrip().endswith("\x1b[2K"), "the line is erased at the end"


def test_warnings_of_the_package_are_plain_lines(capsys: pytest.CaptureFixture[str]) -> None:
    with warnings_as_lines():
        warnings.warn("two windows were joined", RecordingWarning, stacklevel=1)
        warnings.warn("the notes of the fit say this", FitWarning, stacklevel=1)
    assert capsys.readouterr().err == "warning: two windows were joined\n"


def test_how_warnings_are_shown_is_put_back() -> None:
    before = warnings.showwarning
    with warnings_as_lines():
        assert warnings.showwarning is not before
    assert warnings.showwarning is before
