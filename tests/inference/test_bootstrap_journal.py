"""Replicates on disk: interrupted and gone on with, to the bit; files of something else refused."""

from __future__ import annotations

import json
import os
import signal
import subprocess
import sys
import time
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
from worlds import model, simulated

import kernelfit as kf
from kernelfit.errors import OutputError, StorageError
from kernelfit.inference.bootstrap import BlockWeights, OneStep
from kernelfit.inference.bootstrap.journal import FILE_NAME

pytestmark = pytest.mark.filterwarnings("ignore::kernelfit.KernelfitWarning")

TESTS = Path(__file__).parents[1]
SLOW_RUN = """
import sys, warnings
from worlds import model, simulated
if __name__ == "__main__":
    warnings.simplefilter("ignore")
    fit = model().fit(simulated(3, duration_s=60.0))
    fit.bootstrap("block-weights", n_replicates=60, seed=2, jobs=int(sys.argv[2]), folder=sys.argv[1])
"""


@pytest.fixture(scope="module")
def fit():
    return model().fit(simulated(3, duration_s=60.0))


@pytest.fixture(scope="module")
def uninterrupted(fit, tmp_path_factory):
    folder = tmp_path_factory.mktemp("whole")
    return fit.bootstrap("block-weights", n_replicates=60, seed=2, jobs=1, folder=folder), folder


def same(a, b):
    for name in ("replicates", "converged", "at_bound", "own_covariances"):
        np.testing.assert_array_equal(getattr(a, name), getattr(b, name))
    assert a.messages == b.messages


def start(folder, jobs):
    """The run in another process and process group, as from a terminal of its own."""
    return subprocess.Popen(
        [sys.executable, "-c", SLOW_RUN, str(folder), str(jobs)],
        env={**os.environ, "PYTHONPATH": str(TESTS)}, start_new_session=True,
        stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True,
    )  # fmt: skip


def wait_for_lines(process, path, n):
    until = time.monotonic() + 120
    while time.monotonic() < until:
        if path.exists() and path.read_bytes().count(b"\n") > n:
            return
        assert process.poll() is None, process.stderr.read()
        time.sleep(0.005)
    raise AssertionError("the run wrote nothing")


# --- interruptions --------------------------------------------------------------------------------------------


@pytest.mark.skipif(sys.platform == "win32", reason="signals of POSIX")
@pytest.mark.parametrize("jobs", [1, 2])
def test_killed_midway_and_started_again(fit, uninterrupted, tmp_path, jobs):
    path = tmp_path / FILE_NAME
    process = start(tmp_path, jobs)
    wait_for_lines(process, path, 5)
    os.killpg(process.pid, signal.SIGKILL)
    process.communicate()
    n_kept = path.read_bytes().count(b"\n") - 1
    assert 5 <= n_kept < 60
    told = []
    again = fit.bootstrap("block-weights", n_replicates=60, seed=2, jobs=1, folder=tmp_path, progress=told.append)
    assert told[0].done == n_kept
    assert len(told) == 61 - n_kept
    same(again, uninterrupted[0])
    assert path.read_bytes() == (uninterrupted[1] / FILE_NAME).read_bytes()


@pytest.mark.skipif(sys.platform == "win32", reason="signals of POSIX")
@pytest.mark.parametrize("jobs", [1, 2])
def test_interrupt_from_the_keyboard(uninterrupted, tmp_path, jobs):
    """Stops at once, keeps what is finished, says so, and leaves no process behind."""
    path = tmp_path / FILE_NAME
    process = start(tmp_path, jobs)
    wait_for_lines(process, path, 5)
    os.killpg(process.pid, signal.SIGINT)
    _, said = process.communicate(timeout=30)
    assert process.returncode in (130, -signal.SIGINT)
    whole = (uninterrupted[1] / FILE_NAME).read_bytes()
    assert whole.startswith(path.read_bytes())
    assert 5 <= path.read_bytes().count(b"\n") - 1 < 60
    assert f"of 60 replicates are in {path}; the same call goes on" in said
    until = time.monotonic() + 10
    while time.monotonic() < until:
        try:
            os.killpg(process.pid, 0)
        except ProcessLookupError:
            return
        time.sleep(0.1)
    raise AssertionError("worker processes are still there")


def test_a_torn_last_line_is_taken_off(fit, uninterrupted, tmp_path):
    whole = (uninterrupted[1] / FILE_NAME).read_bytes()
    lines = whole.splitlines(keepends=True)
    for kept in (
        b"".join(lines[:4]) + lines[4][:30],
        lines[0][:25],
        b"",
        b"".join(lines[:3]) + b'{"replicate":2,"con\n',
    ):
        (tmp_path / FILE_NAME).write_bytes(kept)
        same(
            fit.bootstrap("block-weights", n_replicates=5, seed=2, jobs=1, folder=tmp_path), first(uninterrupted[0], 5)
        )
        assert (tmp_path / FILE_NAME).read_bytes() == b"".join(lines[:6])


def first(boot, n):
    return replace(
        boot,
        replicates=boot.replicates[:n], converged=boot.converged[:n], at_bound=boot.at_bound[:n],
        own_covariances=boot.own_covariances[:n], messages=boot.messages[:n],
    )  # fmt: skip


def test_more_and_fewer_replicates_than_before(fit, uninterrupted, tmp_path):
    few = fit.bootstrap("block-weights", n_replicates=4, seed=2, jobs=1, folder=tmp_path)
    same(few, first(uninterrupted[0], 4))
    told = []
    more = fit.bootstrap("block-weights", n_replicates=7, seed=2, jobs=1, folder=tmp_path, progress=told.append)
    assert [p.done for p in told] == [4, 5, 6, 7]
    same(more, first(uninterrupted[0], 7))
    same(fit.bootstrap("block-weights", n_replicates=2, seed=2, jobs=1, folder=tmp_path), first(uninterrupted[0], 2))


# --- what is written ------------------------------------------------------------------------------------------


def test_failed_replicates_come_back_too(fit, tmp_path, monkeypatch):
    from kernelfit.inference.bootstrap.block_weights import WeightedReplicator
    from kernelfit.inference.bootstrap.kind import Replicate

    sound = WeightedReplicator.with_weights

    def sometimes(self, weight):
        return Replicate.failed(3, 'no "step"\nleads on µ') if weight[0] > 1 else sound(self, weight)

    monkeypatch.setattr(WeightedReplicator, "with_weights", sometimes)
    made = fit.bootstrap("block-weights", n_replicates=8, jobs=1, folder=tmp_path)
    assert 0 < made.n_failed < 8
    monkeypatch.undo()
    read = fit.bootstrap("block-weights", n_replicates=8, jobs=1, folder=tmp_path)
    same(read, made)
    assert np.isnan(read.replicates[~read.converged]).all()


def test_one_step_replicates_too(fit, tmp_path):
    made = fit.bootstrap("one-step", n_replicates=30, folder=tmp_path)
    same(fit.bootstrap("one-step", n_replicates=30, folder=tmp_path), made)
    same(fit.bootstrap("one-step", n_replicates=30), made)


def test_first_line_says_whose_they_are(fit, uninterrupted):
    head = json.loads((uninterrupted[1] / FILE_NAME).read_text().splitlines()[0])
    assert head["format"] == "kernelfit bootstrap replicates"
    assert head["kernelfit"] == kf.__version__
    assert (head["kind"], head["law"], head["seed"]) == ("block-weights", "exponential", 2)
    assert head["fit"].startswith("gaussian kernel, ")
    assert head["recording"].startswith(f"9 units, {fit.counts.sum()} spikes, ")


def test_a_fit_loaded_or_with_another_covariance_is_the_same_fit(fit, tmp_path):
    fit.save(tmp_path / "fit.json")
    made = fit.bootstrap("one-step", n_replicates=5, folder=tmp_path / "b")
    loaded = kf.load_fit(tmp_path / "fit.json").with_covariance("model")
    same(loaded.bootstrap("one-step", n_replicates=5, folder=tmp_path / "b"), made)


# --- refusals -------------------------------------------------------------------------------------------------


def test_a_folder_of_other_replicates_is_refused(fit, tmp_path):
    fit.bootstrap("one-step", n_replicates=3, folder=tmp_path)
    other = model().fit(simulated(4, duration_s=60.0))
    for attempt, said in (
        (lambda: fit.bootstrap("one-step", n_replicates=3, seed=1, folder=tmp_path), r"seed 0.*asked for.*seed 1"),
        (lambda: fit.bootstrap(OneStep("mammen"), folder=tmp_path), r"\(exponential\).*asked for.*\(mammen\)"),
        (
            lambda: fit.bootstrap(BlockWeights(), n_replicates=1, jobs=1, folder=tmp_path),
            "'one-step'.*asked for.*'block-weights'",
        ),
        (lambda: other.bootstrap("one-step", folder=tmp_path), r"9 units, (\d+) spikes.*asked for.*9 units, (?!\1)"),
    ):
        with pytest.raises(StorageError, match=said):
            attempt()


def test_another_version_is_refused(fit, tmp_path):
    fit.bootstrap("one-step", n_replicates=3, folder=tmp_path)
    path = tmp_path / FILE_NAME
    path.write_text(path.read_text().replace(f'"kernelfit":"{kf.__version__}"', '"kernelfit":"0.0.9"'))
    with pytest.raises(StorageError, match=r"kernelfit 0\.0\.9.*asked for"):
        fit.bootstrap("one-step", n_replicates=3, folder=tmp_path)


@pytest.mark.parametrize("text", ["", "hello\n", "[1, 2]\n", '{"format": "other"}\n'])
def test_a_foreign_file_is_refused(fit, tmp_path, text):
    (tmp_path / FILE_NAME).write_text(text + "more\nlines\n")
    with pytest.raises(StorageError, match=FILE_NAME):
        fit.bootstrap("one-step", n_replicates=3, folder=tmp_path)
    assert (tmp_path / FILE_NAME).read_text() == text + "more\nlines\n"


def test_a_damaged_line_in_the_middle_is_named(fit, tmp_path):
    fit.bootstrap("one-step", n_replicates=5, folder=tmp_path)
    path = tmp_path / FILE_NAME
    lines = path.read_text().splitlines(keepends=True)
    lines[2] = lines[2][:40] + "\n"
    path.write_text("".join(lines))
    with pytest.raises(StorageError, match="row 3"):
        fit.bootstrap("one-step", n_replicates=5, folder=tmp_path)


def test_a_folder_that_cannot_be(fit, tmp_path):
    (tmp_path / "file").write_text("")
    with pytest.raises(OutputError, match="cannot be written"):
        fit.bootstrap("one-step", n_replicates=3, folder=tmp_path / "file")
