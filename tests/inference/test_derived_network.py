"""What the couplings do together: the spectral radius against dense eigenvalues, extra spikes against a simulation."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from worlds import GAUSSIAN, array, model, simulated

import kernelfit as kf
from kernelfit.errors import StorageError, Unavailable
from kernelfit.inference.derived import DerivedFigure, Law, Lost, derived_figures, setting_of
from kernelfit.inference.derived.network import leading_mode, stability_words
from kernelfit.kernels.parametric import Gaussian

pytestmark = pytest.mark.filterwarnings("ignore::kernelfit.KernelfitWarning")


def with_parts(**changes):
    """A recording with a silent unit, a source-only one and two on one site, fitted with a same-site coefficient."""
    recording = simulated(3, n_side=4, duration_s=40.0)
    positions = recording.positions.copy()
    positions[15] = positions[14]
    trains = {u: recording.spike_times(u) for u in recording.unit_ids}
    trains[recording.unit_ids[5]] = np.empty(0)
    changed = kf.Recording.from_arrays(trains, positions, recording.window_bounds)
    return changed.select(source_only=[recording.unit_ids[2]])


@pytest.fixture(scope="module")
def parts():
    return model("gaussian", same_site="own").fit(with_parts(), threads=2)


@pytest.fixture(scope="module")
def plain():
    return model("gaussian").fit(simulated(3, n_side=4), threads=2)


def at(fit) -> Law:
    return setting_of(fit).at(fit.shared)


def named(law: Law, name: str) -> DerivedFigure:
    (figure,) = [f for f in derived_figures(law) if f.name == name]
    return figure


def dense(fit, shared):
    """E[f'_i] J(d_ij) / alpha of all units, row by row from the definition."""
    n = len(fit.unit_ids)
    law = fit.model.kernel.curve(shared[: fit.n_kernel], fit.span)
    matrix = np.zeros((n, n))
    for i in fit.targets:
        for j in range(n):
            d = float(np.linalg.norm(fit.positions[i] - fit.positions[j]))
            if i == j:
                continue
            same_site = shared[fit.n_kernel] if fit.has_same_site else 0.0
            jump = same_site if d < 1.0 else float(law(np.array([d]))[0])
            matrix[i, j] = fit.counts[i] / fit.duration_s * jump / np.exp(shared[-1])
    return matrix


@pytest.mark.parametrize("which", ["plain", "parts"])
def test_both_figures_from_the_definition(which, request):
    fit = request.getfixturevalue(which)
    law, matrix = at(fit), dense(fit, fit.shared)
    radius = np.max(np.abs(np.linalg.eigvals(matrix)))
    assert named(law, "spectral_radius").value(law) == pytest.approx(radius, rel=1e-9)
    assert fit.spectral_radius == pytest.approx(radius, rel=1e-9)
    fires = fit.counts > 0
    assert fires.sum() == (15 if which == "parts" else 16)
    assert named(law, "extra_spikes").value(law) == pytest.approx(matrix[:, fires].sum() / fires.sum(), rel=1e-9)


@pytest.mark.parametrize("which", ["plain", "parts"])
def test_the_slope_of_the_radius_is_its_derivative(which, request):
    """Central differences of the dense eigenvalue, step 1e-6, hence 1e-6."""
    fit = request.getfixturevalue(which)
    law = at(fit)
    slope = named(law, "spectral_radius").gradient(law)
    for q in range(fit.shared.size):
        step = np.where(np.arange(fit.shared.size) == q, 1e-6, 0.0)
        up, down = (np.max(np.abs(np.linalg.eigvals(dense(fit, fit.shared + s * step)))) for s in (1, -1))
        assert slope[q] == pytest.approx((up - down) / 2e-6, rel=1e-5, abs=1e-8)


def test_extra_spikes_are_those_of_a_simulation():
    """The same network with J and with -J: half the difference in spikes is what the couplings add to first order.

    Terms of second order cancel; those of third are of the size of the figure cubed. In bins of x = 1/8 time constant
    the sum of an effect is short by x / (e^x - 1) (docs/model.md section 9), which is taken account of.
    """
    bin_s, leak, rate_hz, duration_s = 0.002, 62.5, 8.0, 400.0
    laws = {sign: Gaussian().at(amplitude=sign * 0.1, length_um=150.0, reference_um=100.0) for sign in (1.0, -1.0)}
    spikes = {
        sign: kf.simulate_recording(array(4), law, rate_hz, leak, duration_s, 11, bin_width=bin_s).n_spikes
        for sign, law in laws.items()
    }
    mean = 0.5 * (spikes[1.0] + spikes[-1.0])
    short = kf.simulate_recording(array(4), laws[1.0], rate_hz, leak, 20.0, 1, bin_width=bin_s)
    fit = model("gaussian", bin_s=bin_s).fit(short, threads=2)
    # the true parameters, and every unit at the mean rate
    shared = np.array([laws[1.0](fit.reference_distance_um), np.log(150.0), np.log(leak)])
    even = replace(fit, counts=np.full(16, 1000), n_bins=round(1000 * 16 * duration_s / mean / bin_s))
    law = setting_of(even).at(shared)
    extra = named(law, "extra_spikes").value(law)
    x = leak * bin_s
    error = np.sqrt(0.5 / mean) * (1.0 + 2.0 * extra)  # Poisson, and a little more for being coupled
    assert extra > 20 * error
    assert 0.5 * (spikes[1.0] - spikes[-1.0]) / mean == pytest.approx(extra * x / np.expm1(x), abs=4 * error + extra**3)


def test_a_suppressing_network_is_not_called_unstable():
    lowering = Gaussian().at(amplitude=-0.3, length_um=120.0, reference_um=100.0)
    fit = model("flat").fit(simulated(3, lowering, n_side=4), threads=2)
    row = fit.derived().loc["extra_spikes"]
    assert row["estimate"] < 0
    law = at(fit)
    assert leading_mode(law, law.setting.pairs)[0] < 0
    assert "holds activity down" in fit.derived().loc["spectral_radius", "note"]


@pytest.mark.parametrize(
    ("radius", "lower", "upper", "said"),
    [
        (
            0.5,
            0.4,
            0.6,
            "couplings 2 times as strong would make the fitted network unstable (at 1); the interval (0.4 to",
        ),
        (0.8, 0.5, 1.2, "the interval reaches 1, so instability is not excluded"),
        (1.3, 1.1, 1.6, "would keep activity growing"),
        (0.5, np.nan, np.nan, "couplings 2 times as strong"),
    ],
)
def test_how_close_to_instability_in_words(radius, lower, upper, said):
    assert said in stability_words(radius, lower, upper, suppresses=False)


def test_a_loaded_fit_does_not_know_pairs_that_were_left_out(tmp_path):
    """Without the recording the figures that need them have a reason; with it they are those of the fit."""
    recording = simulated(4, GAUSSIAN, n_side=3)
    left_out = replace(recording, excluded_pairs=((recording.unit_ids[0], recording.unit_ids[1]),))
    fit = model("gaussian").fit(left_out, threads=2)
    fit.save(tmp_path / "fit.json")
    loaded = kf.load_fit(tmp_path / "fit.json")
    table = loaded.derived()
    for name in ("extra_spikes", "spectral_radius"):
        assert np.isnan(table.loc[name, "estimate"])
        assert "does not know which pairs were left out" in table.loc[name, "note"]
    again = loaded.derived(recording=left_out)
    for name in ("extra_spikes", "spectral_radius"):
        assert again.loc[name, "estimate"] == fit.derived().loc[name, "estimate"]
    with pytest.raises(StorageError):
        loaded.derived(recording=simulated(5, GAUSSIAN, n_side=3))
    assert isinstance(setting_of(loaded).pairs, Unavailable)
    law = at(loaded)
    assert isinstance(named(law, "extra_spikes").value(law), Lost)
