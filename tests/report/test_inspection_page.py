"""The results folder of an inspection: whole, self-contained, escaped, and its proposals read back."""

from __future__ import annotations

import re
import xml.etree.ElementTree as ET
from dataclasses import replace
from html.parser import HTMLParser
from pathlib import Path

import numpy as np
import pandas as pd
import pytest

import kernelfit.recording
from kernelfit.errors import ArgumentError, OutputError, Unavailable
from kernelfit.recording.inspection import Inspection, inspect_recording
from kernelfit.recording.recording import Recording
from kernelfit.recording.table_writing import write_recording
from kernelfit.recording.tables import read_recording
from kernelfit.report.inspection_data import figures_data, interval_edges
from kernelfit.report.inspection_page import PAGE, write_inspection
from kernelfit.report.inspection_tables import KINDS

NASTY = "<script>alert(1)</script>"
DURATION_S = 300.0
CLICKS_S = np.arange(10.0, 290.0, 20.0)  # moments at which 12 of 16 units fire at once
FIGURES = ("array", "raster", "rate", "intervals", "correlograms")


def faulty_recording(first: str = "u00") -> Recording:
    """16 units, two on one site, planted artefacts, one cell seen twice, one silent unit."""
    rng = np.random.default_rng(21)
    ids = [first, *(f"u{k:02d}" for k in range(1, 16))]
    trains = [np.sort(rng.uniform(0.0, DURATION_S, 1500)) for _ in ids]
    for moment in CLICKS_S:
        for k in rng.permutation(15)[:12]:
            trains[k] = np.append(trains[k], moment + rng.uniform(-4e-4, 4e-4))
    trains[6] = np.append(trains[6], trains[5][::3] + 1e-4)
    trains[15] = np.empty(0)
    positions = 100.0 * np.array([(k % 4, k // 4) for k in range(16)], dtype=np.float64)
    positions[1] = positions[0]
    return Recording(
        unit_ids=tuple(ids),
        positions=positions,
        trains=tuple(np.sort(t) for t in trains),
        window_bounds=np.array([[0.0, DURATION_S]]),
    )


@pytest.fixture(scope="module")
def inspection() -> Inspection:
    return inspect_recording(faulty_recording())


@pytest.fixture(scope="module")
def folder(inspection: Inspection, tmp_path_factory: pytest.TempPathFactory) -> Path:
    place = tmp_path_factory.mktemp("page") / "out"
    write_inspection(place, inspection)
    return place


class Reader(HTMLParser):
    """Tags that are open, every attribute, and the text of a page."""

    def __init__(self) -> None:
        super().__init__()
        self.open: list[str] = []
        self.wrong: list[str] = []
        self.attributes: list[tuple[str, str, str]] = []
        self.text: list[str] = []

    def handle_starttag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        self.attributes += [(tag, name, value or "") for name, value in attrs]
        if tag not in {"meta", "link", "br"}:
            self.open.append(tag)

    def handle_startendtag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        self.attributes += [(tag, name, value or "") for name, value in attrs]

    def handle_endtag(self, tag: str) -> None:
        if not self.open or self.open.pop() != tag:
            self.wrong.append(tag)

    def handle_data(self, data: str) -> None:
        self.text.append(data)


def read(page: Path) -> Reader:
    reader = Reader()
    reader.feed(page.read_text(encoding="utf-8"))
    return reader


def test_the_folder_holds_what_it_lists(folder: Path) -> None:
    listed = set(pd.read_csv(folder / "contents.csv")["file"])
    found = {p.relative_to(folder).as_posix() for p in folder.rglob("*") if p.is_file()}
    assert found == listed
    assert {PAGE, "units.csv", "findings.csv", "proposed_exclusions.csv", "proposed_pairs.csv"} <= found
    assert {f"figures/{name}.{kind}" for name in FIGURES for kind in ("svg", "png")} <= found


def test_the_page_is_well_formed_and_needs_no_network(folder: Path) -> None:
    page = read(folder / PAGE)
    assert page.wrong == []
    assert page.open == []
    for tag, name, value in page.attributes:
        if name in {"src", "href", "xlink:href"}:
            assert value.startswith(("#", "data:")), (tag, name, value)
    assert "http" not in (folder / PAGE).read_text(encoding="utf-8")


def test_every_figure_has_an_alternative_text_and_a_caption(folder: Path) -> None:
    page = read(folder / PAGE)
    labels = [value for tag, name, value in page.attributes if tag == "svg" and name == "aria-label"]
    assert len(labels) == len(FIGURES)
    assert all(len(label) > 30 for label in labels)
    assert (folder / PAGE).read_text(encoding="utf-8").count("<figcaption>") == len(FIGURES)


@pytest.mark.parametrize("name", FIGURES)
def test_figures_are_files_of_their_own(folder: Path, name: str) -> None:
    root = ET.parse(folder / "figures" / f"{name}.svg").getroot()
    assert root.tag.endswith("svg")
    assert (folder / "figures" / f"{name}.png").read_bytes().startswith(b"\x89PNG")


def test_the_page_says_what_was_found(folder: Path, inspection: Inspection) -> None:
    text = "".join(read(folder / PAGE).text).replace("\N{NO-BREAK SPACE}", " ")
    assert "Nothing forbids a fit, but" in text
    assert "for research" in text.lower()
    assert "not for clinical decisions" in text.lower()
    for finding in inspection.findings:
        assert finding.what in text
        assert finding.remedy in text
    table = pd.read_csv(folder / "findings.csv")
    assert table["key"].tolist() == [f.key for f in inspection.findings]


def test_units_are_written_by_id(folder: Path, inspection: Inspection) -> None:
    table = pd.read_csv(folder / "units.csv", dtype={"unit": str}, keep_default_na=False, na_values={"rate_hz": [""]})
    assert table["unit"].tolist() == list(inspection.units.index)
    assert table["n_spikes"].tolist() == inspection.units["n_spikes"].tolist()
    assert table.loc[15, "remarks"] == "silent"


def test_the_proposals_read_back_and_clear_the_recording(folder: Path, tmp_path: Path) -> None:
    recording = faulty_recording()
    write_recording(recording, tmp_path)
    written = {p.stem.split(".")[0]: p for p in tmp_path.iterdir()}
    again = read_recording(
        written["spikes"],
        written["sites"],
        exclusions=folder / "proposed_exclusions.csv",
        exclude_pairs=folder / "proposed_pairs.csv",
    )
    assert len(again.exclusion_bounds) == CLICKS_S.size
    assert [set(pair) for pair in again.excluded_pairs] == [{"u05", "u06"}]
    cleared = inspect_recording(again)
    assert cleared.find("whole_array_events") is None
    assert cleared.find("one_cell_twice") is None


def test_empty_proposals_read_back_too(tmp_path: Path) -> None:
    rng = np.random.default_rng(3)
    trains = {f"u{k}": np.sort(rng.uniform(0.0, 60.0, 200)) for k in range(4)}
    recording = Recording.from_arrays(trains, [[0.0], [100.0], [200.0], [300.0]])
    write_inspection(tmp_path / "out", inspect_recording(recording))
    write_recording(recording, tmp_path / "tables")
    written = {p.stem.split(".")[0]: p for p in (tmp_path / "tables").iterdir()}
    again = read_recording(
        written["spikes"],
        written["sites"],
        exclusions=tmp_path / "out" / "proposed_exclusions.csv",
        exclude_pairs=tmp_path / "out" / "proposed_pairs.csv",
    )
    assert len(again.exclusion_bounds) == 0
    assert again.excluded_pairs == ()


def test_what_a_user_handed_in_is_escaped(tmp_path: Path) -> None:
    write_inspection(tmp_path / "out", inspect_recording(faulty_recording(first=NASTY)))
    page = (tmp_path / "out" / PAGE).read_text(encoding="utf-8")
    assert NASTY not in page
    assert "&lt;script&gt;alert(1)" in page
    assert read(tmp_path / "out" / PAGE).wrong == []


def test_the_same_inspection_gives_the_same_bytes(folder: Path, inspection: Inspection, tmp_path: Path) -> None:
    write_inspection(tmp_path / "out", inspection)
    for path in sorted(p for p in folder.rglob("*") if p.is_file()):
        assert (tmp_path / "out" / path.relative_to(folder)).read_bytes() == path.read_bytes(), path.name


def test_a_folder_in_use_is_refused_before_anything_is_drawn(inspection: Inspection, tmp_path: Path) -> None:
    (tmp_path / "notes.txt").write_text("mine")
    with pytest.raises(OutputError, match="not empty"):
        write_inspection(tmp_path, inspection)
    assert [p.name for p in tmp_path.iterdir()] == ["notes.txt"]


# --- data of figures ------------------------------------------------------------------------------------------


def test_the_raster_starts_where_asked(inspection: Inspection) -> None:
    raster = figures_data(inspection, raster_start_s=100.0).raster
    assert not isinstance(raster, Unavailable)
    assert (raster.start_s, raster.stop_s) == (100.0, 160.0)
    inside = sum(int(((t >= 100.0) & (t < 160.0)).sum()) for t in inspection.recording.trains)
    assert sum(map(len, raster.rows)) == inside
    assert raster.rate_hz.mean() == pytest.approx(inside / 60.0 / 16)
    assert len(raster.marked) == 3  # clicks at 110, 130 and 150 s


def test_the_raster_shows_a_proposal_unless_asked_otherwise(inspection: Inspection) -> None:
    raster = figures_data(inspection).raster
    assert not isinstance(raster, Unavailable)
    assert len(raster.marked) >= 1


def test_a_raster_outside_the_windows_is_refused(inspection: Inspection) -> None:
    with pytest.raises(ArgumentError, match=r"300 s: no window holds that time.*run from 0 s to 300 s"):
        figures_data(inspection, raster_start_s=300.0)


def test_where_the_raster_cannot_start_is_written_out(inspection: Inspection) -> None:
    with pytest.raises(ArgumentError, match=r"cannot start at 1700000012\.5 s: .* run from 0 s to 300 s"):
        figures_data(inspection, raster_start_s=1700000012.5)


def test_the_rate_course_holds_all_spikes_and_breaks_between_windows() -> None:
    recording = replace(faulty_recording(), window_bounds=np.array([[0.0, 100.0], [200.0, 300.0]]))
    inspection = inspect_recording(recording)
    course = figures_data(inspection).course
    assert not isinstance(course, Unavailable)
    known = np.isfinite(course.rate_hz)
    assert (~known).sum() == 1
    assert course.rate_hz[known].sum() * course.bin_s * 16 == pytest.approx(inspection.n_spikes)


def test_interval_histograms_hold_every_interval(inspection: Inspection) -> None:
    data = figures_data(inspection).intervals
    assert not isinstance(data, Unavailable)
    for panel in data.panels:
        decades = np.log10(panel.edges_s[1:] / panel.edges_s[:-1])
        assert np.sum(panel.per_decade * decades) == pytest.approx(1.0)


def test_interval_edges_lie_between_the_steps_of_the_times() -> None:
    lengths = 1e-4 * np.random.default_rng(0).integers(2, 5000, 1000)
    edges = interval_edges(lengths, 1e-4)
    assert np.allclose((edges / 1e-4) % 1.0, 0.5)
    assert (np.histogram(lengths, bins=edges)[0].sum()) == 1000
    assert (np.diff(edges) >= 1e-4 - 1e-12).all()


@pytest.mark.parametrize("n_spikes", [0, 1, 3])
@pytest.mark.parametrize("n_units", [1, 2])
def test_hardly_any_data_still_gives_a_page(n_units: int, n_spikes: int, tmp_path: Path) -> None:
    times = np.linspace(1.0, 5.0, n_spikes)
    recording = Recording(
        unit_ids=tuple(f"u{k}" for k in range(n_units)),
        positions=100.0 * np.arange(n_units, dtype=np.float64)[:, None],
        trains=tuple(times + 0.01 * k for k in range(n_units)),
        window_bounds=np.array([[0.0, 6.0]]),
    )
    page = write_inspection(tmp_path / "out", inspect_recording(recording))
    assert read(page).wrong == []
    if n_spikes == 0:
        assert "could not be drawn" in page.read_text(encoding="utf-8")


def test_every_kind_of_finding_has_words() -> None:
    """Source: the keys as they stand in the checks themselves."""
    source = "".join(
        p.read_text(encoding="utf-8") for p in Path(kernelfit.recording.__file__).parent.glob("checks_*.py")
    )
    keys = re.findall(r"Finding\(\s*\"([a-z0-9_]+)\"", source)
    assert len(keys) > 25
    assert set(keys) == set(KINDS)
