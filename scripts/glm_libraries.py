"""The same Poisson regression from kernelfit and from general-purpose libraries, design building included.

What `scripts/benchmark glm` times: each function takes a recording and gives kernel coefficients and baselines on the
scale of log counts a bin, for the units in order.
"""

from __future__ import annotations

import warnings
from collections.abc import Callable
from dataclasses import dataclass
from functools import partial

import numpy as np
import scipy.sparse
from scipy.signal import lfilter

import kernelfit as kf
from kernelfit._typing import FloatArray, IntArray
from kernelfit.fitting.maximise import maximise
from kernelfit.fitting.null import first_estimate
from kernelfit.fitting.problem import Estimate, make_problem
from kernelfit.kernels import pair_geometry

N_UNITS, BIN_S, LEAK, BASELINE_HZ, N_BASIS = 60, 0.001, 50.0, 5.0, 6
SPLINE = kf.kernels.Spline(n_basis=N_BASIS)


def positions(n_units: int) -> FloatArray:
    """(n, 2) µm, a jittered grid of 100 µm, ten to a row."""
    place = np.arange(n_units)
    grid = 100.0 * np.column_stack([place % 10, place // 10])
    return np.asarray(grid + np.random.default_rng(1).uniform(-15.0, 15.0, grid.shape))


def simulated(n_units: int, duration_s: float) -> kf.Recording:
    law = kf.kernels.Gaussian().at(amplitude=0.12, length_um=150.0, reference_um=100.0)
    return kf.simulate_recording(positions(n_units), law, BASELINE_HZ, LEAK, duration_s, 1, bin_width=BIN_S)


@dataclass(frozen=True)
class Design:
    """Counts and columns of a dense Poisson regression: a cell is a unit in a bin.

    columns : (cells, N_BASIS); counts : (cells,); unit : (cells,)
    """

    columns: FloatArray
    counts: FloatArray
    unit: IntArray

    @property
    def n_cells(self) -> int:
        return int(self.counts.size)

    def dense(self) -> FloatArray:
        """(cells, N_BASIS + N_UNITS), a column of ones and zeros for each unit."""
        full = np.zeros((self.n_cells, N_BASIS + N_UNITS))
        full[:, :N_BASIS] = self.columns
        full[np.arange(self.n_cells), N_BASIS + self.unit] = 1.0
        return full

    def indicators(self) -> scipy.sparse.csr_matrix:
        """(cells, N_UNITS), sparse."""
        return scipy.sparse.csr_matrix((np.ones(self.n_cells), (np.arange(self.n_cells), self.unit)))


def make_design(recording: kf.Recording, *, by_unit: bool) -> Design:
    """Bin the spikes, filter them, weigh them by the basis at each distance. `by_unit`: cells of a unit together."""
    n_bins = round(recording.duration / BIN_S)
    counts = np.zeros((n_bins, N_UNITS))
    for i, name in enumerate(recording.unit_ids):
        spike_bin = np.floor(recording.spike_times(name) / BIN_S + 1e-6).astype(np.int64)
        counts[:, i] = np.bincount(spike_bin[spike_bin < n_bins], minlength=n_bins)  # a stretch starts at 0 here
    gamma = np.exp(-LEAK * BIN_S)
    trace = np.zeros_like(counts)
    trace[1:] = lfilter([gamma], [1.0, -gamma], counts, axis=0)[:-1]
    place = recording.positions
    distance = np.sqrt(((place[:, None] - place[None]) ** 2).sum(axis=-1))
    basis = SPLINE.basis(distance.ravel(), pair_geometry(place).distance_range).reshape(N_UNITS, N_UNITS, N_BASIS)
    basis[np.arange(N_UNITS), np.arange(N_UNITS)] = 0.0
    columns = np.empty((N_BASIS, N_UNITS, n_bins) if by_unit else (N_BASIS, n_bins, N_UNITS))
    for k in range(N_BASIS):
        driven = trace @ basis[:, :, k]
        columns[k] = driven.T if by_unit else driven
    unit = np.arange(N_UNITS)
    return Design(
        columns=columns.reshape(N_BASIS, -1).T,
        counts=(counts.T if by_unit else counts).ravel(),
        unit=np.repeat(unit, n_bins) if by_unit else np.tile(unit, n_bins),
    )


def spline_model() -> kf.CouplingModel:
    return kf.CouplingModel(kernel=SPLINE, bin_width=BIN_S, leak_rate=LEAK, after_spike="none")


def kernelfit_whole(recording: kf.Recording) -> FloatArray:
    """Everything `fit` does: estimates, both covariances, coupling test, after-spike test, notes."""
    with warnings.catch_warnings():
        warnings.simplefilter("ignore", kf.KernelfitWarning)  # short stretches are short on purpose
        fit = spline_model().fit(recording)
    kernel = fit.parameters["estimate"].to_numpy()[:N_BASIS]
    errors = fit.std_errors[["model", "robust"]].to_numpy()[:N_BASIS]
    return np.concatenate([kernel, np.log(BIN_S * fit.baselines["rate_hz"]), errors.T.ravel()])


def kernelfit_bare(recording: kf.Recording) -> FloatArray:
    """The estimates alone, from constant rates and no coupling: what the other libraries do."""
    problem = make_problem(spline_model(), recording)
    own = first_estimate(problem).own
    optimum = maximise(problem, Estimate(own, np.zeros(problem.n_shared)))
    return np.concatenate([optimum.estimate.shared, np.log(BIN_S) + optimum.estimate.own[:, 0]])


@dataclass(frozen=True)
class Way:
    """How to ask glum: order of the cells, an intercept and a unit less, a categorical or a sparse matrix of units."""

    by_unit: bool
    intercept: bool
    categories: bool


def glum_fit(recording: kf.Recording, way: Way, *, errors: bool = False) -> FloatArray:
    """`errors`: standard errors too, from the expected information and clustered by kernelfit's blocks of time."""
    import glum
    import tabmat

    design = make_design(recording, by_unit=way.by_unit)
    units = (
        tabmat.CategoricalMatrix(design.unit, drop_first=way.intercept)
        if way.categories
        else tabmat.SparseMatrix(scipy.sparse.csc_matrix(design.indicators()))
    )
    regression = glum.GeneralizedLinearRegressor(
        family="poisson", alpha=0, fit_intercept=way.intercept, gradient_tol=1e-6, copy_X=False, check_input=False
    )
    matrix = tabmat.SplitMatrix([tabmat.DenseMatrix(design.columns), units])
    regression.fit(matrix, design.counts)
    found = np.asarray(regression.coef_)
    if way.intercept:
        first = float(regression.intercept_)
        found = np.concatenate([found[:N_BASIS], [first], first + found[N_BASIS:]])
    if not errors:
        return found
    n_bins = design.n_cells // N_UNITS
    block = np.arange(n_bins) * max(1, min(100, int(recording.duration))) // n_bins
    clusters = np.tile(block, N_UNITS) if way.by_unit else np.repeat(block, N_UNITS)
    kernel = np.arange(N_BASIS) + int(way.intercept)
    model = regression.std_errors(matrix, design.counts, robust=False, expected_information=True)
    robust = regression.std_errors(matrix, design.counts, clusters=clusters, expected_information=True)
    return np.concatenate([found, model[kernel], robust[kernel]])


def sklearn_fit(recording: kf.Recording, *, dense: bool) -> FloatArray:
    from sklearn.linear_model import PoissonRegressor

    design = make_design(recording, by_unit=False)
    matrix = (
        design.dense()
        if dense
        else scipy.sparse.hstack([scipy.sparse.csr_matrix(design.columns), design.indicators()], format="csr")
    )
    regression = PoissonRegressor(alpha=0, fit_intercept=False, solver="newton-cholesky", tol=1e-6)
    return np.asarray(regression.fit(matrix, design.counts).coef_)


def statsmodels_fit(recording: kf.Recording, *, method: str) -> FloatArray:
    import statsmodels.api as sm

    design = make_design(recording, by_unit=False)
    return np.asarray(sm.GLM(design.counts, design.dense(), family=sm.families.Poisson()).fit(method=method).params)


Fitter = Callable[[kf.Recording], FloatArray]
GLUM = {
    "glum, intercept and categories, by bin": Way(by_unit=False, intercept=True, categories=True),
    "glum, intercept and categories, by unit": Way(by_unit=True, intercept=True, categories=True),
    "glum, categories, by bin": Way(by_unit=False, intercept=False, categories=True),
    "glum, categories, by unit": Way(by_unit=True, intercept=False, categories=True),
    "glum, sparse indicators, by bin": Way(by_unit=False, intercept=False, categories=False),
}
SKLEARN: dict[str, Fitter] = {
    "scikit-learn, newton-cholesky, dense": partial(sklearn_fit, dense=True),
    "scikit-learn, newton-cholesky, sparse": partial(sklearn_fit, dense=False),
}
STATSMODELS: dict[str, Fitter] = {
    "statsmodels, IRLS": partial(statsmodels_fit, method="IRLS"),
    "statsmodels, Newton": partial(statsmodels_fit, method="newton"),
}
