"""What an inspection has to say: one finding is a severity, what was seen, where, and what can be done."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Literal, TypeAlias

Severity: TypeAlias = Literal["error", "warning", "info"]
SEVERITIES: tuple[Severity, ...] = ("error", "warning", "info")
_NAMES_SHOWN = 8

# What can be done, as it is written in Python and on the command line.
LEAVE_OUT = "rec.select(units=...) with the others, or --leave-out"
CUT = "rec.select(start_s=..., stop_s=...), or --start-s and --stop-s"


@dataclass(frozen=True, slots=True)
class Finding:
    """One thing an inspection found.

    Parameters
    ----------
    key : names the kind of finding for programs ("silent_units"); stays the same between versions
    severity : "error": mend this before a fit, its numbers would be wrong; "warning": it bends a fit unless
        something is done; "info": good to know
    what : what was seen, a full sentence with its numbers
    where : units, stretch or file it concerns
    remedy : what the user can do about it, a full sentence
    """

    key: str
    severity: Severity
    what: str
    where: str
    remedy: str

    def __str__(self) -> str:
        return f"{self.severity}: {self.what} Where: {self.where}. {self.remedy}"


def by_severity(findings: Sequence[Finding]) -> tuple[Finding, ...]:
    """Errors first, then warnings, then the rest, each in the order given."""
    return tuple(sorted(findings, key=lambda f: SEVERITIES.index(f.severity)))


# --- how numbers and names are written in a finding --------------------------------------------------------


def number(value: float, digits: int = 3) -> str:
    """A number to `digits` significant digits, integer digits never rounded away, at most three decimals."""
    if not math.isfinite(value):
        return "unknown"
    if value == 0.0:
        return "0"
    decimals = min(max(digits - 1 - math.floor(math.log10(abs(value))), 0), 3)
    text = f"{value:,.{decimals}f}"
    return text.rstrip("0").rstrip(".") if "." in text else text


def percent(share: float) -> str:
    """A share as a percentage with two digits: "13 %", "0.42 %"."""
    return f"{number(100.0 * share, 2)} %"


def seconds(value_s: float) -> str:
    """A time with its unit: "1.5 ms", "45 s", "29 min 42 s", "2 h 1 min"."""
    if abs(value_s) < 1.0:
        return f"{number(1e3 * value_s)} ms"
    if abs(value_s) < 120.0:
        return f"{number(value_s)} s"
    minutes, left = divmod(round(value_s), 60)
    hours, minutes_left = divmod(minutes, 60)
    first, second = (f"{hours:,} h", f"{minutes_left} min") if hours else (f"{minutes} min", f"{left} s")
    return first if second.startswith("0 ") else f"{first} {second}"


def counted(n: int, one: str, many: str | None = None) -> str:
    """A count with its noun: "1 unit", "12 units"."""
    return f"{n:,} {one if n == 1 else many or one + 's'}"


def names(items: Sequence[str], *, shown: int = _NAMES_SHOWN) -> str:
    """A list of names that stays readable: the first few, then how many more."""
    if len(items) <= shown + 1:
        return ", ".join(items)
    return f"{', '.join(items[:shown])} and {len(items) - shown:,} more"
