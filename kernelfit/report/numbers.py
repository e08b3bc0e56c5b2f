"""How numbers are written in every sentence, table and figure.

Two significant digits of an interval's half-width decide how its three numbers are rounded; times below 1 s
are in ms; prose never has more than three decimals; a number that is missing says so in words.
"""

from __future__ import annotations

import math
import re

COULD_NOT = "could not be estimated"
PROSE_DECIMALS = 3
DECADES_APART = 30.0
UNBOUNDED = 1e9  # an end of an interval this far out bounds nothing a recording could hold
POWERS_FROM = 1e12  # lone numbers this large are written with a power of ten
NOT_BOUNDED = "not bounded"
MINUS = "\N{MINUS SIGN}"


def fixed_text(value: float, decimals: int) -> str:
    """`value` with that many decimals (negative: to tens, hundreds...), thousands apart, a true minus."""
    rounded = round(value, decimals)
    if rounded == 0.0:
        rounded = 0.0  # no "-0"
    return f"{rounded:,.{max(decimals, 0)}f}".replace("-", MINUS)


def decimals_for(half_width: float, digits: int = 2) -> int:
    """Decimals that show `digits` significant digits of a half-width; negative for tens, hundreds..."""
    if not math.isfinite(half_width) or half_width <= 0.0:
        return PROSE_DECIMALS
    place = math.floor(math.log10(half_width))
    if round(half_width, digits - 1 - place) >= 10.0 ** (place + 1):
        place += 1  # 0.0996 has two digits as 0.10, not as 0.100
    return digits - 1 - place


def number_text(value: float, digits: int = 3, *, max_decimals: int = PROSE_DECIMALS, keep_zeros: bool = False) -> str:
    """A lone number to `digits` significant digits, never more than `max_decimals` decimals.

    Integer digits are never rounded away: 90145 stays 90,145. Zeros at the end of the decimals are left out, so
    that 5 ms is not "5.00 ms", unless `keep_zeros` asks for them (columns of figures).
    """
    if math.isnan(value):
        return "not known"
    if math.isinf(value):
        return "infinite" if value > 0 else f"{MINUS}infinite"
    if value == 0.0:
        return "0"
    if abs(value) >= POWERS_FROM:
        return powers_text(f"{value:.{digits - 1}e}".replace("-", MINUS, value < 0.0))
    text = fixed_text(value, min(max(decimals_for(abs(value), digits), 0), max_decimals))
    return text if keep_zeros or "." not in text else text.rstrip("0").rstrip(".")


def range_text(low: float, high: float, digits: int = 2, *, max_decimals: int = 6) -> str:
    """The ends of a range, each to its own digits: "0.00063 to 0.31"."""
    return " to ".join(number_text(v, digits, max_decimals=max_decimals, keep_zeros=True) for v in (low, high))


def count_text(value: float) -> str:
    """A count: "90,145"."""
    return f"{round(value):,}"


def spaced_unit(unit: str) -> str:
    """The unit as it follows a number, nothing for pure numbers. Pages keep the two on one line."""
    return f" {unit}" if unit else ""


def interval_text(
    estimate: float, lower: float, upper: float, unit: str = "", *, max_decimals: int = PROSE_DECIMALS
) -> str:
    """Estimate with its interval: "12 % (9 to 15)".

    Two significant digits of the half-width decide the rounding of all three; decimals that are zero in all
    three are left out unless the limit has cut them. Where the ends are decades apart, each number keeps two
    digits of its own. `max_decimals` is the limit for prose; tables may have more.

    Parameters
    ----------
    estimate, lower, upper : same unit; an infinite end (or one beyond 1e9) is "at least" or "at most", two are "not
        bounded", missing ends leave the estimate alone, a missing estimate says that it could not be had
    unit : written once, after the estimate
    """
    if math.isnan(estimate):
        return COULD_NOT
    mark = spaced_unit(unit)
    low_known, high_known = abs(lower) < UNBOUNDED, abs(upper) < UNBOUNDED
    if not low_known and not high_known:
        missing = math.isnan(lower) or math.isnan(upper)
        return f"{number_text(estimate, max_decimals=max_decimals)}{mark}{'' if missing else f' ({NOT_BOUNDED})'}"
    if low_known and high_known and _spans_decades(estimate, lower, upper):
        each = tuple(fixed_text(v, min(decimals_for(abs(v)), max_decimals)) for v in (estimate, lower, upper))
        return f"{each[0]}{mark} ({each[1]} to {each[2]})"
    one_sided = abs((upper if high_known else lower) - estimate)
    half_width = (upper - lower) / 2.0 if low_known and high_known else one_sided
    wanted = decimals_for(half_width)
    decimals = min(wanted, max_decimals)
    shown = [estimate, *([lower] if low_known else []), *([upper] if high_known else [])]
    while 0 < decimals <= wanted <= max_decimals and all(fixed_text(v, decimals).endswith("0") for v in shown):
        decimals -= 1
    middle = fixed_text(estimate, decimals)
    if not high_known:
        return f"{middle}{mark} (at least {fixed_text(lower, decimals)})"
    if not low_known:
        return f"{middle}{mark} (at most {fixed_text(upper, decimals)})"
    return f"{middle}{mark} ({fixed_text(lower, decimals)} to {fixed_text(upper, decimals)})"


def _spans_decades(estimate: float, lower: float, upper: float) -> bool:
    """True where the half-width would round a number of the interval away."""
    ends = sorted(abs(v) for v in (lower, estimate, upper))
    return lower * upper > 0.0 and ends[2] > DECADES_APART * ends[0]


def distance_label(distance_um: float) -> str:
    """A distance with its unit: "200 µm", mm from 10 mm, tenths only below 10 µm."""
    if distance_um >= 10_000.0:
        return f"{number_text(distance_um / 1000.0)}{spaced_unit('mm')}"
    return f"{fixed_text(distance_um, 0 if distance_um >= 10.0 else 1)}{spaced_unit('µm')}"


def p_text(p_value: float) -> str:
    """A p-value to two digits, "< 0.001" below: "0.042", "0.30"."""
    if math.isnan(p_value):
        return COULD_NOT
    if p_value < 0.001:
        return "< 0.001"
    return f"{p_value:.{min(decimals_for(p_value), 4) if p_value < 0.995 else 2}f}"


def p_sentence(p_value: float) -> str:
    """A p-value with its letter: "p = 0.042", "p < 0.001"."""
    text = p_text(p_value)
    return f"p {text}" if text.startswith("<") else f"p = {text}"


def time_unit_for(seconds: float) -> tuple[float, str]:
    """Factor and unit for a time: ms below 1 s, s from there."""
    return (1e3, "ms") if math.isfinite(seconds) and abs(seconds) < 1.0 else (1.0, "s")


def time_text(seconds: float, lower_s: float = math.nan, upper_s: float = math.nan) -> str:
    """A time with its interval, in ms below 1 s: "13 ms (11 to 15)"."""
    factor, unit = time_unit_for(seconds)
    return interval_text(seconds * factor, lower_s * factor, upper_s * factor, unit)


_SUPERSCRIPTS = str.maketrans("0123456789-", "⁰¹²³⁴⁵⁶⁷⁸⁹⁻")
_PLAIN_POWERS = range(-3, 6)


def powers_text(text: str) -> str:
    """Numbers such as 2.4e-07 inside a text as people write them: 2.4 × 10⁻⁷; 6.9e-01 is 0.69."""

    def written(match: re.Match[str]) -> str:
        power = int(match[2])
        if power in _PLAIN_POWERS:
            return number_text(float(match[0]), 2, max_decimals=5)
        return f"{match[1]} × 10{str(power).translate(_SUPERSCRIPTS)}"

    return re.sub(r"(?<![\w.])(\d(?:\.\d+)?)e([+-]?\d+)\b", written, text)


def duration_text(seconds: float) -> str:
    """A stretch of time as people say it: "45 s", "29 min 42 s", "2 h 1 min"."""
    if seconds < 1.0:
        return time_text(seconds)
    if seconds < 120.0:
        return f"{number_text(seconds)}{spaced_unit('s')}"
    whole = round(seconds)
    hours, rest = divmod(whole, 3600)
    minutes, left = divmod(rest, 60)
    if hours:
        return f"{hours} h {minutes} min" if minutes else f"{hours} h"
    return f"{minutes} min {left} s" if left else f"{minutes} min"


# A number and its unit, and a p with its value, belong on one line.
_TIES = re.compile(r"(?<=\d) (?=(?:%|µm|mm|ms|s|min|h|Hz)(?!\w))|(?<=\bp) (?=[=<] )|(?<=\bp [=<]) (?=[\d<])")


def tied(text: str) -> str:
    """The text with no-break spaces where a line must not end: before units, inside "p = 0.042"."""
    return _TIES.sub("\N{NO-BREAK SPACE}", text)
