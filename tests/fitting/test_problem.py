"""Objective, score and information of every family against high-precision arithmetic; what cannot be fitted."""

from __future__ import annotations

from dataclasses import dataclass, field

import mpmath
import numpy as np
import pytest
from mp_model import MpModel

from kernelfit import CouplingModel, kernels, terms
from kernelfit.errors import GridError, ModelError, NotIdentifiedError
from kernelfit.fitting.maximise import evaluate_locally
from kernelfit.fitting.problem import Estimate, make_problem
from kernelfit.recording.recording import Recording

# d and e share a site; distances between the four sites all differ.
POSITIONS = np.array([[0.0, 0.0], [90.0, 20.0], [-40.0, 130.0], [200.0, 160.0], [200.3, 160.0]])


def recording(seed=1, **options):
    """Five units, two windows and an exclusion; spikes before, between and inside."""
    rng = np.random.default_rng(seed)
    trains = tuple(np.sort(rng.uniform(-0.2, 1.5, 14)) for _ in range(5))
    return Recording(
        tuple("abcde"), POSITIONS, trains, np.array([[0.0, 0.5], [0.707, 1.4]]), np.array([[0.9, 0.95]]), **options
    )


@dataclass(frozen=True)
class Case:
    """A model on the recording and the natural values of its shared parameters."""

    kernel: kernels.Kernel
    natural: tuple[float, ...]
    same_site: str = "own"
    leak_rate: float | None = None
    after_spike: object = terms.AfterSpike(time_constants_s=(0.02, 0.15), ridge=0.3)
    max_distance: float | None = None
    warm_up_s: float = 0.0
    recording_options: dict = field(default_factory=dict)

    def problem(self):
        rec = recording(**self.recording_options)
        model = CouplingModel(
            kernel=self.kernel, bin_width=0.02, leak_rate=self.leak_rate, max_distance=self.max_distance,
            same_site=self.same_site, after_spike=self.after_spike, warm_up_s=self.warm_up_s,
        )  # fmt: skip
        return make_problem(model, rec, threads=1), rec

    def estimate(self, problem):
        rng = np.random.default_rng(3)
        own = rng.normal(0, 0.3, (problem.data.n_targets, 1 + problem.trace_decay.size))
        own[:, 0] += np.log(8.0)
        shared = [*self.kernel.working(np.array(self.natural), problem.span)]
        shared += [0.17] * problem.has_same_site + [np.log(13.0)] * problem.fits_leak
        return Estimate(own, np.array(shared))


S4, S5 = (0.3, -0.1, 0.2, 0.05), (0.3, 0.2, 0.1, -0.1, 0.05)
CASES = {
    "flat": Case(kernels.Flat(), (0.2,)),
    "exponential": Case(kernels.Exponential(), (0.3, 120.0)),
    "gaussian": Case(kernels.Gaussian(), (-0.25, 140.0)),
    "power-law": Case(kernels.PowerLaw(), (0.3, 1.6)),
    "difference-of-gaussians": Case(kernels.DifferenceOfGaussians(), (0.5, 90.0, 0.3, 210.0)),
    "mexican-hat": Case(kernels.MexicanHat(), (0.5, 130.0)),
    "disc": Case(kernels.Disc(), (0.2, 150.0)),
    "spline": Case(kernels.Spline(n_basis=4), S4),
    "spline, penalised": Case(kernels.Spline(n_basis=5, smoothing=2.5, order=2), S5),
    "spline over log-distance": Case(kernels.Spline(n_basis=4, axis="log-distance"), S4),
    "power-law with its scale": Case(kernels.PowerLaw(fit_scale=True), (0.3, 80.0, 1.6)),
    "leak fixed": Case(kernels.Exponential(), (0.3, 120.0), leak_rate=21.0),
    "same-site pairs excluded": Case(kernels.Gaussian(), (0.25, 140.0), same_site="exclude"),
    "same-site pairs in the kernel": Case(kernels.Gaussian(), (0.25, 140.0), same_site="kernel"),
    "no after-spike term": Case(kernels.Exponential(), (0.3, 120.0), after_spike="none"),
    "default after-spike basis": Case(kernels.Flat(), (0.1,), after_spike="basis"),
    "largest distance": Case(kernels.Exponential(), (0.3, 120.0), max_distance=180.0),
    "pairs left out": Case(kernels.Gaussian(), (0.3, 120.0), recording_options={"excluded_pairs": (("a", "c"),)}),
    "a source-only unit": Case(kernels.Gaussian(), (0.3, 120.0), recording_options={"source_only": frozenset("b")}),
    "warm-up": Case(kernels.Gaussian(), (0.3, 120.0), warm_up_s=0.1),
}


def test_the_cases_cover_every_registered_family():
    assert {c.kernel.name for c in CASES.values()} == set(kernels.KERNELS)


@pytest.mark.parametrize("case", CASES.values(), ids=CASES)
def test_objective_score_and_information(case):
    """Source: docs/model.md sections 3 to 6 in 40 digits (mp_model.py). Doubles keep about 12 over 280 cells."""
    problem, rec = case.problem()
    estimate = case.estimate(problem)
    local = evaluate_locally(problem, estimate)
    objective, score, information = MpModel(problem, rec).derivatives(estimate)
    assert mpmath.almosteq(local.objective, objective, rel_eps=1e-12)
    got = np.concatenate([local.score_own.ravel(), local.score_shared])
    if case.kernel.name == "disc":  # the radius has no derivative: stated as zero on both sides
        assert got[-3] == score[-3] == 0.0
    np.testing.assert_allclose(got, score, rtol=1e-10, atol=1e-10 * np.abs(score).max())

    n, p = estimate.own.shape
    unpenalised = problem.evaluate(estimate)
    dense = np.zeros((n * p + problem.n_shared,) * 2)
    for i in range(n):
        rows = slice(i * p, (i + 1) * p)
        dense[rows, rows] = unpenalised.own_own[i]
        dense[rows, n * p :] = unpenalised.own_shared[i]
        dense[n * p :, rows] = unpenalised.own_shared[i].T
    dense[n * p :, n * p :] = unpenalised.shared_shared
    np.testing.assert_allclose(dense, information, rtol=1e-10, atol=1e-10 * np.abs(information).max())


def test_score_is_the_slope_of_the_objective_in_doubles_too():
    """Six-point central differences, error of order h^6: no formula of ours in between but the objective."""
    problem, _ = CASES["gaussian"].problem()
    estimate = CASES["gaussian"].estimate(problem)
    local = evaluate_locally(problem, estimate)
    weights = {1: 0.75, 2: -0.15, 3: 1 / 60}
    for q in range(problem.n_shared):
        slope = 0.0
        for k, w in weights.items():
            for sign in (1, -1):
                shared = estimate.shared.copy()
                shared[q] += sign * k * 0.01
                slope += sign * w / 0.01 * evaluate_locally(problem, Estimate(estimate.own, shared)).objective
        assert slope == pytest.approx(local.score_shared[q], rel=1e-8, abs=1e-7)


def test_penalties_are_added_to_the_information_of_a_step():
    case = CASES["spline, penalised"]
    problem, _ = case.problem()
    estimate = case.estimate(problem)
    local, plain = evaluate_locally(problem, estimate), problem.evaluate(estimate)
    s = case.kernel.penalty(problem.span)
    np.testing.assert_allclose((local.information.shared - plain.shared_shared)[:5, :5], s, atol=1e-12)
    ridge = local.information.own - plain.own_own
    np.testing.assert_allclose(ridge, np.broadcast_to(np.diag([0.0, 0.3, 0.3]), ridge.shape), atol=1e-12)


def test_tables_hold_source_by_target():
    """A spike of b (source) moves a; pairs left out and the unit itself are zero."""
    problem, _ = Case(
        kernels.Exponential(), (0.3, 120.0), "own", recording_options={"excluded_pairs": (("a", "c"),)}
    ).problem()
    table = problem.tables(np.array([0.3, np.log(120.0), 0.17, 2.5]))
    assert table.shape == (4, 5, 5)
    distance = np.linalg.norm(POSITIONS[1] - POSITIONS[0])
    r = problem.span.reference_um
    assert table[0, 1, 0] == pytest.approx(0.3 * np.exp(-(distance - r) / 120.0), rel=1e-12)
    assert table[0, 0, 2] == table[0, 2, 0] == 0.0
    assert table[0, 3, 4] == table[0, 4, 3] == pytest.approx(0.17)
    np.testing.assert_array_equal(np.diagonal(table, axis1=1, axis2=2), 0.0)


def test_leak_limits():
    """Slowest: a time constant of a twentieth of the recording. Fastest: 3 per bin."""
    problem, _ = CASES["gaussian"].problem()
    duration = problem.data.n_bins * 0.02
    assert problem.leak_limits == pytest.approx((min(20.0 / duration, 15.0), 150.0))
    np.testing.assert_allclose(problem.bounds[-1], np.log(problem.leak_limits))
    assert CASES["leak fixed"].problem()[0].bounds.shape == (3, 2)  # amplitude, length, same-site


def test_silent_and_source_only_units_leave_the_targets():
    rec = recording(source_only=frozenset("b"))
    trains = list(rec.trains)
    trains[3] = np.array([-0.1, 0.6])  # outside the windows: silent, and still a source
    rec = Recording(rec.unit_ids, rec.positions, tuple(trains), rec.window_bounds, source_only=rec.source_only)
    problem = make_problem(CouplingModel(bin_width=0.02), rec)
    np.testing.assert_array_equal(problem.data.targets, [0, 2, 4])
    assert 3 in problem.data.event_unit


# --- refusals ---------------------------------------------------------------------------------------------


def refused(model=None, **changes):
    rec = recording()
    parts = {
        "unit_ids": rec.unit_ids, "positions": rec.positions, "trains": rec.trains, "window_bounds": rec.window_bounds
    } | changes  # fmt: skip
    return make_problem(model or CouplingModel(bin_width=0.02), Recording(**parts))


def test_one_unit_is_refused():
    with pytest.raises(ModelError, match=r"sites table: one unit \('a'\) .* at least two units"):
        refused(unit_ids=("a",), positions=POSITIONS[:1], trains=recording().trains[:1])


def test_no_spike_in_the_windows_is_refused():
    with pytest.raises(ModelError, match=r"spikes table: no unit has a spike in the bins .* \(time_unit\)"):
        refused(trains=tuple(np.array([100.0]) for _ in range(5)))


def test_one_active_unit_is_refused():
    with pytest.raises(ModelError, match="no unit that fires has a partner within the kernel that fires too"):
        refused(trains=(recording().trains[0], *[np.empty(0)] * 4))


def test_all_units_on_one_site_are_refused():
    with pytest.raises(ModelError, match=r"^sites table: all 5 units lie on one site .*length_unit"):
        refused(positions=POSITIONS * 1e-3)


def test_no_pair_within_reach_is_refused():
    says = r"^sites table: no pair of units lies within max_distance = 50 µm: the smallest distance in the array is 92"
    with pytest.raises(ModelError, match=says):
        refused(CouplingModel(bin_width=0.02, max_distance=50.0))


def test_too_few_distances_are_refused():
    square = np.array([[0.0, 0.0], [100.0, 0.0], [0.0, 100.0], [100.0, 100.0], [0.0, 0.2]])
    with pytest.raises(NotIdentifiedError, match="Spline coefficient_5"):
        refused(CouplingModel(kernel="spline", bin_width=0.02), positions=square)


def test_bins_wider_than_a_window_are_refused():
    with pytest.raises(GridError, match="wider than window 1"):
        refused(CouplingModel(bin_width=0.6))
