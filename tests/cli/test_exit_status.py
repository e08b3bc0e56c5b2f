"""Exit statuses of the command line that are not about bad input.

Expected values are the contract: 0 done, 1 our own fault, 3 not converged, 130 interrupted.
"""

from __future__ import annotations

import os
import re
import subprocess
import sys
from pathlib import Path
from typing import NoReturn

import pytest

import kernelfit
from kernelfit.cli import main
from kernelfit.errors import NotConvergedError

SPIKES = "unit,time_s\n" + "".join(f"{u},{k + 0.1 * j}\n" for k in range(30) for j, u in enumerate("abc"))
SITES = "unit,x_um,y_um\na,0,0\nb,100,0\nc,0,100\n"


@pytest.fixture
def call(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> list[str]:
    """A good call of `fit` in a folder of its own."""
    monkeypatch.chdir(tmp_path)
    (tmp_path / "spikes.csv").write_text(SPIKES)
    (tmp_path / "sites.csv").write_text(SITES)
    return ["fit", "spikes.csv", "sites.csv"]


def failing_with(error: BaseException, monkeypatch: pytest.MonkeyPatch) -> None:
    def fail(*_: object, **__: object) -> NoReturn:
        raise error

    monkeypatch.setattr("kernelfit.cli.fit.fit_and_write", fail)


def run(*arguments: str, cwd: Path | None = None) -> subprocess.CompletedProcess[str]:
    command = [sys.executable, "-c", "import sys; from kernelfit.cli import main; sys.exit(main())", *arguments]
    return subprocess.run(command, cwd=cwd, capture_output=True, text=True, check=False, timeout=120)


def test_version(capsys: pytest.CaptureFixture[str]) -> None:
    assert main(["--version"]) == 0
    assert capsys.readouterr().out == f"kernelfit {kernelfit.__version__}\n"


@pytest.mark.parametrize("command", [[], ["fit"], ["demo"], ["inspect"]], ids=" ".join)
def test_help_is_plain_and_on_standard_output(command: list[str], capsys: pytest.CaptureFixture[str]) -> None:
    assert main([*command, "--help"]) == 0
    printed = capsys.readouterr()
    assert printed.out.startswith("Usage: kernelfit")
    assert not set("│╭╰\x1b") & set(printed.out)
    assert printed.err == ""


@pytest.mark.parametrize(
    ("command", "usage"),
    [
        (["inspect"], "Usage: kernelfit inspect SPIKES SITES [OPTIONS]"),
        (["fit"], "Usage: kernelfit fit SPIKES SITES [OPTIONS]"),
        (["demo"], "Usage: kernelfit demo [OPTIONS]"),
    ],
)
def test_usage_reads_as_it_is_typed(command: list[str], usage: str, capsys: pytest.CaptureFixture[str]) -> None:
    assert main([*command, "--help"]) == 0
    shown = capsys.readouterr().out
    assert shown.splitlines()[0] == usage
    assert not set("{}") & set(shown)


def test_the_list_of_commands_is_not_cut_short(capsys: pytest.CaptureFixture[str]) -> None:
    assert main(["--help"]) == 0
    assert "..." not in capsys.readouterr().out.replace("[ARGS]...", "")


@pytest.mark.parametrize("command", ["inspect", "fit"])
def test_numbers_of_options_have_their_unit_and_their_default(command: str, capsys: pytest.CaptureFixture[str]) -> None:
    """An option with a placeholder says in which unit, and what holds without it; tables and ids need neither."""
    assert main([command, "--help"]) == 0
    entries = capsys.readouterr().out.partition("Options:")[2].split("\n  --")[1:]
    said = {"--" + entry.split()[0]: " ".join(entry.split()) for entry in entries}
    units = {"--bin-ms": "milliseconds", "--warm-up-s": "Seconds", "--start-s": "seconds", "--stop-s": "seconds"}
    units |= {"--leak-rate": "1/s", "--max-distance-um": "µm", "--raster-start-s": "seconds"}
    for option, unit in units.items():
        assert option not in said or unit in said[option]
    for option in ("--kernel", "--bin-ms", "--link", "--same-site", "--after-spike", "--warm-up-s", "--intervals"):
        assert option not in said or "[default: " in said[option]
    for option in ("--max-distance-um", "--threads", "--windows", "--raster-start-s"):
        assert option not in said or "Without it" in said[option]


def test_every_option_of_fit_has_a_help_text(capsys: pytest.CaptureFixture[str]) -> None:
    main(["fit", "--help"])
    options = [line for line in capsys.readouterr().out.splitlines() if line.startswith("  --")]
    assert len(options) >= 28
    for line in options:
        name_and_help = re.split(r"\s{2,}", line.strip(), maxsplit=1)
        assert len(name_and_help) == 2, line


def test_own_fault_is_status_1_with_a_record(
    call: list[str], monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str], tmp_path: Path
) -> None:
    monkeypatch.setattr("tempfile.tempdir", str(tmp_path))
    failing_with(ZeroDivisionError("a mistake of ours"), monkeypatch)
    assert main(call) == 1
    said = capsys.readouterr().err
    assert "fault of kernelfit, not of your input: ZeroDivisionError: a mistake of ours" in said
    assert "report it" in said
    assert "Traceback" not in said
    (record,) = tmp_path.glob("kernelfit-fault-*.txt")
    assert str(record) in said
    text = record.read_text(encoding="utf-8")
    assert "Traceback" in text
    assert "ZeroDivisionError: a mistake of ours" in text
    assert kernelfit.__version__ in text
    assert "'spikes.csv'" in text


def test_own_fault_is_shown_where_no_record_can_be_written(
    call: list[str], monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str], tmp_path: Path
) -> None:
    monkeypatch.setattr("tempfile.tempdir", str(tmp_path / "absent"))
    failing_with(ZeroDivisionError("a mistake of ours"), monkeypatch)
    assert main(call) == 1
    assert "Traceback" in capsys.readouterr().err


def test_interruption_is_status_130(
    call: list[str], monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str], tmp_path: Path
) -> None:
    failing_with(KeyboardInterrupt(), monkeypatch)
    assert main(call) == 130
    said = capsys.readouterr().err
    assert "Interrupted. No results were written." in said
    assert "Traceback" not in said
    assert sorted(p.name for p in tmp_path.iterdir()) == ["sites.csv", "spikes.csv"]


def test_no_optimum_is_status_3(call: list[str], monkeypatch: pytest.MonkeyPatch) -> None:
    failing_with(NotConvergedError("nothing to stand on"), monkeypatch)
    assert main(call) == 3


def test_wrong_call_through_the_process(tmp_path: Path) -> None:
    result = run("fit", "nowhere.csv", "sites.csv", cwd=tmp_path)
    assert result.returncode == 2
    assert "nowhere.csv" in result.stderr
    assert "Traceback" not in result.stderr
    assert result.stdout == ""
    assert list(tmp_path.iterdir()) == []


def test_message_lines_are_not_wrapped(tmp_path: Path) -> None:
    name = "a-rather-long-name-" * 8 + ".csv"
    result = run("fit", name, "sites.csv", cwd=tmp_path)
    assert result.returncode == 2
    assert any(line.count(name) and len(line) > 150 for line in result.stderr.splitlines())


@pytest.mark.parametrize(
    "name",
    ["a b.csv", "[bold]x[/bold].csv", "%s %d.csv", "ü-漢-🐟.csv", "line\nbreak.csv", "\x1b[31mred.csv", "$(ls).csv"],
)
def test_hostile_names_are_named_harmlessly(
    name: str, tmp_path: Path, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    monkeypatch.chdir(tmp_path)
    assert main(["fit", name, "sites.csv"]) == 2
    said = capsys.readouterr().err
    assert "\x1b" not in said
    assert ".csv" in said
    assert "Traceback" not in said


@pytest.mark.skipif(os.name != "posix", reason="file names are bytes only there")
def test_name_that_is_no_text_is_refused(tmp_path: Path) -> None:
    name = os.fsdecode(b"\xff\xfe.csv")
    result = run("fit", name, "sites.csv", cwd=tmp_path)
    assert result.returncode == 2
    assert "Traceback" not in result.stderr


def test_name_that_begins_with_a_dash_can_be_given(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    monkeypatch.chdir(tmp_path)
    assert main(["fit", "--", "-spikes.csv", "sites.csv"]) == 2
    assert "-spikes.csv" in capsys.readouterr().err


@pytest.mark.skipif(os.name != "posix", reason="pipes of a shell")
def test_a_reader_that_goes_away_is_no_failure(tmp_path: Path) -> None:
    reading, writing = os.pipe()
    os.close(reading)
    command = [sys.executable, "-c", "import sys; from kernelfit.cli import main; sys.exit(main())", "fit", "--help"]
    with os.fdopen(writing, "w") as closed:
        result = subprocess.run(command, stdout=closed, stderr=subprocess.PIPE, text=True, check=False, timeout=120)
    assert result.returncode == 0, result.stderr
    assert result.stderr == ""
