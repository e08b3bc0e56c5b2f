"""From what was typed after an option to its value; messages name the option, the value and the remedy.

Each function makes the parser of one option; `what` completes its remedy with the unit and an example.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Iterable
from difflib import get_close_matches

from kernelfit.errors import ArgumentError

ALIKE = 0.65  # of the letters, for one word to be taken for another misspelt


def number(option: str, what: str) -> Callable[[str], float]:
    """Parser of a finite number."""

    def parse(typed: str) -> float:
        value = _number(option, typed, what)
        if not math.isfinite(value):
            raise ArgumentError(f"{option}: {str(typed)!r} is not finite. Give {what}.")
        return value

    return parse


def above_zero(option: str, what: str) -> Callable[[str], float]:
    """Parser of a finite number above 0."""

    def parse(typed: str) -> float:
        value = _number(option, typed, what)
        if not (math.isfinite(value) and value > 0):
            raise ArgumentError(f"{option}: {value:g} is out of range. Give a number above 0: {what}.")
        return value

    return parse


def from_zero(option: str, what: str) -> Callable[[str], float]:
    """Parser of a finite number, 0 or more."""

    def parse(typed: str) -> float:
        value = _number(option, typed, what)
        if not (math.isfinite(value) and value >= 0):
            raise ArgumentError(f"{option}: {value:g} is out of range. Give 0 or more: {what}.")
        return value

    return parse


def whole(option: str, smallest: int) -> Callable[[str], int]:
    """Parser of a whole number of at least `smallest`."""

    def parse(typed: str) -> int:
        remedy = f"Give a whole number, {smallest} or more."
        try:
            value = int(str(typed))
        except ValueError:
            raise ArgumentError(f"{option}: {str(typed)!r} is not a whole number. {remedy}") from None
        if value < smallest:
            raise ArgumentError(f"{option}: {value} is out of range. {remedy}")
        return value

    return parse


def one_of(option: str, choices: Iterable[str]) -> Callable[[str], str]:
    """Parser of a word out of `choices`."""
    listed = tuple(choices)

    def parse(typed: str) -> str:
        if typed not in listed:
            close = get_close_matches(str(typed).casefold().replace("_", "-"), listed, n=1, cutoff=ALIKE)
            meant = f"Did you mean {close[0]}? " if close else ""
            give = "Give one of " if len(listed) > 1 else "There is only "
            raise ArgumentError(f"{option}: {str(typed)!r} is not known. {meant}{give}{', '.join(listed)}.")
        return typed

    return parse


def _number(option: str, typed: str, what: str) -> float:
    try:
        return float(str(typed))
    except ValueError:
        text = str(typed)
        other = text.replace(",", ".")
        remedy = f"Write {other}" if "," in text and _is_number(other) else f"Give {what}"
        raise ArgumentError(f"{option}: {text!r} is not a number. {remedy}.") from None


def _is_number(text: str) -> bool:
    try:
        float(text)
    except ValueError:
        return False
    return True
