"""The results folder of a fit: every promised file, no network, nothing of a user's text taken as markup."""

from __future__ import annotations

import html.parser
import re
import xml.etree.ElementTree as ET
from pathlib import Path

import numpy as np
import pandas as pd
import pytest
from fakes import FakeSolver, fake_fit, fake_recording

import kernelfit.report.page as page_module
from kernelfit.errors import OutputError
from kernelfit.report.content import build_content
from kernelfit.report.figures_array import draw_array
from kernelfit.report.figures_kernel import draw_kernel, draw_time_course
from kernelfit.report.fit_page import write_results
from kernelfit.report.look import RAISING, inline_svg, look, save_figure
from kernelfit.report.page import Page, Section, Text, render_page
from kernelfit.report.truth import Truth, TruthValue

HOSTILE = ("<script>alert(1)</script>", "$\\frac{1}{", 'a&b"c', "x" * 300, "=1+1", "ünit", "007", "NA")
CONTRACT = ("report.html", "fit.json", "parameters.csv", "baselines.csv", "kernel.csv", "goodness.csv", "figures")
FIGURES = ("kernel", "time-course", "after-spike", "array", "ks", "raster")


@pytest.fixture(scope="module")
def written(tmp_path_factory):
    fit = fake_fit()
    folder = tmp_path_factory.mktemp("results") / "out"
    truth = Truth((TruthValue("amplitude", 0.11, "per spike"),), "An invented array of sixty units.")
    path = write_results(folder, fit, fit.recording, truth=truth)
    return folder, path.read_text(encoding="utf-8"), fit


@pytest.fixture(scope="module")
def hostile(tmp_path_factory):
    recording = fake_recording(8, ids=HOSTILE)
    fit = fake_fit(recording=recording)
    path = write_results(tmp_path_factory.mktemp("hostile") / "out", fit, recording)
    return path.parent, path.read_text(encoding="utf-8")


class Reader(html.parser.HTMLParser):
    """What a browser would see: elements with their attributes, and the text."""

    def __init__(self, page: str) -> None:
        super().__init__(convert_charrefs=True)
        self.elements: list[tuple[str, dict[str, str | None]]] = []
        self.open: list[str] = []
        self.text: list[str] = []
        self.unclosed: list[str] = []
        self.feed(page)

    def handle_starttag(self, tag, attrs):
        self.elements.append((tag, dict(attrs)))
        if tag not in {"meta", "link", "br"}:
            self.open.append(tag)

    def handle_startendtag(self, tag, attrs):
        self.elements.append((tag, dict(attrs)))

    def handle_endtag(self, tag):
        if not self.open or self.open[-1] != tag:
            self.unclosed.append(tag)
        else:
            self.open.pop()

    def handle_data(self, data):
        if not self.open or self.open[-1] not in {"script", "style"}:
            self.text.append(data)


def test_every_file_of_the_contract_is_there(written):
    folder, _, _ = written
    for name in CONTRACT:
        assert (folder / name).exists(), name
    for name in FIGURES:
        assert (folder / "figures" / f"{name}.svg").stat().st_size > 2000
        assert (folder / "figures" / f"{name}.png").read_bytes().startswith(b"\x89PNG")


def test_the_list_of_files_is_the_files(written):
    folder, page, _ = written
    listed = set(pd.read_csv(folder / "contents.csv").file)
    there = {p.relative_to(folder).as_posix() for p in folder.rglob("*") if p.is_file()}
    assert listed == there
    assert all(name in page for name in listed)


def test_tables_hold_the_numbers_of_the_fit(written):
    folder, _, fit = written
    kernel = pd.read_csv(folder / "kernel.csv")
    assert list(kernel.columns) == ["distance_um", "estimate", "lower", "upper"]
    assert not kernel.isna().any().any()
    np.testing.assert_allclose(kernel.estimate, fit.kernel(kernel.distance_um.to_numpy()), rtol=1e-12)
    parameters = pd.read_csv(folder / "parameters.csv", index_col="name")
    np.testing.assert_array_equal(parameters.estimate, fit.parameters.estimate)  # to the last bit
    goodness = pd.read_csv(folder / "goodness.csv", dtype={"unit": str})
    assert list(goodness.unit) == [*fit.unit_ids, "all units"]
    baselines = pd.read_csv(folder / "baselines.csv", dtype={"unit": str}, index_col="unit")
    assert list(baselines.index) == list(fit.unit_ids)


def test_the_page_needs_no_network(written, hostile):
    for page in (written[1], hostile[1]):
        assert not re.search(r"(https?:)?//[a-z0-9.-]+\.[a-z]", page)
        seen = Reader(page)
        for tag, attributes in seen.elements:
            for name in ("src", "href", "xlink:href", "data"):
                value = attributes.get(name)
                assert value is None or value.startswith(("#", "data:")), (tag, name, value)
        assert "@import" not in page


def test_the_markup_is_well_formed(written, hostile):
    for page in (written[1], hostile[1]):
        seen = Reader(page)
        assert seen.unclosed == []
        assert seen.open == []


def test_ids_on_the_page_are_unique_and_every_reference_has_its_target(written):
    seen = Reader(written[1])
    ids = [a["id"] for _, a in seen.elements if "id" in a]
    assert len(ids) == len(set(ids))
    targets = {a["href"][1:] for _, a in seen.elements if (a.get("href") or "").startswith("#")}
    targets |= set(re.findall(r"url\(#([^)]+)\)", written[1]))
    targets |= {a["aria-labelledby"] for _, a in seen.elements if "aria-labelledby" in a}
    assert targets <= set(ids)


def test_hostile_unit_ids_are_text_and_nothing_else(hostile):
    folder, page = hostile
    seen = Reader(page)
    scripts = [a for tag, a in seen.elements if tag == "script"]
    assert len(scripts) == 1  # our own
    assert "<script>alert" not in page
    text = " ".join(seen.text)
    for unit in HOSTILE:
        assert unit in text
    back = pd.read_csv(folder / "baselines.csv", dtype={"unit": str}, keep_default_na=False)
    assert tuple(back.unit) == HOSTILE


def test_pictures_have_alternatives_and_tables_have_captions(written):
    seen = Reader(written[1])
    pictures = [a for tag, a in seen.elements if tag == "svg"]
    assert len(pictures) == len(FIGURES)
    for attributes in pictures:
        assert attributes["role"] == "img"
        assert len(attributes["aria-label"]) > 30
    tags = [tag for tag, _ in seen.elements]
    assert tags.count("caption") == tags.count("table")
    assert all(a.get("scope") in {"col", "row"} for tag, a in seen.elements if tag == "th")
    assert ("html", {"lang": "en"}) in seen.elements


def test_sections_come_in_the_order_of_the_house_and_open_with_a_sentence(written):
    page = written[1]
    titles = re.findall(r"<h2[^>]*>([^<]+)</h2>\s*<div class=\"text\">\s*<p class=\"lead\">([^<]+)</p>", page)
    assert [t for t, _ in titles] == [
        "Verdict",
        "The kernel",
        "How sure are these numbers",
        "Does the model describe the recording",
        "The recording",
        "Settings",
        "Methods paragraph",
        "What the numbers do not mean",
        "Files",
    ]
    assert all(lead.rstrip().endswith((".", ":")) for _, lead in titles)


def test_cautions_stand_beside_the_numbers(written):
    page = written[1]
    verdict = page[page.index('id="verdict"') : page.index('id="kernel"')]
    kernel = page[page.index('id="kernel"') : page.index('id="sure"')]
    assert "functional coupling, not synaptic" in verdict
    assert "Not for clinical decisions" in verdict
    assert "cells that were not recorded" in kernel


def test_the_truth_is_shown_only_where_there_is_one(written, hostile):
    assert "truth the recording was made from" in written[1]
    assert "An invented array of sixty units." in written[1]
    assert "truth the recording was made from" not in hostile[1]


def test_a_fit_that_did_not_converge_is_written_and_marked(tmp_path):
    fit = fake_fit(
        recording=fake_recording(8), converged=False, solver=FakeSolver(converged=False, message="step limit")
    )
    page = write_results(tmp_path / "out", fit, fit.recording).read_text(encoding="utf-8")
    assert page.index('class="notice error"') < page.index("<main")


def test_nothing_is_left_when_writing_fails(tmp_path, monkeypatch):
    fit = fake_fit(recording=fake_recording(8))
    monkeypatch.setattr(type(fit), "save", lambda self, path: (_ for _ in ()).throw(OSError(28, "No space left")))
    with pytest.raises(OutputError, match="No space left"):
        write_results(tmp_path / "out", fit, fit.recording)
    assert list(tmp_path.iterdir()) == []


def test_a_folder_with_contents_is_refused_before_anything_is_computed(tmp_path):
    (tmp_path / "mine.txt").write_text("mine")
    with pytest.raises(OutputError, match="not empty"):
        write_results(tmp_path, None, None)


def test_the_same_fit_gives_the_same_files(tmp_path):
    fit = fake_fit(recording=fake_recording(8))
    first = write_results(tmp_path / "a", fit, fit.recording).parent
    second = write_results(tmp_path / "b", fit, fit.recording).parent
    for path in sorted(p for p in first.rglob("*") if p.is_file()):
        assert path.read_bytes() == (second / path.relative_to(first)).read_bytes(), path.name


# --- figures ----------------------------------------------------------------------------------------------


def texts_of(path) -> str:
    return " ".join("".join(t.itertext()) for t in ET.parse(path).iter("{http://www.w3.org/2000/svg}text"))


@pytest.mark.parametrize(
    ("name", "wanted"),
    [
        (
            "kernel",
            [
                "One spike raises the rate by 12 %",
                "distance (µm)",
                "effect of one spike (% of rate)",
                "pairs",
                "reference 200 µm",
            ],
        ),
        ("time-course", ["time since the spike (ms)", "effect of one spike (% of rate)", "at 200 µm"]),
        ("after-spike", ["time since the unit's own spike (ms)", "rate multiplier", "median"]),
        ("array", ["baseline rate (Hz)", "Baseline rates run from"]),
        ("ks", ["all units together", "KS statistic / critical value", "observed share of intervals", "worst"]),
        ("raster", ["60 units", "rate per unit (Hz)", "time on the recording's clock (s)", "observed", "fitted"]),
    ],
)
def test_figures_say_what_they_show_with_units(written, name, wanted):
    text = texts_of(written[0] / "figures" / f"{name}.svg")
    for words in wanted:
        assert " ".join(words.split()) in " ".join(text.split()), words


def test_figures_are_one_or_two_columns_wide(written):
    # 89 and 183 mm in points: 252.3 and 518.7
    for name in FIGURES:
        root = ET.parse(written[0] / "figures" / f"{name}.svg").getroot()
        width = float(root.get("width").removesuffix("pt"))
        assert width == pytest.approx(252.3, abs=0.1) or width == pytest.approx(518.7, abs=0.1)


def test_figures_hold_no_date_and_are_the_same_bytes_twice(tmp_path):
    fit = fake_fit(recording=fake_recording(8))
    data = build_content(fit, fit.recording, fit.goodness()).figures.kernel
    for k in "ab":
        (tmp_path / k).mkdir()
        save_figure(draw_kernel(data), tmp_path / k, "kernel")
    for ending in ("svg", "png"):
        assert (tmp_path / "a" / f"kernel.{ending}").read_bytes() == (tmp_path / "b" / f"kernel.{ending}").read_bytes()
    assert "<dc:date>" not in (tmp_path / "a" / "kernel.svg").read_text()


def test_lowering_is_drawn_and_told_in_its_own_colour():
    fit = fake_fit(recording=fake_recording(8), sign=-1.0)
    figures = build_content(fit, fit.recording, fit.goodness()).figures
    for figure in (draw_kernel(figures.kernel), draw_time_course(figures.course)):
        svg = inline_svg(figure, "x", "alt")
        assert RAISING not in svg
        assert "lowers the rate" in svg or "fades" in svg


def test_drawing_leaves_the_callers_settings_alone():
    import matplotlib as mpl

    with mpl.rc_context({"font.size": 31.0, "svg.fonttype": "path"}):
        fit = fake_fit(recording=fake_recording(8))
        draw_array(build_content(fit, fit.recording, fit.goodness()).figures.array)
        with look():
            assert mpl.rcParams["font.size"] < 10
        assert mpl.rcParams["font.size"] == 31.0
        assert mpl.rcParams["svg.fonttype"] == "path"


# --- pages ------------------------------------------------------------------------------------------------


def test_names_of_options_stay_on_one_line():
    shown = render_page(Page("t", "s", (Section("one", "One", "l", (Text("Cut it (--stop-s 5, a--b <i>--x</i>)."),)),)))
    assert '<span class="option">--stop-s</span> 5, a--b &lt;i&gt;<span class' not in shown  # one letter is no option
    assert '<span class="option">--stop-s</span> 5, a--b &lt;i&gt;--x&lt;/i&gt;' in shown


def test_printing_is_not_ruled_by_the_width_of_a_screen():
    # a printed page is as wide as a small tablet: rules for those must name the screen
    css = (Path(page_module.__file__).parent / "templates" / "page.css").read_text(encoding="utf-8")
    rules = re.findall(r"@media ([^{]+)\{", css)
    assert len(rules) > 3
    assert all(rule.startswith(("screen and", "print")) for rule in rules)


def test_numbers_stay_with_their_units_and_text_is_escaped():
    page = Page(
        "a <b>", "s", (Section("one", "One", "It is 12 % at 200 µm (p = 0.042).", (Text("p < 0.001 & 5 ms"),)),)
    )
    shown = render_page(page)
    assert "a &lt;b&gt;" in shown
    assert "12\N{NO-BREAK SPACE}% at 200\N{NO-BREAK SPACE}µm (p\N{NO-BREAK SPACE}=\N{NO-BREAK SPACE}0.042)" in shown
    assert "p\N{NO-BREAK SPACE}&lt;\N{NO-BREAK SPACE}0.001 &amp; 5\N{NO-BREAK SPACE}ms" in shown
