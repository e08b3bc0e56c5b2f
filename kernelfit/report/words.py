"""Plain sentences with numbers: what a fit found, how sure it is, how well the model describes the recording.

Every function takes numbers and returns text; none knows a fit. Under the `exp` link a coupling J is read as
a change of the rate in per cent, 100 (e^J - 1); under any other link a jump of the drive has no such reading,
and the sentences speak of the drive.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from kernelfit._typing import FloatArray
from kernelfit.errors import Unavailable
from kernelfit.report.numbers import (
    COULD_NOT,
    NOT_BOUNDED,
    PROSE_DECIMALS,
    UNBOUNDED,
    count_text,
    decimals_for,
    distance_label,
    fixed_text,
    interval_text,
    number_text,
    p_sentence,
    spaced_unit,
    time_text,
)

MULTIPLES_FROM = 2.0  # a rate that triples is "multiplied by 3.0", not "raised by 200 %"
RATIO_WORTH_SAYING = 1.5
MOSTLY_REJECTED = 0.5  # more than this share of the tested units rejected: the caution comes before any number
FEWER_SPIKES = 3.0  # units that pass with this many times fewer spikes than those that fail: worth saying
LARGEST_JUMP = 600.0  # e to that power can still be written as a number; any such rise is without bound
NOTHING_PERCENT = 0.1  # an effect all of whose interval is smaller is "below 0.1 %"


@dataclass(frozen=True, slots=True)
class Estimate:
    """A number with its interval in one unit. Unknown ends are NaN; `reason` says why a value is missing."""

    value: float
    lower: float = math.nan
    upper: float = math.nan
    reason: str = ""

    @property
    def known(self) -> bool:
        """True where there is a value to state."""
        return math.isfinite(self.value)

    @property
    def bounded(self) -> bool:
        """True where both ends of the interval are finite."""
        return math.isfinite(self.lower) and math.isfinite(self.upper)

    @property
    def undecided(self) -> bool:
        """True where the interval holds 0, so that the direction is open."""
        return self.bounded and self.lower <= 0.0 <= self.upper

    def text(self, unit: str = "") -> str:
        """As prose writes it."""
        if not self.known:
            return could_not(self.reason)
        return interval_text(self.value, self.lower, self.upper, unit)


def could_not(reason: str) -> str:
    """ "could not be estimated: why" """
    return f"{COULD_NOT}: {reason}" if reason else COULD_NOT


def percent_of_rate(jump: FloatArray) -> FloatArray:
    """Change of the rate in per cent that a jump of the drive causes under the `exp` link."""
    return np.asarray(100.0 * np.expm1(np.minimum(jump, LARGEST_JUMP)))


def level_text(level: float) -> str:
    """ "95 %" """
    return f"{number_text(100.0 * level)}{spaced_unit('%')}"


# --- one spike ------------------------------------------------------------------------------------------


def effect_text(jump: Estimate, link: str, level: float) -> str:
    """What one spike does to the rate of another unit, without its place: "raises the rate by 12 % (...)".

    Parameters
    ----------
    jump : J with its interval
    link : name of the rate link
    level : of the interval
    """
    if not jump.known:
        return f"has an effect that {could_not(jump.reason)}"
    if link != "exp":
        return _jump_text(jump, level)
    if jump.value > math.log1p(MULTIPLES_FROM):
        value, low, high = (math.exp(min(v, LARGEST_JUMP)) for v in (jump.value, jump.lower, jump.upper))
        open_text = ", so its direction is open" if jump.undecided else ""
        return f"multiplies the rate by {_with_level(value, low, high, '', level)}{open_text}"
    value, low, high = (float(v) for v in percent_of_rate(np.array([jump.value, jump.lower, jump.upper])))
    if jump.undecided:
        return f"changes the rate by {_with_level(value, low, high, '%', level)}, so its direction is open"
    if value < 0.0:
        return f"lowers the rate by {_with_level(-value, -high, -low, '%', level)}"
    return f"raises the rate by {_with_level(value, low, high, '%', level)}"


def _jump_text(jump: Estimate, level: float) -> str:
    if jump.undecided:
        return (
            f"changes the drive by {_with_level(jump.value, jump.lower, jump.upper, '', level)}, "
            "so its direction is open"
        )
    if jump.value < 0.0:
        return f"lowers the drive by {_with_level(-jump.value, -jump.upper, -jump.lower, '', level)}"
    return f"raises the drive by {_with_level(jump.value, jump.lower, jump.upper, '', level)}"


def _with_level(value: float, lower: float, upper: float, unit: str, level: float) -> str:
    """ "12 % (95 % interval 9 to 15 %)": the first interval of a paragraph names its level."""
    text = interval_text(value, lower, upper, unit)
    if " (" not in text:
        return text
    if text.endswith(f"({NOT_BOUNDED})"):
        return text.replace(" (", f" ({level_text(level)} interval ", 1)
    return text.replace(" (", f" ({level_text(level)} interval ", 1)[:-1] + spaced_unit(unit) + ")"


def fading_text(time_constant_s: Estimate, *, fixed: bool) -> str:
    """How long the effect lasts: "fading with a time constant of 13 ms (11 to 15)"."""
    if fixed:
        return f"fading with the time constant it was given, {time_text(time_constant_s.value)}"
    if not time_constant_s.known:
        return f"its time constant {could_not(time_constant_s.reason)}"
    shown = time_text(time_constant_s.value, time_constant_s.lower, time_constant_s.upper)
    return f"fading with a time constant of {shown}"


def one_spike_sentence(
    distance_um: float,
    jump: Estimate,
    time_constant_s: Estimate,
    *,
    link: str,
    level: float,
    leak_fixed: bool,
    in_model: bool = False,
) -> str:
    """The headline: "One spike at 200 µm raises the rate by 12 % (...), fading with ...".

    `in_model`: "In this model, one spike ...", where the model does not describe most of the units.
    """
    effect = effect_text(jump, link, level)
    fading = fading_text(time_constant_s, fixed=leak_fixed)
    joint = "; " if not time_constant_s.known and not leak_fixed else ", "
    one = "In this model, one" if in_model else "One"
    return f"{one} spike at {distance_label(distance_um)} {effect}{joint}{fading}."


def same_site_sentence(jump: Estimate, *, link: str, level: float) -> str:
    """What one spike does to another unit on the same site, where that has a coefficient of its own."""
    return f"Between units on one site a spike {effect_text(jump, link, level)}."


def distances_sentence(distances_um: FloatArray, jumps: tuple[Estimate, ...], link: str) -> str:
    """The same effect at a few distances, so that any kernel can be read without its formula.

    Returns
    -------
    "Farther away the change of the rate is 4.1 % (2.2 to 6.0) at 400 µm and ...", "" without distances
    """
    parts = []
    for distance, jump in zip(distances_um, jumps, strict=True):
        if jump.known:
            parts.append(f"{_size_text(jump, link)} at {distance_label(float(distance))}")
    if not parts:
        return ""
    subject = "Farther away the change of the rate is" if link == "exp" else "Farther away the jump of the drive is"
    return f"{subject} {listed(parts)}."


def _size_text(jump: Estimate, link: str) -> str:
    """The effect with its interval, "below 0.1 %" where all of it is."""
    if link != "exp":
        return interval_text(jump.value, jump.lower, jump.upper)
    ends = percent_of_rate(np.array([jump.value, jump.lower, jump.upper]))
    if np.nanmax(np.abs(ends)) < NOTHING_PERCENT:
        return f"below {number_text(NOTHING_PERCENT)}{spaced_unit('%')}"
    return interval_text(float(ends[0]), float(ends[1]), float(ends[2]), "%", max_decimals=2)


def not_ruled_out_sentence(distance_um: float, jump: Estimate, link: str, level: float) -> str:
    """Where no coupling was found: how large an effect could still have gone unseen."""
    if not jump.bounded:
        return "How large an effect could have gone unseen could not be estimated."
    ends = np.array([jump.lower, jump.upper])
    unit, of = ("%", " of the rate") if link == "exp" else ("", " on the drive")
    low, high = (float(v) for v in (percent_of_rate(ends) if link == "exp" else ends))
    if max(abs(low), abs(high)) >= UNBOUNDED:
        where = distance_label(distance_um)
        return f"At {where} no effect can be ruled out, however large: the recording does not bound it."
    decimals = min(decimals_for((high - low) / 2.0), PROSE_DECIMALS)
    return (
        f"At {distance_label(distance_um)} an effect between {fixed_text(low, decimals)} and "
        f"{fixed_text(high, decimals)}{spaced_unit(unit)}{of} cannot be ruled out ({level_text(level)} interval)."
    )


def length_sentence(kernel_name: str, length_um: Estimate, word: str = "length") -> str:
    """The length of a kernel that has one: "The gaussian kernel has a length of 180 µm (150 to 210)"."""
    if not length_um.known:
        return f"The {word} of the {kernel_name} kernel {could_not(length_um.reason)}."
    return f"The {kernel_name} kernel has a {word} of {length_um.text('µm')}."


def listed(parts: list[str]) -> str:
    """ "a", "a and b", "a, b and c" """
    if len(parts) < 2:
        return "".join(parts)
    return f"{', '.join(parts[:-1])} and {parts[-1]}"


# --- how sure -------------------------------------------------------------------------------------------


def sureness_sentence(n_blocks: int, block_length_s: float, ratios: FloatArray, *, headline: str = "robust") -> str:
    """What the two kinds of standard errors say together.

    Parameters
    ----------
    n_blocks, block_length_s : the blocks of time behind the robust kind
    ratios : robust over model-based standard error, one per parameter that has both
    headline : the kind that the page's intervals are of, "robust" or "model-based"
    """
    known = ratios[np.isfinite(ratios)]
    blocks = f"{count_text(n_blocks)} blocks of {block_text(block_length_s)}"
    if known.size == 0:
        return f"Standard errors could not be had in both ways, so they cannot be compared ({blocks})."
    low, high = float(known.min()), float(known.max())
    low_text, high_text = (number_text(v, 2, keep_zeros=True) for v in (low, high))
    times = high_text if low_text == high_text else f"{low_text} to {high_text}"
    if high < RATIO_WORTH_SAYING:
        return (
            f"Robust standard errors, from {blocks}, are {times} times those that take the model at its word: "
            "stretches of time scatter as the model says."
        )
    return (
        f"Robust standard errors, from {blocks}, are {times} times those that take the model at its word; "
        f"the intervals of this page are {headline}."
    )


def worth_sentence(ratio: float) -> str:
    """What a ratio of standard errors means as length of recording; "" where it says little."""
    if not math.isfinite(ratio) or ratio < RATIO_WORTH_SAYING:
        return ""
    return (
        f"A ratio of {number_text(ratio, 2, keep_zeros=True)} means that bursts and slow changes carry much of the "
        f"estimate: it is as uncertain as a recording {number_text(ratio**2, 2)} times shorter would leave it if the "
        "model were exactly right."
    )


def block_text(seconds: float) -> str:
    return time_text(seconds) if seconds < 1.0 else f"{number_text(seconds, 3)}{spaced_unit('s')}"


# --- does the model describe the recording ---------------------------------------------------------------


def described_text(n_tested: int, n_rejected: int) -> str:
    """How many units the model describes, in a clause: "The model describes the spike times of 31 of the 35 units
    tested"."""
    kept = n_tested - n_rejected
    if n_tested == 1:
        return f"The model {'describes' if kept else 'does not describe'} the spike times of the one unit tested"
    if kept == 0:
        which = "either of the two" if n_tested == 2 else f"any of the {count_text(n_tested)}"
        return f"The model does not describe the spike times of {which} units tested"
    if n_rejected == 0:
        return f"The model describes the spike times of {all_of(n_tested)} units tested"
    return f"The model describes the spike times of {count_text(kept)} of the {count_text(n_tested)} units tested"


def all_of(n: int) -> str:
    """ "both", "all 35" """
    return "both" if n == 2 else f"all {count_text(n)}"


def mostly_rejected(n_tested: int, n_rejected: int) -> bool:
    """True where more than half of the units tested are rejected: what the model says is then told with a caution."""
    return n_tested > 0 and n_rejected > MOSTLY_REJECTED * n_tested


def rejected_sentence(n_tested: int, n_rejected: int, level: float) -> str:
    """The caution that comes before any number where most units are rejected, and what it means for the numbers."""
    if n_tested == 1:
        which = "the one unit tested"
    elif n_rejected == n_tested:
        which = "either of the two units tested" if n_tested == 2 else f"any of the {count_text(n_tested)} units tested"
    else:
        which = f"{count_text(n_rejected)} of the {count_text(n_tested)} units tested"
    return (
        f"The model does not describe the spike times of {which} ({_how_tested(level)}): the numbers below are its "
        "best summary of the recording, and their intervals do not cover what it misses."
    )


def _how_tested(level: float) -> str:
    return f"time rescaling, Kolmogorov-Smirnov, {level_text(level)} after correction for many tests"


def misfit_sentence(ks_statistics: FloatArray) -> str:
    """How far observed and expected shares are apart in the median unit; "" without a test."""
    known = ks_statistics[np.isfinite(ks_statistics)]
    if known.size == 0:
        return ""
    middle, largest = (number_text(float(v), 2, keep_zeros=True) for v in (np.median(known), known.max()))
    if known.size < 3:
        of = "its intervals" if known.size == 1 else "a unit's intervals"
        return f"Observed and expected share of {of} are at most {largest} apart."
    return (
        f"Between the observed and the expected share of a unit's intervals the largest difference is {middle} in the "
        f"median unit, {largest} in the worst."
    )


def few_spikes_sentence(passing_spikes: FloatArray, failing_spikes: FloatArray) -> str:
    """What passing means where the units that pass have far fewer spikes than those that fail; "" elsewhere."""
    if passing_spikes.size == 0 or failing_spikes.size == 0:
        return ""
    passing, failing = float(np.median(passing_spikes)), float(np.median(failing_spikes))
    if passing > failing / FEWER_SPIKES:
        return ""
    have = "The unit that passes has" if passing_spikes.size == 1 else "The units that pass have a median of"
    others = "the one that fails" if failing_spikes.size == 1 else "those that fail"
    return (
        f"{have} {_spikes(passing)}, {others} {'a median of ' * (failing_spikes.size > 1)}{count_text(failing)}: with "
        "few spikes only gross misses show, so passing says little."
    )


def _spikes(n: float) -> str:
    return "1 spike" if round(n) == 1 else f"{count_text(n)} spikes"


def untested_sentence(n_units: int, n_tested: int) -> str:
    """How many units have no test; "" where all have."""
    left = n_units - n_tested
    if left <= 0:
        return ""
    return (
        f"{count_text(left)} of the {count_text(n_units)} units {'is' if left == 1 else 'are'} not tested: too few "
        "spikes, or none; the table says why."
    )


def goodness_sentence(n_tested: int, n_rejected: int, pooled_p: float, level: float) -> str:
    """How many units the model describes, and whether it describes them together.

    Parameters
    ----------
    n_tested, n_rejected : units with a test, and those rejected after the correction for many tests
    pooled_p : p-value of the test on all units taken together; NaN where there is none
    level : of the tests, e.g. 0.05
    """
    if n_tested == 0:
        return "No unit has enough spikes for a test of the model."
    first = described_text(n_tested, n_rejected)
    how = _how_tested(level)
    if math.isnan(pooled_p):
        return f"{first} ({how})."
    if pooled_p < level:
        together = f"taken together, the units speak against it ({p_sentence(pooled_p)})"
    else:
        together = f"taken together, nothing speaks against it ({p_sentence(pooled_p)})"
    return f"{first} ({how}); {together}."


def explained_sentence(
    deviance_explained: float | Unavailable, bits_per_spike: float | Unavailable, *, own_spikes: bool
) -> str:
    """What the model adds over constant rates; `own_spikes`: it holds after-spike terms, whose part is in it."""
    if isinstance(deviance_explained, Unavailable) or isinstance(bits_per_spike, Unavailable):
        reason = next(v.reason for v in (deviance_explained, bits_per_spike) if isinstance(v, Unavailable))
        return f"The gain over constant rates {could_not(reason.rstrip('.'))}."
    what = "coupling and units' own earlier spikes together explain" if own_spikes else "coupling explains"
    return (
        f"Over constant rates, {what} {number_text(100.0 * deviance_explained, 2)}{spaced_unit('%')} of "
        f"the deviance, {number_text(bits_per_spike, 2)} bits per spike."
    )


# --- what the numbers do not mean ------------------------------------------------------------------------

FUNCTIONAL = (
    "This is functional coupling, not synaptic coupling: it says how the rate at one place changes after a "
    "spike at another, given all recorded spikes."
)
UNRECORDED = (
    "Input common to several units, cells that were not recorded and slow changes of state leave a trace "
    "in the kernel, in the time constant and in the baselines."
)
SORTING = "Errors of spike sorting and dead times of the detection bend the kernel at short distances and short lags."
USE = (
    "For research. Not for clinical decisions; recordings from people or animals fall under local ethics "
    "rules and licensed practice."
)
CAUTIONS = (FUNCTIONAL, UNRECORDED, SORTING, USE)
