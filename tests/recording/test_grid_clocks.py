"""The same recording on another clock: seconds since 1970 in place of seconds since the start.

Doubles near 1.7e9 are 2.4e-7 s apart, 240 times the millionth of a 1 ms bin that times may miss an edge by. Times here
are whole ticks of 0.1 ms, written in decimals and read as the nearest double; expected bins are integer arithmetic.
"""

from __future__ import annotations

import dataclasses

import numpy as np
import pytest
from hypothesis import example, given, settings
from hypothesis import strategies as st

import kernelfit as kf
from kernelfit.errors import GridError
from kernelfit.recording.grid import Grid, bins_between, make_grid
from kernelfit.recording.recording import clock_text

TICKS_PER_S = 10_000
BIN_TICKS = 10  # 1 ms
EPOCH_TICKS = 1_700_000_000 * TICKS_PER_S

CLOCKS = st.one_of(
    st.sampled_from([EPOCH_TICKS, EPOCH_TICKS + 1, EPOCH_TICKS + 4567, -EPOCH_TICKS, 2**31 * TICKS_PER_S]),
    st.integers(-EPOCH_TICKS, 2 * EPOCH_TICKS),
)


def seconds(ticks):
    """The nearest double to a whole number of ticks, as a table with four decimals is read."""
    return float(f"{'-' if ticks < 0 else ''}{abs(ticks) // TICKS_PER_S}.{abs(ticks) % TICKS_PER_S:04d}")


def recording(shift, trains, windows=((0, 20_000),), exclusions=()):
    moved = [[(seconds(a + shift), seconds(b + shift)) for a, b in table] for table in (windows, exclusions)]
    times = {f"u{k}": [seconds(t + shift) for t in train] for k, train in enumerate(trains)}
    return kf.Recording.from_arrays(times, 100.0 * np.arange(len(trains)), moved[0], exclusions=moved[1])


def same_but_for_the_clock(one: Grid, other: Grid) -> None:
    for field in dataclasses.fields(Grid):
        if field.name != "window_start_s":
            np.testing.assert_array_equal(getattr(one, field.name), getattr(other, field.name), err_msg=field.name)


@settings(max_examples=300, deadline=None)
@given(
    shift=CLOCKS,
    trains=st.lists(st.lists(st.integers(-500, 25_000), min_size=1, max_size=30, unique=True), min_size=1, max_size=3),
    cuts=st.lists(st.integers(1, 19_999), min_size=4, max_size=4, unique=True),
    exclusion=st.tuples(st.integers(-100, 21_000), st.integers(1, 3_000)),
)
@example(EPOCH_TICKS, [list(range(0, 20_000, 10))], [1, 10, 20, 19_990], (30, 70))
def test_counts_windows_and_exclusions_do_not_depend_on_the_clock(shift, trains, cuts, exclusion):
    a, b, c, d = sorted(cuts)
    windows = [w for w in ((a, b), (c, d)) if w[1] - w[0] >= BIN_TICKS] or [(0, 20_000)]
    start, length = exclusion
    trains = [sorted({*train, windows[0][0]}) for train in trains]  # a recording needs a spike in a window
    here, there = (counted(clock, trains, windows, [(start, start + length)]) for clock in (0, shift))
    if here is None or there is None:
        assert here is there is None
    else:
        same_but_for_the_clock(here, there)


def counted(clock, *parts) -> Grid | None:
    """The grid, or None where the exclusion leaves no bin."""
    try:
        return make_grid(recording(clock, *parts), 0.001)
    except GridError:
        return None


@settings(max_examples=300, deadline=None)
@given(shift=CLOCKS, edges=st.lists(st.integers(0, 1_999), min_size=1, max_size=50, unique=True))
@example(0, list(range(2_000)))
@example(EPOCH_TICKS, list(range(2_000)))
@example(EPOCH_TICKS + 4567, list(range(2_000)))
def test_a_spike_on_an_edge_falls_into_the_bin_it_opens_on_every_clock(shift, edges):
    grid = make_grid(recording(shift, [[BIN_TICKS * k for k in edges]]), 0.001)
    np.testing.assert_array_equal(grid.event_bin, np.sort(edges))
    assert (grid.event_count == 1).all()
    assert grid.n_bins == 2_000


@settings(max_examples=200, deadline=None)
@given(shift=CLOCKS, start=st.integers(0, 9_999), ticks=st.lists(st.integers(0, 9_999), min_size=1, unique=True))
def test_bins_are_those_of_integer_arithmetic(shift, start, ticks):
    """Windows that start anywhere, spikes anywhere: bin = whole bins of 10 ticks since the start."""
    grid = make_grid(recording(shift, [[start + t for t in ticks]], [(start, start + 10_000)]), 0.001)
    bins, counts = np.unique(np.array(ticks) // BIN_TICKS, return_counts=True)
    np.testing.assert_array_equal(grid.event_bin, bins)
    np.testing.assert_array_equal(grid.event_count, counts)


def test_the_millionth_alone_would_put_spikes_on_edges_into_the_bin_before():
    """Without allowing for the step of doubles, a good part of such spikes would be one bin early."""
    start, width = seconds(EPOCH_TICKS + 4567), 0.001
    times = np.array([seconds(EPOCH_TICKS + 4567 + BIN_TICKS * k) for k in range(2_000)])
    early = np.floor((times - start) / width + 1e-6) < np.arange(2_000)
    assert early.sum() > 200


@pytest.mark.filterwarnings("ignore::kernelfit.KernelfitWarning")
def test_the_fit_does_not_depend_on_the_clock():
    """Bins and counts are the same, so every number is, to the last bit; windows stated and not."""
    law = kf.kernels.Exponential().at(amplitude=0.4, length_um=120.0, reference_um=100.0)
    simulated = kf.simulate_recording(100.0 * np.arange(4.0)[:, None], law, 4.0, 30.0, 30.0, 2, bin_width=0.001)
    ticks = [np.unique(np.round(TICKS_PER_S * train).astype(int)).tolist() for train in simulated.trains]
    model = kf.CouplingModel(kernel="exponential", bin_width=0.001)
    for windows in ([(0, 140_000), (150_003, 300_000)], None):
        fits = []
        for shift in (0, EPOCH_TICKS):
            times = {f"u{k}": [seconds(t + shift) for t in train] for k, train in enumerate(ticks)}
            moved = None if windows is None else [(seconds(a + shift), seconds(b + shift)) for a, b in windows]
            fits.append(model.fit(kf.Recording.from_arrays(times, simulated.positions, moved), threads=1))
        here, there = fits
        assert there.log_likelihood == here.log_likelihood
        np.testing.assert_array_equal(there.parameters["estimate"], here.parameters["estimate"])
        np.testing.assert_array_equal(there.parameters["std_error"], here.parameters["std_error"])
        np.testing.assert_array_equal(there.goodness().units["ks_statistic"], here.goodness().units["ks_statistic"])


@settings(max_examples=300, deadline=None)
@given(shift=CLOCKS, start=st.integers(0, 9_999), first=st.integers(0, 9_999), length=st.integers(1, 12_000))
@example(EPOCH_TICKS + 4567, 0, 30, 50)
@example(EPOCH_TICKS, 3, 0, 1)
def test_bins_of_a_stretch_are_those_of_integer_arithmetic(shift, start, first, length):
    """Every bin of 10 ticks that the stretch touches, counted from the start of the window, a thousand in all."""
    rec = recording(shift, [[start]], [(start, start + 10_000)])
    times = [seconds(shift + start + first), seconds(shift + start + first + length)]
    window, bin_, n = bins_between(rec, make_grid(rec, 0.001), *times)
    last = min(-(-(first + length) // BIN_TICKS), 1_000)
    assert (window, bin_, n) == (0, first // BIN_TICKS, last - first // BIN_TICKS)


@pytest.mark.parametrize("shift", [0, EPOCH_TICKS, EPOCH_TICKS + 4567])
def test_stretches_that_no_window_holds(shift):
    rec = recording(shift, [[100, 6_000]], [(0, 2_000), (5_003, 7_003)])
    grid = make_grid(rec, 0.001)

    def n_bins(a, b):
        return bins_between(rec, grid, seconds(shift + a), seconds(shift + b))[2]

    assert [n_bins(*s) for s in ((-20, -10), (2_000, 2_100), (3_000, 6_000), (7_003, 8_000), (40, 40))] == [0] * 5
    assert bins_between(rec, grid, seconds(shift + 5_003), seconds(shift + 9_000)) == (1, 0, 200)
    assert bins_between(rec, grid, -1e300, 1e300)[2] == 0
    assert bins_between(rec, grid, 1e300, 1e301)[2] == 0


@pytest.mark.filterwarnings("ignore::kernelfit.KernelfitWarning")
def test_fitted_rates_do_not_depend_on_the_clock():
    """The stretch from the 101st bin to the 150th, and what was counted in it, on both clocks."""
    law = kf.kernels.Exponential().at(amplitude=0.4, length_um=120.0, reference_um=100.0)
    simulated = kf.simulate_recording(100.0 * np.arange(4.0)[:, None], law, 4.0, 30.0, 10.0, 2, bin_width=0.001)
    ticks = [np.unique(np.round(TICKS_PER_S * train).astype(int)).tolist() for train in simulated.trains]
    rates = []
    for shift in (0, EPOCH_TICKS + 4567):
        times = {f"u{k}": [seconds(t + shift) for t in train] for k, train in enumerate(ticks)}
        windows = [(seconds(shift), seconds(shift + 100_000))]
        fit = kf.CouplingModel(kernel="exponential", bin_width=0.001).fit(
            kf.Recording.from_arrays(times, simulated.positions, windows), threads=1
        )
        rates.append(fit.fitted_rates(seconds(shift + 1_000), seconds(shift + 1_500)))
    here, there = rates
    assert here.counts.shape == there.counts.shape == (50, 4)
    np.testing.assert_array_equal(there.counts, here.counts)
    np.testing.assert_array_equal(there.rate_hz, here.rate_hz)
    for unit, train in enumerate(ticks):
        bins = np.array(train)[(np.array(train) >= 1_000) & (np.array(train) < 1_500)] // BIN_TICKS - 100
        np.testing.assert_array_equal(here.counts[:, unit], np.bincount(bins, minlength=50))


def test_bins_finer_than_the_clock_are_refused_with_what_to_do():
    """2 steps of 2.4e-7 s are a tenth of a bin of 4.8 µs."""
    rec = recording(EPOCH_TICKS, [[3, 8, 5000]])
    with pytest.raises(GridError, match=r"bin_width=1e-06 s is too fine for times near 1700000002 s.*5e-06 s"):
        make_grid(rec, 1e-6)
    assert make_grid(rec, 5e-6).n_bins == 400_000


@pytest.mark.parametrize(
    ("time_s", "text"),
    [
        (1.7e9, "1700000000"),
        (1700000012.5, "1700000012.5"),
        (100.0, "100"),
        (0.0, "0"),
        (-2.25, "-2.25"),
        (1e-3, "0.001"),
    ],
)
def test_times_are_written_out(time_s, text):
    assert clock_text(time_s) == text
