"""What an after-spike term would add: refused where the blocks of time are too few for any answer but one."""

from __future__ import annotations

import dataclasses

import numpy as np
import pytest
from scipy.stats import chi2
from worlds import LEAK, model, simulated

import kernelfit as kf
from kernelfit.fitting.added_term import EVERY, LEVEL, LITTLE, _advice, after_spike_test, fewest_blocks
from kernelfit.fitting.maximise import maximise
from kernelfit.fitting.outcome import ScoreTest

pytestmark = pytest.mark.filterwarnings("ignore::kernelfit.KernelfitWarning")


# Critical values of chi-square at 5 %: Fisher and Yates (1938), table IV (from memory): 3.841, 5.991, 9.488, 11.070.
@pytest.mark.parametrize(("n_terms", "blocks"), [(1, 4), (2, 6), (4, 10), (5, 12)])
def test_blocks_that_a_test_needs(n_terms, blocks):
    assert fewest_blocks(n_terms) == blocks


@pytest.mark.parametrize("n_blocks", [3, 8, 30])
def test_a_statistic_never_exceeds_the_number_of_its_blocks(n_blocks):
    """Scores as one-sided as they can be: S'(sum s s')^-1 S is at most the number of blocks."""
    rng = np.random.default_rng(n_blocks)
    for shift in (0.0, 1.0, 1000.0):
        scores = rng.normal(size=(n_blocks, 5)) + shift
        total = scores.sum(axis=0)
        assert total @ np.linalg.pinv(scores.T @ scores) @ total <= n_blocks * (1 + 1e-9)


def n_terms():
    return kf.terms.AfterSpike().constants(0.005)[::EVERY].size


@pytest.mark.parametrize("spare", [-1, 0])
def test_few_blocks_of_time_give_a_reason_instead_of_a_p_value(spare):
    """Blocks of a second each at this leak; one fewer than needed, and just enough."""
    needed = fewest_blocks(n_terms())
    refractory = simulated(
        6, duration_s=float(needed + spare), rate_hz=25.0,
        after_spike_constants_s=np.array([0.02]), after_spike_coefficients=np.array([-2.0]),
    )  # fmt: skip
    test = model("flat", leak_rate=LEAK).fit(refractory, threads=1).after_spike_test
    if spare < 0:
        assert isinstance(test, kf.Unavailable)
        assert f"({needed - 1} blocks of time, {needed} are needed)" in test.reason
    else:
        assert isinstance(test, ScoreTest)
        assert test.statistic <= needed


def test_at_least_as_many_blocks_as_can_reject():
    k = n_terms()
    assert chi2.sf(fewest_blocks(k) - 1, k) > LEVEL >= chi2.sf(fewest_blocks(k), k)


def test_the_reason_is_kept_on_disk(tmp_path):
    fit = model("flat", leak_rate=LEAK).fit(simulated(1, duration_s=3.0), threads=1)
    fit.save(tmp_path / "fit.json")
    assert kf.load_fit(tmp_path / "fit.json").after_spike_test == fit.after_spike_test
    assert isinstance(fit.after_spike_test, kf.Unavailable)


def test_blocks_of_the_test_are_those_of_the_standard_errors():
    """Where a slow state joined the usual blocks, the test counts the joined ones."""
    slow = simulated(3, duration_s=60.0, rate_course=lambda t: 0.6 * np.sin(2 * np.pi * t / 20.0))
    fit = model(leak_rate=LEAK).fit(slow, threads=2)
    problem, curve = fit.problem(), fit.uncertainty.block_curve
    optimum = maximise(problem, fit.estimate)
    usual = int(np.argmin(np.abs(curve.length_s - 1.0)))
    assert curve.chosen > usual
    again = after_spike_test(problem, optimum, curve)
    by_usual = after_spike_test(problem, optimum, dataclasses.replace(curve, chosen=usual))
    assert again.statistic == pytest.approx(fit.after_spike_test.statistic, rel=1e-6)
    assert by_usual.statistic != pytest.approx(again.statistic, rel=1e-2)


def test_little_is_said_of_little_and_not_of_the_uncertain():
    much, hardly, unsure, nothing = (
        _advice(bits, p) for bits, p in ((0.2, 1e-5), (0.0004, 1e-5), (0.2, 0.3), (0.0004, 0.3))
    )
    assert "matters here: an after-spike term would add about 0.2 bits per spike (p < 0.001)" in much
    assert "can be seen here, but an after-spike term would add little" in hardly
    assert "little" not in unsure
    assert "too uncertain to be told from chance; fit with after_spike='basis'" in unsure
    assert nothing == "An after-spike term would add little: about 0.0004 bits per spike (p = 0.3)."
    assert "matters here" in _advice(LITTLE, LEVEL)
