"""What chosen smoothing gains, and whether its bands cover the curve on the whole: 30 simulated recordings.

Kernels are drawn as the penalty has it, second differences of coefficients independent and normal: there the band of a
penalised fit covers 95 % of the curve on average (Nychka 1988, Journal of the American Statistical Association 83,
1134-1143). docs/smoothing.md has the study, with other kernels.
"""

from __future__ import annotations

import numpy as np
import pytest
from worlds import LEAK, array, model

from kernelfit import kernels, simulate_recording
from kernelfit.errors import SimulationError

N_RECORDINGS = 30
DISTANCES = kernels.pair_geometry(array(4)).distinct_um
ENDS = {"smallest_um": float(DISTANCES[0]), "largest_um": float(DISTANCES[-1])}
BEND = np.linalg.pinv(np.diff(np.eye(10), n=2, axis=0))


def drawn(seed):
    """A kernel about a line from 0.12 to 0 per spike, and a recording of it; another where the network runs away."""
    rng = np.random.default_rng([20261201, seed])
    while True:
        truth = kernels.Spline().at(coefficients=np.linspace(0.12, 0.0, 10) + BEND @ rng.normal(0.0, 0.04, 8), **ENDS)
        try:
            return truth, simulate_recording(array(4), truth, 6.0, LEAK, 60.0, rng, bin_width=0.005)
        except SimulationError:
            continue


@pytest.fixture(scope="module")
def results():
    """(recordings, 3): squared error with and without smoothing, share of the pairs' distances that the band covers."""
    rows = []
    for seed in range(N_RECORDINGS):
        truth, recording = drawn(seed)
        chosen = model(kernels.Spline(smoothing="likelihood")).fit(recording, covariance="model", threads=2)
        plain = model(kernels.Spline()).fit(recording, threads=2)
        band = chosen.kernel_band(DISTANCES)
        inside = (band["lower"] <= truth(DISTANCES)) & (truth(DISTANCES) <= band["upper"])
        errors = [np.mean((f.kernel(DISTANCES) - truth(DISTANCES)) ** 2) for f in (chosen, plain)]
        rows.append([*errors, inside.mean()])
    return np.array(rows)


@pytest.mark.filterwarnings("ignore::kernelfit.errors.FitWarning")
def test_bands_cover_the_curve_on_the_whole(results):
    covered = results[:, 2]
    monte_carlo = covered.std(ddof=1) / np.sqrt(N_RECORDINGS)
    assert abs(covered.mean() - 0.95) < 3.0 * monte_carlo
    assert monte_carlo < 0.04  # so that the line above can fail


@pytest.mark.filterwarnings("ignore::kernelfit.errors.FitWarning")
def test_chosen_smoothing_halves_the_squared_error(results):
    """Against the ten coefficients without a penalty; measured: a third (docs/smoothing.md)."""
    assert results[:, 0].mean() < 0.5 * results[:, 1].mean()
