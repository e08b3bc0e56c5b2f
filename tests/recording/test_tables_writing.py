"""Writing a recording to tables: loss-free, whole or not at all."""

import numpy as np
import pytest

import kernelfit as kf
from kernelfit.errors import OutputError, RecordingError
from kernelfit.recording.table_writing import TABLE_FILES


def small():
    return kf.Recording.from_arrays(
        {"u1": [0.1, 0.2 + 0.1, 700.0], "007": [1 / 3], "#3": [], "a, b": [5.0]},
        [[0, 1 / 7, -2], [1e-3, 2, 3], [4, 5, 6], [7, 8, 9.5]],
        windows=[(0.0, 2.0), (4.0, 6.0 + 1e-9)],
        exclusions=[(0.5, 0.7)],
        exclude_pairs=[("u1", "a, b")],
        groups=["left", "", "right", "NA"],
    ).select(source_only=["#3"])


def read(folder):
    tables = [folder / name for name in TABLE_FILES]
    return kf.read_recording(*tables[:3], exclusions=tables[3], exclude_pairs=tables[4])


def assert_same(one, other):
    assert one.unit_ids == other.unit_ids
    assert one.positions.tobytes() == other.positions.tobytes()
    assert [t.tobytes() for t in one.trains] == [t.tobytes() for t in other.trains]
    assert one.window_bounds.tobytes() == other.window_bounds.tobytes()
    assert one.exclusion_bounds.tobytes() == other.exclusion_bounds.tobytes()
    for name in ("window_conditions", "window_trials", "groups", "excluded_pairs", "source_only"):
        assert getattr(one, name) == getattr(other, name), name


def test_what_was_written_reads_back_the_same_to_the_last_bit(tmp_path):
    rec = small()
    folder = kf.write_recording(rec, tmp_path / "out")
    assert sorted(p.name for p in folder.iterdir()) == sorted(TABLE_FILES)
    assert_same(rec, read(folder))


def test_the_tables_are_plain(tmp_path):
    rec = kf.Recording.from_arrays({"a": [0.5], "b": [0.25]}, [0.0, 1.5])
    folder = kf.write_recording(rec, tmp_path / "out")
    assert (folder / "spikes.csv").read_bytes() == b"unit,time_s\nb,0.25\na,0.5\n"
    assert (folder / "sites.csv").read_bytes() == b"unit,x_um\na,0.0\nb,1.5\n"
    assert (folder / "windows.csv").read_bytes() == b"start_s,stop_s\n0.0,1.0\n"
    assert (folder / "exclusions.csv").read_bytes() == b"start_s,stop_s\n"
    assert (folder / "exclude_pairs.csv").read_bytes() == b"unit_a,unit_b\n"


def test_labels_of_windows(tmp_path):
    rec = kf.read_recording(
        small().spikes,
        small().units,
        small().windows.assign(condition=["a;b", "x\t y".replace("\t", "")], trial=["1", "01"]),
    )
    assert_same(rec, read(kf.write_recording(rec, tmp_path / "out")))


def test_an_empty_folder_is_welcome_and_parents_are_made(tmp_path):
    (tmp_path / "empty").mkdir()
    kf.write_recording(small(), tmp_path / "empty")
    kf.write_recording(small(), str(tmp_path / "a" / "b" / "c"))
    assert_same(read(tmp_path / "empty"), read(tmp_path / "a" / "b" / "c"))


def test_nothing_is_overwritten_unasked(tmp_path):
    folder = kf.write_recording(small(), tmp_path / "out")
    other = small().select(units=["u1"])
    with pytest.raises(OutputError, match="is not empty"):
        kf.write_recording(other, folder)
    assert_same(read(folder), small())
    kf.write_recording(other, folder, overwrite=True)
    assert read(folder).unit_ids == ("u1",)
    assert [p.name for p in tmp_path.iterdir()] == ["out"]  # nothing temporary stays behind


def test_a_folder_with_other_things_is_never_touched(tmp_path):
    folder = kf.write_recording(small(), tmp_path / "out")
    (folder / "notes.txt").write_text("mine")
    with pytest.raises(OutputError, match=r"other things than tables of a recording \(notes\.txt\)"):
        kf.write_recording(small(), folder, overwrite=True)
    assert (folder / "notes.txt").read_text() == "mine"


def test_a_file_in_the_way(tmp_path):
    (tmp_path / "out").write_text("x")
    with pytest.raises(OutputError, match="is a file"):
        kf.write_recording(small(), tmp_path / "out")
    with pytest.raises(OutputError, match="cannot be written"):
        kf.write_recording(small(), tmp_path / "out" / "deeper")


@pytest.mark.parametrize("name", TABLE_FILES)
def test_a_failure_half_way_leaves_nothing(tmp_path, monkeypatch, name):
    from pathlib import Path

    whole = Path.write_text

    def full_disk(self, *args, **kwargs):
        if self.name == name:
            raise OSError(28, "No space left on device")
        return whole(self, *args, **kwargs)

    folder = kf.write_recording(small(), tmp_path / "out")
    monkeypatch.setattr(Path, "write_text", full_disk)
    for target in (folder, tmp_path / "fresh"):
        with pytest.raises(OutputError, match="No space left on device"):
            kf.write_recording(small().select(units=["u1"]), target, overwrite=True)
    assert [p.name for p in tmp_path.iterdir()] == ["out"]
    assert_same(read(folder), small())


@pytest.mark.parametrize("unit", ["", " u", "u\n", "a\tb", "\x00", "\ud800"])
def test_ids_that_no_table_can_hold(tmp_path, unit):
    rec = kf.Recording((unit,), np.zeros((1, 1)), (np.array([0.5]),), np.array([[0.0, 1.0]]))
    with pytest.raises(RecordingError, match=r"unit ids: .* cannot be written to a table"):
        kf.write_recording(rec, tmp_path / "out")
    assert not (tmp_path / "out").exists()
