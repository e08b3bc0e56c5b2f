"""The bootstrap on a real recording: the time it takes, and one step against refits.

The tables are not part of the project: the folder is named by the environment variable KERNELFIT_RECORDINGS, and these
tests are skipped without it.
"""

from __future__ import annotations

import os
import time
from pathlib import Path

import numpy as np
import pytest

import kernelfit as kf

FOLDER = os.environ.get("KERNELFIT_RECORDINGS")
NAME = "retina-mouse-p7-wt-1"

pytestmark = [
    pytest.mark.skipif(not FOLDER, reason="KERNELFIT_RECORDINGS does not name the folder of real recordings"),
    pytest.mark.filterwarnings("ignore::kernelfit.KernelfitWarning"),
]


@pytest.fixture(scope="module")
def fit():
    folder = Path(str(FOLDER))
    recording = kf.read_recording(folder / f"{NAME}.spikes.csv.gz", folder / f"{NAME}.sites.csv")
    return kf.CouplingModel(kernel="exponential", bin_width=0.01).fit(recording)


def test_two_thousand_single_steps_take_less_than_two_fits(fit):
    started = time.monotonic()
    boot = fit.bootstrap("one-step", n_replicates=2000)
    assert time.monotonic() - started < 2.0 * fit.seconds
    assert boot.n_failed == 0
    np.testing.assert_allclose(boot.intervals()["std_error"], fit.parameters["std_error"], rtol=0.1)


def test_refits_converge(fit):
    """21 blocks of a minute and a half with about 30 waves: heavy weights, and still an optimum every time."""
    boot = fit.bootstrap("block-weights", n_replicates=20, jobs=1)
    assert boot.n_failed == 0
    assert np.isfinite(boot.own_covariances).all()
