"""Single cells of a table: text to exact numbers, anything to text labels, and words for what went wrong."""

from __future__ import annotations

import datetime
import math
import numbers
import re
import unicodedata
from collections.abc import Sequence
from dataclasses import dataclass
from decimal import Decimal
from typing import TypeAlias

import numpy as np
import pandas as pd

from kernelfit._typing import AnyArray, FloatArray
from kernelfit._validation import described

# One column: text or mixed objects as a list, or a numeric array from a DataFrame or a Parquet file.
Cells: TypeAlias = list[object] | AnyArray

_NUMBER = re.compile(r"[+-]?(?:[0-9]+\.?[0-9]*|\.[0-9]+)(?:[eE][+-]?[0-9]+)?")
_GROUPED = re.compile(r"[+-]?[0-9]{1,3}(?:[ ,.'_’\u00a0\u202f][0-9]{3})+(?:[.,][0-9]*)?")
_WITH_UNIT = re.compile(r"[+-]?[0-9.,]+\s*(?:s|ms|us|µs|μs|sec|min|h|um|µm|μm|mm|Hz)", re.IGNORECASE)
_CLOCK = re.compile(r"[0-9]+:[0-9]{1,2}(?::[0-9]{1,2})?(?:[.,][0-9]*)?")
_NO_VALUE = frozenset({"", "na", "n/a", "nan", "null", "none", "nil", "-", "--", "?", "#n/a", "#value!", "missing"})
_FAST_CHARACTERS = frozenset("0123456789+-.eE ")
_MINUS_SIGNS = "\u2212\u2013\u2014"


@dataclass(frozen=True, slots=True)
class BadCell:
    """A cell that cannot be used: its place in the column (from 0), what is wrong, what to do."""

    at: int
    problem: str
    remedy: str


def is_missing(cell: object) -> bool:
    """True for None, NaN, NaT and pandas' NA: what libraries put where a DataFrame holds nothing."""
    if cell is None or cell is pd.NA or cell is pd.NaT:
        return True
    return isinstance(cell, (float, np.floating)) and math.isnan(cell)


def written(cells: Cells, at: int) -> str:
    """The cell as the user wrote it, for messages."""
    cell = cells[at]
    if is_missing(cell):
        return "" if cell is None else "nan"
    return repr(float(cell)) if isinstance(cell, (float, np.floating)) else str(cell)


# --- numbers ---------------------------------------------------------------------------------------------


def read_numbers(cells: Cells, decimal: str) -> tuple[FloatArray, list[BadCell]]:
    """A column as float64, each value the nearest double of the decimal as written.

    Parameters
    ----------
    cells : (n,) text with `decimal` as its mark, numbers, or both
    decimal : "." or ","

    Returns
    -------
    values : (n,) NaN where the cell is bad
    bad : cells that are empty, not numbers or not finite, in order
    """
    if isinstance(cells, np.ndarray):
        values = np.array(cells, dtype=np.float64)
        bad = np.flatnonzero(~np.isfinite(values))
        return values, [BadCell(int(k), *_why_not_finite(values[k])) for k in bad]
    fast = _fast_numbers(cells, decimal)
    return _slow_numbers(cells, decimal) if fast is None else (fast, [])


def _fast_numbers(cells: list[object], decimal: str) -> FloatArray | None:
    """The whole column at once, or None when any cell needs a closer look."""
    if not cells:
        return np.empty(0)
    if set(map(type, cells)) != {str}:
        return None
    text = "\n".join(cells)  # type: ignore[arg-type]  # all are str: seen in the line above
    allowed = _FAST_CHARACTERS if decimal == "." else _FAST_CHARACTERS - {"."} | {","}
    if set(text) - {"\n"} - allowed:
        return None
    if decimal == ",":
        text = text.replace(",", ".")
    try:
        values = np.fromiter(map(float, text.split("\n")), dtype=np.float64)
    except ValueError:
        return None
    return values if len(values) == len(cells) and bool(np.isfinite(values).all()) else None


def _slow_numbers(cells: list[object], decimal: str) -> tuple[FloatArray, list[BadCell]]:
    values = np.full(len(cells), np.nan)
    bad: list[BadCell] = []
    for k, cell in enumerate(cells):
        if isinstance(cell, str):
            number = _number_from_text(cell.strip(), decimal)
            if number is None:
                bad.append(BadCell(k, *_why_not_a_number(cell.strip(), decimal)))
                continue
        elif is_missing(cell):
            bad.append(BadCell(k, *_why_not_finite(math.nan)))
            continue
        elif isinstance(cell, (bool, np.bool_)) or not isinstance(cell, (numbers.Real, Decimal)):
            bad.append(BadCell(k, f"{_sentence_start(cell)} instead of a plain number.", _plain_number_remedy(cell)))
            continue
        else:
            try:
                number = float(cell)
            except OverflowError:
                number = math.inf
        if math.isfinite(number):
            values[k] = number
        else:
            bad.append(BadCell(k, *_why_not_finite(number)))
    return values, bad


def _number_from_text(text: str, decimal: str) -> float | None:
    if decimal == ",":
        if "." in text:
            return None
        text = text.replace(",", ".")
    return float(text) if _NUMBER.fullmatch(text) else None


def _sentence_start(cell: object) -> str:
    words = "a number with decimals" if isinstance(cell, (float, np.floating, Decimal)) else described(cell)
    return words[0].upper() + words[1:]


def _plain_number_remedy(cell: object) -> str:
    if isinstance(cell, (list, tuple, np.ndarray)):
        return "Give one number in each row."
    if isinstance(cell, (datetime.date, datetime.timedelta)):
        return "Give plain numbers, such as the seconds since the start of the recording."
    return "Give plain numbers."


def _why_not_finite(value: float) -> tuple[str, str]:
    if math.isnan(value):
        return "Missing value.", "Fill it in, or delete the row."
    return "Not a finite number.", "Correct it, or delete the row."


def _why_not_a_number(text: str, decimal: str) -> tuple[str, str]:
    """What is wrong with this text as a number, and how to write it; most telling reason first."""
    other = "," if decimal == "." else "."
    if text.lower() in _NO_VALUE:
        return (
            "Missing value." if text else "Empty cell where a number is needed.",
            "Fill it in, or delete the row.",
        )
    if text.lower().lstrip("+-") in {"inf", "infinity", "∞"}:
        return "Not a finite number.", "Correct it, or delete the row."
    swapped = text.replace(other, decimal)
    if text.count(other) == 1 and decimal not in text and _number_from_text(swapped, decimal) is not None:
        return "Not a number.", f"Write {swapped}, or load with decimal={other!r}."
    if _GROUPED.fullmatch(text) or text.count(decimal) > 1:
        return (
            "Not a number: it seems to hold separators of thousands.",
            "Write the digits without separators.",
        )
    if re.fullmatch(r"[+-]?0[xX][0-9a-fA-F.pP+-]*", text):
        return "Not a decimal number.", "Write it in decimal digits."
    if _CLOCK.fullmatch(text):
        return (
            "A clock time, not a number.",
            "Write times as numbers in one unit of measure, for example seconds.",
        )
    if _WITH_UNIT.fullmatch(text):
        return (
            "A number with a unit of measure in the cell.",
            "Write the number alone, and name the unit with time_unit or length_unit.",
        )
    if any(sign in text for sign in _MINUS_SIGNS):
        return (
            "Not a number: it holds a dash that is not a minus sign.",
            "Write the minus as a plain hyphen (-).",
        )
    return "Not a number.", f"Write a number such as 12{decimal}35."


# --- labels ----------------------------------------------------------------------------------------------


def read_labels(cells: Cells, *, required: bool = True) -> tuple[list[str], list[BadCell]]:
    """A column of ids or labels as text, surrounding blanks trimmed and nothing else changed.

    ``NA``, ``007``, ``nan`` and ``1e5`` stay what they are. Integers of a DataFrame become their digits;
    other numbers are refused, because 7.0 may have been "7" or "007" or "7.0". A line break or another
    control character is refused.

    Parameters
    ----------
    cells : (n,) text, integers or both
    required : False where an empty label is a label

    Returns
    -------
    labels : (n,) text; "" where the cell is bad or empty
    bad : cells that cannot be labels, in order
    """
    if isinstance(cells, np.ndarray):
        if cells.dtype.kind in "iu" or not len(cells):
            return list(map(str, cells.tolist())), []
        kind = "truth values" if cells.dtype.kind == "b" else "floating-point numbers"
        remedy = "Turn the column into text first, so that '7' and '007' cannot be mixed up."
        return [""] * len(cells), [BadCell(0, f"The column holds {kind}, and ids are text.", remedy)]
    bad: list[BadCell] = []
    if set(map(type, cells)) <= {str}:
        labels: list[str] = list(map(str.strip, cells))  # type: ignore[arg-type]  # all are str: just seen
    else:
        labels = [""] * len(cells)
        for k, cell in enumerate(cells):
            if isinstance(cell, str):
                labels[k] = cell.strip()
            elif isinstance(cell, (int, np.integer)) and not isinstance(cell, bool):
                labels[k] = str(int(cell))
            elif not is_missing(cell):
                bad.append(BadCell(k, f"{_sentence_start(cell)}, and ids are text.", "Turn the ids into text."))
    refused = {label for label in set(labels) if _is_refused(label)}
    if refused or (required and "" in set(labels)):
        known = {b.at for b in bad}
        for k, label in enumerate(labels):
            if label in refused:
                problem = "The text holds a line break or another control character."
                bad.append(BadCell(k, problem, "Use letters, digits and signs that print."))
            elif required and not label and k not in known:
                bad.append(BadCell(k, "Empty cell where an id is needed.", "Fill it in, or delete the row."))
        bad.sort(key=lambda b: b.at)
    return labels, bad


def _is_refused(label: str) -> bool:
    return any(unicodedata.category(c) in ("Cc", "Cs") for c in label)


def closest_note(wanted: str, known: Sequence[str]) -> str:
    """A hint at the id that was perhaps meant ("Did you mean '007'?"), or an empty text."""
    from difflib import get_close_matches

    def bare(label: str) -> str:
        text = label.casefold().removesuffix(".0").lstrip("0")
        return text or "0"

    same = next((k for k in known if bare(k) == bare(wanted)), None)
    if same is not None:
        spreadsheet = " (a spreadsheet may have changed it)" if wanted[:1].isdigit() else ""
        return f" The closest id there is {same!r}{spreadsheet}."
    close = get_close_matches(wanted, known, n=1, cutoff=0.6)
    return f" The closest id there is {close[0]!r}." if close else ""
