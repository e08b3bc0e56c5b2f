"""Make the replicates: each from its own random numbers, in processes, kept on disk as they come.

Replicate k draws from child k of the seed's `SeedSequence` and from nothing else. Results are the same to the bit for
any number of processes, after any interruption, and whatever number of replicates was asked for first.
"""

from __future__ import annotations

import os
import time
from collections.abc import Callable, Iterator, Sequence
from contextlib import closing
from dataclasses import dataclass
from pathlib import Path

import numpy as np
from joblib import Parallel, delayed

from kernelfit._validation import check_callback, check_seed, check_whole, given_as
from kernelfit.errors import ArgumentError, NotConvergedError
from kernelfit.fitting.result import CouplingFit
from kernelfit.inference.bootstrap.journal import Journal, header
from kernelfit.inference.bootstrap.kind import BootstrapKind, Replicate, Replicator
from kernelfit.inference.bootstrap.registry import kind_from
from kernelfit.inference.bootstrap.result import Bootstrap
from kernelfit.recording.recording import Recording, check_recording


@dataclass(frozen=True, slots=True)
class BootstrapProgress:
    """One report of progress.

    Parameters
    ----------
    done, n_replicates : replicates finished, those found on disk included, and asked for
    n_failed : of those finished, how many gave no estimate
    seconds_left : rough, from the replicates made so far; 0 when done
    """

    done: int
    n_replicates: int
    n_failed: int
    seconds_left: float


BootstrapProgressCallback = Callable[[BootstrapProgress], None]


def bootstrap(
    fit: CouplingFit,
    kind: str | BootstrapKind,
    *,
    n_replicates: int,
    seed: int,
    recording: Recording | None,
    jobs: int | None,
    folder: str | Path | None,
    progress: BootstrapProgressCallback | None,
) -> Bootstrap:
    """Replicates of a fit; see `CouplingFit.bootstrap`."""
    kind = kind_from(kind)
    _check_call(n_replicates, seed, recording, jobs, folder, progress)
    _check_converged(fit)
    replicator = kind.replicator(fit, recording)
    collected = _Collected(n_replicates, progress)
    if folder is None:
        for number, replicate in _made(replicator, range(n_replicates), seed, jobs):
            collected.add(number, replicate)
        return _result(fit, kind, seed, collected)
    with Journal(Path(folder), header(fit, kind, seed), fit.shared.size) as journal:
        collected.start_with({k: r for k, r in journal.finished.items() if k < n_replicates})
        left = [k for k in range(n_replicates) if k not in collected.replicates]
        try:
            for number, replicate in _made(replicator, left, seed, jobs):
                journal.append(number, replicate)
                collected.add(number, replicate)
        except KeyboardInterrupt as stop:
            kept = f"{len(collected.replicates)} of {n_replicates} replicates are in {journal.path}"
            stop.add_note(f"{kept}; the same call goes on.")
            raise
    return _result(fit, kind, seed, collected)


def _check_call(
    n_replicates: object, seed: object, recording: object, jobs: object, folder: object, progress: object
) -> None:
    check_whole(n_replicates, "n_replicates", 1)
    check_seed(seed)
    if recording is not None:
        check_recording(recording)
    if jobs is not None:
        check_whole(jobs, "jobs", 1, ", or None for as many processes as the machine has")
    if folder is not None and not isinstance(folder, (str, os.PathLike)):
        raise ArgumentError(f"{given_as('folder', folder)} is no path. Name a folder to keep the replicates in.")
    check_callback(progress)


def _check_converged(fit: CouplingFit) -> None:
    if not fit.converged:
        raise NotConvergedError(
            f"{fit.origin.name('spikes')}: the fit did not reach an optimum ({fit.solver.message}), so its replicates "
            "would not scatter around one. See fit.notes."
        )


@dataclass(eq=False)
class _Collected:
    """The replicates so far, by number, and what the caller hears of them."""

    n_replicates: int
    progress: BootstrapProgressCallback | None

    def __post_init__(self) -> None:
        self.replicates: dict[int, Replicate] = {}
        self.n_failed = 0
        self.n_found = 0
        self.started = time.monotonic()

    def start_with(self, found: dict[int, Replicate]) -> None:
        """Those that were on disk."""
        self.replicates.update(found)
        self.n_found = len(found)
        self.n_failed = sum(not r.converged for r in found.values())
        if found:
            self._report()

    def add(self, number: int, replicate: Replicate) -> None:
        """One more."""
        self.replicates[number] = replicate
        self.n_failed += not replicate.converged
        self._report()

    def _report(self) -> None:
        if self.progress is None:
            return
        done = len(self.replicates)
        made, left = done - self.n_found, self.n_replicates - done
        pace_s = (time.monotonic() - self.started) / made if made else 0.0
        self.progress(BootstrapProgress(done, self.n_replicates, self.n_failed, pace_s * left))


def _made(
    replicator: Replicator, numbers: Sequence[int], seed: int, jobs: int | None
) -> Iterator[tuple[int, Replicate]]:
    """Replicates of these numbers, in this order."""
    n_jobs = min(jobs or os.cpu_count() or 1, max(len(numbers), 1))
    if n_jobs == 1 or not replicator.refits:
        for number in numbers:
            yield number, _one(replicator, seed, number)
        return
    # Arrays are sent as they are: mapped from a file they would be read-only, for which the loops are not compiled.
    parallel = Parallel(n_jobs=n_jobs, prefer="processes", return_as="generator", max_nbytes=None)
    with closing(parallel(delayed(_one)(replicator, seed, number) for number in numbers)) as results:
        yield from zip(numbers, results, strict=True)


def _one(replicator: Replicator, seed: int, number: int) -> Replicate:
    return replicator.replicate(np.random.default_rng(np.random.SeedSequence(seed, spawn_key=(number,))))


def _result(fit: CouplingFit, kind: BootstrapKind, seed: int, collected: _Collected) -> Bootstrap:
    made = [collected.replicates[k] for k in range(collected.n_replicates)]
    nothing = np.full((fit.shared.size, fit.shared.size), np.nan)
    return Bootstrap(
        fit=fit,
        kind=kind,
        seed=int(seed),
        replicates=np.array([r.shared for r in made]),
        converged=np.array([r.converged for r in made], dtype=bool),
        at_bound=np.array([r.at_bound for r in made]),
        own_covariances=np.array([nothing if r.covariance is None else r.covariance for r in made]),
        messages=tuple(r.message for r in made),
    )
