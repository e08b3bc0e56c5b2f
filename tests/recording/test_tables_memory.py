"""Recordings from DataFrames, Parquet and arrays: the same checks as for files, rows counted from 0."""

import hashlib

import numpy as np
import pandas as pd
import pytest

import kernelfit as kf
from kernelfit.errors import ArgumentError, RecordingError, TableError


def frames():
    spikes = pd.DataFrame({"unit": ["u1", "u2", "u1"], "time_s": [0.5, 0.25, 2.125]})
    sites = pd.DataFrame({"unit": ["u1", "u2", "u3"], "x_um": [0, 100, 200], "y_um": [10.0, 20.5, 30.0]})
    return spikes, sites


def assert_is_the_small_recording(rec):
    assert rec.unit_ids == ("u1", "u2", "u3")
    assert [t.tolist() for t in rec.trains] == [[0.5, 2.125], [0.25], []]
    assert rec.positions.tolist() == [[0.0, 10.0], [100.0, 20.5], [200.0, 30.0]]


# --- DataFrames ------------------------------------------------------------------------------------------


def test_frames():
    spikes, sites = frames()
    before = spikes.copy(), sites.copy()
    rec = kf.read_recording(spikes, sites)
    assert_is_the_small_recording(rec)
    assert rec.origin.name("spikes") == "spikes table"
    pd.testing.assert_frame_equal(spikes, before[0])
    pd.testing.assert_frame_equal(sites, before[1])


def test_a_recording_is_not_tied_to_the_frame():
    spikes, sites = frames()
    rec = kf.read_recording(spikes, sites)
    spikes.loc[:, "time_s"] = -1.0
    sites.loc[:, "y_um"] = -1.0
    assert_is_the_small_recording(rec)


@pytest.mark.parametrize("dtype", ["float32", "Float64", "object", "str", "category", "double[pyarrow]"])
def test_types_of_the_time_column(dtype):
    spikes, sites = frames()
    spikes["time_s"] = spikes["time_s"].astype(dtype)
    assert_is_the_small_recording(kf.read_recording(spikes, sites))


@pytest.mark.parametrize("dtype", ["object", "string", "category", "string[pyarrow]"])
def test_types_of_the_unit_column(dtype):
    spikes, sites = frames()
    spikes["unit"] = spikes["unit"].astype(dtype)
    assert_is_the_small_recording(kf.read_recording(spikes, sites))


@pytest.mark.parametrize("dtype", ["int64", "uint8", "Int32", "object"])
def test_integers_become_their_digits(dtype):
    spikes = pd.DataFrame({"unit": pd.Series([7, 36, 7]).astype(dtype), "time_s": [1.0, 2.0, 3.0]})
    sites = pd.DataFrame({"unit": ["36", "7"], "x_um": [0, 1]})
    assert kf.read_recording(spikes, sites).counts.tolist() == [1, 2]


def test_integer_times_in_samples():
    spikes = pd.DataFrame({"unit": ["a", "a"], "time_samples": np.array([3, 2**40], dtype=np.int64)})
    sites = pd.DataFrame({"unit": ["a"], "x_um": [0]})
    rec = kf.read_recording(spikes, sites, time_unit="samples", sampling_rate_hz=3e4)
    assert rec.trains[0].tolist() == [3 / 3e4, 2**40 / 3e4]


def test_numbers_in_frames_do_not_depend_on_the_decimal_mark():
    spikes, sites = frames()
    assert_is_the_small_recording(kf.read_recording(spikes, sites, decimal=","))
    spikes["time_s"] = ["0,5", "0,25", "2,125"]
    assert_is_the_small_recording(kf.read_recording(spikes, sites, decimal=","))


def test_ids_in_an_index_are_found():
    spikes, sites = frames()
    assert_is_the_small_recording(kf.read_recording(spikes, sites.set_index("unit")))
    rec = kf.read_recording(spikes, sites)
    again = kf.read_recording(rec.spikes, rec.units, rec.windows)
    assert_is_the_small_recording(again)


def test_the_row_index_of_a_frame_does_not_matter():
    spikes, sites = frames()
    spikes.index = [5, 5, 5]
    assert_is_the_small_recording(kf.read_recording(spikes, sites.iloc[::-1].iloc[::-1]))


def test_truth_values_mark_source_only_units():
    spikes, sites = frames()
    sites["source_only"] = [False, True, False]
    assert kf.read_recording(spikes, sites).source_only == {"u2"}


def test_the_hash_of_a_frame_is_that_of_its_columns_as_csv():
    spikes, sites = frames()
    rec = kf.read_recording(spikes.assign(extra=1)[["time_s", "extra", "unit"]], sites)
    as_csv = "unit,time_s\nu1,0.5\nu2,0.25\nu1,2.125\n"
    assert rec.origin.files[0].sha256 == hashlib.sha256(as_csv.encode()).hexdigest()


BAD_FRAMES = {
    "floats for ids": (
        {"unit": [7.0, 8.0], "time_s": [1.0, 2.0]},
        "row 0, column unit: '7.0': The column holds floating-point numbers, and ids are text.",
        "Turn the column into text",
    ),
    "a float among ids": (
        {"unit": ["u1", 2.5], "time_s": [1.0, 2.0]},
        "row 1, column unit: '2.5': A number with decimals, and ids are text.",
    ),
    "truth values for ids": (
        {"unit": [True, False], "time_s": [1.0, 2.0]},
        "row 0, column unit: 'True': A truth value, and ids are text.",
    ),
    "no id": ({"unit": ["u1", None], "time_s": [1.0, 2.0]}, "row 1, column unit", "Empty cell where an id is needed."),
    "nan": ({"unit": ["u1", "u1"], "time_s": [1.0, np.nan]}, "row 1, column time_s: 'nan': Missing value."),
    "infinite": (
        {"unit": ["u1", "u1"], "time_s": [1.0, -np.inf]},
        "row 1, column time_s: '-inf': Not a finite number.",
    ),
    "none among objects": ({"unit": ["u1", "u1"], "time_s": [1.0, None]}, "row 1, column time_s", "Missing value."),
    "text": ({"unit": ["u1", "u1"], "time_s": [1.0, "x"]}, "row 1, column time_s: 'x': Not a number."),
    "too large an integer": ({"unit": ["u1"], "time_s": [10**400]}, "column time_s", "Not a finite number."),
    "dates": (
        {"unit": ["u1"], "time_s": [pd.Timestamp("2026-01-01")]},
        "column time_s: '2026-01-01 00:00:00': A date instead of a plain number.",
    ),
    "durations": (
        {"unit": ["u1"], "time_s": [pd.Timedelta("1s")]},
        "column time_s",
        "A length of time instead of a plain",
    ),
    "truth values": (
        {"unit": ["u1"], "time_s": [True]},
        "column time_s: 'True': A truth value instead of a plain",
    ),
    "complex": ({"unit": ["u1"], "time_s": [1j]}, "column time_s: '1j': A complex number instead of a plain number."),
    "duplicate": (
        {"unit": ["u1", "u2", "u1"], "time_s": [1.0, 1.0, 1.0]},
        "row 2, column time_s: '1.0': Unit 'u1' has a spike at this time already in row 0.",
    ),
    "no columns": ({}, "There is no column 'unit' and no column 'time_s'; found: none."),
    "half a character": (
        {"unit": pd.Series(["\ud800"], dtype=object), "time_s": [1.0]},
        "column unit",
        "control character",
    ),
}


@pytest.mark.parametrize("case", BAD_FRAMES)
def test_bad_frames(case):
    columns, *pieces = BAD_FRAMES[case]
    with pytest.raises(TableError) as caught:
        kf.read_recording(pd.DataFrame(columns), frames()[1])
    assert str(caught.value).startswith("spikes table")
    for piece in pieces:
        assert piece in str(caught.value)


def test_rows_of_frames_say_how_they_are_counted():
    with pytest.raises(TableError, match=r"spikes table \(rows counted from 0\), row 0, column time_s"):
        kf.read_recording(pd.DataFrame({"unit": ["u1"], "time_s": [np.nan]}), frames()[1])


def test_column_names_that_are_no_text():
    with pytest.raises(TableError, match="found: 0, 1"):
        kf.read_recording(pd.DataFrame([["u1", 0.5]]), frames()[1])


# --- Parquet ---------------------------------------------------------------------------------------------


def test_parquet(tmp_path):
    pytest.importorskip("pyarrow")
    spikes, sites = frames()
    spikes.to_parquet(tmp_path / "spikes.parquet")
    sites.to_csv(tmp_path / "sites.csv", index=False)
    rec = kf.read_recording(tmp_path / "spikes.parquet", tmp_path / "sites.csv")
    assert_is_the_small_recording(rec)
    data = (tmp_path / "spikes.parquet").read_bytes()
    assert rec.origin.files[0].sha256 == hashlib.sha256(data).hexdigest()


def test_faults_in_parquet_name_the_file(tmp_path):
    pytest.importorskip("pyarrow")
    spikes, sites = frames()
    spikes.assign(time_s=[0.5, np.nan, 1.0]).to_parquet(tmp_path / "spikes.parquet")
    with pytest.raises(TableError, match=r"spikes\.parquet \(rows counted from 0\), row 1, column time_s: 'nan'"):
        kf.read_recording(tmp_path / "spikes.parquet", sites)


# --- arrays ----------------------------------------------------------------------------------------------


def test_from_arrays():
    rec = kf.Recording.from_arrays(
        {"u1": [2.125, 0.5], "u2": np.array([0.25]), "u3": []},
        [[0, 10], [100, 20.5], [200, 30]],
        groups=["a", "b", "a"],
        exclude_pairs=[("u1", "u3")],
        exclusions=[(0.1, 0.3), (0.2, 0.4)],
    )
    assert_is_the_small_recording(rec)
    assert rec.groups == ("a", "b", "a")
    assert rec.excluded_pairs == (("u1", "u3"),)
    assert rec.exclusion_bounds.tolist() == [[0.1, 0.4]]
    assert rec.window_bounds.tolist() == [[0.0, 3.0]]
    assert rec.origin.windows_stated is False
    assert [f.role for f in rec.origin.files] == ["spikes", "sites", "exclusions", "exclude_pairs"]


def test_from_arrays_agrees_with_read_recording():
    spikes, sites = frames()
    windows = pd.DataFrame({"start_s": [1.0, 0.0], "stop_s": [3.0, 0.75], "condition": ["b", "a"]})
    read = kf.read_recording(spikes, sites, windows)
    trains = {u: spikes.loc[spikes["unit"] == u, "time_s"].to_numpy() for u in sites["unit"]}
    made = kf.Recording.from_arrays(trains, sites[["x_um", "y_um"]].to_numpy(), windows)
    pd.testing.assert_frame_equal(read.units, made.units)
    pd.testing.assert_frame_equal(read.spikes, made.spikes)
    pd.testing.assert_frame_equal(read.windows, made.windows)


def test_a_flat_list_of_positions_is_one_coordinate():
    rec = kf.Recording.from_arrays({"a": [1.0], "b": [2.0]}, [0.0, 50.0], windows=[(0, 3)])
    assert rec.positions.tolist() == [[0.0], [50.0]]
    assert rec.window_bounds.tolist() == [[0.0, 3.0]]


def test_integer_keys_become_text():
    assert kf.Recording.from_arrays({7: [1.0], 8: [2.0]}, [0.0, 1.0]).unit_ids == ("7", "8")


def test_arrays_are_copied():
    times = np.array([1.0, 2.0])
    positions = np.array([[0.0, 0.0]])
    rec = kf.Recording.from_arrays({"a": times}, positions)
    times[0], positions[0, 0] = 1.5, 99.0
    assert rec.trains[0].tolist() == [1.0, 2.0]
    assert rec.positions[0, 0] == 0.0


def test_the_hashes_follow_the_contents():
    def hashes(times, positions):
        return [f.sha256 for f in kf.Recording.from_arrays({"a": times}, positions).origin.files]

    base = hashes([1.0, 2.0], [0.0])
    assert hashes([2.0, 1.0], [0.0]) == base
    assert hashes([1.0, 2.5], [0.0])[0] != base[0]
    assert hashes([1.0, 2.0], [0.5])[1] != base[1]


@pytest.mark.parametrize(
    ("times", "positions", "options", "error", "message"),
    [
        (
            {"a": [1.0, np.nan]},
            [0.0],
            {},
            TableError,
            "spike_times_s['a'] (rows counted from 0), row 1: 'nan': Not a finite time",
        ),
        (
            {"a": [1.0, 1.0]},
            [0.0],
            {},
            TableError,
            "row 1: '1.0': The unit has a spike at this time already in row 0. Take one out, or pass drop",
        ),
        (
            {"a": [1.0]},
            [np.inf],
            {},
            TableError,
            "positions_um (rows counted from 0), row 0, column x_um: 'inf': Not a finite position",
        ),
        (
            {"a": [1.0], "b": []},
            [0.0],
            {},
            RecordingError,
            "positions_um has shape (1,), and spike_times_s holds 2 units.",
        ),
        ({"a": [1.0]}, [[0.0] * 4], {}, RecordingError, "positions_um has shape (1, 4)"),
        ({"a": [1.0]}, [[[0.0]]], {}, RecordingError, "positions_um has shape (1, 1, 1)"),
        (
            {"a": [1.0], "b": [2.0]},
            [[0.0], [1.0, 2.0]],
            {},
            RecordingError,
            "positions_um cannot be made an array of numbers",
        ),
        ({"a": [[1.0]]}, [0.0], {}, RecordingError, "spike_times_s['a'] has shape (1, 1)."),
        ({"a": ["1.0"]}, [0.0], {}, RecordingError, "spike_times_s['a'] holds text, not numbers"),
        ({"a": ["1.0", None]}, [0.0], {}, RecordingError, "spike_times_s['a'] holds text, not numbers"),
        ({"a": [True]}, [0.0], {}, RecordingError, "spike_times_s['a'] holds truth values, not numbers"),
        ({}, [], {}, RecordingError, "spike_times_s holds no units"),
        ([[1.0]], [0.0], {}, RecordingError, "spike_times_s is a list. Give a dictionary from unit id to spike times"),
        ({"a": []}, [0.0], {}, RecordingError, "the recording holds no spikes"),
        (
            {"a": [1.0], " a": [2.0]},
            [0.0, 1.0],
            {},
            TableError,
            "'a': Two units have this id (blanks around ids do not count).",
        ),
        ({"": [1.0]}, [0.0], {}, TableError, "column unit: '': Empty cell"),
        ({7.0: [1.0]}, [0.0], {}, TableError, "column unit: '7.0': A number with decimals, and ids are text."),
        (
            {"a": [1.0]},
            [0.0],
            {"groups": ["x", "y"]},
            RecordingError,
            "groups holds 2 labels for 1 units. Give one for each.",
        ),
        ({"a": [1.0]}, [0.0], {"groups": "x"}, RecordingError, "groups is the text 'x'. Give a list"),
        (
            {"a": [1.0]},
            [0.0],
            {"windows": [(0, 1, 2)]},
            RecordingError,
            "windows has shape (1, 3). Give pairs of start and stop",
        ),
        (
            {"a": [1.0]},
            [0.0],
            {"windows": [(0, 2), (1, 3)]},
            TableError,
            "windows table (rows counted from 0), row 1, column start_s: '1.0': The window starts before",
        ),
        (
            {"a": [1.0]},
            [0.0],
            {"windows": [(5, 6)]},
            RecordingError,
            "windows table: none of the 1 spikes of spikes table (1 to 1 s)",
        ),
        ({"a": [1.0]}, [0.0], {"windows": []}, TableError, "windows table: The table has no rows."),
        (
            {"a": [1.0]},
            [0.0],
            {"exclusions": [(2, 1)]},
            TableError,
            "exclusions table (rows counted from 0), row 0, column stop_s: '1.0'",
        ),
        (
            {"a": [1.0]},
            [0.0],
            {"exclude_pairs": [("a", "b")]},
            TableError,
            "exclude_pairs table (rows counted from 0), row 0, column unit_b: 'b': The unit is not in spike_times_s.",
        ),
        (
            {"a": [1.0]},
            [0.0],
            {"exclude_pairs": ["ab"]},
            ArgumentError,
            "exclude_pairs holds the text 'ab'.",
        ),
    ],
)
def test_bad_arrays(times, positions, options, error, message):
    with pytest.raises(error) as caught:
        kf.Recording.from_arrays(times, positions, **options)
    assert message in str(caught.value)


def test_duplicates_in_arrays_are_dropped_when_asked():
    rec = kf.Recording.from_arrays({"a": [1.0, 1.0, 2.0], "b": [1.0]}, [0.0, 1.0], drop_duplicates=True)
    assert rec.counts.tolist() == [2, 1]
    assert "1 exact duplicate spike dropped" in rec.origin.notes
