"""A fit made by hand, with the attributes reports read: an 8 x 8 array, 60 units, waves, known numbers.

Nothing here was fitted. Numbers a test compares with are written out below or follow from them by a formula that
stands in the test.
"""

from __future__ import annotations

from dataclasses import dataclass, field, replace
from pathlib import Path

import numpy as np
import pandas as pd

from kernelfit.diagnostics.goodness import Goodness, goodness_of_fit
from kernelfit.engine.compensator import Compensator
from kernelfit.errors import Unavailable
from kernelfit.kernels.parametric import Gaussian
from kernelfit.model.coupling import CouplingModel
from kernelfit.recording.recording import Origin, Recording, SourceFile

PITCH_UM = 200.0
DURATION_S = 240.0
AMPLITUDE, AMPLITUDE_LOW, AMPLITUDE_HIGH = 0.1133, 0.0862, 0.1398  # 12.0 % (9.0 to 15.0) of the rate
LENGTH, LENGTH_LOW, LENGTH_HIGH = 262.0, 221.0, 311.0
MODEL = CouplingModel(kernel="gaussian", bin_width=0.005)
LEAK, LEAK_LOW, LEAK_HIGH = 76.9, 66.7, 90.9  # 13.0 ms (11.0 to 15.0)


@dataclass(frozen=True)
class FakeSolver:
    converged: bool = True
    n_iterations: int = 14
    max_gradient: float = 3e-7
    message: str = "the score is zero to rounding"
    starts: int = 4


@dataclass(frozen=True)
class FakeVerdict:
    found: bool = True
    p_value: float = 1e-9
    sentence: str = "The coupling improves the fit by more than chance would."


@dataclass(frozen=True)
class FakeNote:
    severity: str
    what: str
    where: str
    remedy: str


@dataclass(frozen=True)
class FakeScoreTest:
    statistic: float = 812.4
    df: int = 300
    p_value: float = 1e-12
    bits_per_spike: float = 0.05
    sentence: str = "After-spike terms would improve the fit"


@dataclass(frozen=True)
class FakeRates:
    time_s: np.ndarray
    rate_hz: np.ndarray
    counts: np.ndarray


@dataclass(frozen=True, eq=False)
class FakeFit:
    recording: Recording
    model: CouplingModel = MODEL
    converged: bool = True
    verdict: FakeVerdict = FakeVerdict()
    notes: tuple[FakeNote, ...] = ()
    solver: FakeSolver = FakeSolver()
    second_optimum: str | None = None
    covariance_kind: str = "robust"
    after_spike_test: FakeScoreTest | None = None
    ratio: float = 3.1
    sign: float = 1.0
    version: str = "0.1.0"
    created: str = "2026-12-01T12:00:00+00:00"
    n_iterations: int = 14
    block_length_s: float = 2.4
    n_blocks: int = 100
    spectral_radius: float = 0.42
    seconds: float = 3.2
    seed: int = 0
    reference_distance_um: float = PITCH_UM
    extra_parameters: tuple[tuple[str, float, float, float, str, str], ...] = field(default=())

    @property
    def unit_ids(self):
        return self.recording.unit_ids

    @property
    def positions(self):
        return self.recording.positions

    @property
    def origin(self):
        return self.recording.origin

    @property
    def duration_s(self):
        return self.recording.duration

    @property
    def n_bins(self):
        return round(self.duration_s / self.model.bin_width)

    @property
    def n_spikes(self):
        return self.recording.n_spikes

    @property
    def window_bounds(self):
        return self.recording.window_bounds

    log_likelihood = -98_765.432
    null_log_likelihood = -104_321.0
    n_parameters = 363
    aic = 198_256.9
    bic = 201_004.2

    @property
    def leak_rate(self):
        return LEAK if self.model.leak_rate is None else self.model.leak_rate

    @property
    def time_constant(self):
        return 1.0 / self.leak_rate

    @property
    def parameters(self):
        low, high = sorted((self.sign * AMPLITUDE_LOW, self.sign * AMPLITUDE_HIGH))
        fixed = self.model.leak_rate is not None
        nan = float("nan")
        shrink = 1.0 if self.covariance_kind == "robust" else 1.0 / self.ratio

        def ends(value: float, a: float, b: float) -> tuple[float, float]:
            return value - (value - a) * shrink, value + (b - value) * shrink

        rows = [
            ("amplitude", self.sign * AMPLITUDE, *ends(self.sign * AMPLITUDE, low, high), "per spike", ""),
            ("length_um", LENGTH, *ends(LENGTH, LENGTH_LOW, LENGTH_HIGH), "µm", ""),
            *self.extra_parameters,
            ("leak_rate", self.leak_rate, nan, nan, "1/s", "fixed")
            if fixed
            else ("leak_rate", LEAK, *ends(LEAK, LEAK_LOW, LEAK_HIGH), "1/s", ""),
        ]
        table = pd.DataFrame(rows, columns=["name", "estimate", "lower", "upper", "unit", "note"]).set_index("name")
        table.insert(1, "std_error", (table.upper - table.lower) / 3.97)
        return table

    @property
    def std_errors(self):
        robust = replace(self, covariance_kind="robust").parameters.std_error
        return pd.DataFrame({"model": robust / self.ratio, "robust": robust, "ratio": self.ratio + 0 * robust})

    def with_covariance(self, kind):
        return replace(self, covariance_kind=kind)

    @property
    def baselines(self):
        rate = 0.55 * self.recording.units.rate_hz
        silent = rate == 0
        estimate = np.log(rate.where(~silent, 1.0)).where(~silent, -np.inf)
        return pd.DataFrame(
            {
                "estimate": estimate,
                "std_error": pd.Series(0.05, index=rate.index).where(~silent, np.nan),
                "lower": (estimate - 0.1).where(~silent, np.nan),
                "upper": (estimate + 0.1).where(~silent, np.nan),
                "rate_hz": rate,
                "note": ["silent: not estimable" if s else "" for s in silent],
            }
        )

    def _curve(self, amplitude: float):
        return Gaussian().at(amplitude=amplitude, length_um=LENGTH, reference_um=PITCH_UM)

    def kernel(self, distances_um):
        return self._curve(self.sign * AMPLITUDE)(np.asarray(distances_um))

    def kernel_band(self, distances_um, level=0.95, simultaneous=False):
        d = np.asarray(distances_um, dtype=float)
        estimate = self.kernel(d)
        ends = np.stack([self._curve(self.sign * a)(d) for a in (AMPLITUDE_LOW, AMPLITUDE_HIGH)])
        return pd.DataFrame({"distance_um": d, "estimate": estimate, "lower": ends.min(0), "upper": ends.max(0)})

    @property
    def pairs_by_distance(self):
        x = self.positions
        d = np.sqrt(((x[:, None] - x[None]) ** 2).sum(-1))[np.triu_indices(len(x), 1)]
        d = d[d >= 1.0]
        values, counts = np.unique(np.round(d, 6), return_counts=True)
        return pd.DataFrame({"distance_um": values, "n_pairs": counts})

    def after_spike_curves(self, lags_s):
        if self.after_spike_test is not None:
            return Unavailable('the model has no after-spike term (after_spike="none")')
        rng = np.random.default_rng(5)
        depth = rng.uniform(1.0, 4.0, len(self.unit_ids))[:, None]
        rebound = rng.uniform(0.0, 0.8, len(self.unit_ids))[:, None]
        curves = np.exp(-depth * np.exp(-lags_s / 0.004) + rebound * np.exp(-lags_s / 0.08))
        curves[self.recording.counts == 0] = np.nan
        return curves

    def goodness(self, recording=None, seed=0):
        return fake_goodness(self.recording, seed=seed)

    def fitted_rates(self, start_s, stop_s, recording=None):
        width = self.model.bin_width
        n = round((stop_s - start_s) / width)
        edges = start_s + width * np.arange(n + 1)
        counts = np.stack([np.histogram(t, edges)[0] for t in self.recording.trains], axis=1)
        trace = np.zeros(n)
        decay = np.exp(-width * 4.0)
        for k in range(1, n):
            trace[k] = decay * (trace[k - 1] + counts[k - 1].sum() / counts.shape[1])
        rate = self.recording.units.rate_hz.to_numpy()[None] * (0.4 + 1.4 * trace[:, None])
        return FakeRates(edges[:-1], np.where(rate > 0, rate, np.nan), counts)

    def save(self, path):
        Path(path).write_text('{"kernelfit": "0.1.0"}\n', encoding="utf-8")

    def summary(self):
        return "a fake"


def fake_recording(
    n_units: int = 60, *, ids: tuple[str, ...] | None = None, seed: int = 11, duration_s: float = DURATION_S
) -> Recording:
    """Waves every ten seconds or so over an 8 x 8 grid; every seventh unit shares a site; the last one is silent."""
    rng = np.random.default_rng(seed)
    grid = PITCH_UM * np.array([(k % 8, k // 8) for k in range(64)], dtype=float)
    place = np.array([grid[(k - k // 7) % 64] for k in range(n_units)])
    if n_units > 64:  # a larger array, for tables and pictures of many units
        side = int(np.ceil(np.sqrt(n_units)))
        place = 60.0 * np.array([(k % side, k // side) for k in range(n_units)], dtype=float)
    base = rng.lognormal(np.log(1.2), 0.8, n_units)
    waves = np.cumsum(rng.exponential(10.0, 200))
    waves = waves[waves < duration_s]
    trains = []
    for k in range(n_units):
        times = [rng.uniform(0, duration_s, rng.poisson(base[k] * duration_s))]
        for w in waves:
            arrival = w + place[k, 0] / 800.0
            times.append(arrival + rng.exponential(0.5, rng.poisson(4.0 * base[k])))
        train = np.unique(np.round(np.concatenate(times), 5))
        trains.append(train[(train > 0) & (train < duration_s)])
    trains[-1] = np.empty(0)
    names = ids or tuple(f"u{k:02d}" for k in range(n_units))
    return Recording(
        unit_ids=names,
        positions=place,
        trains=tuple(trains),
        window_bounds=np.array([[0.0, duration_s]]),
        origin=Origin(
            files=(
                SourceFile("spikes", "slice-04.spikes.csv.gz", "a3" * 32),
                SourceFile("sites", "slice-04.sites.csv", "b7" * 32),
            ),
            windows_stated=False,
        ),
    )


def fake_goodness(recording: Recording, *, bend: float = 0.35, right_every: int = 2, seed: int = 0) -> Goodness:
    """Goodness of a model that is right for every second unit (or every tenth) and bent for the rest, pooled right."""
    rng = np.random.default_rng(seed + 3)

    def times(n: int, shape: float) -> np.ndarray:
        return np.cumsum(rng.gamma(shape, 1.0 / shape, n))

    unit, before, count, total = [], [], [], []
    for k, n in enumerate(recording.counts):
        t = times(int(n), 1.0 if k % right_every == 0 else 1.0 - bend)
        unit.append(np.full(n, k, dtype=np.int32))
        before.append(t)
        count.append(np.ones(n, dtype=np.int64))
        total.append(float(t[-1]) + 1.0 if n else 0.0)
    n_all = int(recording.counts.sum())
    pooled = times(n_all, 1.0)
    compensator = Compensator(
        unit=np.concatenate(unit),
        before=np.concatenate(before),
        within=np.full(n_all, 1e-9),
        count=np.concatenate(count),
        total=np.array(total),
        pooled_before=pooled,
        pooled_within=np.full(n_all, 1e-9),
        pooled_count=np.ones(n_all, dtype=np.int64),
        pooled_total=float(pooled[-1]) + 1.0,
    )
    return goodness_of_fit(
        compensator,
        recording.unit_ids,
        log_likelihood=-98_765.4,
        null_log_likelihood=-104_321.0,
        saturated_log_likelihood=-52_000.0,
        n_spikes=n_all,
        seed=seed,
    )


def fake_fit(**changes: object) -> FakeFit:
    """A converged fit with coupling; fields can be changed by name."""
    recording = changes.pop("recording", None) or fake_recording()
    return FakeFit(recording=recording, **changes)
