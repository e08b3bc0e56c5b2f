"""The inspection finds what was planted, each fault by its key, and finds nothing in clean recordings.

Expected values are the faults themselves, planted with known places and sizes.
"""

from __future__ import annotations

import re
from collections.abc import Callable
from dataclasses import replace

import numpy as np
import pandas as pd
import pytest
from planted import (
    DURATION_S,
    PITCH_UM,
    coupled_trains,
    grid_positions,
    recording_of,
    steady_trains,
    with_artefacts,
)

from kernelfit.errors import RecordingError
from kernelfit.recording.inspection import Inspection, inspect_recording
from kernelfit.recording.recording import Origin, Recording


def keys(inspection: Inspection, *severities: str) -> set[str]:
    return {f.key for f in inspection.findings if not severities or f.severity in severities}


@pytest.fixture(scope="module")
def clean() -> dict[str, np.ndarray]:
    return steady_trains(np.random.default_rng(11))


# --- nothing to find -----------------------------------------------------------------------------------------


@pytest.mark.parametrize("seed", range(4))
@pytest.mark.parametrize("make", [steady_trains, coupled_trains], ids=["independent", "coupled"])
def test_a_clean_recording_gives_no_warning(make: Callable[..., dict[str, np.ndarray]], seed: int) -> None:
    inspection = inspect_recording(recording_of(make(np.random.default_rng(seed))), seed=seed)
    assert keys(inspection, "error", "warning") == set(), inspection.summary()
    assert inspection.proposed_exclusions.empty
    assert inspection.proposed_pairs.empty


def test_the_inspection_leaves_the_recording_and_repeats_itself(clean: dict[str, np.ndarray]) -> None:
    recording = recording_of(clean)
    first, second = inspect_recording(recording), inspect_recording(recording)
    assert first.findings == second.findings
    pd.testing.assert_frame_equal(first.units, second.units)
    pd.testing.assert_frame_equal(first.correlograms, second.correlograms)
    assert recording.inspect().findings == first.findings
    with pytest.raises(AttributeError):
        first.seed = 1  # type: ignore[misc]


# --- planted faults -------------------------------------------------------------------------------------------


def silent(trains: dict[str, np.ndarray]) -> Recording:
    return recording_of({**trains, "u03": np.empty(0)})


def nearly_silent(trains: dict[str, np.ndarray]) -> Recording:
    return recording_of({**trains, "u03": trains["u03"][::200]})


def double_detection(trains: dict[str, np.ndarray]) -> Recording:
    rng = np.random.default_rng(1)
    doubled = {u: np.sort(np.concatenate([t, t[rng.uniform(size=t.size) < 0.15] + 0.0004])) for u, t in trains.items()}
    return recording_of(doubled)


def one_contaminated(trains: dict[str, np.ndarray]) -> Recording:
    spikes = trains["u07"]
    return recording_of({**trains, "u07": np.sort(np.concatenate([spikes, spikes[::20] + 0.0007]))})


def overlapping_sites(trains: dict[str, np.ndarray]) -> Recording:
    positions = grid_positions(5)
    positions[1] = positions[0]
    positions[2] = positions[0] + [0.3, 0.0]
    return recording_of(trains, positions)


def milliseconds_as_seconds(trains: dict[str, np.ndarray]) -> Recording:
    return recording_of({u: 1e3 * t for u, t in trains.items()}, windows=((0.0, 1e3 * DURATION_S),))


def short_milliseconds_as_seconds(trains: dict[str, np.ndarray]) -> Recording:
    cut = {u: 1e3 * t[t < 60.0] for u, t in trains.items()}
    return recording_of(cut, windows=((0.0, 6e4),))


def samples_as_seconds(trains: dict[str, np.ndarray]) -> Recording:
    return recording_of(
        {u: np.unique(np.floor(2e4 * t)) for u, t in trains.items()}, windows=((0.0, 2e4 * DURATION_S),)
    )


def integer_milliseconds(trains: dict[str, np.ndarray]) -> Recording:
    cut = {u: np.unique(np.floor(1e3 * t[t < 60.0])) for u, t in trains.items()}
    return recording_of(cut, windows=((0.0, 6e4),))


def seconds_as_milliseconds(trains: dict[str, np.ndarray]) -> Recording:
    return recording_of({u: t[t < 60.0] / 1e3 for u, t in trains.items()}, windows=((0.0, 0.06),))


def coarse_times(trains: dict[str, np.ndarray]) -> Recording:
    return recording_of({u: np.unique(np.round(t, 2)) for u, t in trains.items()})


def millimetres_as_micrometres(trains: dict[str, np.ndarray]) -> Recording:
    return recording_of(trains, grid_positions(5) / 1e3)


def nanometres_as_micrometres(trains: dict[str, np.ndarray]) -> Recording:
    return recording_of(trains, grid_positions(5) * 1e3)


def copied_train(trains: dict[str, np.ndarray]) -> Recording:
    return recording_of({**trains, "u24": trains["u00"]})


def one_site(trains: dict[str, np.ndarray]) -> Recording:
    return recording_of(trains, np.zeros((25, 2)))


def rate_that_drops(trains: dict[str, np.ndarray]) -> Recording:
    return recording_of({u: np.concatenate([t[t < 300], t[t >= 300][::3]]) for u, t in trains.items()})


def unit_that_leaves(trains: dict[str, np.ndarray]) -> Recording:
    return recording_of({**trains, "u05": trains["u05"][trains["u05"] < 300]})


def pause(trains: dict[str, np.ndarray]) -> Recording:
    return recording_of({u: t[(t < 200) | (t > 290)] for u, t in trains.items()})


def short_pause(trains: dict[str, np.ndarray]) -> Recording:
    return recording_of({u: t[(t < 200) | (t > 212)] for u, t in trains.items()})


def one_that_carries_it(trains: dict[str, np.ndarray]) -> Recording:
    fast = np.sort(np.random.default_rng(2).choice(np.arange(0, DURATION_S, 0.01), 36_000, replace=False))
    return recording_of({**trains, "u09": fast})


def few_waves(trains: dict[str, np.ndarray]) -> Recording:
    rng = np.random.default_rng(3)
    waves = np.arange(10.0, DURATION_S, 40.0)
    burst = {u: np.sort(rng.choice(waves, 600) + rng.normal(0.0, 1.0, 600)) for u in trains}
    return recording_of({u: t[(t > 0) & (t < DURATION_S)] for u, t in burst.items()})


def windows_elsewhere(trains: dict[str, np.ndarray]) -> Recording:
    return recording_of(trains, windows=((500.0, 550.0),))


def all_excluded_unit(trains: dict[str, np.ndarray]) -> Recording:
    spikes = 100.0 + np.random.default_rng(4).uniform(0.0, 1.0, 50)
    return recording_of({**trains, "u01": np.sort(spikes)}, exclusions=((100.0, 101.0),))


def exclusions_upside_down(trains: dict[str, np.ndarray]) -> Recording:
    return recording_of(trains, exclusions=((0.0, 400.0),))


def nothing_left(trains: dict[str, np.ndarray]) -> Recording:
    return recording_of(trains, windows=((1000.0, 1100.0),))


def unstated_windows(trains: dict[str, np.ndarray]) -> Recording:
    return replace(recording_of(trains), origin=Origin(windows_stated=False))


PLANTED = {  # fault -> its key, its severity, and a name that must be said under "where"
    silent: ("silent_units", "warning", "u03"),
    nearly_silent: ("nearly_silent_units", "info", "u03"),
    double_detection: ("double_detection", "warning", "u"),
    one_contaminated: ("intervals_below_1ms", "warning", "u07"),
    overlapping_sites: ("units_on_one_site", "info", "u00+u01+u02"),
    milliseconds_as_seconds: ("times_look_like_ms", "warning", "spikes"),
    short_milliseconds_as_seconds: ("times_look_like_ms", "warning", "spikes"),
    samples_as_seconds: ("longer_than_a_week", "error", "spikes"),
    integer_milliseconds: ("times_are_integers", "error", "spikes"),
    seconds_as_milliseconds: ("rates_too_high", "error", "u00"),
    coarse_times: ("coarse_times", "warning", "spikes"),
    millimetres_as_micrometres: ("array_too_small", "error", "sites"),
    nanometres_as_micrometres: ("array_too_large", "error", "sites"),
    copied_train: ("identical_trains", "error", "u00 = u24"),
    one_site: ("no_distances", "error", "sites"),
    rate_that_drops: ("rate_changes", "warning", "busiest"),
    unit_that_leaves: ("units_come_or_go", "warning", "u05"),
    pause: ("gaps", "warning", "290"),
    short_pause: ("gaps", "warning", "212"),
    one_that_carries_it: ("dominant_unit", "warning", "u09"),
    few_waves: ("few_events", "warning", "whole recording"),
    windows_elsewhere: ("spikes_outside_windows", "warning", "windows"),
    all_excluded_unit: ("only_in_exclusions", "warning", "u01"),
    exclusions_upside_down: ("much_excluded", "warning", "exclusions"),
    nothing_left: ("no_spikes", "error", "spikes"),
    unstated_windows: ("windows_not_stated", "info", "spikes"),
}


@pytest.mark.parametrize("fault", PLANTED, ids=lambda f: f.__name__)
def test_a_planted_fault_is_found(fault: Callable[..., Recording], clean: dict[str, np.ndarray]) -> None:
    key, severity, where = PLANTED[fault]
    inspection = inspect_recording(fault(clean))
    found = inspection.find(key)
    assert found is not None, inspection.summary()
    assert found.severity == severity, found
    assert where in found.where
    assert found.what.endswith(".")
    assert found.remedy.endswith(".")


def test_exclusions_that_leave_nothing_are_refused(clean: dict[str, np.ndarray]) -> None:
    with pytest.raises(
        RecordingError, match=r"exclusions table: the exclusions leave nothing of any window.*Use fewer"
    ):
        inspect_recording(recording_of(clean, exclusions=((-1.0, 700.0),)))


def test_every_planted_fault_is_absent_from_the_clean_recording(clean: dict[str, np.ndarray]) -> None:
    planted = {key for key, _, _ in PLANTED.values()}
    assert keys(inspect_recording(recording_of(clean))) & planted == set()


def test_planted_artefacts_are_proposed_and_masking_them_clears_the_page(clean: dict[str, np.ndarray]) -> None:
    moments = np.arange(20.0, 580.0, 14.0)
    trains = with_artefacts(clean, np.random.default_rng(5), moments, share=0.6)
    recording = recording_of(trains)
    inspection = inspect_recording(recording)
    events = inspection.find("whole_array_events")
    assert events is not None
    assert re.search(r"by up to 50 ms have fewer than one\. Of all spikes, [0-9.]+ % lie there", events.what)
    assert not any(re.search(r"[0-9]\. [0-9]", f.what) for f in inspection.findings)  # reads as one number
    proposed = inspection.proposed_exclusions
    assert len(proposed) == moments.size
    assert ((proposed["start_s"] < moments) & (moments < proposed["stop_s"])).all()
    assert (proposed["units_at_once"] >= 15).all()  # 0.6 of 25 units were made to fire
    masked = inspect_recording(recording.with_exclusions(proposed))
    assert keys(masked, "error", "warning") == set(), masked.summary()
    # The artefacts bent the raw correlogram of distant pairs and not the masked one.
    assert _first_lag(inspection.correlograms) > 2.0
    assert _first_lag(inspection.correlograms_masked) == pytest.approx(1.0, abs=0.25)


def _first_lag(correlograms: pd.DataFrame) -> float:
    far = correlograms[(correlograms["scale"] == "fine") & correlograms["band"].str.startswith("beyond")]
    return float(far["relative"].iloc[0])


def test_a_unit_that_is_artefact_only_is_named(clean: dict[str, np.ndarray]) -> None:
    moments = np.arange(20.0, 580.0, 5.0)
    trains = with_artefacts({**clean, "u13": np.empty(0)}, np.random.default_rng(6), moments, share=0.6)
    inspection = inspect_recording(recording_of(trains))
    found = inspection.find("only_in_proposed")
    assert found is not None
    assert found.where == "u13"
    assert inspection.units.loc["u13", "share_in_proposed"] == 1.0
    assert inspection.units.loc["u13", "remarks"] == "artefact only"


def test_one_cell_seen_twice_is_proposed_as_a_pair(clean: dict[str, np.ndarray]) -> None:
    rng = np.random.default_rng(7)
    seen = clean["u12"][rng.uniform(size=clean["u12"].size) < 0.3]
    trains = {**clean, "u13": np.sort(np.concatenate([clean["u13"], seen + 0.0001]))}
    inspection = inspect_recording(recording_of(trains))
    assert inspection.find("one_cell_twice") is not None
    pairs = inspection.proposed_pairs
    assert [set(p) for p in zip(pairs["unit_a"], pairs["unit_b"], strict=True)] == [{"u12", "u13"}]
    assert pairs["share_of_smaller"].iloc[0] == pytest.approx(0.3, abs=0.03)
    left_out = inspect_recording(recording_of(trains, pairs=(("u12", "u13"),)))
    assert left_out.find("one_cell_twice") is None


def test_an_array_wide_dead_time_is_found_at_its_length() -> None:
    trains = steady_trains(np.random.default_rng(8), rate_hz=8.0)
    owner = np.repeat(np.arange(len(trains)), [t.size for t in trains.values()])
    times = np.concatenate(list(trains.values()))
    order = np.argsort(times)
    kept, last = [], -1.0
    for k in order:  # every spike blocks all units for 1 ms
        if times[k] - last >= 0.001:
            kept.append(k)
            last = times[k]
    index = np.array(kept)
    blocked = {u: np.sort(times[index][owner[index] == n]) for n, u in enumerate(trains)}
    inspection = inspect_recording(recording_of(blocked))
    found = inspection.find("array_dead_time")
    assert found is not None
    assert "for about 1 ms" in found.what
    assert inspection.suggested_bin_width_s >= 0.005  # five times the dead time
    assert "detection bends the counts" in inspection.bin_width_reason


def test_a_dead_time_on_one_site_is_told_from_an_array_wide_one() -> None:
    trains = steady_trains(np.random.default_rng(9), rate_hz=10.0)
    positions = grid_positions(5)
    positions[1] = positions[0]
    clear = trains["u00"]
    near = np.clip(np.searchsorted(clear, trains["u01"]), 1, clear.size - 1)
    distance = np.minimum(np.abs(clear[near] - trains["u01"]), np.abs(clear[near - 1] - trains["u01"]))
    # Only 60 spike pairs of one pair of units are expected within 1 ms: bursts common to both make it enough.
    common = np.sort(np.random.default_rng(10).uniform(0, DURATION_S, 4000))
    late = common + np.random.default_rng(10).uniform(0.001, 0.02, common.size)
    trains["u00"] = np.sort(np.concatenate([clear, common]))
    trains["u01"] = np.sort(np.concatenate([trains["u01"][distance > 0.001], late]))
    inspection = inspect_recording(recording_of(trains, positions))
    assert inspection.find("same_site_dead_time") is not None, inspection.summary()
    assert inspection.find("array_dead_time") is None


# --- tables -----------------------------------------------------------------------------------------------------


def test_units_table_holds_counts_shares_and_companions(clean: dict[str, np.ndarray]) -> None:
    positions = grid_positions(5)
    positions[4] = positions[3]
    inspection = inspect_recording(recording_of(clean, positions))
    units = inspection.units
    assert list(units.index) == list(clean)
    assert units["n_spikes"].tolist() == [t.size for t in clean.values()]
    assert units["rate_hz"].to_numpy() == pytest.approx([t.size / DURATION_S for t in clean.values()])
    assert units["n_same_site"].tolist() == [0, 0, 0, 1, 1, *[0] * 20]
    gaps = np.diff(clean["u00"])
    assert units.loc["u00", "shortest_interval_s"] == gaps.min()
    assert units.loc["u00", "share_below_2ms"] == np.mean(gaps < 0.002)


def test_distances_and_ranges_count_the_pairs_of_a_square_grid(clean: dict[str, np.ndarray]) -> None:
    inspection = inspect_recording(recording_of(clean, pairs=(("u00", "u01"),)))
    assert inspection.reference_distance_um == PITCH_UM
    table = inspection.distances.set_index("distance_um")
    # 5 x 5 grid: 2 * 5 * 4 adjacent pairs, one of them left out; 2 * 4 * 4 diagonal ones; 300 pairs in all.
    assert table.loc[100.0, "n_pairs"] == 39
    assert table.loc[141.4, "n_pairs"] == 32
    assert inspection.distances["n_pairs_within"].iloc[-1] == 299
    ranges = inspection.ranges.set_index("max_distance_um")
    assert ranges.loc[100.0, "n_pairs"] == 39
    assert ranges.loc[150.0, ["n_pairs", "n_distances", "n_units"]].tolist() == [71, 2, 25]


def test_block_rates_and_gaps(clean: dict[str, np.ndarray]) -> None:
    inspection = inspect_recording(pause(clean))
    assert len(inspection.block_rates) == 4  # 600 s: never fewer than four blocks
    assert inspection.block_rates["n_spikes"].sum() == inspection.n_spikes
    assert inspection.gaps["length_s"].iloc[0] == pytest.approx(90.0, abs=1.0)


# --- texts --------------------------------------------------------------------------------------------------------


def test_texts_say_what_was_found(clean: dict[str, np.ndarray]) -> None:
    inspection = inspect_recording(copied_train(clean))
    text = inspection.summary()
    assert "25 units" in text
    assert "error: 2 units have exactly the same spike times" in text
    assert "remedy: Keep one of each" in text
    assert "Suggested bin width" in text
    assert text == str(inspection)
    assert "1 error" in repr(inspection)
    assert inspection.table()["severity"].tolist() == sorted(
        inspection.table()["severity"], key=["error", "warning", "info"].index
    )


def test_the_notebook_view_escapes_ids(clean: dict[str, np.ndarray]) -> None:
    trains = {("<b>x</b>" if u == "u00" else u): t for u, t in clean.items()}
    inspection = inspect_recording(recording_of({**trains, "<b>x</b>": np.empty(0)}))
    view = inspection._repr_html_()
    assert "<b>" not in view
    assert "&lt;b&gt;x" in view


@pytest.mark.parametrize("n_units", [1, 2, 3])
@pytest.mark.parametrize("n_spikes", [0, 1, 2, 5])
@pytest.mark.parametrize("duration_s", [0.5, 3.0, 100.0])
def test_tiny_recordings_are_inspected_without_complaint_of_the_machine(
    n_units: int, n_spikes: int, duration_s: float
) -> None:
    rng = np.random.default_rng(12)
    trains = {f"u{k}": np.sort(rng.uniform(0.0, duration_s, n_spikes)) for k in range(n_units)}
    for positions in (np.zeros((n_units, 1)), PITCH_UM * np.arange(n_units)[:, None], rng.normal(size=(n_units, 3))):
        inspection = inspect_recording(recording_of(trains, positions, windows=((0.0, duration_s),)))
        assert inspection.suggested_bin_width_s > 0.0
        assert inspection.summary()


def test_short_trials_are_inspected() -> None:
    rng = np.random.default_rng(13)
    windows = tuple((2.0 * k, 2.0 * k + 0.7) for k in range(300))
    trains = steady_trains(rng)
    inspection = inspect_recording(recording_of(trains, windows=windows))
    assert keys(inspection, "error", "warning") == {"spikes_outside_windows"}
    late = inspection.correlograms[inspection.correlograms["scale"] == "slow"]
    assert late["expected"].to_numpy()[late["lag_s"].to_numpy() > 0.7].max() == 0.0  # no window is that long
    fine = inspection.correlograms[inspection.correlograms["scale"] == "fine"]
    assert np.average(fine["relative"], weights=fine["expected"]) == pytest.approx(1.0, abs=0.02)
