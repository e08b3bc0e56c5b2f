"""Tables of an inspection's page, and its methods paragraph."""

from __future__ import annotations

import math
from collections.abc import Iterable, Sequence

import numpy as np
import pandas as pd

from kernelfit._typing import FloatArray
from kernelfit.recording.artefacts import (
    MARGIN_S,
    MIN_UNITS,
    N_SHIFTS,
    SHARE_OF_UNITS,
    SHARPNESS,
    SHIFT_S,
    SHOULDER_FROM_S,
    SHOULDER_TO_S,
    WITHIN_S,
)
from kernelfit.recording.coincidence import (
    CLOSE_FROM_S,
    CLOSE_TO_S,
    COINCIDENCE_S,
    FALSE_DISCOVERIES,
    LEVEL_FROM_S,
    LEVEL_TO_S,
    MIN_RATIO,
    MIN_SHARE,
)
from kernelfit.recording.findings import Finding
from kernelfit.recording.inspection import Inspection
from kernelfit.report.content_tables import changes_on_reading
from kernelfit.report.numbers import (
    count_text,
    distance_label,
    duration_text,
    fixed_text,
    number_text,
    p_text,
    time_text,
)
from kernelfit.report.page import Cell, Column, Definition, Table, without_empty_notes

HASH_SHOWN = 12
GAPS_SHOWN = 12
BENJAMINI = "Benjamini Y, Hochberg Y (1995) J R Stat Soc B 57: 289-300."
SEVERITY_WORDS = {"error": "Error", "warning": "Warning", "info": "Note"}
KINDS = {
    "array_dead_time": "one spike blocks the whole array",
    "array_too_large": "array too large",
    "array_too_small": "array too small",
    "coarse_times": "coarse times",
    "dominant_unit": "one unit dominates",
    "double_detection": "spikes counted twice",
    "far_coincidences": "distant units coincide",
    "few_events": "bursts",
    "gaps": "gaps",
    "identical_trains": "identical spike trains",
    "intervals_below_1ms": "intervals below 1 ms",
    "intervals_below_2ms": "intervals below 2 ms",
    "longer_than_a_week": "longer than a week",
    "mostly_in_proposed": "mostly artefacts",
    "much_excluded": "much is excluded",
    "nearly_silent_units": "nearly silent units",
    "no_distances": "no distances",
    "no_spikes": "no spikes",
    "one_cell_twice": "one cell seen twice",
    "only_in_exclusions": "nothing but exclusions",
    "only_in_proposed": "nothing but artefacts",
    "rate_changes": "changes of rate",
    "rates_too_high": "rates too high",
    "same_site_dead_time": "dead time on one site",
    "silent_units": "silent units",
    "spikes_outside_windows": "spikes outside the windows",
    "times_are_integers": "times are whole numbers",
    "times_look_like_ms": "times look like ms",
    "units_come_or_go": "units come or go",
    "units_on_one_site": "units on one site",
    "whole_array_events": "artefacts on the whole array",
    "windows_not_stated": "windows not stated",
}


def findings_list(findings: Sequence[Finding]) -> Definition:
    """Every finding: severity and kind; what was seen, what can be done, and where."""
    rows = tuple(
        (
            f"{SEVERITY_WORDS[f.severity]}: {KINDS[f.key]}",
            f"{f.what} Where: {f.where.rstrip('.')}. {f.remedy}",
        )
        for f in findings
    )
    return Definition(rows, "All findings (findings.csv)", ("kind", "what was found, where, and what can be done"))


def pairs_table(pairs: pd.DataFrame) -> Table:
    """Pairs that are perhaps one cell seen twice, with the evidence."""
    rows = tuple(
        (
            Cell(str(a)),
            Cell(str(b)),
            _number(d, digits=3),
            _count(n),
            _number(x, digits=2),
            _number(100.0 * share, digits=2),
            Cell(p_text(p), p),
        )
        for a, b, d, n, x, share, p in zip(
            pairs["unit_a"],
            pairs["unit_b"],
            _floats(pairs["distance_um"]),
            _floats(pairs["n_coincidences"]),
            _floats(pairs["expected"]),
            _floats(pairs["share_of_smaller"]),
            _floats(pairs["p_adjusted"]),
            strict=True,
        )
    )
    return Table(
        caption="Neighbouring pairs with an excess of exact coincidences",
        columns=(
            Column("unit", numeric=False),
            Column("other unit", numeric=False),
            Column("distance (µm)"),
            Column("coincidences"),
            Column("expected"),
            Column("excess (% of smaller unit)"),
            Column("p, adjusted"),
        ),
        rows=rows,
        file="proposed_pairs.csv",
    )


def units_table(inspection: Inspection) -> Table:
    """Every unit."""
    units = inspection.units
    places = [c for c in ("x_um", "y_um", "z_um") if c in units.columns]
    grouped = "group" in units.columns
    shared = bool((units["n_same_site"] > 0).any())
    proposed = len(inspection.proposed_exclusions) > 0
    columns = [Column("unit", numeric=False)]
    columns += [Column("group", numeric=False)] * grouped
    columns += [Column(f"{c[0]} (µm)") for c in places]
    columns += [
        Column("spikes"),
        Column("rate (Hz)"),
        Column("below 1 ms (%)"),
        Column("below 2 ms (%)"),
        *[Column("others on site")] * shared,
        *[Column("in proposed (%)")] * proposed,
        Column("remarks", numeric=False, wraps=True),
    ]
    decimals = decimals_of(units[places].to_numpy(dtype=np.float64))
    numbers = {c: _floats(units[c]) for c in units.columns if c not in ("group", "remarks")}
    rows = []
    for k, unit in enumerate(units.index):
        row = [Cell(str(unit))]
        row += [Cell(str(units["group"].iloc[k]))] if grouped else []
        row += [_fixed(float(numbers[c][k]), decimals) for c in places]
        row += [
            _count(float(numbers["n_spikes"][k])),
            _number(float(numbers["rate_hz"][k]), digits=3, keep_zeros=True),
            _fixed(100.0 * float(numbers["share_below_1ms"][k]), 1),
            _fixed(100.0 * float(numbers["share_below_2ms"][k]), 1),
            *[_count(float(numbers["n_same_site"][k]))] * shared,
            *[_fixed(100.0 * float(numbers["share_in_proposed"][k]), 1)] * proposed,
            Cell(str(units["remarks"].iloc[k])),
        ]
        rows.append(tuple(row))
    more = ", other units on the site" * shared + ", share of spikes in proposed exclusions" * proposed
    table = Table(
        caption=f"The units: shares of intervals below 1 and 2 ms{more}",
        columns=tuple(columns),
        rows=tuple(rows),
        file="units.csv",
    )
    return without_empty_notes(table)


def blocks_table(blocks: pd.DataFrame) -> Table:
    """Rates over blocks of time."""
    decimals = decimals_of(blocks[["start_s", "stop_s"]].to_numpy(dtype=np.float64))
    rows = tuple(
        (
            _fixed(a, decimals),
            _fixed(b, decimals),
            _count(n),
            _number(rate, digits=3, keep_zeros=True),
            _count(active),
        )
        for a, b, n, rate, active in zip(
            *(_floats(blocks[c]) for c in ("start_s", "stop_s", "n_spikes", "rate_hz", "n_active_units")), strict=True
        )
    )
    columns = (
        Column("from (s)"),
        Column("to (s)"),
        Column("spikes"),
        Column("rate per unit (Hz)"),
        Column("units with a spike"),
    )
    return Table(caption="Rates over blocks of time", columns=columns, rows=rows, file="block_rates.csv")


def gaps_table(gaps: pd.DataFrame) -> Table:
    """The longest stretches without a spike."""
    shown = gaps.head(GAPS_SHOWN)
    rows = tuple(
        (_fixed(length, 1), _fixed(a, 1), _fixed(b, 1))
        for a, b, length in zip(*(_floats(shown[c]) for c in ("start_s", "stop_s", "length_s")), strict=True)
    )
    cut = f", the longest {GAPS_SHOWN} of {count_text(len(gaps))}" if len(gaps) > GAPS_SHOWN else ""
    return Table(
        caption=f"Stretches of 10 s and more without a spike{cut}",
        columns=(Column("length (s)"), Column("from (s)"), Column("to (s)")),
        rows=rows,
        file="gaps.csv",
    )


def ranges_table(inspection: Inspection) -> Table:
    """What a kernel of each range would rest on."""
    ranges = inspection.ranges
    largest = float(ranges["max_distance_um"].max())
    rows = tuple(
        (
            Cell(f"{number_text(reach)}{' (all)' if reach == largest else ''}", reach),
            _count(pairs),
            _count(distances),
            _count(units),
        )
        for reach, pairs, distances, units in zip(
            *(_floats(ranges[c]) for c in ("max_distance_um", "n_pairs", "n_distances", "n_units")), strict=True
        )
    )
    columns = (
        Column("range of the kernel (µm)"),
        Column("pairs of units"),
        Column("distinct distances"),
        Column("units with a partner"),
    )
    return Table(caption="Pairs within each kernel range", columns=columns, rows=rows, file="ranges.csv")


def recording_facts(inspection: Inspection) -> Definition:
    """What was recorded."""
    recording = inspection.recording
    origin, bounds = recording.origin, recording.window_bounds
    rows = [(f"file, {f.role}", f"{f.name} (SHA-256 {f.sha256[:HASH_SHOWN]}...)") for f in origin.files]
    rows.append(("units", count_text(recording.n_units)))
    rows.append(("sites", count_text(_n_sites(inspection))))
    rows.append(("reference distance", _distance(inspection.reference_distance_um)))
    rows.append(("spikes counted here", count_text(inspection.n_spikes)))
    windows = "1 window" if len(bounds) == 1 else f"{count_text(len(bounds))} windows"
    span = f"{number_text(float(bounds[0, 0]))} to {number_text(float(bounds[-1, 1]))} s on the recording's clock"
    rows.append(("windows", f"{windows}, {duration_text(recording.duration)} in all, {span}"))
    excluded = recording.exclusion_bounds
    if len(excluded):
        length = number_text(float(np.sum(excluded[:, 1] - excluded[:, 0])))
        rows.append(("exclusions", f"{count_text(len(excluded))} stretches, {length} s in all; not looked at"))
    if recording.excluded_pairs:
        rows.append(("pairs left out", f"{count_text(len(recording.excluded_pairs))}; not in the correlograms"))
    rows += changes_on_reading(origin.notes)
    return Definition(rows=tuple(rows), caption="The recording")


def _n_sites(inspection: Inspection) -> int:
    from kernelfit.recording.layout import lay_out

    return lay_out(inspection.recording).n_sites


def _distance(distance_um: float) -> str:
    if math.isnan(distance_um):
        return "none: a single site"
    return f"{distance_label(distance_um)}, median over sites of the distance to the nearest other site"


def methods_paragraph(inspection: Inspection) -> tuple[str, tuple[str, ...]]:
    """The inspection in a paragraph ready for a paper, and its references."""
    from kernelfit import __version__

    close = f"{number_text(1e3 * CLOSE_FROM_S)} to {time_text(CLOSE_TO_S)}"
    level = f"{number_text(1e3 * LEVEL_FROM_S)} to {time_text(LEVEL_TO_S)}"
    reference_um = inspection.reference_distance_um
    reference = "the reference distance" if math.isnan(reference_um) else distance_label(reference_um)
    paragraph = (
        f"Recordings were inspected with kernelfit {__version__} before any fit. Whole-array artefacts were moments "
        f"at which at least {number_text(100 * SHARE_OF_UNITS)} % of the active units, and at least {MIN_UNITS}, "
        f"fired within {time_text(WITHIN_S)} of one spike and spikes were at least {number_text(SHARPNESS)} times as "
        f"dense as {number_text(1e3 * SHOULDER_FROM_S)} to {time_text(SHOULDER_TO_S)} away, with "
        f"{number_text(1e3 * MARGIN_S, 4)} ms to both sides; the number of units was raised where trains shifted as "
        f"wholes by up to {time_text(SHIFT_S)}, each unit by its own amount ({N_SHIFTS} times, seed "
        f"{inspection.seed}), gave more than 1 % as many. Neighbouring pairs of units (up to 1.5 times {reference}, "
        f"the median distance between nearest sites) were held to be perhaps one cell if coincidences within "
        f"{time_text(COINCIDENCE_S)} exceeded {number_text(MIN_RATIO)} times the pair's level at lags of {close} and "
        f"of {level}, by at least {number_text(100 * MIN_SHARE)} % of the smaller unit's spikes (one-sided binomial "
        f"tests, false discovery rate {number_text(100 * FALSE_DISCOVERIES)} %, Benjamini and Hochberg 1995). Short "
        "intervals were marked above 1 % of a unit's intervals (common practice). Correlograms were pooled over "
        "pairs by distance and divided by the number of spike pairs expected from the mean rates."
    )
    return paragraph, (BENJAMINI,)


# --- cells --------------------------------------------------------------------------------------------------


def _floats(column: Iterable[object]) -> np.ndarray[tuple[int], np.dtype[np.float64]]:
    return np.asarray(list(column), dtype=np.float64)


def _number(value: float, digits: int = 3, *, keep_zeros: bool = False) -> Cell:
    value = float(value)
    return Cell("none", None) if math.isnan(value) else Cell(number_text(value, digits, keep_zeros=keep_zeros), value)


def decimals_of(values: FloatArray) -> int:
    """Decimals that all numbers of a column share: none where all are whole, else one."""
    known = values[np.isfinite(values)]
    return 0 if np.array_equal(known, np.round(known)) else 1


def _fixed(value: float, decimals: int) -> Cell:
    value = float(value)
    return Cell("none", None) if math.isnan(value) else Cell(fixed_text(value, decimals), value)


def _count(value: float) -> Cell:
    return Cell(count_text(float(value)), float(value))
