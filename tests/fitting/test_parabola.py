"""The parabola, its tops under penalties and its marginal likelihood, against dense normal theory."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.optimize import minimize
from scipy.stats import multivariate_normal

from kernelfit.fitting.arrow import Arrow
from kernelfit.fitting.marginal import added_spread, best_weights, likely_weights
from kernelfit.fitting.maximise import Local
from kernelfit.fitting.parabola import Parabola, Penalty, reweighted
from kernelfit.fitting.problem import Estimate

N, P, Q = 4, 3, 5  # units, own parameters, shared parameters
ROUGH = np.diff(np.eye(Q), n=2, axis=0).T @ np.diff(np.eye(Q), n=2, axis=0)
SMOOTHNESS = Penalty("kernel", np.zeros(P), ROUGH, np.linalg.eigvalsh(ROUGH)[2:])
RIDGE = Penalty("after-spike", np.array([0.0, 1.0, 1.0]), np.zeros((Q, Q)), np.ones(N * (P - 1)))
BOTH = (SMOOTHNESS, RIDGE)


class Regression:
    """y = X beta + noise of variance 1: a log-likelihood that is a parabola everywhere."""

    def __init__(self, seed=0, spread=1.0, bend=0.4):
        rng = np.random.default_rng(seed)
        n_rows = 40
        self.design = np.zeros((N * n_rows, N * P + Q))
        for i in range(N):
            rows = slice(i * n_rows, (i + 1) * n_rows)
            self.design[rows, i * P : (i + 1) * P] = rng.normal(size=(n_rows, P))
            self.design[rows, N * P :] = rng.normal(size=(n_rows, Q))
        beta = np.concatenate([rng.normal(0, spread, N * P), np.linspace(1, 2, Q) + rng.normal(0, bend, Q)])
        self.y = self.design @ beta + rng.normal(size=len(self.design))
        self.own, self.shared = rng.normal(size=(N, P)), rng.normal(size=Q)  # anywhere: the parabola is exact

    def parabola(self, free=None):
        free = np.ones(Q, dtype=bool) if free is None else free
        at = np.concatenate([self.own.ravel(), self.shared])
        residual = self.y - self.design @ at
        score, information = self.design.T @ residual, self.design.T @ self.design
        own = [information[i * P : (i + 1) * P, i * P : (i + 1) * P] for i in range(N)]
        cross = [information[i * P : (i + 1) * P, N * P :] for i in range(N)]
        arrow = Arrow(np.array(own), np.array(cross), information[N * P :, N * P :])
        return Parabola(
            own=self.own,
            shared=self.shared,
            free=free,
            value=-0.5 * float(residual @ residual),
            score_own=score[: N * P].reshape(N, P),
            score_shared=score[N * P :],
            information=arrow.only(free),
        )

    def penalty(self, weights):
        full = np.zeros((N * P + Q, N * P + Q))
        full[N * P :, N * P :] = weights[0] * ROUGH
        full[: N * P, : N * P] = np.diag(np.tile(weights[1] * RIDGE.own, N))
        return full


@pytest.fixture(params=[0, 1], ids=["first", "second"])
def regression(request):
    return Regression(request.param)


def test_the_top_is_that_of_penalised_least_squares(regression):
    weights = np.array([3.0, 0.7])
    peak = regression.parabola().peak(BOTH, weights)
    penalised = regression.design.T @ regression.design + regression.penalty(weights)
    beta = np.linalg.solve(penalised, regression.design.T @ regression.y)
    np.testing.assert_allclose(peak.own.ravel(), beta[: N * P], atol=1e-10)
    np.testing.assert_allclose(peak.shared, beta[N * P :], atol=1e-10)
    inverse = np.linalg.inv(penalised)
    np.testing.assert_allclose(peak.covariance, inverse[N * P :, N * P :], rtol=1e-9)
    np.testing.assert_allclose(peak.own_variance.ravel(), np.diag(inverse)[: N * P], rtol=1e-9)
    # directions left free: rank - w tr(V R), by the dense inverse
    for k, rank in ((0, 3), (1, 8)):
        alone = regression.penalty(np.where(np.arange(2) == k, weights, 0.0))
        assert peak.free_directions[k] == pytest.approx(rank - np.trace(inverse @ alone), rel=1e-9)
        assert peak.costs[k] == pytest.approx(beta @ alone @ beta, rel=1e-9)


def test_log_marginal_is_the_density_of_the_data_under_the_prior(regression):
    """With a flat prior (variance 1e6) on what no penalty weighs; differences between weights lose the constant."""

    def density(weights):
        value, vector = np.linalg.eigh(regression.penalty(weights))
        prior = np.where(value > 1e-9, 1.0 / np.maximum(value, 1e-9), 1e6)
        covariance = np.eye(len(regression.y)) + regression.design @ (vector * prior) @ vector.T @ regression.design.T
        return multivariate_normal.logpdf(regression.y, cov=covariance)

    parabola = regression.parabola()
    first, second = np.array([0.3, 2.0]), np.array([20.0, 0.5])
    ours = parabola.peak(BOTH, first).log_marginal - parabola.peak(BOTH, second).log_marginal
    assert ours == pytest.approx(density(first) - density(second), abs=1e-4)


def test_slope_is_the_derivative_of_the_log_marginal(regression):
    parabola, x, step = regression.parabola(), np.log([2.0, 0.4]), 1e-5
    peak = parabola.peak(BOTH, np.exp(x))
    for k in range(2):
        up, down = x.copy(), x.copy()
        up[k] += step
        down[k] -= step
        rise = parabola.peak(BOTH, np.exp(up)).log_marginal - parabola.peak(BOTH, np.exp(down)).log_marginal
        assert peak.slope[k] == pytest.approx(rise / (2 * step), rel=1e-5)


def test_a_floor_of_fixed_ridge_is_part_of_the_prior(regression):
    """The derivative of log |f I + w R| where a fixed ridge f lies under the penalty."""
    floored = Penalty("kernel", np.zeros(P), ROUGH, SMOOTHNESS.scales, floor=0.5)
    for w in (0.1, 3.0):
        rise = floored.log_determinant(w * np.exp(1e-6)) - floored.log_determinant(w * np.exp(-1e-6))
        assert floored.directions(w) == pytest.approx(rise / 2e-6, rel=1e-6)
    assert SMOOTHNESS.directions(7.0) == pytest.approx(3.0)


@pytest.mark.parametrize("penalties", [BOTH, (SMOOTHNESS,), (RIDGE,)], ids=["both", "kernel", "after-spike"])
def test_best_weights_have_the_highest_marginal_likelihood(regression, penalties):
    parabola = regression.parabola()
    weights, bounds = best_weights(parabola, penalties, np.ones(len(penalties)))
    assert (bounds[:, 0] < weights).all()
    assert (weights < bounds[:, 1]).all()
    found = minimize(
        lambda x: -parabola.peak(penalties, np.exp(x)).log_marginal,
        np.zeros(len(penalties)),
        method="Nelder-Mead",
        options={"xatol": 1e-6, "fatol": 1e-12, "maxiter": 5000},
    )
    assert parabola.peak(penalties, weights).log_marginal == pytest.approx(-found.fun, abs=1e-7)
    np.testing.assert_allclose(np.log(weights), found.x, atol=5e-3)


def test_a_line_ends_at_the_upper_bound_and_a_rough_curve_at_the_lower():
    straight = Regression(bend=0.0)
    parabola = straight.parabola()
    # data that lie on the penalty's null space exactly
    straight.y = straight.design @ np.concatenate([np.ones(N * P), np.linspace(1, 2, Q)])
    parabola = straight.parabola()
    weights, bounds = best_weights(parabola, (SMOOTHNESS,), np.ones(1))
    assert weights[0] == pytest.approx(bounds[0, 1])
    assert parabola.peak((SMOOTHNESS,), weights).free_directions[0] == pytest.approx(0.003, rel=1e-6)  # 1e-3 of rank 3
    rough = Regression(bend=1e4)
    weights, bounds = best_weights(rough.parabola(), (SMOOTHNESS,), np.ones(1))
    assert weights[0] == pytest.approx(bounds[0, 0])
    assert rough.parabola().peak((SMOOTHNESS,), weights).free_directions[0] == pytest.approx(2.997, rel=1e-6)


def test_data_that_say_nothing_have_bounds_too():
    nothing = Parabola(
        own=np.zeros((0, 1)),
        shared=np.zeros(Q),
        free=np.ones(Q, dtype=bool),
        value=0.0,
        score_own=np.zeros((0, 1)),
        score_shared=np.zeros(Q),
        information=Arrow(np.zeros((0, 1, 1)), np.zeros((0, 1, Q)), np.zeros((Q, Q))),
    )
    penalty = Penalty("kernel", np.zeros(1), ROUGH, SMOOTHNESS.scales)
    assert nothing.limits(0, (penalty,), np.ones(1)) == (1.0, 1.0)


def test_a_parameter_that_is_known_is_left_where_it_is(regression):
    free = np.array([True, True, True, True, False])
    peak = regression.parabola(free).peak((RIDGE,), np.array([1.0]))
    assert peak.shared[4] == regression.shared[4]
    assert peak.covariance.shape == (4, 4)


def test_reweighting_a_point_needs_no_sweep(regression):
    parabola = regression.parabola()
    bare = Local(
        Estimate(parabola.own, parabola.shared),
        parabola.value,
        parabola.value,
        parabola.score_own,
        parabola.score_shared,
        parabola.information,
    )
    weights = np.array([3.0, 0.7])
    heavy = reweighted(bare, BOTH, weights)
    x = np.concatenate([parabola.own.ravel(), parabola.shared])
    full = regression.penalty(weights)
    assert heavy.objective == pytest.approx(parabola.value - 0.5 * x @ full @ x)
    assert heavy.log_likelihood == parabola.value
    score = np.concatenate([parabola.score_own.ravel(), parabola.score_shared]) - full @ x
    np.testing.assert_allclose(np.concatenate([heavy.score_own.ravel(), heavy.score_shared]), score)
    back = Parabola.at(heavy, np.ones(Q, dtype=bool), BOTH, weights)
    np.testing.assert_allclose(back.information.shared, parabola.information.shared, atol=1e-9)
    assert back.value == pytest.approx(parabola.value)


def test_likely_weights_are_even_in_free_directions_without_data():
    """Where the marginal likelihood is flat, every number of free directions is as likely as any other."""
    regression = Regression(bend=0.3)
    parabola = regression.parabola()
    weights = np.ones(1)
    likely = likely_weights(parabola, (SMOOTHNESS,), weights, 0)
    assert likely.share.sum() == pytest.approx(1.0)
    assert likely.quantile(0.025) < likely.quantile(0.5) < likely.quantile(0.975)
    free = np.array([peak.free_directions[0] for peak in likely.peaks])
    height = np.array([peak.log_marginal for peak in likely.peaks])
    even = likely.share / np.exp(height - height.max())
    x = np.log(likely.weight)
    np.testing.assert_allclose(even / even.sum(), np.gradient(free, x) / np.gradient(free, x).sum(), rtol=1e-9)


def test_not_knowing_the_weight_widens_and_never_narrows():
    regression = Regression(bend=0.3)
    parabola = regression.parabola()
    weights, _ = best_weights(parabola, (SMOOTHNESS,), np.ones(1))
    likely = likely_weights(parabola, (SMOOTHNESS,), weights, 0)
    added = added_spread(parabola, (SMOOTHNESS,), weights, likely)
    assert np.linalg.eigvalsh(added).min() > -1e-12
    assert np.trace(added) > 0
    # where only one weight is likely there is nothing to add
    certain = type(likely)(weights, np.ones(1), (parabola.peak((SMOOTHNESS,), weights),))
    np.testing.assert_allclose(added_spread(parabola, (SMOOTHNESS,), weights, certain), 0.0, atol=1e-12)
