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
    PROSE_DECIMALS,
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
RATIO_WORTH_SAYING = 1.2
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
    return 100.0 * np.expm1(jump)


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
        value, low, high = (math.exp(v) for v in (jump.value, jump.lower, jump.upper))
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
) -> str:
    """The headline: "One spike at 200 µm raises the rate by 12 % (...), fading with ..."."""
    effect = effect_text(jump, link, level)
    fading = fading_text(time_constant_s, fixed=leak_fixed)
    joint = "; " if not time_constant_s.known and not leak_fixed else ", "
    return f"One spike at {distance_label(distance_um)} {effect}{joint}{fading}."


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
    span = number_text(high, 2) if number_text(low, 2) == number_text(high, 2) else ""
    times = span or f"{number_text(low, 2)} to {number_text(high, 2)}"
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
        f"A ratio of {number_text(ratio, 2)} means that bursts and slow changes carry much of the estimate: "
        f"it is as uncertain as a recording {number_text(ratio**2, 2)} times shorter would leave it if the "
        "model were exactly right."
    )


def block_text(seconds: float) -> str:
    return time_text(seconds) if seconds < 1.0 else f"{number_text(seconds, 3)}{spaced_unit('s')}"


# --- does the model describe the recording ---------------------------------------------------------------


def described_text(n_tested: int, n_rejected: int) -> str:
    """How many units the model describes, in a clause: "The model describes the spike times of 31 of 35 units"."""
    kept = n_tested - n_rejected
    if n_tested == 1:
        return f"The model {'describes' if kept else 'does not describe'} the spike times of the one unit tested"
    if kept == 0:
        return f"The model does not describe the spike times of any of the {count_text(n_tested)} units"
    if n_rejected == 0:
        return f"The model describes the spike times of all {count_text(n_tested)} units"
    return f"The model describes the spike times of {count_text(kept)} of {count_text(n_tested)} units"


def misfit_sentence(ks_statistics: FloatArray) -> str:
    """How far observed and expected shares are apart in the middle unit; "" without a test."""
    known = ks_statistics[np.isfinite(ks_statistics)]
    if known.size == 0:
        return ""
    middle, largest = number_text(float(np.median(known)), 2), number_text(float(known.max()), 2)
    if known.size == 1:
        return f"Observed and expected share of its intervals are at most {largest} apart."
    return (
        f"In the middle unit the observed share of intervals is at most {middle} away from the expected one, in the "
        f"worst {largest}."
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
    how = f"time rescaling, Kolmogorov-Smirnov, {level_text(level)} after correction for many tests"
    if math.isnan(pooled_p):
        return f"{first} ({how})."
    if pooled_p < level:
        together = f"taken together, the units speak against it ({p_sentence(pooled_p)})"
    else:
        together = f"taken together, nothing speaks against it ({p_sentence(pooled_p)})"
    return f"{first} ({how}); {together}."


def explained_sentence(deviance_explained: float | Unavailable, bits_per_spike: float | Unavailable) -> str:
    """What the model adds over constant rates."""
    if isinstance(deviance_explained, Unavailable) or isinstance(bits_per_spike, Unavailable):
        reason = next(v.reason for v in (deviance_explained, bits_per_spike) if isinstance(v, Unavailable))
        return f"The gain over constant rates {could_not(reason.rstrip('.'))}."
    return (
        f"Over constant rates it explains {number_text(100.0 * deviance_explained, 2)}{spaced_unit('%')} of "
        f"the deviance and gains {number_text(bits_per_spike, 2)} bits per spike."
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
