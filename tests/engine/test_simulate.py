"""Simulation in bins: repeatable, right in its moments, guarded against explosion, and the model the sweep is about."""

from __future__ import annotations

import numpy as np
import pytest

from kernelfit import kernels, simulate_recording
from kernelfit.engine.evaluate import Point, SweepData, evaluate
from kernelfit.engine.simulate import CHUNK_BINS, simulate_counts
from kernelfit.errors import ArgumentError, SimulationError
from kernelfit.model.links import EXP, Exp
from kernelfit.recording.grid import make_grid

LINE = np.array([[0.0], [100.0], [200.0], [350.0]])
WEAK = kernels.Exponential().at(amplitude=0.1, length_um=150.0, reference_um=100.0)


def dense(events, n_bins, n_units):
    counts = np.zeros((n_bins, n_units))
    counts[events[0], events[1]] = events[2]
    return counts


# --- the same bits ----------------------------------------------------------------------------------------


def test_the_same_seed_gives_the_same_bits_and_another_seed_others():
    a, b, other = (simulate_recording(LINE, WEAK, 8.0, 40.0, 20.0, seed) for seed in (3, np.random.default_rng(3), 4))
    for unit in a.unit_ids:
        np.testing.assert_array_equal(a.spike_times(unit), b.spike_times(unit))
    assert a.n_spikes != other.n_spikes or not np.array_equal(a.trains[0], other.trains[0])


def test_a_longer_run_begins_like_a_shorter_one():
    """Counts follow the stream of uniforms bin by bin, whatever the chunks and the room for events."""
    table = 0.05 * (1.0 - np.eye(6))
    runs = [
        simulate_counts(Exp(), 0.01, 30.0, np.log(np.full(6, 20.0)), table, n, np.random.default_rng(1))
        for n in (CHUNK_BINS + 900, 3 * CHUNK_BINS)
    ]
    short, long = (dense(r, n, 6) for r, n in zip(runs, (CHUNK_BINS + 900, 3 * CHUNK_BINS), strict=True))
    assert short.sum() > 4 * 1024  # more events than one allotment of room holds
    np.testing.assert_array_equal(short, long[: len(short)])


def test_nothing_drawn_from_the_global_generator():
    state = np.random.get_state()[1].copy()  # noqa: NPY002
    simulate_recording(LINE, WEAK, 8.0, 40.0, 1.0, 3)
    np.testing.assert_array_equal(np.random.get_state()[1], state)  # noqa: NPY002


# --- spike times and bins ---------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("bin_s", "duration_s"), [(0.001, 60.0), (0.002, 400.0), (1 / 3000, 20.0), (0.0033, 50.0), (0.01, 5000.0)]
)
def test_binned_again_the_counts_are_identical(bin_s, duration_s):
    recording = simulate_recording(LINE, WEAK, 8.0, 40.0, duration_s, 11, bin_width=bin_s)
    table = np.zeros((4, 4))
    apart = ~np.eye(4, dtype=bool)
    table[apart] = WEAK(np.abs(LINE - LINE.T)[apart])
    n_bins = int(np.floor(duration_s / bin_s + 1e-6))
    events = simulate_counts(Exp(), bin_s, 40.0, np.log(np.full(4, 8.0)), table, n_bins, np.random.default_rng(11))
    grid = make_grid(recording, bin_s)
    assert grid.n_bins == n_bins
    for name, want in zip(("event_bin", "event_unit", "event_count"), events, strict=True):
        np.testing.assert_array_equal(getattr(grid, name), want, err_msg=name)


def test_spikes_lie_inside_the_window_sorted_and_distinct():
    none = kernels.Flat().at(amplitude=0.0)
    recording = simulate_recording(LINE, none, 200.0, 40.0, 30.0, 5, bin_width=0.01)  # two spikes a bin
    for times in recording.trains:
        assert times[0] >= 0.0
        assert times[-1] < 30.0
        assert (np.diff(times) > 0).all()


# --- moments that can be worked out -----------------------------------------------------------------------
# One unit fires at constant rate (mean m per bin) and drives another, exp link, no way back. With counts y Poisson and
# J_k = J gamma^k the effect k bins later, Poisson's generating function gives, exactly,
#   E rate = e^b prod_k exp(m (e^{J_k} - 1)),   Cov(y_{t-k}, y'_t) = m D E rate (e^{J_k} - 1),
#   E rate_t rate_{t+l} = e^{2b} prod_k exp(m (e^{J_k + J_{k+l}} - 1)) prod_{k<=l} exp(m (e^{J_k} - 1)).
# Own derivation; to first order in J these are the mean and cross-covariance of Hawkes (1971), Biometrika 58, 83-90.

D, LEAK, JUMP, SOURCE_HZ, TARGET_HZ = 0.005, 25.0, 0.8, 12.0, 5.0
LAGS = np.arange(1, 400)
EFFECT = JUMP * np.exp(-LEAK * D * LAGS)
M = SOURCE_HZ * D
MEAN = D * TARGET_HZ * np.exp(np.sum(M * np.expm1(EFFECT)))


@pytest.fixture(scope="module")
def driven():
    """(n_bins, 2) counts of source and target: 4000 s."""
    n_bins = 800_000
    table = np.array([[0.0, JUMP], [0.0, 0.0]])
    baseline = np.log(np.array([SOURCE_HZ, TARGET_HZ]))
    return dense(simulate_counts(Exp(), D, LEAK, baseline, table, n_bins, np.random.default_rng(8)), n_bins, 2)


def mean_and_error(values, n_blocks=400):
    """Mean, and its standard error from blocks long against the memory."""
    blocks = values[: len(values) // n_blocks * n_blocks].reshape(n_blocks, -1).mean(axis=1)
    return blocks.mean(), blocks.std(ddof=1) / np.sqrt(n_blocks)


def test_mean_rates(driven):
    for column, want in ((0, M), (1, MEAN)):
        mean, error = mean_and_error(driven[:, column])
        assert abs(mean - want) < 4 * error
        assert error < 0.02 * want  # or the test would see nothing


@pytest.mark.parametrize("lag", [1, 2, 5, 12])
def test_cross_covariance(driven, lag):
    source, target = driven[:-lag, 0], driven[lag:, 1]
    covariance, error = mean_and_error((source - M) * (target - MEAN))
    want = M * MEAN * np.expm1(EFFECT[lag - 1])
    assert abs(covariance - want) < 4 * error
    assert want > 4 * error


def test_a_bin_does_not_drive_itself_nor_the_past(driven):
    for source, target in ((driven[:, 0], driven[:, 1]), (driven[3:, 0], driven[:-3, 1])):
        covariance, error = mean_and_error((source - M) * (target - MEAN))
        assert abs(covariance) < 4 * error


def test_count_variance_of_the_driven_unit(driven):
    """Variance of the count in windows of 40 bins, from the covariance of the rate at every lag."""
    n = 40
    first = np.sum(M * np.expm1(EFFECT))
    covariance = np.empty(n)
    for lag in range(n):
        later = np.concatenate([EFFECT[lag:], np.zeros(lag)])
        between = EFFECT[:lag]
        log_product = np.sum(M * np.expm1(EFFECT + later)) + np.sum(M * np.expm1(between))
        covariance[lag] = (D * TARGET_HZ) ** 2 * (np.exp(log_product) - np.exp(2.0 * first))
    want = n * MEAN + n * covariance[0] + 2.0 * np.sum((n - np.arange(1, n)) * covariance[1:])
    counts = driven[:, 1].reshape(-1, n).sum(axis=1)
    squares, error = mean_and_error((counts - n * MEAN) ** 2)
    assert abs(squares - want) < 4 * error
    assert squares - n * MEAN > 8 * error  # far from a Poisson count


def test_counts_are_poisson_given_the_rate():
    """No coupling: variance equals mean, and the distribution is Poisson's (chi-square of 0, 1, 2, 3 and more)."""
    n_bins = 200_000
    rng = np.random.default_rng(2)
    events = simulate_counts(Exp(), 0.01, 10.0, np.log(np.array([60.0])), np.zeros((1, 1)), n_bins, rng)
    counts = dense(events, n_bins, 1)[:, 0].astype(int)
    p = np.exp(-0.6) * np.array([1.0, 0.6, 0.18, 0.036])
    want = n_bins * np.append(p[:3], 1.0 - p[:3].sum())
    seen = np.append(np.bincount(counts, minlength=4)[:3], np.sum(counts >= 3))
    assert np.sum((seen - want) ** 2 / want) < 16.27  # 0.999 point of chi-square with 3 degrees of freedom
    assert counts.mean() == pytest.approx(0.6, abs=4 * np.sqrt(0.6 / n_bins))


def test_mean_rate_without_coupling_is_the_baseline():
    rates = np.array([0.0, 2.0, 10.0, 40.0])
    flat = kernels.Flat().at(amplitude=0.0)
    recording = simulate_recording(LINE, flat, rates, 40.0, 500.0, 1)
    assert recording.spike_times("u01").size == 0
    assert (np.abs(recording.counts - 500.0 * rates) <= 4 * np.sqrt(500.0 * rates)).all()


# --- the model of the sweep -------------------------------------------------------------------------------


def test_the_sweeps_score_at_the_truth_has_mean_zero_and_the_informations_variance():
    """After-spike effects, coupling and leak: 30 recordings of 5 units; scores are standardised by the information."""
    rng = np.random.default_rng(6)
    positions = rng.uniform(0, 300, (5, 2))
    distance = np.linalg.norm(positions[:, None] - positions, axis=-1)
    apart = ~np.eye(5, dtype=bool)
    curve = kernels.Gaussian().at(amplitude=0.15, length_um=150.0, reference_um=100.0)
    table = np.where(apart, curve(distance), 0.0)
    constants, weights = np.array([0.003, 0.03]), np.stack([np.full(5, -3.0), rng.normal(-0.3, 0.1, 5)])
    point = Point(
        link=EXP, leak=30.0, fit_leak=True, tables=np.stack([table, apart.astype(float)]),
        baseline=np.log(np.full(5, 12.0)), trace_decay=np.exp(-0.002 / constants), coefficient=weights,
    )  # fmt: skip
    z = []
    for _ in range(30):
        recording = simulate_recording(
            positions, curve, 12.0, 30.0, 20.0, rng, bin_width=0.002,
            after_spike_constants_s=constants, after_spike_coefficients=weights,
        )  # fmt: skip
        data = SweepData.from_grid(make_grid(recording, 0.002), np.arange(5))
        sums = evaluate(data, point, threads=2)
        own = sums.score[0, :, :3] / np.sqrt(np.einsum("njj->nj", sums.own_own))
        shared = sums.score[0, :, 3:].sum(axis=0) / np.sqrt(np.diag(sums.shared_shared))
        z.append(np.concatenate([own.ravel(), shared]))
    z = np.array(z)
    assert np.abs(z.mean(axis=0)).max() < 4 / np.sqrt(30)
    assert np.abs(z).max() < 5.0
    assert np.mean(z**2) == pytest.approx(1.0, abs=0.3)


def test_refractoriness_is_seen_in_the_intervals():
    recording = simulate_recording(
        LINE, kernels.Flat().at(amplitude=0.0), 30.0, 40.0, 200.0, 2,
        after_spike_constants_s=np.array([0.01]), after_spike_coefficients=np.array([-8.0]),
    )  # fmt: skip
    bins = [np.diff(np.floor(t / 0.001)) for t in recording.trains]
    # a bin does not drive itself: two spikes in one bin are not held back
    short = [np.mean((n > 0) & (n < 5)) for n in bins]
    assert max(short) < 0.004  # a Poisson train has e^-0.03 - e^-0.15 = 11 % here


# --- sites, arguments, explosions -------------------------------------------------------------------------


def test_units_on_one_site_are_not_coupled():
    twins = np.array([[0.0, 0.0], [0.3, 0.0], [400.0, 0.0]])
    strong = kernels.Exponential().at(amplitude=6.0, length_um=20.0, reference_um=1.0)  # felt only on the spot
    recording = simulate_recording(twins, strong, 10.0, 40.0, 60.0, 1)
    assert recording.counts[:2] == pytest.approx(600, abs=4 * np.sqrt(600))


def test_a_supercritical_network_says_why_and_what_to_do():
    strong = kernels.Flat().at(amplitude=1.5)
    with pytest.raises(SimulationError) as error:
        simulate_recording(LINE, strong, 20.0, 40.0, 100.0, 1)
    message = str(error.value)
    # three partners, 20 Hz, J/alpha = 1.5/40: each spike causes 3 * 20 * 1.5 / 40 = 2.25 others
    assert "exploded at" in message
    assert "bin of 1 ms" in message
    assert "each spike causes 2.2 others" in message
    assert "supercritical" in message
    assert "Lower the amplitude or the baselines, or raise the leak rate." in message


def test_a_burst_in_a_subcritical_network_is_told_apart():
    strong = kernels.Flat().at(amplitude=2.5)
    with pytest.raises(SimulationError, match=r"a burst carried it .* \(spectral radius 0\.56 at the bas") as error:
        simulate_recording(LINE, strong, 3.0, 40.0, 2000.0, 1)
    assert "Lower the amplitude or the baselines, or raise the leak rate." in str(error.value)


def test_a_unit_that_excites_itself_to_death_is_told_apart():
    nothing = kernels.Flat().at(amplitude=0.0)
    with pytest.raises(SimulationError, match="make the after-spike effects weaker: a unit may excite itself"):
        simulate_recording(
            LINE, nothing, 20.0, 40.0, 100.0, 1,
            after_spike_constants_s=np.array([0.1]), after_spike_coefficients=np.array([1.5]),
        )  # fmt: skip


@pytest.mark.parametrize(
    ("change", "says"),
    [
        ({"baseline_hz": -1.0}, r"baseline_hz=-1.0 is below 0\. Give one rate of 0 Hz or more, or 4 of them"),
        ({"baseline_hz": np.array([1.0, 2.0])}, "or 4 of them"),
        ({"baseline_hz": np.nan}, "baseline_hz"),
        ({"leak_rate": 0.0}, "leak_rate=0.0 must be a positive number"),
        ({"duration": np.inf}, "duration=inf"),
        ({"bin_width": -0.001}, "bin_width=-0.001"),
        ({"link": "cubic"}, "link='cubic' is not known"),
        ({"unit_ids": ("a", "b")}, "2 unit_ids for 4 positions"),
        ({"kernel": lambda d: np.full(d.shape, np.nan)}, "not finite"),
        ({"positions_um": np.array([[0.0, np.nan]] * 4)}, "not finite"),
        ({"after_spike_constants_s": np.array([0.01])}, "go together"),
        (
            {"after_spike_constants_s": np.array([0.01]), "after_spike_coefficients": np.zeros((2, 4))},
            r"shape \(2, 4\) for 1 time constant and 4 units",
        ),
    ],
)
def test_refusals_name_the_argument(change, says):
    call = {"positions_um": LINE, "kernel": WEAK, "baseline_hz": 8.0, "leak_rate": 40.0, "duration": 1.0, "seed": 1}
    with pytest.raises(ArgumentError, match=says):
        simulate_recording(**{**call, **change})


SIMULATION = {
    "positions_um": LINE, "kernel": WEAK, "baseline_hz": 8.0, "leak_rate": 40.0, "duration": 1.0, "seed": 1
}  # fmt: skip
MAY_BE_NONE = {
    "after_spike_constants_s": np.array([0.01]), "after_spike_coefficients": np.array([0.1]),
    "rate_course": np.zeros_like, "unit_ids": ("a", "b", "c", "d"),
}  # fmt: skip


@pytest.mark.parametrize("value", ["x", None, ["x"], {}, object(), 1j], ids=lambda v: type(v).__name__)
@pytest.mark.parametrize("name", [*SIMULATION, "link", "bin_width"])
def test_every_argument_is_refused_by_name(name, value):
    with pytest.raises(ArgumentError, match=rf"^{name}( |=)") as refused:
        simulate_recording(**{**SIMULATION, name: value})
    if value == "x":
        assert "'x'" in str(refused.value)


@pytest.mark.parametrize("value", ["x", "abcd", ["x"], {}, object(), 1j], ids=lambda v: type(v).__name__)
@pytest.mark.parametrize("name", MAY_BE_NONE)
def test_every_choice_is_refused_by_name(name, value):
    simulate_recording(**SIMULATION, **MAY_BE_NONE)
    says = rf"^({name}( |=)|1 unit_ids for 4 positions|0 unit_ids)"
    with pytest.raises(ArgumentError, match=says):
        simulate_recording(**{**SIMULATION, **MAY_BE_NONE, name: value})


@pytest.mark.parametrize(
    "gives", ["x", None, [1.0, 2.0], np.zeros((2, 2)), [np.nan] * 12, {}], ids=lambda v: type(v).__name__
)
def test_functions_that_give_no_numbers(gives):
    """4 units have 12 coupled pairs, and a second 1000 bins."""
    with pytest.raises(ArgumentError, match=r"^kernel( |=|\(distances_um\)).*Give a function of distances"):
        simulate_recording(**{**SIMULATION, "kernel": lambda d: gives})
    with pytest.raises(ArgumentError, match=r"^rate_course( |=|\(time_s\)).*one finite number for each time"):
        simulate_recording(**SIMULATION, rate_course=lambda t: gives)


def test_names_differ():
    with pytest.raises(ArgumentError, match="4 unit_ids for 4 positions, not all of them different"):
        simulate_recording(**SIMULATION, unit_ids=["a", "b", "c", "a"])
    assert simulate_recording(**SIMULATION, unit_ids=["a", "b", "c", "d"]).unit_ids == ("a", "b", "c", "d")


def test_a_slow_course_multiplies_all_rates_in_its_time():
    """Expected spikes of an uncoupled unit over half a period of the course: 8 Hz times the integral of e^c."""
    nothing = kernels.Flat().at(amplitude=0.0, reference_um=100.0)
    period_s, size, duration_s = 50.0, 0.5, 2000.0
    rec = simulate_recording(
        LINE, nothing, 8.0, 40.0, duration_s, 3, bin_width=0.005,
        rate_course=lambda t: size * np.sin(2 * np.pi * t / period_s),
    )  # fmt: skip
    phase = np.linspace(0.0, np.pi, 2001)
    factor = np.array([np.trapezoid(np.exp(sign * size * np.sin(phase)), phase) / np.pi for sign in (1.0, -1.0)])
    expected = 8.0 * 0.5 * duration_s * factor
    for unit in rec.unit_ids:
        high = (rec.spike_times(unit) % period_s) < period_s / 2
        got = np.array([high.sum(), (~high).sum()])
        assert (np.abs(got - expected) < 3.5 * np.sqrt(expected)).all()


def test_no_course_and_a_course_of_nothing_are_the_same_bits():
    a = simulate_recording(LINE, WEAK, 8.0, 40.0, 20.0, 3)
    b = simulate_recording(LINE, WEAK, 8.0, 40.0, 20.0, 3, rate_course=np.zeros_like)
    for unit in a.unit_ids:
        np.testing.assert_array_equal(a.spike_times(unit), b.spike_times(unit))


def test_a_course_must_give_a_number_for_each_time():
    with pytest.raises(ArgumentError, match="one finite number for each time"):
        simulate_recording(LINE, WEAK, 8.0, 40.0, 20.0, 3, rate_course=lambda t: np.array([1.0]))
