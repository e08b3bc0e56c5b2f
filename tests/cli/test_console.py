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
from kernelfit.cli._console import ProgressLine, say, tell, warnings_as_lines
from kernelfit.errors import FitWarning, RecordingWarning
from kernelfit.fitting.progress import Progress


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


def report(sweeps: int, *, peak_bytes: int = 0, stage: str = "climbing") -> Progress:
    return Progress(stage=stage, sweeps=sweeps, expected_sweeps=41, seconds_left=0.0, peak_bytes=peak_bytes)


def shown_at(times_s: list[float], reports: list[Progress], monkeypatch: pytest.MonkeyPatch) -> list[str]:
    """Lines off a terminal when the reports come at these times; the first time is that of the start."""
    clock = iter(times_s)
    monkeypatch.setattr(_console.time, "monotonic", lambda: next(clock))
    stream = io.StringIO()
    progress = ProgressLine(stream)
    for each in reports:
        progress(each)
    return stream.getvalue().splitlines()


def test_progress_is_silent_off_a_terminal_when_the_work_is_short(capsys: pytest.CaptureFixture[str]) -> None:
    with ProgressLine() as progress:
        progress(report(1))
        progress(report(2))
    printed = capsys.readouterr()
    assert printed.out + printed.err == ""


def test_progress_off_a_terminal_is_a_plain_line_now_and_then(monkeypatch: pytest.MonkeyPatch) -> None:
    # Source: by hand. After the first report (its 8 s may be compilation) 10 sweeps take 4 s, so 30 take 12 s.
    lines = shown_at([0.0, 8.0, 12.0, 13.0, 24.0], [report(1), report(11), report(12), report(36)], monkeypatch)
    assert lines == ["climbing: 27 %, about 12 s left", "climbing: 88 %, about 2 s left"]


def test_a_long_fit_is_announced_once_with_time_and_memory(monkeypatch: pytest.MonkeyPatch) -> None:
    # Source: by hand. 10 sweeps take 60 s, so 30 take 180 s.
    reports = [report(1), report(11, peak_bytes=400_000_000), report(12, peak_bytes=400_000_000)]
    lines = shown_at([0.0, 1.0, 61.0, 66.0], reports, monkeypatch)
    assert lines == [
        "The fit will take about 3 min and 0.4 GB of memory. Ctrl-C stops it cleanly.",
        "climbing: 27 %, about 3 min left",
    ]


def test_no_time_is_told_from_a_single_report(monkeypatch: pytest.MonkeyPatch) -> None:
    assert shown_at([0.0, 300.0], [report(1)], monkeypatch) == ["climbing: 2 %"]


def test_progress_on_a_terminal_stays_on_one_line_and_vanishes() -> None:
    stream = Terminal()
    with ProgressLine(stream) as progress:
        progress(report(20, stage="climbing [bold]"))
        progress._bar.refresh()
    shown = stream.getvalue()
    assert "climbing [bold]" in shown
    assert "49 %" in shown
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
