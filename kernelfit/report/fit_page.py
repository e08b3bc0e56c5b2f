"""The results folder of a fit: page, figures, tables and the fit itself, written whole or not at all."""

from __future__ import annotations

import os
from collections.abc import Callable
from pathlib import Path
from typing import TYPE_CHECKING, Protocol, TypeVar

import pandas as pd
from matplotlib.figure import Figure

from kernelfit.errors import Unavailable
from kernelfit.inference.sureness import Sureness
from kernelfit.recording.recording import Recording
from kernelfit.report import sure_captions, words
from kernelfit.report.content import FitContent, build_content
from kernelfit.report.figures_array import draw_array, draw_raster
from kernelfit.report.figures_derived import draw_marked_kernel
from kernelfit.report.figures_fit import draw_after_spike, draw_ks
from kernelfit.report.figures_kernel import draw_kernel, draw_time_course
from kernelfit.report.figures_profile import draw_profiles
from kernelfit.report.figures_sureness import draw_blocks, draw_influence, draw_kinds
from kernelfit.report.folder import FileEntry, ResultsFolder, check_folder, files_list
from kernelfit.report.look import save_figure
from kernelfit.report.page import (
    Block,
    Listing,
    Page,
    Picture,
    Quote,
    Section,
    Text,
    picture,
    render_page,
)
from kernelfit.report.readings import LEVEL
from kernelfit.report.truth import Truth

if TYPE_CHECKING:
    from kernelfit.diagnostics.goodness import Goodness
    from kernelfit.fitting.result import CouplingFit

REPORT = "report.html"


class FigureData(Protocol):
    """What is drawn, with the numbers behind it."""

    def numbers(self) -> pd.DataFrame:
        """The table behind the figure."""
        ...


D = TypeVar("D")


def write_results(
    folder: str | os.PathLike[str],
    fit: CouplingFit,
    recording: Recording,
    *,
    goodness: Goodness | None = None,
    sureness: Sureness | None = None,
    truth: Truth | None = None,
    overwrite: bool = False,
) -> Path:
    """Write the results folder of a fit.

    Parameters
    ----------
    folder : where; written whole or not at all
    fit : the fit; one that did not converge is written, too, and marked
    recording : the recording it was fitted to
    goodness : its goodness of fit, computed here with seed 0 if not given
    sureness : bootstrap, influence, derived figures (`kernelfit.inference.sureness.how_sure`); None: not on the page
    truth : what an invented recording was made from, shown beside the estimates
    overwrite : replace earlier results in that folder

    Returns
    -------
    Path of the report in the finished folder.

    Raises
    ------
    OutputError : the folder is not empty and may not be replaced, or cannot be written
    """
    check_folder(folder, overwrite=overwrite)
    if goodness is None:
        goodness = fit.goodness(recording)
    content = build_content(fit, recording, goodness, sureness=sureness, truth=truth)
    with ResultsFolder(folder, overwrite=overwrite) as results:
        results.file(REPORT, "this page: verdict, figures, tables, methods")
        fit.save(results.file("fit.json", "the whole fit, for kernelfit.load_fit"))
        _write_tables(results, fit, goodness, content)
        if sureness is not None:
            _write_sureness(results, fit, sureness, content)
        pictures = _write_figures(results, content)
        page = fit_page(content, pictures, results.entries)
        results.write_text(REPORT, render_page(page), "this page: verdict, figures, tables, methods")
    return results.path / REPORT


def _write_tables(results: ResultsFolder, fit: CouplingFit, goodness: Goodness, content: FitContent) -> None:
    def write(name: str, table: pd.DataFrame, what: str, *, index: bool = True) -> None:
        table.to_csv(results.file(name, what), index=index, encoding="utf-8", lineterminator="\n")

    percent = f"{100 * LEVEL:.0f} %"
    write("parameters.csv", fit.parameters, f"shared parameters with standard errors and {percent} intervals")
    write("std_errors.csv", fit.std_errors, "model-based and robust standard errors and their ratio")
    write("baselines.csv", fit.baselines, "every unit's baseline b, its standard error and rate in Hz")
    kernel = content.figures.kernel
    if isinstance(kernel, Unavailable):
        band = pd.DataFrame(columns=["distance_um", "estimate", "lower", "upper"])
        write("kernel.csv", band, f"the kernel: none, {kernel.reason}", index=False)
    else:
        write("kernel.csv", kernel.numbers(), f"J against distance with pointwise {percent} band", index=False)
        write("pairs.csv", fit.pairs_by_distance, "number of pairs of units at each distance", index=False)
    tests = pd.concat([goodness.units, goodness.pooled])
    tests.index.name = "unit"
    write("goodness.csv", tests, "KS test of every unit; last row: all units taken together")


def _write_sureness(results: ResultsFolder, fit: CouplingFit, sureness: Sureness, content: FitContent) -> None:
    def write(name: str, table: pd.DataFrame, what: str, *, index: bool = False) -> None:
        table.to_csv(results.file(name, what), index=index, encoding="utf-8", lineterminator="\n")

    write("derived.csv", sureness.derived, "what follows from the fit: reach, mass, changes of the rate", index=True)
    write("worth.csv", fit.worth, "what the recording is worth for each parameter", index=True)
    if content.sureness is None:
        return
    kinds = content.sureness.figures.kinds
    if not isinstance(kinds, Unavailable):
        write("intervals.csv", kinds.numbers(), "intervals of every kind")
    if not isinstance(sureness.influence, Unavailable):
        write("influence.csv", sureness.influence.refits, "estimates without the stretch and unit that move them most")


# --- figures ----------------------------------------------------------------------------------------------


def _write_figures(results: ResultsFolder, content: FitContent) -> dict[str, Picture]:
    """Draw and save every figure that has data; by name, those that were drawn."""
    drawn: dict[str, Picture] = {}

    def add(
        name: str,
        data: D | Unavailable,
        draw: Callable[[D], Figure],
        what: str,
        caption: str,
        *,
        alt: str,
        wide: bool = False,
        numbers: str = "",
    ) -> None:
        if isinstance(data, Unavailable):
            return
        figure = draw(data)
        svg = results.file(f"figures/{name}.svg", f"{what}, for a paper")
        results.file(f"figures/{name}.png", f"{what}, 300 dots per inch")
        save_figure(figure, svg.parent, name)
        files = (f"figures/{name}.svg", f"figures/{name}.png", *((numbers,) if numbers else ()))
        drawn[name] = picture(figure, name, alt=alt, caption=caption, wide=wide, files=files)

    def numbers_of(data: FigureData | Unavailable, name: str, what: str) -> str:
        """Write the table behind a figure; its name, "" where there is no figure."""
        if isinstance(data, Unavailable):
            return ""
        data.numbers().to_csv(results.file(name, what), index=False, encoding="utf-8", lineterminator="\n")
        return name

    figures, texts = content.figures, content.captions
    add(
        "kernel",
        figures.kernel,
        draw_kernel,
        "kernel with band and pairs per distance",
        texts.kernel,
        alt=f"{_title(figures.kernel)}. Curve of the effect of one spike against distance, with its band.",
        numbers="kernel.csv",
    )
    course = figures.course
    add(
        "time-course",
        course,
        draw_time_course,
        "time course of one spike's effect",
        texts.course,
        alt=f"{_title(course)}. Curves that fall from their value at the spike towards zero.",
        numbers=numbers_of(course, "figures/time-course.csv", "numbers of the time course"),
    )
    own = figures.after_spike
    add(
        "after-spike",
        own,
        draw_after_spike,
        "after-spike curves",
        texts.after_spike,
        alt=f"{_title(own)}. Rate multiplier against the time since a unit's own spike.",
        numbers=numbers_of(own, "figures/after-spike.csv", "numbers of the after-spike curves"),
    )
    add(
        "array",
        figures.array,
        draw_array,
        "array map of baseline rates",
        texts.array,
        alt=f"{figures.array.title}. Map of the array, each unit coloured by its baseline rate.",
        numbers="baselines.csv",
    )
    add(
        "ks",
        figures.ks,
        draw_ks,
        "KS plots and all units at a glance",
        texts.ks,
        alt=f"{_title(figures.ks)}. KS plots of units and of all together, and each unit's KS statistic.",
        wide=True,
        numbers="goodness.csv",
    )
    raster = figures.raster
    add(
        "raster",
        raster,
        draw_raster,
        "raster with observed and fitted rate",
        texts.raster,
        alt=f"{_title(raster)}. Spike raster above, observed and fitted rate below.",
        wide=True,
        numbers=numbers_of(raster, "figures/raster.csv", "observed and fitted rate of the raster"),
    )
    if content.sureness is not None:
        sure = content.sureness.figures
        add(
            "distances",
            sure.marked,
            draw_marked_kernel,
            "the kernel with the distances read off it",
            sure_captions.marked(content.sureness),
            alt=f"{_title(sure.marked)}. The kernel with distances marked, each with its interval.",
            numbers=numbers_of(sure.marked, "figures/distances.csv", "distances read off the kernel"),
        )
        add(
            "intervals",
            sure.kinds,
            draw_kinds,
            "intervals of every kind, side by side",
            sure_captions.kinds(content.sureness),
            alt=f"{_title(sure.kinds)}. For each parameter a row of intervals, one of each kind.",
            wide=True,
            numbers="intervals.csv",
        )
        profiles = sure.profiles
        if profiles is not None:
            add(
                "profiles",
                profiles,
                draw_profiles,
                "profile likelihood of every parameter",
                "" if isinstance(profiles, Unavailable) else profiles.caption,
                alt=f"{_title(profiles)}. Fall of the log-likelihood against the value of each parameter.",
                wide=True,
                numbers=numbers_of(profiles, "figures/profiles.csv", "numbers of the profiles"),
            )
        add(
            "blocks",
            sure.blocks,
            draw_blocks,
            "standard errors against the length of blocks of time",
            sure_captions.blocks(content.sureness),
            alt=f"{_title(sure.blocks)}. Curves of standard errors against the length of a block.",
            numbers=numbers_of(sure.blocks, "figures/blocks.csv", "numbers of the block lengths"),
        )
        add(
            "influence",
            sure.influence,
            draw_influence,
            "what leaving out each stretch and each unit does",
            sure_captions.influence(content.sureness),
            alt=f"{_title(sure.influence)}. Bars over time and a map of the array for each parameter.",
            wide=True,
            numbers=numbers_of(sure.influence, "figures/influence.csv", "moves by stretch and unit"),
        )
    return drawn


def _title(data: object) -> str:
    return str(getattr(data, "title", ""))


# --- the page ---------------------------------------------------------------------------------------------


def fit_page(content: FitContent, pictures: dict[str, Picture], files: tuple[FileEntry, ...]) -> Page:
    """The report as a page: verdict, kernel, how sure, description, recording, settings and the rest."""
    sections = (
        _verdict(content),
        _kernel(content, pictures),
        _sure(content, pictures),
        _goodness(content, pictures),
        _recording(content, pictures),
        _settings(content),
        _methods(content),
        _cautions(),
        _files(files),
    )
    return Page(
        title=content.title,
        subtitle=content.subtitle,
        notices=content.notices,
        sections=sections,
        footer="Written by kernelfit. For research; not for clinical decisions.",
    )


def _shown(pictures: dict[str, Picture], *names: str) -> tuple[Picture, ...]:
    return tuple(pictures[n] for n in names if n in pictures)


def _missing(data: object, what: str) -> tuple[Block, ...]:
    return (Text(f"{what} could not be drawn: {data.reason}."),) if isinstance(data, Unavailable) else ()


def _verdict(content: FitContent) -> Section:
    blocks: list[Block] = [Text(sentence) for sentence in content.verdict[1:] if sentence]
    blocks.append(Text(f"{words.FUNCTIONAL} {words.USE}", "caution"))
    below: tuple[Block, ...] = ()
    if content.tables.truth is not None:
        below = (Text(content.truth_sentence), content.tables.truth)
    return Section("verdict", "Verdict", content.verdict[0], tuple(blocks), below=below)


def _kernel(content: FitContent, pictures: dict[str, Picture]) -> Section:
    figures = content.figures
    blocks: tuple[Block, ...] = (
        *(Text(s) for s in content.coupling),
        content.tables.parameters,
        Text(f"{words.UNRECORDED} {words.SORTING}", "caution"),
        Text(content.after_spike),
        *_missing(figures.kernel, "The kernel"),
        *_missing(figures.course, "The time course"),
    )
    return Section(
        "kernel",
        "The kernel",
        content.coupling_lead,
        blocks,
        beside=_shown(pictures, "kernel"),
        below=(
            *_shown(pictures, "distances", "time-course", "after-spike"),
            *(() if content.sureness is None else (content.sureness.derived,)),
        ),
    )


def _sure(content: FitContent, pictures: dict[str, Picture]) -> Section:
    blocks: list[Block] = [Text(s) for s in content.sure]
    below: list[Block] = [*_shown(pictures, "intervals", "profiles"), content.tables.std_errors]
    if content.sureness is not None:
        more = content.sureness
        blocks += [Text(s) for s in more.sentences]
        blocks += _missing(more.figures.kinds, "The intervals of every kind")
        blocks += _missing(more.figures.influence, "What carries the result")
        below += [t for t in (more.worth,) if t is not None]
        below += [*_shown(pictures, "influence"), *([more.refits] if more.refits is not None else [])]
    if content.notes:
        blocks.append(Listing(content.notes, "The fit noted:"))
    return Section(
        "sure",
        "How sure are these numbers",
        content.sure_lead,
        tuple(blocks),
        beside=_shown(pictures, "blocks"),
        below=tuple(below),
    )


def _goodness(content: FitContent, pictures: dict[str, Picture]) -> Section:
    blocks = (*(Text(s) for s in content.goodness), *_missing(content.figures.ks, "The KS plots"))
    below: tuple[Block, ...] = (*_shown(pictures, "ks", "raster"), content.tables.goodness)
    return Section("goodness", "Does the model describe the recording", content.goodness_lead, blocks, below=below)


def _recording(content: FitContent, pictures: dict[str, Picture]) -> Section:
    blocks = (content.tables.recording, *_missing(content.figures.raster, "The raster"))
    return Section(
        "recording",
        "The recording",
        content.recording_lead,
        blocks,
        beside=_shown(pictures, "array"),
        below=(content.tables.units,),
    )


def _settings(content: FitContent) -> Section:
    lead = "With these settings, this version and these files the fit can be run again."
    return Section("settings", "Settings", lead, (content.tables.settings,), beside=(content.tables.fit,))


def _methods(content: FitContent) -> Section:
    return Section(
        "methods",
        "Methods paragraph",
        "This paragraph can go into a paper as it stands.",
        (
            Quote(content.methods.paragraph, "Methods paragraph"),
            Listing(content.methods.references, "References named in it:"),
        ),
    )


def _cautions() -> Section:
    lead = "The numbers describe how rates follow spikes; they do not show wiring."
    return Section("cautions", "What the numbers do not mean", lead, (Listing(words.CAUTIONS),))


def _files(files: tuple[FileEntry, ...]) -> Section:
    return Section(
        "files",
        "Files",
        "Everything on this page, as files for papers and further work.",
        (files_list(files),),
    )
