"""Whatever the file holds, a reader ends with a recording or a message; what is written reads back."""

import gzip
import tempfile
from pathlib import Path

import numpy as np
import pandas as pd
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st
from test_tables_writing import assert_same, read

import kernelfit as kf

# Pieces that meet the special cases of the reader far more often than free text does.
PIECES = st.sampled_from(
    (
        *("unit", "time_s", "x_um", "y_um", "z_um", "start_s", "stop_s", "unit_a", "u1", "0.5", "1,5", "-", "-0"),
        *("nan", "1e999", "1e308", "#", '"', '""', ",", ";", "\t", "|", "\n", "\r\n", "\r", " ", "\ufeff", "\x00", "é"),
    )
)
NEARLY_TABLES = st.lists(PIECES, max_size=60).map("".join)
BODIES = st.lists(PIECES, max_size=40).map("".join)
OPTIONS = st.fixed_dictionaries(
    {
        "time_unit": st.sampled_from(["s", "ms", "us"]),
        "length_unit": st.sampled_from(["um", "mm"]),
        "decimal": st.sampled_from([".", ","]),
        "drop_duplicates": st.booleans(),
    }
)
SPIKES = b"unit,time_s\nu1,0.5\n"
SITES = b"unit,x_um\nu1,0\n"
# One folder serves all examples: each rewrites its files.
FUZZ = settings(max_examples=150, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture])


def try_to_read(folder, *, name="spikes.csv", spikes=SPIKES, sites=SITES, windows=None, **options):
    (folder / name).write_bytes(spikes)
    (folder / "sites.csv").write_bytes(sites)
    if windows is not None:
        (folder / "windows.csv").write_bytes(windows)
        options["windows"] = folder / "windows.csv"
    try:
        rec = kf.read_recording(folder / name, folder / "sites.csv", **options)
    except kf.KernelfitError as error:
        message = str(error)
    else:
        assert_is_sound(rec)
        return
    assert message


def assert_is_sound(rec):
    assert all(np.isfinite(t).all() and (np.diff(t) > 0).all() for t in rec.trains)
    assert np.isfinite(rec.positions).all()
    assert rec.n_spikes > 0


@given(data=st.binary(max_size=300), name=st.sampled_from(["s.csv", "s.csv.gz", "s.parquet", "s.tsv"]))
@FUZZ
def test_any_bytes(tmp_path, data, name):
    try_to_read(tmp_path, name=name, spikes=data)


@given(text=NEARLY_TABLES | st.text(max_size=100), options=OPTIONS, encoding=st.sampled_from(["utf-8", "utf-16"]))
@FUZZ
def test_any_text(tmp_path, text, options, encoding):
    data = text.encode(encoding, errors="surrogatepass")
    try_to_read(tmp_path, spikes=data, **options)
    try_to_read(tmp_path, sites=data, **options)
    try_to_read(tmp_path, windows=data, **options)


@given(body=BODIES, header=st.sampled_from(["unit,time_s", "unit;time_s", '"unit","time_s"']), options=OPTIONS)
@FUZZ
def test_any_rows_below_a_sound_header(tmp_path, body, header, options):
    try_to_read(tmp_path, spikes=f"{header}\n{body}".encode(), **options)


@given(body=BODIES, header=st.sampled_from(["unit,x_um", "unit,x_um,y_um,z_um", "x_mm;unit;group;source_only"]))
@FUZZ
def test_any_sites_below_a_sound_header(tmp_path, body, header):
    try_to_read(tmp_path, sites=f"{header}\n{body}".encode())


@given(cut=st.integers(0, 200), flip=st.integers(0, 10_000))
@FUZZ
def test_damaged_gzip(tmp_path, cut, flip):
    data = bytearray(gzip.compress(SPIKES * 20, mtime=0))
    data[flip % len(data)] ^= 1 << flip % 8
    try_to_read(tmp_path, name="s.csv.gz", spikes=bytes(data[: max(len(data) - cut, 1)]))


@given(flips=st.lists(st.integers(0, 100_000), max_size=5), cut=st.integers(0, 50))
@FUZZ
def test_damaged_parquet(tmp_path, flips, cut):
    pytest.importorskip("pyarrow")
    whole = tmp_path / "whole.parquet"
    if not whole.exists():
        pd.DataFrame({"unit": ["u1"], "time_s": [0.5]}).to_parquet(whole)
    data = bytearray(whole.read_bytes())
    for flip in flips:
        data[flip % len(data)] ^= 1 << flip % 8
    try_to_read(tmp_path, name="s.parquet", spikes=bytes(data[: len(data) - cut]))


CELLS = (
    st.none() | st.booleans() | st.integers() | st.floats() | st.text(max_size=4) | st.complex_numbers() | st.dates()
)


@given(
    unit=st.lists(CELLS, min_size=3, max_size=3),
    time_s=st.lists(CELLS, min_size=3, max_size=3),
    dtype=st.sampled_from([object, None]),
)
@FUZZ
def test_any_frame(unit, time_s, dtype):
    sites = pd.DataFrame({"unit": ["1", "a"], "x_um": [0, 1]})
    try:
        frame = pd.DataFrame({"unit": unit, "time_s": time_s}, dtype=dtype)
    except (OverflowError, ValueError, TypeError):  # pandas refuses it already
        return
    try:
        rec = kf.read_recording(frame, sites)
    except kf.KernelfitError as error:
        message = str(error)
    else:
        assert_is_sound(rec)
        return
    assert message


# --- round trip ------------------------------------------------------------------------------------------

LABELS = st.text(st.characters(exclude_categories=("Cc", "Cs")), max_size=6).map(str.strip)
IDS = LABELS.filter(bool)
TIMES = st.floats(-1e9, 1e9, allow_nan=False)
PLACES = st.floats(-1e8, 1e8, allow_nan=False)


@st.composite
def recordings(draw):
    ids = draw(st.lists(IDS, min_size=1, max_size=5, unique=True))
    n = len(ids)
    trains = [np.unique(draw(st.lists(TIMES, max_size=8))) for _ in ids]
    trains[0] = np.unique(np.append(trains[0], 0.0))
    edges = np.unique(draw(st.lists(TIMES, max_size=7)))
    pairs = edges[: len(edges) // 2 * 2].reshape(-1, 2)
    windows = pairs if any((a <= 0.0 < b) for a, b in pairs) else np.array([[-1.0, 1.0]])
    n_axes = draw(st.integers(1, 3))
    labels = st.none() | st.tuples(*[LABELS] * len(windows))
    return kf.Recording(
        unit_ids=tuple(ids),
        positions=np.array(draw(st.lists(PLACES, min_size=n * n_axes, max_size=n * n_axes))).reshape(n, n_axes),
        trains=tuple(trains),
        window_bounds=windows,
        exclusion_bounds=pairs,
        window_conditions=draw(labels),
        window_trials=draw(labels),
        groups=draw(st.none() | st.tuples(*[LABELS] * n)),
        excluded_pairs=((ids[0], ids[-1]),) if n > 1 else (),
        source_only=frozenset(draw(st.lists(st.sampled_from(ids), max_size=2))),
    )


@given(rec=recordings())
@settings(max_examples=100, deadline=None)
def test_what_is_written_reads_back_the_same(rec):
    with tempfile.TemporaryDirectory() as folder:
        assert_same(rec, read(kf.write_recording(rec, Path(folder) / "tables")))


@given(rec=recordings())
@settings(max_examples=50, deadline=None)
def test_frames_of_a_recording_read_back_the_same(rec):
    again = kf.read_recording(rec.spikes, rec.units, rec.windows)
    assert again.unit_ids == rec.unit_ids
    assert [t.tobytes() for t in again.trains] == [t.tobytes() for t in rec.trains]
    assert again.positions.tobytes() == rec.positions.tobytes()
