"""What estimates would be without a part of the recording, against fits that never saw that part."""

from __future__ import annotations

import numpy as np
import pytest
from worlds import LEAK, model, simulated

import kernelfit as kf
from kernelfit.inference.scales import natural_values, on_log_scale, shared_names, shared_units

WIDE_LAW = 60.0


@pytest.fixture(scope="module")
def recording():
    return simulated(1, duration_s=WIDE_LAW)


@pytest.fixture(scope="module")
def fit(recording):
    return model("gaussian").fit(recording, threads=2)


@pytest.fixture(scope="module")
def found(fit):
    return fit.influence(threads=2)


def test_scales_are_those_of_the_parameter_table(fit):
    assert shared_names(fit) == tuple(fit.parameters.index)
    assert list(shared_units(fit)) == list(fit.parameters["unit"])
    np.testing.assert_allclose(natural_values(fit, fit.shared), fit.parameters["estimate"], rtol=1e-12)
    two = natural_values(fit, np.array([fit.shared, fit.shared + 0.1]))
    np.testing.assert_allclose(two[1, 1:] / two[0, 1:], np.exp(0.1), rtol=1e-12)
    np.testing.assert_array_equal(on_log_scale(fit), [False, True, True])
    stated = model("flat", leak_rate=LEAK).fit(fit.recording, threads=1)
    assert shared_names(stated) == ("amplitude",)


def test_stretches_are_the_blocks_of_the_robust_covariance(fit, found):
    assert len(found.stretches) == fit.n_blocks
    np.testing.assert_allclose(found.stretches["stop_s"] - found.stretches["start_s"], fit.block_length_s)
    assert found.stretches["n_spikes"].sum() == found.events["n_spikes"].sum() == fit.n_spikes
    assert len(found.events) == 4 * fit.n_blocks
    # the jackknife of the covariance is made of the same moves
    moves = found.stretches["length_um_in_std_errors"] * np.sqrt(fit.uncertainty.shared("robust")[1, 1])
    jackknife = (fit.n_blocks - 1) / fit.n_blocks * np.sum(moves**2)
    assert jackknife == pytest.approx(fit.uncertainty.shared("jackknife")[1, 1], rel=1e-6)


def test_one_step_is_close_to_a_fit_without_the_stretch(fit, found):
    """The largest stretch, cut out as an exclusion would be but that its spikes still drive: refitted by weights. For a
    unit the step takes the information as it is with it, one of nine, and understates the change."""
    for row in found.refits.itertuples():
        assert row.converged
        error = fit.std_errors.loc[row.parameter, "robust"]
        if row.left_out == "stretch":
            assert row.one_step == pytest.approx(row.refitted, abs=0.2 * error)
        else:
            assert 0.6 < row.one_step / row.refitted < 1.2


def test_the_largest_stretch_and_unit_are_refitted_for_every_parameter(found):
    assert list(found.refits["parameter"]) == [name for name in found.parameters for _ in range(2)]
    assert list(found.refits["left_out"]) == ["stretch", "unit"] * 3
    for name in found.parameters:
        rows = found.refits[found.refits["parameter"] == name].set_index("left_out")
        size = found.units[f"{name}_in_std_errors"].abs()
        assert rows.loc["unit", "which"] == size.idxmax()
        worst = found.stretches[f"{name}_in_std_errors"].abs().idxmax()
        assert rows.loc["stretch", "which"].startswith(f"{found.stretches['start_s'][worst]:.6g} to ")


def test_leaving_out_a_unit_is_a_fit_that_does_not_explain_it(fit, found, recording):
    rows = found.refits[(found.refits["left_out"] == "unit") & (found.refits["parameter"] == "length_um")]
    unit = rows["which"].iloc[0]
    without = model("gaussian").fit(recording.select(source_only=[unit]), threads=2)
    change = without.parameters.loc["length_um", "estimate"] - fit.parameters.loc["length_um", "estimate"]
    assert rows["refitted"].iloc[0] == pytest.approx(change, rel=1e-3)


def test_a_burst_of_coupling_in_one_stretch_is_pointed_at():
    """Ten seconds of strong coupling pasted into fifty without any: the stretches that carry it lie there."""
    quiet = simulated(5, lambda d: 0.0 * d, duration_s=50.0)
    loud = simulated(6, lambda d: np.where(d < 200.0, 0.25, 0.0), duration_s=10.0)
    trains = {u: np.concatenate([quiet.spike_times(u), 50.0 + loud.spike_times(u)]) for u in quiet.unit_ids}
    fit = model("flat", leak_rate=LEAK).fit(kf.Recording.from_arrays(trains, quiet.positions, [(0.0, 60.0)]), threads=2)
    stretches = fit.influence(threads=2).stretches
    lost = stretches["amplitude"].to_numpy()
    assert lost[stretches["start_s"] >= 50.0].sum() < -3.0 * np.abs(lost[stretches["start_s"] < 50.0].sum() / 5.0)
    assert stretches["start_s"].iloc[np.argmin(lost)] >= 50.0


def test_a_loaded_fit_asks_for_the_recording(fit, tmp_path):
    fit.save(tmp_path / "fit.json")
    with pytest.raises(kf.KernelfitError, match="does not hold the spikes"):
        kf.load_fit(tmp_path / "fit.json").influence()
