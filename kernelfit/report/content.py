"""Everything a report says and shows, as data: figures' data, tables, sentences and captions of one fit.

This is the last place that looks at a fit. `fit_page` only arranges and writes what stands here.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from kernelfit.errors import Unavailable
from kernelfit.inference.sureness import Sureness
from kernelfit.recording.recording import Recording
from kernelfit.report import captions, words
from kernelfit.report.content_figures import (
    after_spike_data,
    baseline_data,
    course_data,
    kernel_data,
    ks_data,
    raster_data,
)
from kernelfit.report.content_sureness import SureContent, sure_content
from kernelfit.report.content_tables import (
    fit_facts,
    goodness_table,
    parameter_table,
    recording_facts,
    settings_facts,
    std_error_table,
    truth_table,
    unit_table,
)
from kernelfit.report.figure_data import (
    AfterSpikeData,
    ArrayData,
    CourseData,
    KernelData,
    KsData,
    RasterData,
)
from kernelfit.report.methods import Methods, methods
from kernelfit.report.numbers import count_text, duration_text, number_text, p_sentence, powers_text
from kernelfit.report.page import Definition, Notice, Table
from kernelfit.report.readings import (
    LEAK,
    LEVEL,
    TEST_LEVEL,
    described_sentence,
    gain_sentence,
    kernel_name,
    length_word,
    link_name,
    parameter_of,
    sure_lead,
    verdict,
)
from kernelfit.report.truth import Truth

if TYPE_CHECKING:
    from kernelfit.diagnostics.goodness import Goodness
    from kernelfit.fitting.outcome import Note
    from kernelfit.fitting.result import CouplingFit

# Where a note says itself where it belongs; any other place is printed as it is.
_PLACES = {
    "coupling": "",
    "exclusions": "",
    "optimiser": "",
    "pairs on one site": "",
    "standard errors": "",
    "units": "",
    "windows": "",
}
NOTICES_SHOWN = 8  # at the top of the page; all notes stand in the section on how sure the numbers are
AFTER_SPIKE_SHOWN = 2.0  # longest lag of the after-spike figure, in longest time constants of its basis


@dataclass(frozen=True, eq=False)
class FitFigures:
    """Data of every figure, or the reason why there is none."""

    kernel: KernelData | Unavailable
    course: CourseData | Unavailable
    after_spike: AfterSpikeData | Unavailable
    array: ArrayData
    ks: KsData | Unavailable
    raster: RasterData | Unavailable


@dataclass(frozen=True, eq=False)
class FitTables:
    """Every table of the page."""

    parameters: Table
    std_errors: Table
    goodness: Table
    units: Table
    truth: Table | None
    recording: Definition
    settings: Definition
    fit: Definition


@dataclass(frozen=True, eq=False)
class FitContent:
    """One fit, ready to be set on a page.

    Parameters
    ----------
    title, subtitle : of the page
    notices : what must be read before any number
    verdict : three sentences: what one spike does; how that depends on distance; whether the model describes
        the recording. The last comes before any number where most units are rejected
    coupling_lead, coupling : the kernel in words, the first sentence apart
    sure_lead, sure : how sure the numbers are
    sureness : other kinds of interval, what carries the result, derived figures; None where they were not asked for
    goodness_lead, goodness : whether the model describes the recording
    recording_lead : what was recorded
    after_spike : what own spikes do, or what a score test says they would
    notes : everything the fit noted, one line each
    captions : of every figure
    truth_sentence : what an invented recording was made from, "" for a real one
    """

    title: str
    subtitle: str
    notices: tuple[Notice, ...]
    verdict: tuple[str, str, str]
    coupling_lead: str
    coupling: tuple[str, ...]
    sure_lead: str
    sure: tuple[str, ...]
    sureness: SureContent | None
    goodness_lead: str
    goodness: tuple[str, ...]
    recording_lead: str
    after_spike: str
    notes: tuple[str, ...]
    methods: Methods
    truth_sentence: str
    captions: captions.Captions
    figures: FitFigures
    tables: FitTables


def build_content(
    fit: CouplingFit,
    recording: Recording,
    goodness: Goodness,
    *,
    sureness: Sureness | None = None,
    truth: Truth | None = None,
) -> FitContent:
    """Everything the report of a fit says.

    Parameters
    ----------
    fit : the fit, converged or not
    recording : the recording it was fitted to
    goodness : its goodness of fit
    sureness : what else was asked on how sure the numbers are
    truth : what an invented recording was made from
    """
    figures = FitFigures(
        kernel=kernel_data(fit),
        course=course_data(fit),
        after_spike=after_spike_data(fit, AFTER_SPIKE_SHOWN),
        array=baseline_data(fit),
        ks=ks_data(goodness),
        raster=raster_data(fit, recording),
    )
    tables = FitTables(
        parameters=parameter_table(fit),
        std_errors=std_error_table(fit),
        goodness=goodness_table(goodness),
        units=unit_table(fit, recording),
        truth=None if truth is None else truth_table(fit, truth),
        recording=recording_facts(fit, recording),
        settings=settings_facts(fit, goodness),
        fit=fit_facts(fit, goodness),
    )
    return FitContent(
        title=f"Coupling in {recording_name(recording)}",
        subtitle=subtitle(fit, recording),
        notices=notices(fit, invented=truth is not None),
        verdict=verdict(fit, goodness),
        coupling_lead=coupling_lead(fit),
        coupling=coupling_sentences(fit),
        sure_lead=sure_lead(fit),
        sure=sure_sentences(fit),
        sureness=None if sureness is None else sure_content(fit, sureness),
        goodness_lead=described_sentence(goodness),
        goodness=goodness_sentences(fit, goodness),
        recording_lead=recording_lead(fit, recording),
        after_spike=after_spike_sentence(fit),
        notes=tuple(note_text(note) for note in fit.notes),
        methods=methods(fit, recording, goodness),
        truth_sentence="" if truth is None else truth.sentence,
        captions=captions.captions(fit, recording, goodness, figures.kernel, figures.array, figures.ks, figures.raster),
        figures=figures,
        tables=tables,
    )


# --- the top of the page ----------------------------------------------------------------------------------


def recording_name(recording: Recording) -> str:
    """The recording by the name of its spikes file, without the endings of tables."""
    name = recording.origin.name("spikes")
    for ending in (".gz", ".csv", ".tsv", ".txt", ".parquet", ".spikes"):
        name = name.removesuffix(ending)
    return "a recording from memory" if name == "spikes table" else name


def subtitle(fit: CouplingFit, recording: Recording) -> str:
    """Counts, settings and version in one line."""
    return (
        f"{count_text(recording.n_units)} units, {count_text(fit.n_spikes)} spikes in "
        f"{duration_text(fit.duration_s)}; {kernel_name(fit)} kernel, bins of "
        f"{duration_text(fit.model.bin_width)}; kernelfit {fit.version}."
    )


def _said(note: Note, fit: CouplingFit) -> bool:
    """True where the page's top says so already: no convergence, no coupling."""
    return note.what == fit.verdict.sentence or (not fit.converged and note.what.startswith("The fit did not converge"))


def note_text(note: Note) -> str:
    """One note as a line: what, where, remedy."""
    place = _PLACES.get(note.where, note.where).rstrip(".")
    where = f" Where: {place}." if place else ""
    return powers_text(f"{note.what}{where}{' ' if note.remedy else ''}{note.remedy}")


def notices(fit: CouplingFit, *, invented: bool = False) -> tuple[Notice, ...]:
    """What must be read before any number: an invented recording, a fit that did not converge, errors, warnings."""
    marked = []
    if invented:
        marked.append(
            Notice(
                "info",
                "This recording is invented. The numbers show how well a known truth is found again; they say "
                "nothing about any tissue.",
            )
        )
    if not fit.converged:
        why = powers_text(fit.solver.message).rstrip(".")
        marked.append(
            Notice(
                "error",
                f"The fit did not converge: {why}. The numbers on this page are where it stopped. They are not "
                "estimates and their intervals do not hold.",
            )
        )
    for severity in ("error", "warning"):
        marked += [Notice(severity, note_text(n)) for n in fit.notes if n.severity == severity and not _said(n, fit)]
    if len(marked) > NOTICES_SHOWN:
        more = len(marked) - NOTICES_SHOWN
        marked = [
            *marked[:NOTICES_SHOWN],
            Notice(
                "info",
                f"{more} more stand under \N{LEFT DOUBLE QUOTATION MARK}How sure are these "
                "numbers\N{RIGHT DOUBLE QUOTATION MARK}.",
            ),
        ]
    return tuple(marked)


# --- sections ---------------------------------------------------------------------------------------------


def coupling_lead(fit: CouplingFit) -> str:
    """The kernel section's first sentence."""
    if not fit.verdict.found:
        return "The recording does not show coupling; what follows is what the fit found all the same."
    name = kernel_name(fit)
    length = parameter_of(fit, "length_um")
    if length is not None:
        return words.length_sentence(name, length, length_word(fit))
    return f"The coupling at each distance is described by a {name} kernel, drawn with its interval."


def coupling_sentences(fit: CouplingFit) -> tuple[str, ...]:
    """The kernel section's text."""
    same_site = parameter_of(fit, "same_site")
    found = fit.verdict.sentence if fit.verdict.found else ""
    sentences = [
        found,
        "" if same_site is None else words.same_site_sentence(same_site, link=link_name(fit), level=LEVEL),
        stability_sentence(fit.spectral_radius) if fit.verdict.found else "",
    ]
    return tuple(s for s in sentences if s)


def stability_sentence(spectral_radius: float) -> str:
    """What the spectral radius of E[f'] J / alpha says about the fitted network as a whole."""
    if not math.isfinite(spectral_radius):
        return ""
    size = number_text(spectral_radius, 2)
    if spectral_radius < 1.0:
        return (
            "Taken as a network, the fitted couplings by themselves multiply a small rise of activity by about "
            f"{size} per round in the long run (spectral radius): they do not keep activity going. Effects of own "
            "spikes are not in this number."
        )
    return (
        "Taken as a network, the fitted couplings by themselves multiply a small rise of activity by about "
        f"{size} per round in the long run (spectral radius, 1 or more): a simulation from this fit may run away."
    )


def sure_sentences(fit: CouplingFit) -> tuple[str, ...]:
    """How sure: what the ratio means, what the fit rests on, a second optimum."""
    table = fit.std_errors
    first = next((n for n in table.index if n != LEAK), None)
    ratio = math.nan if first is None else float(table.loc[first, "ratio"])
    sentences = [
        words.worth_sentence(ratio),
        "Model-based intervals hold if every bin is independent given the model. Robust intervals hold "
        f"also if it is not, as long as stretches of {words.block_text(fit.block_length_s)} are; neither "
        "kind mends an estimate that is bent because the model leaves something out.",
    ]
    if fit.second_optimum is not None:
        sentences.append(f"A second solution fits about as well: {fit.second_optimum}")
    return tuple(s for s in sentences if s)


def goodness_sentences(fit: CouplingFit, goodness: Goodness) -> tuple[str, ...]:
    """What the model explains, and what a failed or passed test means."""
    units = goodness.units
    tested = units["p_adjusted"].notna().to_numpy()
    failing = units["p_adjusted"].to_numpy(dtype=np.float64) < TEST_LEVEL
    n_spikes = units["n_spikes"].to_numpy(dtype=np.float64)
    sentences = [
        words.untested_sentence(len(units), goodness.n_tested) if goodness.n_tested else "",
        words.misfit_sentence(units["ks_statistic"].to_numpy(dtype=np.float64)),
        words.few_spikes_sentence(n_spikes[tested & ~failing], n_spikes[failing]),
        gain_sentence(fit, goodness),
    ]
    if goodness.n_rejected:
        sentences.append(
            "Where a unit fails, the model misses something in the timing of its spikes: slow changes of "
            "the rate, bursts, a common drive, a mixture of cells. With many spikes even small misses "
            "show; the plots tell how far the line leaves the diagonal."
        )
    elif goodness.n_tested:
        sentences.append("A unit that passes has too few spikes to show what the model misses, or nothing is missed.")
    if fit.converged and words.mostly_rejected(goodness.n_tested, goodness.n_rejected):
        sentences.append("As more than half of the units tested fail, the verdict says so before any number.")
    return tuple(s for s in sentences if s)


def after_spike_sentence(fit: CouplingFit) -> str:
    """What own spikes do; without the term, what the score test says it would add."""
    test = fit.after_spike_test
    if test is None:
        return (
            "What a unit's own earlier spikes do to its rate (refractoriness, bursts) is part of the model. Left out, "
            "it would be taken for coupling and bend the kernel's length and the time constant."
        )
    if isinstance(test, Unavailable):
        return f"The model leaves out what a unit's own spikes do to it. What it would add {test}."
    return (
        f"The model leaves out what a unit's own spikes do to it. {test.sentence.rstrip('.')}. Score test: chi-squared "
        f"{number_text(test.statistic)} with {test.df} degrees of freedom, {p_sentence(test.p_value)}."
    )


def recording_lead(fit: CouplingFit, recording: Recording) -> str:
    """What was recorded."""
    rate = fit.n_spikes / fit.duration_s / recording.n_units if fit.duration_s > 0 else math.nan
    return (
        f"{count_text(recording.n_units)} units gave {count_text(fit.n_spikes)} spikes in "
        f"{duration_text(fit.duration_s)}, on average {number_text(rate, 2)} spikes per second and unit."
    )
