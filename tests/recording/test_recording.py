"""`Recording` and `select`: what it holds, how it is cut, and what it refuses.

Expected numbers are counted by hand from the few spikes written here.
"""

import dataclasses

import numpy as np
import pandas as pd
import pytest

import kernelfit as kf
from kernelfit.errors import ArgumentError, RecordingError
from kernelfit.recording.grid import make_grid
from kernelfit.recording.inspection import inspect_recording
from kernelfit.recording.recording import Origin, SourceFile


@pytest.fixture
def rec():
    return kf.read_recording(
        pd.DataFrame(
            {
                "unit": ["a", "a", "a", "b", "b", "c", "a", "c"],
                "time_s": [1.0, 2.0, 12.0, 2.0, 9.5, 25.0, 7.5, 10.0],
            }
        ),
        pd.DataFrame(
            {
                "unit": ["c", "a", "b", "d"],
                "x_um": [0.0, 100.0, 200.0, 300.0],
                "y_um": [5.0, 5.0, 5.0, 5.0],
                "group": ["on", "off", "on", "off"],
            }
        ),
        pd.DataFrame({"start_s": [0.0, 10.0], "stop_s": [5.0, 20.0], "condition": ["before", "drug"], "trial": [1, 2]}),
        exclusions=pd.DataFrame({"start_s": [11.0], "stop_s": [11.5]}),
        exclude_pairs=pd.DataFrame({"unit_a": ["a", "c"], "unit_b": ["b", "d"]}),
    )


# --- what it holds ---------------------------------------------------------------------------------------


def test_order_and_sizes(rec):
    assert rec.unit_ids == ("c", "a", "b", "d")  # of the sites table
    assert (rec.n_units, rec.n_coordinates, rec.n_spikes, rec.duration) == (4, 2, 5, 15.0)
    assert rec.counts.tolist() == [1, 3, 1, 0]  # 7.5, 9.5 and 25 lie outside; 10 is the start of a window


def test_the_stop_of_a_window_lies_outside(rec):
    cut = rec.select(stop_s=12.0)
    assert cut.counts.tolist() == [1, 2, 1, 0]
    assert rec.select(stop_s=np.nextafter(12.0, 13.0)).counts.tolist() == [1, 3, 1, 0]


def test_units_table(rec):
    units = rec.units
    assert list(units.index) == ["c", "a", "b", "d"]
    assert units.index.name == "unit"
    assert list(units.columns) == ["x_um", "y_um", "group", "n_spikes", "rate_hz"]
    assert units.loc["a", "n_spikes"] == 3
    assert units.loc["a", "rate_hz"] == pytest.approx(3 / 15)
    assert units.loc["d", "rate_hz"] == 0.0


def test_windows_and_exclusions_tables(rec):
    assert rec.windows.to_dict("list") == {
        "start_s": [0.0, 10.0],
        "stop_s": [5.0, 20.0],
        "condition": ["before", "drug"],
        "trial": ["1", "2"],
    }
    assert rec.exclusions.to_dict("list") == {"start_s": [11.0], "stop_s": [11.5]}


def test_spikes_table_is_sorted_by_time_then_by_unit(rec):
    spikes = rec.spikes
    assert spikes["time_s"].tolist() == [1.0, 2.0, 2.0, 7.5, 9.5, 10.0, 12.0, 25.0]
    assert spikes["unit"].tolist() == ["a", "a", "b", "a", "b", "c", "a", "c"]


def test_spike_times(rec):
    assert rec.spike_times("a").tolist() == [1.0, 2.0, 7.5, 12.0]
    assert rec.spike_times("d").size == 0


def test_an_unknown_unit_is_named_with_the_closest(rec):
    with pytest.raises(RecordingError, match=r"sites table: no unit 'A' among its 4 units\. Ids are text and case"):
        rec.spike_times("A")


def test_it_cannot_be_changed(rec):
    for array in (rec.positions, rec.window_bounds, rec.exclusion_bounds, *rec.trains):
        with pytest.raises(ValueError, match="read-only"):
            array[...] = 0.0
    with pytest.raises(dataclasses.FrozenInstanceError):
        rec.unit_ids = ()
    windows, units = rec.windows, rec.units
    windows.iloc[0, 0] = 99.0
    units.loc[:, "x_um"] = 99.0
    assert rec.window_bounds[0, 0] == 0.0
    assert rec.positions[0, 0] == 0.0


def test_repr(rec):
    assert repr(rec) == "Recording(4 units, 2 coordinates, 5 spikes in 2 windows of 15 s)"


@pytest.mark.parametrize(
    ("change", "message"),
    [
        ({"unit_ids": ()}, "holds no units"),
        ({"unit_ids": ("a", "a")}, "Unit 'a' is listed twice"),
        ({"positions": np.zeros((3, 2))}, r"positions has shape \(3, 2\)"),
        ({"positions": np.zeros((2, 4))}, r"positions has shape \(2, 4\)"),
        ({"trains": (np.array([1.0]),)}, "1 spike trains for 2 units"),
        ({"window_bounds": np.empty((0, 2))}, "has no window"),
    ],
)
def test_shapes_that_do_not_fit(change, message):
    sound = {
        "unit_ids": ("a", "b"),
        "positions": np.zeros((2, 2)),
        "trains": (np.array([1.0]), np.array([2.0])),
        "window_bounds": np.array([[0.0, 3.0]]),
    }
    with pytest.raises(RecordingError, match=message):
        kf.Recording(**(sound | change))


def test_origin():
    origin = Origin((SourceFile("spikes", "s.csv", "00"),))
    assert origin.name("spikes") == "s.csv"
    assert origin.name("sites") == "sites table"
    assert origin.noted("x").noted("y").notes == ("x", "y")
    assert origin.notes == ()


# --- select ----------------------------------------------------------------------------------------------


def test_nothing_asked_nothing_changed(rec):
    assert rec.select() is rec


def test_select_units_keeps_the_order_of_the_sites(rec):
    chosen = rec.select(units=["b", "a"])
    assert chosen.unit_ids == ("a", "b")
    assert chosen.positions.tolist() == [[100.0, 5.0], [200.0, 5.0]]
    assert chosen.groups == ("off", "on")
    assert chosen.spike_times("a").tolist() == rec.spike_times("a").tolist()
    assert chosen.excluded_pairs == (("a", "b"),)
    assert chosen.origin.notes[-1] == "2 of 4 units selected"
    assert rec.n_units == 4
    assert rec.select(units="b").unit_ids == ("b",)


def test_select_groups(rec):
    assert rec.select(groups=["on"]).unit_ids == ("c", "b")
    assert rec.select(groups="off").unit_ids == ("a", "d")


def test_select_by_number_of_spikes_counts_in_the_new_windows(rec):
    assert rec.select(min_spikes=1).unit_ids == ("c", "a", "b")
    assert rec.select(min_spikes=2).unit_ids == ("a",)
    assert rec.select(min_spikes=1, start_s=10.0).unit_ids == ("c", "a")


def test_select_time_cuts_the_windows_and_keeps_history(rec):
    cut = rec.select(start_s=1.5, stop_s=15.0)
    assert cut.window_bounds.tolist() == [[1.5, 5.0], [10.0, 15.0]]
    assert cut.counts.tolist() == [1, 2, 1, 0]
    assert cut.spike_times("a").tolist() == rec.spike_times("a").tolist()
    assert cut.window_conditions == ("before", "drug")
    later = rec.select(start_s=6.0)
    assert later.window_bounds.tolist() == [[10.0, 20.0]]
    assert later.window_conditions == ("drug",)
    assert later.window_trials == ("2",)


def test_select_conditions(rec):
    drug = rec.select(conditions="drug")
    assert drug.window_bounds.tolist() == [[10.0, 20.0]]
    assert drug.exclusion_bounds.tolist() == [[11.0, 11.5]]


def test_select_source_only(rec):
    marked = rec.select(source_only=["d", "a"])
    assert marked.source_only == {"a", "d"}
    assert marked.source_only_mask.tolist() == [False, True, False, True]
    assert marked.n_units == 4
    assert marked.select(units=["a", "b"]).source_only == {"a"}
    assert marked.select(source_only=[]).source_only == frozenset()


def test_silent_units_stay(rec):
    cut = rec.select(stop_s=0.5)
    assert cut.n_units == 4
    assert cut.n_spikes == 0


@pytest.mark.parametrize(
    ("asked", "message"),
    [
        ({"units": ["a", "z"]}, "no unit 'z' among its 4 units"),
        ({"units": []}, "spikes table: the selection leaves no unit of 4"),
        ({"groups": ["ON"]}, "sites table: no group 'ON'. Known: off, on."),
        ({"min_spikes": 100}, "the selection leaves no unit of 4. Widen it"),
        ({"start_s": 30.0}, "nothing of the windows is left from start_s=30 on"),
        ({"start_s": 5.0, "stop_s": 10.0}, "The recording runs from 0 s to 20 s."),
        ({"start_s": 8.0, "stop_s": 2.0}, "nothing of the windows is left"),
        ({"conditions": ["wash"]}, "windows table: no condition 'wash'. Known: before, drug."),
        ({"source_only": ["z"]}, "no unit 'z'"),
    ],
)
def test_selections_that_are_refused(rec, asked, message):
    with pytest.raises(RecordingError) as caught:
        rec.select(**asked)
    assert message in str(caught.value)


def test_groups_and_conditions_that_were_never_given():
    bare = kf.Recording.from_arrays({"a": [1.0]}, [0.0])
    with pytest.raises(RecordingError, match="The sites have no column 'group'"):
        bare.select(groups=["on"])
    with pytest.raises(RecordingError, match="The windows have no column 'condition'"):
        bare.select(conditions=["drug"])


# --- exclusions ------------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    "given",
    [np.array([[3.0, 4.0], [1.0, 2.0]]), pd.DataFrame({"start_s": [3.0, 1.0], "stop_s": [4.0, 2.0]})],
)
def test_with_exclusions_replaces_and_sorts(rec, given):
    assert rec.with_exclusions(given).exclusion_bounds.tolist() == [[1.0, 2.0], [3.0, 4.0]]
    assert rec.exclusion_bounds.tolist() == [[11.0, 11.5]]


@pytest.mark.parametrize("bad", [[[2.0, 1.0]], [[1.0, 1.0]], [[0.0, np.inf]], [[np.nan, 1.0]]])
def test_exclusions_that_are_no_stretches(rec, bad):
    with pytest.raises(ArgumentError, match="is not a stretch with stop after start"):
        rec.with_exclusions(np.array(bad))


# --- calls that cannot be meant: refused in words, never by a traceback from inside a library ----------------

TWO = {"a": [0.1, 0.5, 1.2], "b": [0.3, 0.7, 1.1]}
PLACES = [[0.0, 0.0], [100.0, 0.0]]

BAD_CALLS = {
    "nothing for spikes": (
        lambda r: kf.Recording.from_arrays(None, PLACES),
        "spike_times_s is None. Give a",
    ),
    "words for times": (
        lambda r: kf.Recording.from_arrays({"a": "0.1", "b": [1.0]}, PLACES),
        "spike_times_s['a'] is the text '0.1'. Give plain numbers",
    ),
    "no times": (lambda r: kf.Recording.from_arrays({"a": None, "b": [1.0]}, PLACES), "spike_times_s['a'] is None."),
    "one number": (
        lambda r: kf.Recording.from_arrays({"a": 1.0, "b": [1.0]}, PLACES),
        "spike_times_s['a'] is a single number. Give a flat list",
    ),
    "dates": (
        lambda r: kf.Recording.from_arrays({"a": np.array(["2026-01-01"], dtype="M8[s]"), "b": [1.0]}, PLACES),
        "spike_times_s['a'] holds dates, not numbers.",
    ),
    "no positions": (lambda r: kf.Recording.from_arrays(TWO, None), "positions_um is None. Give plain numbers"),
    "a word for positions": (lambda r: kf.Recording.from_arrays(TWO, "here"), "positions_um is the text 'here'."),
    "a path for windows": (
        lambda r: kf.Recording.from_arrays(TWO, PLACES, "w.csv"),
        "windows is the text 'w.csv'. Give plain numbers; tables are read by kf.read_recording.",
    ),
    "one window without brackets": (
        lambda r: kf.Recording.from_arrays(TWO, PLACES, (0.0, 2.0)),
        "windows has shape (2,). Give pairs of start and stop in seconds, such as [(0.0, 60.0)",
    ),
    "a number for windows": (lambda r: kf.Recording.from_arrays(TWO, PLACES, 5), "windows is a single number."),
    "one pair without brackets": (
        lambda r: kf.Recording.from_arrays(TWO, PLACES, exclude_pairs=("a", "b")),
        "exclude_pairs holds the text 'a'. Give pairs of unit ids, such as [('u01', 'u02')].",
    ),
    "a number for pairs": (
        lambda r: kf.Recording.from_arrays(TWO, PLACES, exclude_pairs=5),
        "exclude_pairs is 5. Give pairs",
    ),
    "a number for groups": (lambda r: kf.Recording.from_arrays(TWO, PLACES, groups=5), "groups is 5. Give a list"),
    "words to the constructor": (
        lambda r: kf.Recording(("a", "b"), PLACES, (["x"], [1.0]), [(0.0, 1.0)]),
        "trains: a list cannot be made an array of numbers.",
    ),
    "a word for its positions": (
        lambda r: kf.Recording(("a", "b"), "x", ([1.0], [1.0]), [(0.0, 1.0)]),
        "positions: the text 'x' cannot be made an array of numbers.",
    ),
    "half a window": (
        lambda r: kf.Recording(("a", "b"), PLACES, ([1.0], [1.0]), [0.0, 1.0, 2.0]),
        "window_bounds: 3 numbers are no pairs of start and stop.",
    ),
    "a number for units": (lambda r: r.select(units=5), "units: 5 is no list. Give a list of ids or labels."),
    "a word for a count": (lambda r: r.select(min_spikes="many"), "min_spikes: the text 'many' is no count."),
    "a word for a time": (lambda r: r.select(start_s="5"), "start_s: the text '5' is no time."),
    "no time": (lambda r: r.select(stop_s=float("nan")), "stop_s: nan is no time. Give seconds"),
    "a list for a unit": (lambda r: r.spike_times(["a"]), "no unit ['a'] among its 2 units."),
    "a path for exclusions": (lambda r: r.with_exclusions("x.csv"), "exclusions: the text 'x.csv' cannot be made"),
    "half an exclusion": (lambda r: r.with_exclusions([1.0, 2.0, 3.0]), "exclusions: 3 numbers are no pairs"),
    "other columns": (
        lambda r: r.with_exclusions(pd.DataFrame({"from": [1.0], "to": [2.0]})),
        "exclusions: there is no column 'start_s' and no column 'stop_s'.",
    ),
    "a path for a recording": (lambda r: make_grid("s.csv", 0.001), "recording: the text 's.csv' is not a recording."),
    "nothing to look at": (lambda r: inspect_recording(None), "recording: None is not a recording."),
    "a word for a seed": (lambda r: inspect_recording(r, seed="x"), "seed: the text 'x' is no seed."),
    "nothing to write": (lambda r: kf.write_recording(None, "folder"), "recording: None is not a recording."),
    "nowhere to write": (lambda r: kf.write_recording(r, None), "folder: None is no path."),
}


@pytest.mark.parametrize("call", BAD_CALLS.values(), ids=BAD_CALLS.keys())
def test_calls_that_cannot_be_meant_are_refused_in_words(call):
    make, words = call
    with pytest.raises(kf.KernelfitError) as caught:
        make(kf.Recording.from_arrays(TWO, PLACES, [(0.0, 2.0)]))
    assert words in str(caught.value)
    assert len(str(caught.value)) < 300


def test_no_pairs_may_be_said_as_none():
    assert kf.Recording.from_arrays(TWO, PLACES, exclude_pairs=None).excluded_pairs == ()
