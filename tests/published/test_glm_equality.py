"""At a fixed leak a kernel linear in its coefficients is a Poisson regression: general-purpose libraries must agree.

The dense design is built here, cell by cell from the spike times; of the package it uses the B-splines alone.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import pytest
import statsmodels.api as sm
from sklearn.linear_model import PoissonRegressor

import kernelfit as kf
from kernelfit.kernels.bands import Bands

pytestmark = [pytest.mark.published, pytest.mark.filterwarnings("ignore::kernelfit.KernelfitWarning")]

BIN_S, LEAK = 0.01, 30.0
CONSTANTS = (0.01, 0.06)
N_UNITS = 7
WINDOWS = [(0.0, 14.0), (15.234, 31.0)]
EXCLUSIONS = [(6.003, 6.5), (20.0, 20.001)]
REFERENCE = kf.kernels.Exponential().at(amplitude=0.2, length_um=120.0, reference_um=100.0)


def positions():
    return np.random.default_rng(6).uniform(0, 400, (N_UNITS, 2))  # pairs in every band


@pytest.fixture(scope="module")
def recording():
    """Seven units, one with two windows' worth of gaps, an exclusion, spikes before and between the windows."""
    simulated = kf.simulate_recording(
        positions(), REFERENCE, 7.0, LEAK, 33.0, 12, bin_width=BIN_S,
        after_spike_constants_s=np.array(CONSTANTS), after_spike_coefficients=np.array([-1.5, 0.3]),
    )  # fmt: skip
    shifted = {u: simulated.spike_times(u) - 1.0 for u in simulated.unit_ids}
    return kf.Recording.from_arrays(shifted, positions(), WINDOWS, exclusions=EXCLUSIONS)


@dataclass(frozen=True)
class Dense:
    """(n_rows, n_columns) design, counts, and the time at which each row's bin starts. Rows: bins in time, then units.

    Columns: a baseline for each unit, after-spike traces unit by unit, kernel coefficients."""

    design: np.ndarray
    counts: np.ndarray
    start_s: np.ndarray


def dense_design(recording, basis, constants):
    """The regression of docs/model.md section 3, from spike times.

    Parameters
    ----------
    basis : distances (m,) to (m, K)
    constants : time constants of the after-spike traces, seconds
    """
    n, x = recording.n_units, recording.positions
    weight = np.zeros((n, n, basis(np.array([100.0])).shape[1]))  # target, source, coefficient
    for i in range(n):
        for j in range(n):
            d = np.sqrt(np.sum((x[i] - x[j]) ** 2))
            if i != j and d >= 1.0:
                weight[i, j] = basis(np.array([d]))[0]
    gamma = np.exp(-LEAK * BIN_S)
    decay = np.exp(-BIN_S / np.array(constants))
    rows, counts, starts = [], [], []
    for a, b in recording.window_bounds:
        # all spikes before the window, wherever they lie, in bins counted back from its start
        n_bins = int(np.floor((b - a) / BIN_S + 1e-6))
        first = int(np.floor((-1.0 - a) / BIN_S)) - 1
        y = np.zeros((n_bins - first, n))
        for j in range(n):
            t = recording.trains[j]
            for low, high in recording.exclusion_bounds:
                t = t[(t < low) | (t >= high)]
            bins = np.floor((t - a) / BIN_S + 1e-6).astype(int)
            before = t < a
            bins[before] = np.minimum(bins[before], -1)
            keep = (bins < n_bins) & (bins >= first)
            np.add.at(y, (bins[keep] - first, j), 1.0)
        P = np.zeros((n, weight.shape[2]))
        S = np.zeros((n, decay.size))
        for k in range(len(y)):
            if k > 0:
                P = gamma * (P + np.einsum("ijq,j->iq", weight, y[k - 1]))
                S = decay * (S + y[k - 1][:, None])
            t = k + first
            touched = any(
                a + (t + 1) * BIN_S > e + 1e-9 and a + t * BIN_S < f - 1e-9 for e, f in recording.exclusion_bounds
            )
            if t < 0 or touched:
                continue
            for i in range(n):
                row = np.zeros(n + n * decay.size + weight.shape[2])
                row[i] = 1.0
                row[n + i * decay.size : n + (i + 1) * decay.size] = S[i]
                row[n + n * decay.size :] = P[i]
                rows.append(row)
                counts.append(y[k, i])
                starts.append(a + t * BIN_S)
    return Dense(np.array(rows), np.array(counts), np.array(starts))


SPLINE = kf.kernels.Spline(n_basis=5)
EDGES = (120.0, 220.0, 330.0)
KERNELS = {
    "flat": (kf.kernels.Flat(), lambda span: lambda d: np.ones((d.size, 1))),
    "spline": (SPLINE, lambda span: lambda d: SPLINE.basis(d, span)),
    "bands": (
        Bands(EDGES),
        lambda span: lambda d: np.array([[float(sum(v >= e for e in EDGES) == k) for k in range(4)] for v in d]),
    ),
}
CASES = [(name, after) for name in KERNELS for after in (True, False)]


@dataclass(frozen=True)
class Pair:
    """Our fit and what the libraries are given."""

    fit: object
    dense: Dense
    statsmodels: object
    n_own: int

    @property
    def n(self):
        return N_UNITS

    def in_order(self, own, shared):
        """Own parameters (n, P) and shared ones in the order of the dense design."""
        return np.concatenate([own[:, 0], own[:, 1:].ravel(), shared])

    def std_errors(self, kind):
        spread = self.fit.uncertainty
        own = np.sqrt(np.einsum("npp->np", spread.own(kind)))
        return self.in_order(own, np.sqrt(np.diag(spread.shared(kind))))

    def cluster_factor(self):
        """statsmodels multiplies by G/(G - 1) (N - 1)/(N - k); the package by G/(G - 1)."""
        rows, columns = self.dense.design.shape
        return (rows - 1) / (rows - columns)


@pytest.fixture(scope="module", params=CASES, ids=[f"{name}{', after-spike' * after}" for name, after in CASES])
def pair(request, recording):
    name, after = request.param
    kernel, basis = KERNELS[name]
    term = kf.terms.AfterSpike(time_constants_s=CONSTANTS, ridge=0.0) if after else "none"
    model = kf.CouplingModel(kernel=kernel, bin_width=BIN_S, leak_rate=LEAK, after_spike=term)
    fit = model.fit(recording, threads=2)
    dense = dense_design(recording, basis(fit.span), CONSTANTS if after else ())
    regression = sm.GLM(
        dense.counts, dense.design, family=sm.families.Poisson(), offset=np.full(dense.counts.size, np.log(BIN_S))
    )
    return Pair(fit, dense, regression, 1 + 2 * after)


@pytest.fixture(scope="module")
def plain(pair):
    return pair.statsmodels.fit(tol=1e-14, maxiter=100)


def test_rows_and_spikes_are_the_same(pair):
    assert pair.fit.converged
    assert pair.fit.verdict.found  # or intervals would be widened
    assert pair.dense.counts.size == pair.fit.n_bins * N_UNITS
    assert pair.dense.counts.sum() == pair.fit.n_spikes


def test_coefficients_equal_statsmodels(pair, plain):
    got = pair.in_order(pair.fit.own, pair.fit.shared)
    np.testing.assert_allclose(got, plain.params, rtol=1e-6)


def test_log_likelihood_equals_statsmodels(pair, plain):
    assert pair.fit.log_likelihood == pytest.approx(plain.llf, rel=1e-11)
    constant = sm.GLM(pair.dense.counts, pair.dense.design[:, :N_UNITS], family=sm.families.Poisson()).fit(tol=1e-14)
    assert pair.fit.null_log_likelihood == pytest.approx(constant.llf, rel=1e-11)
    assert 2 * (pair.fit.saturated_log_likelihood - pair.fit.log_likelihood) == pytest.approx(plain.deviance, rel=1e-9)


def test_model_based_standard_errors_equal_statsmodels(pair, plain):
    np.testing.assert_allclose(pair.std_errors("model"), plain.bse, rtol=1e-6)


def test_robust_standard_errors_equal_statsmodels_clustered_by_blocks_of_time(pair):
    length = pair.fit.block_length_s
    # blocks of equal numbers of bins within each window, counted over the bins of the sum
    group, used = np.zeros(pair.dense.counts.size, dtype=int), 0
    for a, b in WINDOWS:
        rows = np.flatnonzero((pair.dense.start_s >= a - 1e-9) & (pair.dense.start_s < b))
        bin_of_row = np.arange(rows.size) // N_UNITS
        n_bins = rows.size // N_UNITS
        n_blocks = int(n_bins // round(1.0 / BIN_S))  # 1 s: the shortest block, longer than 20 / LEAK
        edges = [n_bins * k // n_blocks for k in range(1, n_blocks)]
        group[rows] = used + np.searchsorted(edges, bin_of_row, side="right")
        used += n_blocks
    assert used == pair.fit.n_blocks
    assert length == pytest.approx(pair.fit.duration_s / used)
    clustered = pair.statsmodels.fit(tol=1e-14, maxiter=100, cov_type="cluster", cov_kwds={"groups": group})
    np.testing.assert_allclose(pair.std_errors("robust") * np.sqrt(pair.cluster_factor()), clustered.bse, rtol=1e-6)


def test_coefficients_equal_scikit_learn(pair):
    """No offset there: the baselines take log D on."""
    found = PoissonRegressor(alpha=0.0, fit_intercept=False, solver="newton-cholesky", tol=1e-10, max_iter=200)
    found.fit(pair.dense.design, pair.dense.counts)
    want = found.coef_.copy()
    want[:N_UNITS] -= np.log(BIN_S)
    np.testing.assert_allclose(pair.in_order(pair.fit.own, pair.fit.shared), want, rtol=1e-5)


def test_tables_hold_the_same_numbers(pair, plain):
    """parameters and baselines of both kinds are the vectors compared above, not something else."""
    fit = pair.fit.with_covariance("model")
    shared = fit.parameters.drop(index="leak_rate")
    np.testing.assert_allclose(shared["estimate"], plain.params[-len(shared) :], rtol=1e-6)
    np.testing.assert_allclose(shared["std_error"], plain.bse[-len(shared) :], rtol=1e-6)
    np.testing.assert_allclose(fit.baselines["estimate"], plain.params[:N_UNITS], rtol=1e-6)
    np.testing.assert_allclose(fit.baselines["std_error"], plain.bse[:N_UNITS], rtol=1e-6)
    np.testing.assert_allclose(fit.baselines["rate_hz"], np.exp(plain.params[:N_UNITS]), rtol=1e-6)
    np.testing.assert_allclose(shared["upper"] - shared["estimate"], 1.959963985 * shared["std_error"], rtol=1e-6)
