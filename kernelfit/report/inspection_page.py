"""The results folder of an inspection: page, figures, findings and proposals, written whole or not at all."""

from __future__ import annotations

import os
from collections.abc import Callable
from pathlib import Path
from typing import TypeVar

import pandas as pd
from matplotlib.figure import Figure

from kernelfit.errors import Unavailable
from kernelfit.recording.inspection import Inspection
from kernelfit.report import words
from kernelfit.report.content import recording_name
from kernelfit.report.figures_array import draw_array
from kernelfit.report.folder import FileEntry, ResultsFolder, check_folder, files_list
from kernelfit.report.inspection_data import InspectionFigures, figures_data
from kernelfit.report.inspection_figures import draw_correlograms, draw_intervals, draw_rate_course, draw_stretch
from kernelfit.report.inspection_tables import (
    blocks_table,
    findings_list,
    gaps_table,
    methods_paragraph,
    pairs_table,
    ranges_table,
    recording_facts,
    units_table,
)
from kernelfit.report.inspection_words import TOGETHER, InspectionWords, inspection_words
from kernelfit.report.look import save_figure
from kernelfit.report.page import (
    Block,
    Listing,
    Notice,
    Page,
    Picture,
    Quote,
    Section,
    Text,
    picture,
    render_page,
)

PAGE = "inspection.html"
PAGE_WHAT = "this page: findings, proposals, pictures"
D = TypeVar("D")


def write_inspection(
    folder: str | os.PathLike[str],
    inspection: Inspection,
    *,
    raster_start_s: float | None = None,
    overwrite: bool = False,
) -> Path:
    """Write the results folder of an inspection.

    Parameters
    ----------
    folder : where; written whole or not at all
    inspection : what was found
    raster_start_s : where the raster starts, seconds on the recording's clock; None: a stretch of about the mean
        spike count
    overwrite : replace earlier results in that folder

    Returns
    -------
    Path of the page in the finished folder.

    Raises
    ------
    OutputError : the folder is not empty and may not be replaced, or cannot be written
    ArgumentError : `raster_start_s` lies in no window
    """
    check_folder(folder, overwrite=overwrite)
    figures = figures_data(inspection, raster_start_s=raster_start_s)
    said = inspection_words(inspection, figures)
    with ResultsFolder(folder, overwrite=overwrite) as results:
        results.file(PAGE, PAGE_WHAT)
        _write_tables(results, inspection)
        pictures = _write_figures(results, figures, said)
        page = inspection_page(inspection, figures, said, pictures, results.entries)
        results.write_text(PAGE, render_page(page), PAGE_WHAT)
    return results.path / PAGE


def _write_tables(results: ResultsFolder, inspection: Inspection) -> None:
    def write(name: str, table: pd.DataFrame, what: str, *, index: bool = False) -> None:
        table.to_csv(results.file(name, what), index=index, encoding="utf-8", lineterminator="\n")

    write("findings.csv", inspection.table(), "all findings: severity, key, what, where, remedy")
    write(
        "proposed_exclusions.csv",
        inspection.proposed_exclusions,
        "stretches to leave out, for --exclusions; only a header where there are none",
    )
    write(
        "proposed_pairs.csv",
        inspection.proposed_pairs,
        "pairs to leave out of the kernel, for --exclude-pairs; only a header where there are none",
    )
    write("units.csv", inspection.units, "every unit: position, spikes, rate, intervals, remarks", index=True)
    write("correlograms.csv", inspection.correlograms, "correlograms pooled by distance")
    if len(inspection.proposed_exclusions):
        write(
            "correlograms_masked.csv",
            inspection.correlograms_masked,
            "the same with the proposed exclusions left out",
        )
    write("block_rates.csv", inspection.block_rates, "mean rates over blocks of time")
    write("gaps.csv", inspection.gaps, "stretches of 10 s and more without a spike")
    write("distances.csv", inspection.distances, "number of pairs at each distance")
    write("ranges.csv", inspection.ranges, "what a kernel of each range would rest on")


def _write_figures(results: ResultsFolder, figures: InspectionFigures, said: InspectionWords) -> dict[str, Picture]:
    """Draw and save every figure that has data; by name, those that were drawn."""
    drawn: dict[str, Picture] = {}

    def add(
        name: str,
        data: D | Unavailable,
        draw: Callable[[D], Figure],
        what: str,
        *,
        wide: bool = True,
        numbers: str = "",
    ) -> None:
        if isinstance(data, Unavailable):
            return
        figure = draw(data)
        svg = results.file(f"figures/{name}.svg", f"{what}, for a paper")
        results.file(f"figures/{name}.png", f"{what}, 300 dots per inch")
        save_figure(figure, svg.parent, name)
        caption, alt = said.captions[name]
        files = (f"figures/{name}.svg", f"figures/{name}.png", *((numbers,) if numbers else ()))
        drawn[name] = picture(figure, name, alt=alt, caption=caption, wide=wide, files=files)

    def numbers_of(name: str, table: pd.DataFrame | None, what: str) -> str:
        if table is None:
            return ""
        table.to_csv(results.file(name, what), index=False, encoding="utf-8", lineterminator="\n")
        return name

    raster, course, held = figures.raster, figures.course, figures.intervals
    add("array", figures.array, draw_array, "array map of rates", wide=False, numbers="units.csv")
    add(
        "raster",
        raster,
        draw_stretch,
        "raster of a stretch",
        numbers=numbers_of(
            "figures/raster.csv",
            None if isinstance(raster, Unavailable) else raster.numbers(),
            "mean rate under the raster",
        ),
    )
    add(
        "rate",
        course,
        draw_rate_course,
        "mean rate over the recording",
        numbers=numbers_of(
            "figures/rate.csv",
            None if isinstance(course, Unavailable) else course.numbers(),
            "mean rate over the recording",
        ),
    )
    add(
        "intervals",
        held,
        draw_intervals,
        "interval histograms",
        numbers=numbers_of(
            "figures/intervals.csv",
            None if isinstance(held, Unavailable) else held.numbers(),
            "numbers of the interval histograms",
        ),
    )
    add(
        "correlograms",
        figures.correlograms,
        draw_correlograms,
        "correlograms by distance",
        numbers="correlograms.csv",
    )
    return drawn


# --- the page ---------------------------------------------------------------------------------------------


def inspection_page(
    inspection: Inspection,
    figures: InspectionFigures,
    said: InspectionWords,
    pictures: dict[str, Picture],
    files: tuple[FileEntry, ...],
) -> Page:
    """The inspection as a page: findings, proposals, bin width, units, time, distances, and the rest."""
    return Page(
        title=f"Inspection of {recording_name(inspection.recording)}",
        subtitle=said.subtitle,
        notices=_notices(inspection),
        sections=(
            _found(inspection, said),
            _proposals(inspection, said),
            _bin_width(figures, said, pictures),
            _units(inspection, figures, said, pictures),
            _course(inspection, figures, said, pictures),
            _distances(inspection, said),
            _methods(inspection),
            _cautions(),
            _files(files),
        ),
        footer="Written by kernelfit. For research; not for clinical decisions.",
    )


def _notices(inspection: Inspection) -> tuple[Notice, ...]:
    """What must be mended before a fit; the rest stands in the list of findings."""
    return tuple(Notice(f.severity, f"{f.what} {f.remedy}") for f in inspection.findings if f.severity == "error")


def _shown(pictures: dict[str, Picture], *names: str) -> tuple[Picture, ...]:
    return tuple(pictures[n] for n in names if n in pictures)


def _missing(data: object, what: str) -> tuple[Block, ...]:
    return (Text(f"{what} could not be drawn: {data.reason}."),) if isinstance(data, Unavailable) else ()


def _found(inspection: Inspection, said: InspectionWords) -> Section:
    blocks = (*(Text(s) for s in said.verdict[1:]), Text(f"{TOGETHER} {words.USE}", "caution"))
    return Section("findings", "What was found", said.verdict[0], blocks, below=(findings_list(inspection.findings),))


def _proposals(inspection: Inspection, said: InspectionWords) -> Section:
    blocks: tuple[Block, ...] = (*(Text(s) for s in said.proposals), Text(said.proposals_caution, "caution"))
    below: tuple[Block, ...] = ()
    if len(inspection.proposed_pairs):
        below = (pairs_table(inspection.proposed_pairs),)
    return Section("proposals", "What could be left out", said.proposals_lead, blocks, below=below)


def _bin_width(figures: InspectionFigures, said: InspectionWords, pictures: dict[str, Picture]) -> Section:
    blocks: tuple[Block, ...] = (
        *(Text(s) for s in said.bin_width),
        Text(said.correlogram_caution, "caution"),
        *_missing(figures.correlograms, "Correlograms"),
    )
    return Section("bin-width", "Which bin width", said.bin_width_lead, blocks, below=_shown(pictures, "correlograms"))


def _units(
    inspection: Inspection, figures: InspectionFigures, said: InspectionWords, pictures: dict[str, Picture]
) -> Section:
    blocks: tuple[Block, ...] = (
        recording_facts(inspection),
        *_missing(figures.intervals, "Interval histograms"),
    )
    return Section(
        "units",
        "The units",
        said.units_lead,
        blocks,
        beside=_shown(pictures, "array"),
        below=(*_shown(pictures, "intervals"), units_table(inspection)),
    )


def _course(
    inspection: Inspection, figures: InspectionFigures, said: InspectionWords, pictures: dict[str, Picture]
) -> Section:
    blocks: tuple[Block, ...] = (
        *(Text(s) for s in said.course),
        *_missing(figures.course, "The rate over time"),
        *_missing(figures.raster, "The raster"),
    )
    below: list[Block] = [*_shown(pictures, "rate", "raster"), blocks_table(inspection.block_rates)]
    if len(inspection.gaps):
        below.append(gaps_table(inspection.gaps))
    return Section("course", "Over time", said.course_lead, blocks, below=tuple(below))


def _distances(inspection: Inspection, said: InspectionWords) -> Section:
    below: tuple[Block, ...] = (ranges_table(inspection),) if len(inspection.ranges) else ()
    return Section("distances", "Distances", said.distances_lead, tuple(Text(s) for s in said.distances), below=below)


def _methods(inspection: Inspection) -> Section:
    paragraph, references = methods_paragraph(inspection)
    return Section(
        "methods",
        "Methods paragraph",
        "This paragraph can go into a paper as it stands.",
        (Quote(paragraph, "Methods paragraph"), Listing(references, "References named in it:")),
    )


def _cautions() -> Section:
    lead = "An inspection finds what can be seen in spike times and positions, and no more."
    items = (
        "A recording without findings can still hold badly sorted units, drift of the tissue or a common drive.",
        "Marks such as 1 % of short intervals are common practice, not theorems; a unit above one need not be bad, "
        "nor a unit below it good.",
        TOGETHER,
        words.UNRECORDED,
        words.USE,
    )
    return Section("cautions", "What the numbers do not mean", lead, (Listing(items),))


def _files(files: tuple[FileEntry, ...]) -> Section:
    return Section(
        "files",
        "Files",
        "Everything on this page, as files for papers and further work.",
        (files_list(files),),
    )
