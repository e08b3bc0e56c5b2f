"""Quality findings: what a recording is like, what is wrong with it, and what can be done, before any model.

The measuring is in `activity`, `artefacts`, `coincidence`, `correlogram` and `bin_width`; the judging in the
files `checks_...`. This file puts them together.
"""

from __future__ import annotations

import html
from dataclasses import dataclass, field

import numpy as np
import pandas as pd

from kernelfit._validation import described, is_whole
from kernelfit.errors import ArgumentError, RecordingError
from kernelfit.recording.activity import Burstiness
from kernelfit.recording.bin_width import BinWidthAdvice
from kernelfit.recording.checks_input import check_input
from kernelfit.recording.checks_synchrony import LOST_SHARE, check_synchrony
from kernelfit.recording.checks_time import check_time
from kernelfit.recording.checks_units import FEW_SPIKES, SHORT_SHARE, check_units
from kernelfit.recording.coincidence import pairs_to_leave_out
from kernelfit.recording.evidence import Evidence, gather
from kernelfit.recording.findings import SEVERITIES, Finding, by_severity, counted, number, percent, seconds
from kernelfit.recording.merged import merge_trains
from kernelfit.recording.recording import Recording, check_recording

EXCLUSION_COLUMNS = ("start_s", "stop_s", "units_at_once")
_DECIMALS = 6  # of a second, in proposed stretches


@dataclass(frozen=True, eq=False)
class Inspection:
    """What was found in a recording. It changes nothing; proposals are for the user to take up.

    Parameters
    ----------
    findings : errors first, then warnings, then information
    units : by unit id: positions (µm), group where given, n_spikes and rate_hz (windows, exclusions taken
        off), share_below_1ms and share_below_2ms of the intervals, shortest_interval_s, n_same_site (other
        units there), share_in_proposed (spikes that the proposed exclusions would take), remarks
    proposed_exclusions : start_s, stop_s, units_at_once: moments at which much of the array fires at once
    proposed_pairs : unit_a, unit_b and the evidence: near pairs that are perhaps one cell seen twice
    correlograms : pooled by band of distance; columns in `kernelfit.recording.correlogram.correlogram_table`
    correlograms_masked : the same with the proposed exclusions left out
    block_rates : start_s, stop_s, n_spikes, rate_hz (mean over units), n_active_units
    gaps : start_s, stop_s, length_s of stretches of 10 s and more without a spike, longest first
    distances : distance_um, n_pairs, n_pairs_within, for the pairs a kernel can use
    ranges : max_distance_um, n_pairs, n_distances, n_units: what a kernel cut there would rest on
    reference_distance_um : median nearest-neighbour distance between sites; NaN with a single site
    burstiness : how unevenly spikes lie in time; None for very short recordings
    bin_width : the suggestion with its reason
    duration_s : observed time, exclusions taken off
    seed : of the random shifts that tell artefacts from chance
    recording : what was inspected
    """

    findings: tuple[Finding, ...]
    units: pd.DataFrame = field(repr=False)
    proposed_exclusions: pd.DataFrame = field(repr=False)
    proposed_pairs: pd.DataFrame = field(repr=False)
    correlograms: pd.DataFrame = field(repr=False)
    correlograms_masked: pd.DataFrame = field(repr=False)
    block_rates: pd.DataFrame = field(repr=False)
    gaps: pd.DataFrame = field(repr=False)
    distances: pd.DataFrame = field(repr=False)
    ranges: pd.DataFrame = field(repr=False)
    reference_distance_um: float
    burstiness: Burstiness | None
    bin_width: BinWidthAdvice
    duration_s: float
    seed: int
    recording: Recording = field(repr=False)

    @property
    def suggested_bin_width_s(self) -> float:
        """A bin width to start with, seconds."""
        return self.bin_width.width_s

    @property
    def bin_width_reason(self) -> str:
        """Why that width, in words."""
        return self.bin_width.reason

    @property
    def n_spikes(self) -> int:
        """Spikes in the windows and outside the exclusions."""
        return int(self.units["n_spikes"].sum())

    def find(self, key: str) -> Finding | None:
        """The finding of that kind, or None."""
        return next((f for f in self.findings if f.key == key), None)

    def count(self, severity: str) -> int:
        """How many findings have that severity."""
        return sum(f.severity == severity for f in self.findings)

    def table(self) -> pd.DataFrame:
        """The findings as a table: severity, key, what, where, remedy."""
        columns = ["severity", "key", "what", "where", "remedy"]
        return pd.DataFrame([[getattr(f, c) for c in columns] for f in self.findings], columns=columns)

    def headline(self) -> tuple[str, ...]:
        """The inspection in a few lines: what was recorded, what was found, the bin width."""
        recording = self.recording
        rates = self.units["rate_hz"]
        found = ", ".join(counted(self.count(s), s, "info" if s == "info" else None) for s in SEVERITIES)
        lines = [
            f"{counted(recording.n_units, 'unit')}, {counted(self.n_spikes, 'spike')} in "
            f"{seconds(self.duration_s)}; rates {number(rates.min())} to {number(rates.max())} Hz, median "
            f"{number(rates.median())} Hz.",
            f"Findings: {found}.",
        ]
        proposals = []
        if len(self.proposed_exclusions):
            length = float((self.proposed_exclusions["stop_s"] - self.proposed_exclusions["start_s"]).sum())
            proposals.append(f"{counted(len(self.proposed_exclusions), 'exclusion')} ({seconds(length)} in all)")
        if len(self.proposed_pairs):
            proposals.append(f"{counted(len(self.proposed_pairs), 'pair')} to leave out of the kernel")
        if proposals:
            lines.append(f"Proposed: {' and '.join(proposals)}.")
        lines.append(f"Suggested bin width: {seconds(self.suggested_bin_width_s)}. {self.bin_width_reason}")
        return tuple(lines)

    def summary(self) -> str:
        """The headline and every finding as plain text."""
        blocks = ["\n".join(self.headline())]
        blocks += [f"{f.severity}: {f.what}\n  where: {f.where}\n  remedy: {f.remedy}" for f in self.findings]
        return "\n\n".join(blocks)

    def __str__(self) -> str:
        return self.summary()

    def __repr__(self) -> str:
        counts = ", ".join(f"{self.count(s)} {s}" for s in SEVERITIES)
        return f"Inspection({counts}; bin width {self.suggested_bin_width_s:g} s; {self.recording!r})"

    def _repr_html_(self) -> str:
        rows = "".join(
            "<tr>"
            + "".join(f"<td>{html.escape(str(v))}</td>" for v in (f.severity, f.what, f.where, f.remedy))
            + "</tr>"
            for f in self.findings
        )
        head = "".join(f"<p>{html.escape(line)}</p>" for line in self.headline())
        names = "".join(f'<th scope="col">{c}</th>' for c in ("severity", "what", "where", "remedy"))
        return f"{head}<table><thead><tr>{names}</tr></thead><tbody>{rows}</tbody></table>"


def inspect_recording(recording: Recording, *, seed: int = 0) -> Inspection:
    """Look at a recording before any model is fitted.

    Parameters
    ----------
    recording : what was recorded; its exclusions are left out, its excluded pairs do not enter the
        correlograms
    seed : of the random shifts that tell whole-array artefacts from chance

    Returns
    -------
    Inspection : findings, tables and proposals. A recording without spikes or with a single site gets an
        error finding, not an exception.

    Raises
    ------
    RecordingError : the exclusions leave nothing to look at
    ArgumentError : no recording, or a seed that is none
    """
    check_recording(recording)
    if not is_whole(seed) or seed < 0:
        raise ArgumentError(f"seed: {described(seed)} is no seed. Give a whole number, 0 or more.")
    if not len(merge_trains(recording).observed):
        raise RecordingError(
            f"{recording.origin.name('exclusions')}: the exclusions leave nothing of any window to look at. "
            "Use fewer or shorter exclusions."
        )
    evidence = gather(recording, seed=seed)
    findings = [
        *check_input(evidence),
        *check_units(evidence),
        *check_synchrony(evidence),
        *check_time(evidence),
    ]
    layout, events = evidence.layout, evidence.events
    exclusions = pd.DataFrame(np.round(events.bounds, _DECIMALS), columns=list(EXCLUSION_COLUMNS[:2]))
    exclusions[EXCLUSION_COLUMNS[2]] = events.units_at_once
    return Inspection(
        findings=by_severity(findings),
        units=_units_table(evidence),
        proposed_exclusions=exclusions,
        proposed_pairs=pairs_to_leave_out(evidence.excess),
        correlograms=evidence.correlograms,
        correlograms_masked=evidence.correlograms_masked,
        block_rates=evidence.blocks.table,
        gaps=evidence.gaps,
        distances=layout.distances(),
        ranges=layout.ranges(),
        reference_distance_um=float("nan") if layout.reference_um is None else layout.reference_um,
        burstiness=evidence.burstiness,
        bin_width=evidence.advice,
        duration_s=evidence.train.duration_s,
        seed=seed,
        recording=recording,
    )


def _units_table(e: Evidence) -> pd.DataFrame:
    table = e.recording.units.drop(columns=["n_spikes", "rate_hz"])
    counts = e.train.counts()
    table["n_spikes"] = counts
    table["rate_hz"] = e.rate_hz
    table["share_below_1ms"] = e.intervals.share_short
    table["share_below_2ms"] = e.intervals.share_medium
    table["shortest_interval_s"] = e.intervals.shortest_s
    table["n_same_site"] = e.layout.same_site.sum(axis=1)
    table["share_in_proposed"] = e.n_proposed / np.where(counts > 0, counts, np.nan)
    table["remarks"] = _remarks(e)
    return table


def _remarks(e: Evidence) -> list[str]:
    counts = e.train.counts()
    short = np.nan_to_num(e.intervals.share_short)
    remarks = []
    for k in range(counts.size):
        said = []
        if counts[k] == 0:
            said.append("silent outside the exclusions" if e.n_excluded[k] else "silent")
        elif counts[k] < FEW_SPIKES:
            said.append(f"fewer than {FEW_SPIKES} spikes")
        if short[k] > SHORT_SHARE:
            said.append(f"{percent(float(short[k]))} of intervals below 1 ms")
        if counts[k] and e.n_proposed[k] > LOST_SHARE * counts[k]:
            said.append("artefact only" if e.n_proposed[k] == counts[k] else "mostly artefact")
        remarks.append("; ".join(said))
    return remarks
