"""Small invented networks, simulated from a stated truth, and the models that are fitted to them."""

from __future__ import annotations

import numpy as np

from kernelfit import CouplingModel, kernels, simulate_recording

BIN_S = 0.005
LEAK = 40.0
REFERENCE_UM = 100.0


def array(n_side=3, seed=5):
    """A square array of pitch 100 µm with jittered sites, so that distances differ."""
    rng = np.random.default_rng(seed)
    grid = np.array([[100.0 * (k % n_side), 100.0 * (k // n_side)] for k in range(n_side**2)])
    return grid + rng.uniform(-15, 15, grid.shape)


GAUSSIAN = kernels.Gaussian().at(amplitude=0.25, length_um=120.0, reference_um=REFERENCE_UM)
NOTHING = kernels.Flat().at(amplitude=0.0)


def simulated(seed, law=GAUSSIAN, *, n_side=3, duration_s=40.0, rate_hz=6.0, bin_s=BIN_S, **options):
    """A recording of `array` under a law."""
    return simulate_recording(array(n_side), law, rate_hz, LEAK, duration_s, seed, bin_width=bin_s, **options)


def model(kernel="gaussian", *, bin_s=BIN_S, after_spike="none", **options):
    """A model of these recordings; no after-spike term unless asked for."""
    return CouplingModel(kernel=kernel, bin_width=bin_s, after_spike=after_spike, **options)
