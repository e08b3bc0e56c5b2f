"""What the page of an inspection says in sentences, and the captions of its figures."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from kernelfit.errors import Unavailable
from kernelfit.recording.inspection import Inspection
from kernelfit.report.captions import NUMBERED_SAID, places_said
from kernelfit.report.inspection_data import BandCurve, InspectionFigures
from kernelfit.report.look import NUMBERED
from kernelfit.report.numbers import count_text, distance_label, duration_text, number_text, range_text, time_text
from kernelfit.report.words import listed

TOGETHER = (
    "Firing together is not coupling: common input, waves and bursts do the same, and most of a raw correlogram "
    "comes from them."
)


@dataclass(frozen=True, slots=True)
class InspectionWords:
    """Sentences and captions.

    Parameters
    ----------
    subtitle : counts and version in one line
    verdict : three sentences: what was found, what was recorded, which bin width
    ..._lead : first sentence of a section; the tuples beside them are its text
    captions : by figure name, the caption and the text for readers who cannot see it
    """

    subtitle: str
    verdict: tuple[str, str, str]
    proposals_lead: str
    proposals: tuple[str, ...]
    proposals_caution: str
    bin_width_lead: str
    bin_width: tuple[str, ...]
    correlogram_caution: str
    units_lead: str
    course_lead: str
    course: tuple[str, ...]
    distances_lead: str
    distances: tuple[str, ...]
    captions: dict[str, tuple[str, str]]


def inspection_words(inspection: Inspection, figures: InspectionFigures) -> InspectionWords:
    """Everything the page says."""
    bin_width_lead = f"Start with bins of {time_text(inspection.suggested_bin_width_s)}."
    units_lead = _units_lead(inspection)
    return InspectionWords(
        subtitle=_subtitle(inspection),
        verdict=(
            _verdict(inspection),
            units_lead,
            f"{bin_width_lead} The reason stands under \N{LEFT DOUBLE QUOTATION MARK}Which bin "
            "width\N{RIGHT DOUBLE QUOTATION MARK}.",
        ),
        proposals_lead=_proposals_lead(inspection),
        proposals=_proposals(inspection),
        proposals_caution=(
            "Leaving data out changes what a fit finds. Fit with and without, and report both; nothing was left out "
            "here but what the recording's own exclusions name."
        ),
        bin_width_lead=bin_width_lead,
        bin_width=(
            inspection.bin_width_reason,
            "The model lets a spike act from the next bin on: what happens within one bin is not seen, neither the "
            "fault nor the coupling.",
        ),
        correlogram_caution=TOGETHER,
        units_lead=units_lead,
        course_lead=_course_lead(inspection),
        course=_course(inspection),
        distances_lead=_distances_lead(inspection),
        distances=(
            "Pairs on one site and pairs left out are not counted. Where a kernel has few pairs its value rests on "
            "them alone; a kernel with more coefficients than distinct distances cannot be told apart.",
        ),
        captions=_captions(inspection, figures),
    )


def _based_on(inspection: Inspection) -> str:
    return (
        f"{_counted(inspection.recording.n_units, 'unit')}, {_counted(inspection.n_spikes, 'spike')}, "
        f"{count_text(inspection.duration_s)} s."
    )


def _counted(n: int, noun: str) -> str:
    return f"{count_text(n)} {noun}{'s' * (n != 1)}"


def _subtitle(inspection: Inspection) -> str:
    from kernelfit import __version__

    return (
        f"{_counted(inspection.recording.n_units, 'unit')}, {_counted(inspection.n_spikes, 'spike')} in "
        f"{duration_text(inspection.duration_s)}; kernelfit {__version__}."
    )


def _verdict(inspection: Inspection) -> str:
    errors, warnings = inspection.count("error"), inspection.count("warning")
    if errors:
        more = f" and {_counted(warnings, 'warning')}" if warnings else ""
        return f"Not ready for a fit: {_counted(errors, 'error')}{more}, listed below with what can be done."
    if warnings:
        return (
            f"Nothing forbids a fit, but {_counted(warnings, 'warning')} below say{'s' * (warnings == 1)} what would "
            "bend it and what can be done."
        )
    return "Nothing was found that would bend a fit."


def _units_lead(inspection: Inspection) -> str:
    rate = inspection.units["rate_hz"].to_numpy(dtype=np.float64)
    silent = int((rate == 0.0).sum())
    quiet = f"; {_counted(silent, 'unit')} {'is' if silent == 1 else 'are'} silent" if silent else ""
    if silent == rate.size:
        return "No unit fires in the windows and outside the exclusions."
    active = rate[rate > 0.0]
    return (
        f"{_counted(active.size, 'unit')} fire{'s' * (active.size == 1)} at "
        f"{range_text(float(active.min()), float(active.max()))} Hz, half of them above "
        f"{number_text(float(np.median(active)), 2)} Hz{quiet}."
    )


def _proposals_lead(inspection: Inspection) -> str:
    parts = []
    exclusions = inspection.proposed_exclusions
    if len(exclusions):
        length = float((exclusions["stop_s"] - exclusions["start_s"]).sum())
        parts.append(f"{_counted(len(exclusions), 'stretch').replace('stretchs', 'stretches')} ({time_text(length)})")
    if len(inspection.proposed_pairs):
        parts.append(f"{_counted(len(inspection.proposed_pairs), 'pair')} of units")
    if not parts:
        return "Nothing is proposed to be left out."
    return f"Proposed to be left out: {listed(parts)}."


def _proposals(inspection: Inspection) -> tuple[str, ...]:
    said = []
    if len(inspection.proposed_exclusions):
        units = inspection.units
        share = units["share_in_proposed"].fillna(0.0).to_numpy(dtype=np.float64)
        inside = float(np.sum(share * units["n_spikes"].to_numpy(dtype=np.float64)))
        said.append(
            f"proposed_exclusions.csv holds {count_text(len(inspection.proposed_exclusions))} stretches in which "
            f"much of the array fires within 1 ms, {number_text(100.0 * inside / max(inspection.n_spikes, 1), 2)} % "
            "of the spikes. Give it back with --exclusions proposed_exclusions.csv; every bin that touches a "
            "stretch leaves the sum."
        )
    if len(inspection.proposed_pairs):
        said.append(
            f"proposed_pairs.csv holds {_counted(len(inspection.proposed_pairs), 'neighbouring pair')} with more "
            "exact coincidences than their lags of 1 to 10 ms let expect: perhaps one cell seen by two sites. Give it "
            "back with --exclude-pairs proposed_pairs.csv; the units stay, the pair leaves the kernel."
        )
    if not said:
        said.append(
            "No moment was found at which much of the array fires at once beyond chance, and no neighbouring pair "
            "with an excess of exact coincidences."
        )
    return tuple(said)


def _course_lead(inspection: Inspection) -> str:
    finding = inspection.find("rate_changes")
    if finding is not None:
        return finding.what
    blocks = inspection.block_rates
    length = float((blocks["stop_s"] - blocks["start_s"]).median())
    return f"The mean rate is steady: over blocks of {duration_text(round(length, 3))} it stays within a factor of 1.5."


def _course(inspection: Inspection) -> tuple[str, ...]:
    keys = ("few_events", "gaps", "units_come_or_go")
    found = [inspection.find(key) for key in keys]
    return tuple(f"{f.what} {f.remedy}" for f in found if f is not None)


def _distances_lead(inspection: Inspection) -> str:
    if math.isnan(inspection.reference_distance_um):
        sites = inspection.recording.origin.name("sites")
        return f"All units lie on one site ({sites}): nothing can be said about distance."
    table = inspection.distances
    if table.empty:
        return "No pair of units is left for a kernel."
    low, high = float(table["distance_um"].iloc[0]), float(table["distance_um"].iloc[-1])
    return (
        f"A kernel can use {_counted(int(table['n_pairs'].sum()), 'pair')} at "
        f"{_counted(len(table), 'distinct distance')}, from {distance_label(low)} to {distance_label(high)}."
    )


def _last_lag(curve: BandCurve) -> float:
    return float(curve.lag_s[-1] + curve.width_s / 2.0)


def _captions(inspection: Inspection, figures: InspectionFigures) -> dict[str, tuple[str, str]]:
    based_on = _based_on(inspection)
    array = figures.array
    captions = {
        "array": (
            "Each mark is a unit, at its site, coloured by its mean rate; open marks are silent "
            f"units.{places_said(array)} Bar: {distance_label(array.scale_bar_um)}. {based_on}",
            f"{array.title}. Map of the array, each unit coloured by its rate.",
        )
    }
    raster = figures.raster
    if not isinstance(raster, Unavailable):
        marks = "; triangles: proposed exclusions" if len(raster.marked) else ""
        hatched = "; hatched: the recording's own exclusions" if len(raster.excluded) else ""
        captions["raster"] = (
            f"Top: each stroke is a spike, each row a unit, ordered by position{marks}{hatched}. Bottom: mean rate "
            f"over units in bins of {time_text(raster.bin_s)}. {number_text(raster.start_s)} to "
            f"{number_text(raster.stop_s)} s, {_counted(len(raster.rows), 'unit')}, "
            f"{_counted(sum(map(len, raster.rows)), 'spike')}.",
            f"{raster.title}. Spike raster above, mean rate below.",
        )
    course = figures.course
    if not isinstance(course, Unavailable):
        marks = " Triangles: proposed exclusions." if course.marked_s.size else ""
        captions["rate"] = (
            f"Grey: mean rate over units in bins of {time_text(course.bin_s)}. Lines: mean over each block, listed "
            f"in the table.{marks} {based_on}",
            f"{course.title}. Mean rate against time, with block means.",
        )
    held = figures.intervals
    if not isinstance(held, Unavailable):
        numbered = NUMBERED_SAID * any(NUMBERED in panel.label for panel in held.panels)
        worst = " Right: the units with the largest share of intervals below 1 ms." if len(held.panels) > 1 else ""
        captions["intervals"] = (
            "Histograms of the intervals between successive spikes of one unit, on a logarithmic axis; the area "
            f"over a factor of ten is the share of the intervals in it. Left: all units.{worst} Dashed: 1 and 2 ms."
            f"{numbered} {based_on}",
            f"{held.title}. Interval histograms of all units and of the worst ones.",
        )
    correlograms = figures.correlograms
    if not isinstance(correlograms, Unavailable):
        main = (
            "with the proposed exclusions left out; dotted: raw, which may leave the axis"
            if correlograms.proposes
            else "raw"
        )
        captions["correlograms"] = (
            "Pairs of spikes of different units at each lag, either one first, divided by the number that "
            f"independent trains with the same mean rates would give (dashed: 1), {main}. Columns: distance between "
            "the units, pairs left out of the kernel not counted. Top: lags to "
            f"{time_text(_last_lag(correlograms.bands[0].fine))} in steps of "
            f"{time_text(correlograms.bands[0].fine.width_s)}, the upright line one suggested bin "
            f"({time_text(correlograms.bin_width_s)}); bottom: to 5 s. {based_on}",
            f"{correlograms.title}. Correlograms by distance at short and long lags.",
        )
    return captions
