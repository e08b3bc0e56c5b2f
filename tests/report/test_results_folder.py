"""A results folder appears whole or not at all, and never takes anybody else's files with it."""

from __future__ import annotations

import os
import sys

import pytest

from kernelfit.errors import OutputError
from kernelfit.report import folder as folder_module
from kernelfit.report.folder import FileEntry, ResultsFolder, check_folder, files_list


def write(path, text="one", **options):
    with ResultsFolder(path, **options) as results:
        results.write_text("report.html", text, "the page")
        results.write_text("figures/a.svg", text, "a figure")


def everything_in(path):
    return sorted(p.relative_to(path).as_posix() for p in path.rglob("*"))


def test_the_folder_appears_with_a_list_of_its_files(tmp_path):
    write(tmp_path / "a" / "b" / "out")
    out = tmp_path / "a" / "b" / "out"
    assert everything_in(out) == ["contents.csv", "figures", "figures/a.svg", "report.html"]
    assert (out / "contents.csv").read_text().splitlines()[0] == "file,what"
    assert everything_in(tmp_path / "a" / "b") == ["out", *(f"out/{n}" for n in everything_in(out))]


@pytest.mark.parametrize("interruption", [KeyboardInterrupt, RuntimeError, SystemExit])
def test_an_interruption_leaves_nothing(tmp_path, interruption):
    def broken():
        with ResultsFolder(tmp_path / "a" / "out") as results:
            results.write_text("report.html", "half", "the page")
            raise interruption

    with pytest.raises(interruption):
        broken()
    assert everything_in(tmp_path) == []


def test_an_interruption_leaves_earlier_results(tmp_path):
    write(tmp_path / "out", "first")

    def broken():
        with ResultsFolder(tmp_path / "out", overwrite=True) as results:
            results.write_text("report.html", "half", "the page")
            raise KeyboardInterrupt

    with pytest.raises(KeyboardInterrupt):
        broken()
    assert (tmp_path / "out" / "report.html").read_text() == "first"
    assert os.listdir(tmp_path) == ["out"]


def test_nothing_is_seen_before_the_end(tmp_path):
    with ResultsFolder(tmp_path / "out") as results:
        results.write_text("report.html", "x", "the page")
        assert not (tmp_path / "out").exists()
    assert (tmp_path / "out").exists()


def test_a_folder_with_contents_is_refused_and_left_alone(tmp_path):
    (tmp_path / "notes.txt").write_text("mine")
    with pytest.raises(OutputError, match="not empty"):
        write(tmp_path)
    assert everything_in(tmp_path) == ["notes.txt"]


def test_an_empty_folder_is_taken(tmp_path):
    (tmp_path / "out").mkdir()
    write(tmp_path / "out")
    assert (tmp_path / "out" / "report.html").exists()


def test_overwriting_replaces_all_of_earlier_results(tmp_path):
    with ResultsFolder(tmp_path / "out") as results:
        results.write_text("old.csv", "old", "of an earlier fit")
    write(tmp_path / "out", "second", overwrite=True)
    assert not (tmp_path / "out" / "old.csv").exists()
    assert (tmp_path / "out" / "report.html").read_text() == "second"
    assert os.listdir(tmp_path) == ["out"]


@pytest.mark.parametrize("name", ["mine.txt", "figures/mine.png", "deep/er/mine.txt"])
def test_overwriting_refuses_to_delete_what_is_not_ours(tmp_path, name):
    write(tmp_path / "out")
    (tmp_path / "out" / name).parent.mkdir(parents=True, exist_ok=True)
    (tmp_path / "out" / name).write_text("mine")
    with pytest.raises(OutputError, match=name):
        write(tmp_path / "out", "second", overwrite=True)
    assert (tmp_path / "out" / name).read_text() == "mine"
    assert (tmp_path / "out" / "report.html").read_text() == "one"


def test_overwriting_refuses_a_folder_that_was_never_ours(tmp_path):
    (tmp_path / "report.html").write_text("somebody's")
    with pytest.raises(OutputError, match=r"report\.html"):
        write(tmp_path, overwrite=True)
    assert (tmp_path / "report.html").read_text() == "somebody's"


def test_overwriting_keeps_empty_folders_of_others_safe(tmp_path):
    write(tmp_path / "out")
    (tmp_path / "out" / "mine").mkdir()
    with pytest.raises(OutputError, match="mine"):
        write(tmp_path / "out", overwrite=True)


def test_what_file_browsers_leave_does_not_count(tmp_path):
    write(tmp_path / "out")
    (tmp_path / "out" / ".DS_Store").write_text("")
    write(tmp_path / "out", "second", overwrite=True)
    assert (tmp_path / "out" / "report.html").read_text() == "second"


def test_a_failed_move_brings_the_earlier_results_back(tmp_path, monkeypatch):
    write(tmp_path / "out", "first")
    real = os.replace

    def failing(source, target):
        if ".part-" in os.fspath(source):
            raise OSError(16, "Device or resource busy")
        real(source, target)

    monkeypatch.setattr(folder_module.os, "replace", failing)
    with pytest.raises(OutputError, match="busy"):
        write(tmp_path / "out", "second", overwrite=True)
    assert (tmp_path / "out" / "report.html").read_text() == "first"
    assert os.listdir(tmp_path) == ["out"]


def test_a_file_in_the_way_is_refused(tmp_path):
    (tmp_path / "out").write_text("a file")
    with pytest.raises(OutputError, match="a file"):
        write(tmp_path / "out")
    with pytest.raises(OutputError, match="a file"):
        write(tmp_path / "out" / "deeper")


def test_a_name_cannot_leave_the_folder(tmp_path):
    def broken():
        with ResultsFolder(tmp_path / "out") as results:
            results.write_text("../beside.txt", "x", "x")

    with pytest.raises(OutputError, match="outside"):
        broken()
    assert everything_in(tmp_path) == []


def test_the_check_can_be_made_before_a_long_computation(tmp_path):
    check_folder(tmp_path / "new")
    assert not (tmp_path / "new").exists()
    write(tmp_path / "out")
    with pytest.raises(OutputError):
        check_folder(tmp_path / "out")
    check_folder(tmp_path / "out", overwrite=True)


@pytest.mark.skipif(sys.platform == "win32" or os.geteuid() == 0, reason="root may write anywhere")
def test_a_place_without_permission_is_an_output_error(tmp_path):
    (tmp_path / "locked").mkdir(mode=0o500)
    with pytest.raises(OutputError, match="cannot write"):
        write(tmp_path / "locked" / "out")


@pytest.mark.parametrize("name", ["x" * 245, "x" * 300])
def test_a_name_that_is_too_long_is_refused_before_a_long_computation(tmp_path, name):
    """A folder name may have 255 bytes; the hidden one beside it is 15 longer."""
    with pytest.raises(OutputError, match="cannot write there: File name too long"):
        check_folder(tmp_path / name)
    assert list(tmp_path.iterdir()) == []


@pytest.mark.skipif(not os.path.isdir("/proc"), reason="a place where nobody may write")
def test_a_place_where_nobody_may_write_is_refused_before_a_long_computation():
    with pytest.raises(OutputError, match="/proc/results: cannot write there: "):
        check_folder("/proc/results")


def test_results_get_the_usual_permissions(tmp_path):
    (tmp_path / "plain").mkdir()
    write(tmp_path / "out")
    assert (tmp_path / "out").stat().st_mode == (tmp_path / "plain").stat().st_mode


def test_a_page_lists_the_two_forms_of_a_figure_in_one_row():
    files = (FileEntry("a.csv", "numbers"), FileEntry("figures/k.svg", "kernel"), FileEntry("figures/k.png", "kernel"))
    assert files_list(files).rows == (("a.csv", "numbers"), ("figures/k.svg, .png", "kernel"))
    assert files_list(files[2:]).rows == (("figures/k.png", "kernel"),)
