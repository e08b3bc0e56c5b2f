"""What the reader of a fit must be told, in words, from what happened while it was made."""

from __future__ import annotations

import numpy as np

from kernelfit.fitting.bounds import bound_reasons, in_words, run_off_parameters, shared_names
from kernelfit.fitting.covariance import REFUSED_BELOW, Uncertainty
from kernelfit.fitting.detection import CouplingVerdict
from kernelfit.fitting.maximise import RIDGE_GAIN, RIDGE_STEPS, Optimum
from kernelfit.fitting.outcome import Note, Severity
from kernelfit.fitting.problem import SLOWEST_LEAK_SHARE, Problem
from kernelfit.recording.activity import gaps, longest_break, paused
from kernelfit.recording.findings import counted, names, number, seconds
from kernelfit.recording.merged import merge_trains
from kernelfit.recording.recording import Recording

WIDE_BINS = 0.5  # alpha D above this: the bins are too wide for the leak found (docs/model.md section 3)
FEW_BLOCKS = 30


def fit_notes(
    problem: Problem, recording: Recording, optimum: Optimum, spread: Uncertainty, verdict: CouplingVerdict
) -> tuple[Note, ...]:
    """Everything worth saying about a fit, gravest first."""
    notes: list[Note] = []
    names = shared_names(problem)
    if not optimum.converged:
        notes.append(
            Note(
                "error",
                f"The fit did not converge: {optimum.message}.",
                "optimiser",
                "Treat every number with caution. Try a simpler kernel, wider bins, or a fixed leak rate "
                "(leak_rate=..., --leak-rate).",
            )
        )
    elif optimum.on_ridge:
        notes.append(
            Note(
                "info",
                f"The climb ended on a ridge, not at a sharp top: its last {RIDGE_STEPS} steps raised the "
                f"log-likelihood by less than {RIDGE_GAIN:g} in all. Along it other values of the parameters describe "
                "the recording as well as those that are stated.",
                "optimiser",
                "Read the intervals rather than the estimates, and fit.profile(...) for how far the ridge goes; a "
                "kernel with fewer parameters may have a top.",
            )
        )
    if not verdict.found:
        notes.append(
            Note("warning", verdict.sentence, "coupling", "Record longer, or look at fewer, more active units.")
        )
    if spread.weak_direction is not None:
        parts = np.abs(spread.weak_direction)
        named = [names[q] for q in np.flatnonzero(parts > 0.3 * np.nanmax(parts))]
        said = in_words(named, article=True)
        notes.append(
            Note(
                "warning",
                f"The recording cannot tell {said} apart: some combination of them changes nothing."
                if len(named) > 1
                else f"The recording says nothing about {said}.",
                in_words(named),
                "Use a kernel with fewer parameters, or fix the leak rate (leak_rate=..., --leak-rate).",
            )
        )
    reasons = bound_reasons(problem, optimum)
    run_off = run_off_parameters(problem, optimum)
    for q in np.flatnonzero(optimum.at_bound):
        word = in_words([names[q]])
        start = in_words([names[q]], article=True).capitalize()
        if run_off[q]:
            remedy = "Record longer, or use a kernel with fewer parameters."
            severity: Severity = "warning" if verdict.found else "info"
            notes.append(Note(severity, f"{start} has no estimate: {reasons[q]}.", word, remedy))
        elif verdict.found:
            remedy = "It has no interval; do not quote it."
            notes.append(Note("warning", f"{start} ran into its bound: {reasons[q]}.", word, remedy))
    leak = problem.leak(optimum.estimate.shared)
    if verdict.found and leak * problem.data.bin_width > WIDE_BINS:
        notes.append(
            Note(
                "warning",
                f"The bins of {1000 * problem.data.bin_width:g} ms are too wide for the time constant "
                f"found, {1000 / leak:.3g} ms.",
                "bin width",
                f"Refit with bins of at most {1000 * WIDE_BINS / leak:.2g} ms.",
            )
        )
    if not problem.fits_leak and leak < problem.leak_limits[0]:
        notes.append(
            Note(
                "warning",
                f"The time constant stated, {seconds(1 / leak)}, is above 1/{SLOWEST_LEAK_SHARE:g} of the "
                f"{number(problem.grid.duration_s, 4)} s that count: coupling so slow cannot be told from a drifting "
                "rate.",
                "leak rate",
                "State a faster leak rate, or record longer.",
            )
        )
    block_s = f"{number(spread.block_length_s)} s"
    if spread.n_blocks < REFUSED_BELOW:
        many = "a single block" if spread.n_blocks == 1 else f"only {spread.n_blocks} blocks"
        notes.append(
            Note(
                "warning",
                f"The {number(problem.grid.duration_s)} s that count are {many} of time ({REFUSED_BELOW} are needed): "
                "there are no robust standard errors.",
                "standard errors",
                "Record longer, or read the model-based ones: fit.with_covariance('model') (--intervals model).",
            )
        )
    elif spread.n_blocks < FEW_BLOCKS:
        notes.append(
            Note(
                "warning",
                f"Robust standard errors rest on {spread.n_blocks} blocks of time of {block_s}; "
                f"fewer than {FEW_BLOCKS} tend to come out too small.",
                "standard errors",
                "Record longer, or read those of the jackknife, made for few blocks: fit.with_covariance('jackknife') "
                "(--intervals jackknife).",
            )
        )
    if spread.n_blocks >= REFUSED_BELOW and not spread.block_curve.settled:
        notes.append(
            Note(
                "warning",
                f"Neighbouring blocks of time of {block_s} still go together, and there are too "
                "few to join more of them: slow states outlast a block, and robust standard errors are too small.",
                "standard errors",
                "Record longer; read the intervals as lower limits of the uncertainty.",
            )
        )
    for sentence in problem.kernel.check_identified(problem.driven_um, problem.span):
        notes.append(Note("info", sentence, "kernel", "Use fewer coefficients to let the data speak alone."))
    notes += _recording_notes(problem, recording)
    return tuple(notes)


def _pause(recording: Recording) -> list[Note]:
    """Where the window was derived from the spikes, a pause of the acquisition was taken for silence."""
    train = merge_trains(recording)
    silences = gaps(train)
    if not paused(silences["length_s"].to_numpy(dtype=np.float64), longest_break(train)):
        return []
    start, stop = (number(float(silences[end].iloc[0]), 5) for end in ("start_s", "stop_s"))
    return [
        Note(
            "warning",
            f"No unit fires from {start} s to {stop} s, far longer than other silences: a pause of the "
            "acquisition that is taken for silence looks like slow, far-reaching coupling.",
            "windows",
            "If acquisition stopped there, give a windows table with the stretches that were recorded.",
        )
    ]


def _recording_notes(problem: Problem, recording: Recording) -> list[Note]:
    notes: list[Note] = []
    silent = np.flatnonzero((problem.grid.counts_in_sum == 0) & ~recording.source_only_mask)
    if silent.size:
        ids = [recording.unit_ids[k] for k in silent]
        notes.append(
            Note(
                "info",
                f"{counted(len(ids), 'unit')} without a spike in the bins that count: {names(ids)}.",
                "units",
                "Baseline minus infinity, rate 0; not explained, still a source where it fires in other bins.",
            )
        )
    n_same = int(np.triu(problem.geometry.same_site).sum())
    if n_same and problem.model.same_site == "exclude":
        notes.append(
            Note(
                "info",
                f"{counted(n_same, 'pair')} of units on one site left out of the kernel.",
                "pairs on one site",
                "Detection hides coincident spikes there; same_site='own' (--same-site own) gives them a coefficient "
                "of their own.",
            )
        )
    if problem.model.same_site == "own" and not problem.has_same_site:
        notes.append(
            Note(
                "info",
                "No two units on one site, the source firing, are left: there is no same-site coefficient.",
                "pairs on one site",
                "Nothing to do.",
            )
        )
    if not recording.origin.windows_stated:
        start, stop = recording.window_bounds[0]
        notes.append(
            Note(
                "info",
                f"No windows were given: the window runs from {number(start, 5)} s (floor of the first spike) to "
                f"{number(stop, 5)} s (first whole second after the last).",
                "windows",
                "Give a windows table where acquisition started earlier or stopped later.",
            )
        )
        notes += _pause(recording)
    if problem.grid.n_outside:
        notes.append(
            Note(
                "info",
                f"{_spikes_lie(problem.grid.n_outside)} outside the windows: those before a window feed its first "
                "state.",
                "windows",
                "Nothing to do where this is meant.",
            )
        )
    if problem.grid.n_excluded:
        notes.append(
            Note(
                "info",
                f"{_spikes_lie(problem.grid.n_excluded)} inside exclusions: they are not explained and drive nothing.",
                "exclusions",
                "Nothing to do where this is meant.",
            )
        )
    return notes


def _spikes_lie(n: int) -> str:
    return f"{counted(n, 'spike')} {'lies' if n == 1 else 'lie'}"
