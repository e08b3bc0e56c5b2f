"""Time rescaling with and without the correction for bins, against derived values.

Theory: Brown, Barbieri, Ventura, Kass and Frank (2002), Neural Comput. 14, 325-346; Haslinger, Pipa and Brown (2010),
Neural Comput. 22, 2477-2506 (formula from memory and derived); Gerhard, Haslinger and Pipa (2011), Neural Comput. 23,
1452-1483. The numbers are derived for constant rates, where K silent bins are geometric; each was simulated apart.
"""

from __future__ import annotations

import numpy as np
import pytest

from kernelfit.diagnostics import goodness_of_fit, ks, saturated_log_likelihood
from kernelfit.diagnostics.rescaling import bernoulli_rescale, place_events, uniform_scale
from kernelfit.engine.compensator import Compensator

pytestmark = pytest.mark.published


# --- at most one spike per bin ---------------------------------------------------------------------------


@pytest.fixture(scope="module", params=[0.01, 0.05, 0.1, 0.2, 0.4])
def bernoulli(request):
    """Probability, intervals in bins (5e4 of them) and their corrected form."""
    p, n = request.param, 50_000
    rng = np.random.default_rng(round(1000 * p))
    bins = rng.geometric(p, size=n)
    spiked = np.zeros(bins.sum(), dtype=bool)
    spiked[np.cumsum(bins) - 1] = True
    corrected = bernoulli_rescale(np.full(spiked.size, p), spiked, rng.random(n))
    return p, bins, corrected


def distance(intervals):
    return ks.ks_distance(uniform_scale(intervals))


def test_corrected_intervals_are_exponential(bernoulli):
    _, bins, corrected = bernoulli
    n = corrected.size
    assert corrected.size == bins.size
    assert distance(corrected) < 1.63 / np.sqrt(n)  # the 1 % point
    assert corrected.mean() == pytest.approx(1.0, abs=4 / np.sqrt(n))
    assert corrected.var() == pytest.approx(1.0, abs=4 * np.sqrt(8 / n))


def test_uncorrected_intervals_are_not(bernoulli):
    p, bins, _ = bernoulli
    # K p: distance 1 - exp(-p), mean 1, variance 1 - p.  K q with q = -log(1 - p): distance p, mean q/p.
    q, n = -np.log1p(-p), bins.size
    assert distance(bins * p) == pytest.approx(1 - np.exp(-p), abs=0.01)
    assert distance(bins * q) == pytest.approx(p, abs=0.01)
    assert (bins * p).var() == pytest.approx(1 - p, abs=4 * np.sqrt(8 / n))
    assert (bins * q).mean() == pytest.approx(q / p, abs=4 * q / p / np.sqrt(n))


# 1 - exp(-p), q/p, and the mean 1 - q (1 - p)/p of the part that the bin of the spike adds.
@pytest.mark.parametrize(
    ("p", "mean_q", "mean_own_bin"),
    [
        (0.01, 1.00503359, 0.00501675),
        (0.05, 1.02586589, 0.02542741),
        (0.1, 1.05360516, 0.05175536),
        (0.2, 1.11571776, 0.10742579),
        (0.4, 1.27706406, 0.23376156),
    ],
)
def test_own_bin_adds_its_mean(p, mean_q, mean_own_bin):
    q = -np.log1p(-p)
    assert q / p == pytest.approx(mean_q, abs=5e-9)
    # A spike in the first bin: the interval is the own bin's part alone. Midpoint rule over r, error below 1e-9.
    r = (np.arange(20_000) + 0.5) / 20_000
    parts = [bernoulli_rescale(np.array([p]), np.array([True]), np.array([draw]))[0] for draw in r]
    assert np.mean(parts) == pytest.approx(mean_own_bin, abs=1e-8)


def test_changing_probability_by_hand():
    # Silent bins -log(0.9 0.8 0.7) = 0.6851790109, own bin -log(1 - 0.4/2) = 0.2231435513; z = 0.5968 exactly.
    p = np.array([0.1, 0.2, 0.3, 0.4])
    spiked = np.array([False, False, False, True])
    interval = bernoulli_rescale(p, spiked, np.array([0.5]))
    assert interval[0] == pytest.approx(0.9083225622, abs=1e-10)
    assert uniform_scale(interval)[0] == pytest.approx(0.5968, abs=1e-14)
    ends = [uniform_scale(bernoulli_rescale(p, spiked, np.array([r])))[0] for r in (0.0, 1.0)]
    assert ends == pytest.approx([0.496, 0.6976], abs=1e-14)
    # Without the draw: the sum of p gives z = 0.6321205588, the sum of q the upper end.
    assert uniform_scale(np.array([p.sum()]))[0] == pytest.approx(0.6321205588, abs=1e-10)
    assert -np.log1p(-p).sum() == pytest.approx(1.1960046347, abs=1e-10)


# --- counts ----------------------------------------------------------------------------------------------

# Every event at its bin's edge, gaps of 0 inside a bin: distance 1 - (1 - exp(-m))/m, mean gap 1.
EDGE_DISTANCE = {0.05: 0.0245884900, 0.1: 0.0483741804, 0.2: 0.0936537654, 0.5: 0.2130613194, 1.0: 0.3678794412}
EDGE_VARIANCE = {0.1: 1.0016664, 0.5: 1.0414941, 1.0: 1.1639534}


@pytest.mark.parametrize("m", sorted(EDGE_DISTANCE))
def test_counts_put_back_into_their_bins_are_exponential(m):
    rng = np.random.default_rng(round(100 * m))
    counts = rng.poisson(m, size=round(60_000 / m))
    assert counts.max() >= 2
    start = m * np.arange(counts.size)
    gaps = np.diff(place_events(start, np.full(counts.size, m), counts, rng))
    n = gaps.size
    assert distance(gaps) < 1.63 / np.sqrt(n)
    assert gaps.mean() == pytest.approx(1.0, abs=4 / np.sqrt(n))
    assert gaps.var() == pytest.approx(1.0, abs=4 * np.sqrt(8 / n))

    at_edges = np.diff(place_events(start, np.zeros(counts.size), counts, rng))
    assert distance(at_edges) == pytest.approx(EDGE_DISTANCE[m], abs=0.01)
    assert EDGE_DISTANCE[m] == pytest.approx(1 - (1 - np.exp(-m)) / m, abs=1e-10)
    if m in EDGE_VARIANCE:
        assert at_edges.var() == pytest.approx(EDGE_VARIANCE[m], abs=4 * np.sqrt(8 / n))


def test_clipped_counts_need_the_correction_for_one_spike_per_bin():
    m = 0.5
    rng = np.random.default_rng(50)
    spiked = rng.poisson(m, size=150_000) > 0
    p = np.full(spiked.size, -np.expm1(-m))
    corrected = bernoulli_rescale(p, spiked, rng.random(spiked.sum()))
    assert distance(corrected) < 1.63 / np.sqrt(corrected.size)
    as_counts = np.diff(place_events(m * np.arange(spiked.size), np.full(spiked.size, m), spiked.astype(np.int64), rng))
    assert distance(as_counts) > 1.95 / np.sqrt(as_counts.size)


# --- all units as one process ----------------------------------------------------------------------------

# Two units of rate 1, the second a copy of the first delayed by D: each alone is Poisson, together they are not. The
# gaps' distance from their law under independence is exp(-2 D)/2.
DELAYED = {0.05: 0.4524187090, 0.1: 0.4093653765, 0.5: 0.1839397206, 1.0: 0.0676676416}


@pytest.mark.parametrize("delay", sorted(DELAYED))
def test_pooled_process_sees_what_single_units_do_not(delay):
    rng = np.random.default_rng(round(1000 * delay))
    n = 20_000
    first = np.cumsum(rng.exponential(size=n))
    second = first + delay
    together = np.sort(np.concatenate([first, second]))

    def events(times):
        return times, np.zeros(times.size), np.ones(times.size, dtype=np.int64)

    before, within, count = events(np.concatenate([first, second]))
    pooled_before, pooled_within, pooled_count = events(2 * together)  # two units: the pooled clock runs twice as fast
    goodness = goodness_of_fit(
        Compensator(
            unit=np.repeat([0, 1], n).astype(np.int32),
            before=before,
            within=within,
            count=count,
            total=np.full(2, second[-1]),
            pooled_before=pooled_before,
            pooled_within=pooled_within,
            pooled_count=pooled_count,
            pooled_total=2 * second[-1],
        ),
        ["first", "copy"],
        log_likelihood=-1.0,
        null_log_likelihood=-1.0,
        saturated_log_likelihood=saturated_log_likelihood(count),
        n_spikes=2 * n,
        seed=0,
    )
    assert (goodness.units["p_value"] > 0.01).all()
    assert goodness.pooled["p_value"].iloc[0] == ks.SMALLEST_P_VALUE
    assert goodness.pooled["p_value_plain"].iloc[0] < 1e-9
    # Sampling error of the distance: below 1.63/sqrt(number of independent gaps) in 99 % of samples.
    assert ks.ks_distance(uniform_scale(goodness.pooled_train.gaps)) == pytest.approx(
        DELAYED[delay], abs=1.63 / np.sqrt(n)
    )
    assert DELAYED[delay] == pytest.approx(np.exp(-2 * delay) / 2, abs=1e-10)
