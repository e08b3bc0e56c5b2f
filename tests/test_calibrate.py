"""The calibration script measures errors in the standard errors that the intervals are made of."""

from __future__ import annotations

import dataclasses
import importlib.machinery
import importlib.util
import sys
from pathlib import Path

import numpy as np
import pytest

import kernelfit as kf
from kernelfit.inference.intervals import critical_value

SCRIPT = Path(__file__).resolve().parent.parent / "scripts" / "calibrate"


@pytest.fixture(scope="module")
def calibrate():
    loader = importlib.machinery.SourceFileLoader("calibrate_script", str(SCRIPT))
    spec = importlib.util.spec_from_loader(loader.name, loader)
    assert spec is not None
    script = importlib.util.module_from_spec(spec)
    before, sys.dont_write_bytecode = sys.dont_write_bytecode, True  # no __pycache__ in scripts/
    sys.modules[loader.name] = script  # dataclasses look their module up
    try:
        loader.exec_module(script)
    finally:
        sys.dont_write_bytecode = before
        del sys.modules[loader.name]
    return script


@pytest.mark.filterwarnings("ignore::kernelfit.KernelfitWarning")
def test_errors_of_the_kernel_are_those_of_its_band_whatever_the_verdict(calibrate):
    law = kf.kernels.Gaussian().at(amplitude=0.2, length_um=200.0, reference_um=100.0)
    recording = kf.simulate_recording(calibrate.ARRAY, law, 5.0, 50.0, 20.0, 1, bin_width=0.01)
    fit = kf.CouplingModel("gaussian", bin_width=0.01, after_spike="none").fit(recording, threads=2)
    assert fit.verdict.found
    for kind in ("model", "robust"):
        errors = calibrate.kernel_errors(fit, kind)
        band = fit.with_covariance(kind).kernel_band(np.array(calibrate.CHECKED_UM), calibrate.LEVEL)
        half = critical_value(calibrate.LEVEL, fit.uncertainty.degrees_of_freedom(kind)) * errors
        np.testing.assert_allclose(band["upper"] - band["estimate"], half, rtol=1e-12)
        np.testing.assert_allclose(band["estimate"] - band["lower"], half, rtol=1e-12)
        unsure = dataclasses.replace(fit, verdict=dataclasses.replace(fit.verdict, found=False, critical_z=9.0))
        np.testing.assert_array_equal(calibrate.kernel_errors(unsure, kind), errors)
