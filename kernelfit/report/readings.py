"""Readings of a fit that figures, tables and sentences share: estimates with reasons, effects in words."""

from __future__ import annotations

import math
from typing import TYPE_CHECKING

import numpy as np

from kernelfit._typing import FloatArray
from kernelfit.report.numbers import number_text
from kernelfit.report.words import (
    NOTHING_PERCENT,
    Estimate,
    distances_sentence,
    explained_sentence,
    goodness_sentence,
    mostly_rejected,
    not_ruled_out_sentence,
    one_spike_sentence,
    percent_of_rate,
    rejected_sentence,
    sureness_sentence,
)

if TYPE_CHECKING:
    from kernelfit.diagnostics.goodness import Goodness
    from kernelfit.fitting.result import CouplingFit
    from kernelfit.model.coupling import CovarianceKind

LEVEL = 0.95  # of every interval in a report
TEST_LEVEL = 0.05  # of every test in a report
LEAK = "leak_rate"
FARTHER = 1.5  # reference distances: what counts as farther away in a sentence


def kind_word(kind: CovarianceKind) -> str:
    """A kind of interval as a page names it."""
    return {"model": "model-based", "robust": "robust", "jackknife": "jackknife"}[kind]


def is_exp(fit: CouplingFit) -> bool:
    """True where a coupling can be read as a change of the rate in per cent."""
    return link_name(fit) == "exp"


def link_name(fit: CouplingFit) -> str:
    """Name of the rate link."""
    return fit.model.link.name


def kernel_name(fit: CouplingFit) -> str:
    """Name of the kernel family."""
    return fit.model.kernel.name


def length_word(fit: CouplingFit) -> str:
    """What `length_um` is called: the radius of a kernel with an edge, the length of any other."""
    return "radius" if kernel_name(fit) == "disc" else "length"


def parameter_of(fit: CouplingFit, name: str) -> Estimate | None:
    """A parameter with its interval, or None where the model has none of that name."""
    table = fit.parameters
    if name not in table.index:
        return None
    value, lower, upper = table.loc[[name], ["estimate", "lower", "upper"]].to_numpy(dtype=np.float64)[0]
    note = table["note"].to_dict()[name]
    return Estimate(float(value), float(lower), float(upper), plain_reason(str(note or "")))


def coupling_at(fit: CouplingFit, distance_um: float) -> Estimate:
    """J at one distance with its pointwise interval."""
    row = fit.kernel_band(np.array([distance_um]), level=LEVEL).iloc[0]
    value = float(row["estimate"])
    reason = "" if math.isfinite(value) else _why_no_coupling(fit, distance_um)
    return Estimate(value, float(row["lower"]), float(row["upper"]), reason)


def _why_no_coupling(fit: CouplingFit, distance_um: float) -> str:
    """Why the kernel has no value at a distance: an amplitude that could not be estimated, or no pair so far apart."""
    table = fit.parameters
    unknown = table[(table["unit"] == "per spike") & table["estimate"].isna() & (table.index != "same_site")]
    reasons = [plain_reason(note) for note in unknown["note"]]
    return next((r for r in reasons if r), f"the kernel has no value at {number_text(distance_um)} µm")


def plain_reason(note: str) -> str:
    """The note of a parameter without a value, as it goes on after "could not be estimated"."""
    return note.removeprefix("not identified: ")


def time_constant_of(fit: CouplingFit) -> Estimate:
    """1 / leak rate, with the ends of the leak rate's interval turned round. Seconds."""
    leak = parameter_of(fit, LEAK)
    if leak is None or not leak.known or leak.value <= 0.0:
        return Estimate(math.nan, reason="" if leak is None else leak.reason)
    lower = 1.0 / leak.upper if leak.upper > 0.0 else math.nan
    upper = 1.0 / leak.lower if leak.lower > 0.0 else math.nan
    return Estimate(1.0 / leak.value, lower, upper, leak.reason)


def change_text(jump: float, fit: CouplingFit, *, verb: bool = True) -> str:
    """A jump as short words for a title: "raises the rate by 12 %"; without verb its size alone, "12 %"."""
    if not is_exp(fit):
        size = number_text(abs(jump), 2)
        return f"{'lowers' if jump < 0 else 'raises'} the drive by {size}" if verb else size
    percent = abs(float(percent_of_rate(np.array([jump]))[0]))
    small = percent < NOTHING_PERCENT
    size = f"below {number_text(NOTHING_PERCENT)} %" if small else f"{number_text(percent, 2)} %"
    return f"{'lowers' if jump < 0 else 'raises'} the rate by {size}" if verb else size


def is_nothing(jump: Estimate, fit: CouplingFit) -> bool:
    """True where an effect is too small for a number in a title: below 0.1 % of the rate, or exactly none."""
    if not is_exp(fit):
        return jump.value == 0.0
    return abs(float(percent_of_rate(np.array([jump.value]))[0])) < NOTHING_PERCENT


# --- the findings in a sentence each ------------------------------------------------------------------


def verdict(fit: CouplingFit, goodness: Goodness) -> tuple[str, str, str]:
    """Three sentences: what one spike does, how that depends on distance, whether the model describes the recording.

    Where a fit that converged describes less than half of the units tested, the last comes first, as a caution; where
    it found no coupling either, in the middle, before the numbers that cannot be ruled out.
    """
    if not fit.converged:
        stopped = f"The fit did not converge. Where it stopped: {_headline(fit)}"
        return stopped, distance_sentence(fit), described_sentence(goodness)
    if not mostly_rejected(goodness.n_tested, goodness.n_rejected):
        return _headline(fit), distance_sentence(fit), described_sentence(goodness)
    caution = rejected_sentence(goodness.n_tested, goodness.n_rejected, 1.0 - goodness.level)
    if not fit.verdict.found:
        return _headline(fit), caution, distance_sentence(fit)
    return caution, _headline(fit, in_model=True), distance_sentence(fit)


def _headline(fit: CouplingFit, *, in_model: bool = False) -> str:
    if not fit.verdict.found:
        return fit.verdict.sentence
    return one_spike_sentence(
        fit.reference_distance_um,
        coupling_at(fit, fit.reference_distance_um),
        time_constant_of(fit),
        link=link_name(fit),
        level=LEVEL,
        leak_fixed=fit.model.leak_rate is not None,
        in_model=in_model,
    )


def told_distances(fit: CouplingFit) -> FloatArray:
    """Distances with pairs nearest to one, two and four times the reference distance: where effects are told."""
    distance = fit.pairs_by_distance["distance_um"].to_numpy(dtype=np.float64)
    if distance.size == 0:
        return distance
    wanted = fit.reference_distance_um * np.array([1.0, 2.0, 4.0])
    return np.asarray(np.unique([distance[np.argmin(np.abs(distance - w))] for w in wanted]))


def distance_sentence(fit: CouplingFit) -> str:
    """How the effect depends on distance, at about two and four times the reference distance."""
    told = told_distances(fit)
    if told.size == 0:
        return "No pair of units is covered by the kernel."
    if not fit.verdict.found:
        return not_ruled_out_sentence(
            fit.reference_distance_um, coupling_at(fit, fit.reference_distance_um), link_name(fit), LEVEL
        )
    farther = told[told > FARTHER * fit.reference_distance_um]
    if farther.size == 0:
        return "No pairs are much farther apart than that, so nothing can be said about distance."
    return distances_sentence(farther, tuple(coupling_at(fit, float(d)) for d in farther), link_name(fit))


def described_sentence(goodness: Goodness) -> str:
    """Whether the model describes the recording."""
    return goodness_sentence(
        goodness.n_tested,
        goodness.n_rejected,
        float(goodness.pooled["p_value"].iloc[0]),
        1.0 - goodness.level,
    )


def sure_lead(fit: CouplingFit) -> str:
    """How sure: the first sentence."""
    ratios = fit.std_errors["ratio"].to_numpy(dtype=np.float64)
    return sureness_sentence(
        fit.n_blocks,
        fit.block_length_s,
        ratios,
        headline=kind_word(fit.covariance_kind),
    )


def result_lines(fit: CouplingFit, goodness: Goodness) -> tuple[str, ...]:
    """The result in five lines, for a console: the three of the verdict, sureness, gain."""
    return (*verdict(fit, goodness), sure_lead(fit), gain_sentence(fit, goodness))


def gain_sentence(fit: CouplingFit, goodness: Goodness) -> str:
    """What the model adds over constant rates."""
    own = bool(fit.model.after_spike.constants(fit.model.bin_width).size)
    return explained_sentence(goodness.deviance_explained, goodness.bits_per_spike, own_spikes=own)
