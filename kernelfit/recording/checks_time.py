"""Findings about the course of the recording: changes of rate, gaps, and how few events it rests on."""

from __future__ import annotations

from collections.abc import Iterator

import numpy as np
from scipy import stats

from kernelfit.recording.activity import paused
from kernelfit.recording.evidence import Evidence
from kernelfit.recording.findings import CUT, Finding, counted, number, percent, seconds

CHANGE, LARGE_CHANGE = 1.5, 2.0
CHANGE_P = 0.01
BURSTY_TIMES, BURSTY_SHARE = 2.0, 0.3
FEW_EVENTS = 50


def check_time(e: Evidence) -> Iterator[Finding]:
    """Findings about the course of the recording."""
    if e.train.n_spikes == 0:
        return
    yield from _blocks(e)
    yield from _gaps(e)
    yield from _events(e)


def _blocks(e: Evidence) -> Iterator[Finding]:
    table = e.blocks.table
    factor = e.blocks.factor
    if not factor >= CHANGE:
        return
    n_spikes = table["n_spikes"].to_numpy(dtype=np.float64)
    trend_p = float(stats.spearmanr(np.arange(n_spikes.size), n_spikes).pvalue)
    certain = 2.0 * min(trend_p, e.blocks.change_p) < CHANGE_P  # two looks, one level
    low, high = table.iloc[int(n_spikes.argmin())], table.iloc[int(n_spikes.argmax())]
    times = "from nothing" if np.isinf(factor) else f"by a factor of {number(factor, 2)}"
    beyond = (
        "more than bursts within blocks explain"
        if certain
        else "no more than so few bursts in a block would give (rank tests, p above 0.005)"
    )
    yield Finding(
        "rate_changes",
        "warning" if certain and factor >= LARGE_CHANGE else "info",
        f"The mean rate changes {times} over blocks of {seconds(e.blocks.length_s)} ({number(low.rate_hz)} "
        f"to {number(high.rate_hz)} Hz), {beyond}.",
        f"quietest block from {number(low.start_s)} s, busiest from {number(high.start_s)} s",
        f"A drifting rate looks like slow, far-reaching coupling. Fit a steady stretch ({CUT}), or fit both halves "
        "and compare.",
    )


def _gaps(e: Evidence) -> Iterator[Finding]:
    gaps = e.gaps
    if gaps.empty:
        return
    length = gaps["length_s"].to_numpy()
    longest = gaps.iloc[0]
    stopped = paused(length, e.longest_break_s)
    share = length.sum() / e.train.duration_s
    yield Finding(
        "gaps",
        "warning" if stopped else "info",
        f"{counted(len(gaps), 'gap')} of 10 s and more without a spike of any unit, {percent(float(share))} "
        f"of the time; the longest lasts {seconds(float(length[0]))}"
        + (", far longer than other silences: acquisition may have paused." if stopped else "."),
        f"longest from {number(float(longest.start_s))} s to {number(float(longest.stop_s))} s",
        "If acquisition stopped there, give a windows table with the stretches that were recorded: a pause taken for "
        "silence looks like slow, far-reaching coupling. If it ran, silence is data and nothing needs doing.",
    )


def _events(e: Evidence) -> Iterator[Finding]:
    burst = e.burstiness
    if burst is None or burst.busiest_share < max(BURSTY_SHARE, BURSTY_TIMES * burst.even_share):
        return
    few = burst.n_events < FEW_EVENTS
    yield Finding(
        "few_events",
        "warning" if few else "info",
        f"Activity comes in bursts: the busiest 10 % of the seconds hold {percent(burst.busiest_share)} of "
        f"the spikes (independent spikes: {percent(burst.even_share)}), in "
        f"{counted(burst.n_events, 'population event')} (runs of seconds above twice the mean).",
        "whole recording",
        "The effective sample is the number of events, not of spikes: trust the robust intervals, not the "
        "model-based ones" + (", and do not read much into a sample this small." if few else "."),
    )
