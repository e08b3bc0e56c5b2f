"""Fits on disk: to the bit, no pickle, and a clear refusal of everything that is not a whole, own, present-day file."""

from __future__ import annotations

import copy
import json
import os
import re

import numpy as np
import pandas as pd
import pytest
from worlds import LEAK, NOTHING, model, simulated

import kernelfit as kf
from kernelfit.errors import ArgumentError, OutputError, StorageError
from kernelfit.fitting.storage import check_sum, describe_fit, load_fit
from kernelfit.recording.recording import Recording

pytestmark = pytest.mark.filterwarnings("ignore::kernelfit.KernelfitWarning")


@pytest.fixture(scope="module")
def recording():
    return simulated(1, duration_s=20.0)


FITS = {
    "gaussian, after-spike": (model("gaussian", after_spike="basis", same_site="own", max_distance=250.0), "robust"),
    "fixed leak, own time constants": (
        model("exponential", leak_rate=LEAK, after_spike=kf.terms.AfterSpike((0.01, 0.1), ridge=0.5), warm_up_s=0.5),
        "model",
    ),
    "spline with options": (model(kf.kernels.Spline(n_basis=7, smoothing=0.3, order=1, axis="log-distance")), "robust"),
    "disc": (model("disc"), "robust"),
    "power-law with its scale": (model(kf.kernels.PowerLaw(fit_scale=True)), "robust"),
}  # fmt: skip


@pytest.fixture(scope="module", params=FITS.values(), ids=FITS)
def fit(request, recording):
    the_model, covariance = request.param
    return the_model.fit(recording, covariance, threads=2, seed=4)


@pytest.fixture(scope="module")
def path(fit, tmp_path_factory):
    path = tmp_path_factory.mktemp("fits") / "fit.json"
    fit.save(path)
    return path


def test_everything_comes_back_to_the_bit(fit, path):
    loaded = kf.load_fit(path)
    assert describe_fit(loaded) == describe_fit(fit)
    assert loaded.model == fit.model
    assert loaded.model.kernel == fit.model.kernel
    for name in (
        "own",
        "shared",
        "positions",
        "at_bound",
        "counts",
        "targets",
        "distinct_um",
        "n_pairs",
        "window_bounds",
    ):
        np.testing.assert_array_equal(getattr(loaded, name), getattr(fit, name), err_msg=name)
        assert getattr(loaded, name).dtype == getattr(fit, name).dtype, name
    for name in ("log_likelihood", "null_log_likelihood", "aic", "bic", "leak_rate", "spectral_radius", "span", "seed"):
        assert getattr(loaded, name) == getattr(fit, name), name
    assert (loaded.verdict, loaded.notes, loaded.solver) == (fit.verdict, fit.notes, fit.solver)
    assert loaded.origin == fit.origin
    assert loaded.recording is None


def test_tables_bands_and_words_are_the_same(fit, path):
    loaded = kf.load_fit(str(path))
    d = np.linspace(40.0, 240.0, 7)
    pd.testing.assert_frame_equal(loaded.parameters, fit.parameters)
    pd.testing.assert_frame_equal(loaded.baselines, fit.baselines)
    pd.testing.assert_frame_equal(loaded.std_errors, fit.std_errors)
    pd.testing.assert_frame_equal(loaded.kernel_band(d, simultaneous=True), fit.kernel_band(d, simultaneous=True))
    np.testing.assert_array_equal(loaded.kernel(d), fit.kernel(d))
    other = "model" if fit.covariance_kind == "robust" else "robust"
    pd.testing.assert_frame_equal(loaded.with_covariance(other).parameters, fit.with_covariance(other).parameters)
    assert loaded.summary() == fit.summary()


def test_a_loaded_fit_with_its_recording_can_do_all_the_rest(fit, path, recording):
    loaded = kf.load_fit(path)
    pd.testing.assert_frame_equal(loaded.goodness(recording, seed=3).units, fit.goodness(seed=3).units)
    pd.testing.assert_frame_equal(loaded.goodness(recording, seed=3).pooled, fit.goodness(seed=3).pooled)
    np.testing.assert_array_equal(loaded.fitted_rates(3.0, 4.0, recording).rate_hz, fit.fitted_rates(3.0, 4.0).rate_hz)


def test_the_file_is_plain_strict_json(path):
    """Readable by anything: no NaN or Infinity, which JSON does not have."""

    def refuse(constant):
        raise AssertionError(f"{constant} in the file")

    content = json.loads(path.read_text(encoding="utf-8"), parse_constant=refuse)
    assert content["format"] == "kernelfit fit"
    assert content["version"] == kf.__version__
    assert content["seed"] == 4
    assert content["model"]["bin_width_s"] == 0.005
    assert (path.stat().st_mode & 0o777) == 0o644


# --- of one fit -----------------------------------------------------------------------------------------------


@pytest.fixture(scope="module")
def simple(recording):
    return model("gaussian").fit(recording, threads=2)


@pytest.fixture
def saved(simple, tmp_path):
    simple.save(tmp_path / "fit.json")
    return tmp_path / "fit.json"


def test_without_a_recording_spikes_are_asked_for(saved):
    loaded = kf.load_fit(saved)
    for call in (loaded.goodness, lambda: loaded.fitted_rates(0.0, 1.0)):
        with pytest.raises(StorageError, match=r"does not hold the spikes\. Pass recording="):
            call()


def test_another_recording_is_refused_and_both_are_named(saved, recording):
    loaded = kf.load_fit(saved)
    with pytest.raises(
        StorageError, match=r"spikes table and spikes table: this recording is not the one that was fitted"
    ):
        loaded.goodness(simulated(2, duration_s=20.0))
    fewer = recording.select(units=recording.unit_ids[:5])
    with pytest.raises(StorageError, match=r"5 units .* against 9"):
        loaded.goodness(fewer)
    with pytest.raises(StorageError, match="not the one"):
        loaded.goodness(recording.select(stop_s=15.0))


def changed(recording, **parts):
    given = {
        "unit_ids": recording.unit_ids, "positions": recording.positions, "trains": recording.trains,
        "window_bounds": recording.window_bounds, "excluded_pairs": recording.excluded_pairs,
    }  # fmt: skip
    return Recording(**{**given, **parts})


def test_the_same_counts_at_other_times_places_or_pairs_are_another_recording(saved, recording):
    """Same units, same number of spikes of each: only times, positions or excluded pairs tell."""
    loaded = kf.load_fit(saved)
    mirrored = tuple(np.sort(20.0 - t) for t in recording.trains)
    for other in (
        changed(recording, trains=mirrored),
        changed(recording, positions=recording.positions + np.eye(9, 2) * 30.0),
        changed(recording, excluded_pairs=(("u01", "u02"),)),
    ):
        with pytest.raises(StorageError, match="not the one that was fitted"):
            loaded.goodness(other)


def test_the_same_recording_read_again_is_welcome(saved, recording):
    again = changed(recording)
    assert kf.load_fit(saved).goodness(again).units["n_spikes"].sum() == recording.n_spikes


def test_missing_file(tmp_path):
    with pytest.raises(StorageError, match=r"nowhere\.json: cannot be read \(No such file or directory\)"):
        kf.load_fit(tmp_path / "nowhere.json")
    with pytest.raises(StorageError, match="cannot be read"):
        kf.load_fit(tmp_path)


@pytest.mark.parametrize("path", [None, 5, ["fit.json"]])
def test_what_is_no_path_is_refused(simple, path):
    with pytest.raises(ArgumentError, match=r"path: .* is no path\. Give the path of a fit\.json"):
        kf.load_fit(path)
    with pytest.raises(ArgumentError, match=r"path: .* is no path\. Name a file"):
        simple.save(path)


@pytest.mark.parametrize("share", [0.0, 0.001, 0.3, 0.9, 0.999])
def test_a_truncated_file(saved, share):
    text = saved.read_bytes()
    saved.write_bytes(text[: int(share * len(text))])
    with pytest.raises(StorageError, match=r"fit\.json: damaged, or not a saved fit"):
        kf.load_fit(saved)


@pytest.mark.parametrize(
    ("content", "says"),
    [
        (b"\x89PNG\r\n\x1a\n\x00\xff", "damaged, or not a saved fit (it is not text)."),
        (b"unit,time_s\nu01,0.5\n", "damaged, or not a saved fit (from line 1 on it is not JSON)."),
        (b"", "damaged, or not a saved fit (it is empty)."),
        (b"{}", "JSON, but not a fit saved by kernelfit"),
        (b"[1, 2]", "JSON, but not a fit"),
        (b"null", "JSON, but not a fit"),
        (b'{"format": "another program", "format_version": 1}', "JSON, but not a fit"),
        (b'{"format": "kernelfit fit"}', "saved in format None"),
        (b'{"format": "kernelfit fit", "format_version": 1}', "damaged"),
        (b"[" * 100_000, "damaged"),
    ],
)
def test_foreign_files(tmp_path, content, says):
    (tmp_path / "other.json").write_bytes(content)
    with pytest.raises(StorageError, match=re.escape(says)) as error:
        kf.load_fit(tmp_path / "other.json")
    assert "other.json" in str(error.value)


def test_a_later_format_names_both_versions(saved):
    content = json.loads(saved.read_text())
    content["format_version"], content["version"] = 7, "9.1"
    saved.write_text(json.dumps(content))
    with pytest.raises(StorageError, match=r"saved in format 7 by kernelfit '9\.1'; this version reads format 1"):
        kf.load_fit(saved)


def places(value, path=()):
    """Every place in nested dicts, and the first element of every list."""
    if isinstance(value, dict):
        for k, v in value.items():
            yield (*path, k)
            yield from places(v, (*path, k))
    elif isinstance(value, list) and value:
        yield (*path, 0)
        yield from places(value[0], (*path, 0))


def altered(content, place, change):
    content = copy.deepcopy(content)
    *way, last = place
    parent = content
    for step in way:
        parent = parent[step]
    change(parent, last)
    return content


def signed(content):
    """The content with the check sum that belongs to it, as another program might write it."""
    content = {k: v for k, v in content.items() if k != "sha256"}
    return {**content, "sha256": check_sum(content)}


def test_a_missing_entry_is_a_clear_error(saved):
    """Whatever is deleted, with a check sum that belongs to the rest or not: nothing half-loaded comes back."""
    content = json.loads(saved.read_text())
    keys = [p for p in places(content) if isinstance(p[-1], str) and p != ("sha256",)]
    assert len(keys) > 80
    for place in keys:
        less = altered(content, place, lambda parent, last: parent.pop(last))
        saved.write_text(json.dumps(less))
        with pytest.raises(StorageError, match=r"fit\.json: (damaged|saved in|JSON)"):
            kf.load_fit(saved)
        saved.write_text(json.dumps(signed(less)))
        with pytest.raises(StorageError, match=r"fit\.json: (damaged: KeyError|damaged: TypeError|saved in|JSON)"):
            kf.load_fit(saved)


@pytest.mark.parametrize("junk", ["x", -1, [], {}, None, 1e400, 0.1], ids=repr)
def test_an_entry_that_was_overwritten_is_a_clear_error(saved, junk):
    content = json.loads(saved.read_text())
    for place in places(content):
        other = altered(content, place, lambda parent, last: parent.__setitem__(last, junk))
        if other == content:
            continue
        saved.write_text(json.dumps(other))
        with pytest.raises(StorageError, match=r"fit\.json: (damaged|saved in|JSON)"):
            kf.load_fit(saved)


def test_one_digit_is_enough(saved):
    text = saved.read_text()
    at = text.index(".", text.index('"own"')) + 3
    saved.write_text(text[:at] + str((int(text[at]) + 1) % 10) + text[at + 1 :])
    with pytest.raises(StorageError, match="its check sum does not match"):
        kf.load_fit(saved)


def test_layout_and_order_are_free(saved, simple):
    content = json.loads(saved.read_text())
    saved.write_text(json.dumps(dict(reversed(content.items())), indent=7))
    assert kf.load_fit(saved).log_likelihood == simple.log_likelihood


# --- writing --------------------------------------------------------------------------------------------------


def test_a_fit_is_written_whole_or_not_at_all(simple, tmp_path, monkeypatch):
    path = tmp_path / "fit.json"
    path.write_text("what was there")

    def full(*args):
        raise OSError(28, "No space left on device")

    monkeypatch.setattr(os, "replace", full)
    with pytest.raises(OutputError, match=r"fit\.json: cannot be written \(No space left on device\)"):
        simple.save(path)
    assert path.read_text() == "what was there"
    assert [p.name for p in tmp_path.iterdir()] == ["fit.json"]


def test_a_folder_that_is_not_there(simple, tmp_path):
    with pytest.raises(OutputError, match="Check the folder"):
        simple.save(tmp_path / "none" / "fit.json")


def test_an_older_file_is_replaced(simple, saved):
    simple.with_covariance("model").save(saved)
    assert load_fit(saved).covariance_kind == "model"


def test_a_fit_of_a_kernel_of_ones_own_is_named_when_it_cannot_be_loaded(recording, tmp_path):
    from kernelfit.kernels.bands import Bands

    own = model(Bands((150.0,)), leak_rate=LEAK).fit(recording, threads=2)
    own.save(tmp_path / "own.json")
    with pytest.raises(StorageError, match=r"own\.json: fitted with the kernel 'bands'"):
        kf.load_fit(tmp_path / "own.json")


def test_a_fit_that_failed_can_be_saved_and_loaded(tmp_path, monkeypatch):
    """Infinities of a failed climb (no decrement, no objective) have no place in JSON and must not stop the saving."""
    from kernelfit.fitting import search as search_module
    from kernelfit.fitting.maximise import maximise

    monkeypatch.setattr(search_module, "maximise", lambda p, s, **o: maximise(p, s, **{**o, "max_iterations": 0}))
    fit = model("gaussian").fit(simulated(9, NOTHING, duration_s=10.0), threads=2)
    assert not fit.converged
    fit.save(tmp_path / "fit.json")
    loaded = kf.load_fit(tmp_path / "fit.json")
    assert not loaded.converged
    assert loaded.solver.max_gradient == fit.solver.max_gradient
