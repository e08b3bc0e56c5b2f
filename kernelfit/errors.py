"""Every error and warning of the package, one root each.

A caller catches `KernelfitError`; the command line turns it into exit status 2 (or 3 for a fit that did not
converge). A message says where the fault lies, what was found there and what to do about it.
"""

from __future__ import annotations

import re
from collections import Counter
from collections.abc import Sequence
from dataclasses import dataclass

MAX_FAULTS_SHOWN = 20  # a table of a million bad rows should not print a million lines
MAX_FAULTS_ALIKE = 3  # of one kind in one column: the fourth teaches nothing that the third did not
MAX_VALUE_SHOWN = 60  # characters of a cell; a cell may hold a whole file


class KernelfitError(Exception):
    """Root of every error that a user can cause."""


# --- what was handed in ---------------------------------------------------------------------------------


@dataclass(frozen=True, slots=True)
class Fault:
    """One thing wrong in one table.

    Parameters
    ----------
    table : name of the file, or of the table where it was a DataFrame ("spikes table")
    problem : what is wrong, a full sentence without the place
    remedy : what the user can do about it, a full sentence
    row : line as the user's editor counts (a header is line 1), or None where the fault is not in a row
    column : column name, or None
    value : the value as written, or None
    """

    table: str
    problem: str
    remedy: str
    row: int | None = None
    column: str | None = None
    value: str | None = None

    def __str__(self) -> str:
        place = [self.table]
        if self.row is not None:
            place.append(f"row {self.row}")
        if self.column is not None:
            place.append(f"column {self.column}")
        value = "" if self.value is None else f"{shortened(self.value)!r}: "
        return f"{', '.join(place)}: {value}{self.problem} {self.remedy}"

    @property
    def kind(self) -> tuple[str, str | None, str]:
        """What faults alike have in common: table, column, first sentence of the problem without numbers and names."""
        sentence = self.problem.partition(". ")[0].rstrip(".")
        return self.table, self.column, re.sub(r"'[^']*'|[0-9]+(?:\.[0-9]+)?", "", sentence)


def shortened(text: str) -> str:
    """The text, cut where it is too long for a message."""
    return text if len(text) <= MAX_VALUE_SHOWN else text[: MAX_VALUE_SHOWN - 3] + "..."


class TableError(KernelfitError):
    """A table cannot be used. `faults` holds everything found wrong in it, in order of rows.

    The message shows the first few of each kind and says how many more there are.
    """

    def __init__(self, faults: Sequence[Fault]) -> None:
        self.faults: tuple[Fault, ...] = tuple(faults)
        super().__init__("\n".join(_fault_lines(self.faults)))


def _fault_lines(faults: tuple[Fault, ...]) -> list[str]:
    alike = Counter(fault.kind for fault in faults)
    first: dict[tuple[str, str | None, str], Fault] = {}
    shown: Counter[tuple[str, str | None, str]] = Counter()
    lines: list[str] = []
    for fault in faults:
        wanted = MAX_FAULTS_ALIKE if alike[fault.kind] > MAX_FAULTS_ALIKE + 1 else MAX_FAULTS_ALIKE + 1
        if shown[fault.kind] < wanted and len(lines) < MAX_FAULTS_SHOWN:
            lines.append(str(fault))
            shown[fault.kind] += 1
            first.setdefault(fault.kind, fault)
    for kind, example in first.items():
        n = alike[kind] - shown[kind]
        if n:
            column = "" if example.column is None else f", column {example.column}"
            like = "" if example.row is None else f" like row {example.row}"
            lines.append(f"{example.table}{column}: {n:,} more{like}.")
    unseen = sum(n for kind, n in alike.items() if kind not in first)
    if unseen:
        lines.append(f"... and {unseen:,} more faults of other kinds or in other places.")
    return lines


class RecordingError(KernelfitError):
    """The recording as a whole cannot be used as asked (unknown unit, empty selection, bad arrays)."""


class ArgumentError(KernelfitError):
    """An argument of a call or an option of a command is out of its range."""


class GridError(KernelfitError):
    """The bin width does not fit the recording."""


# --- what was asked of the model ------------------------------------------------------------------------


class ModelError(KernelfitError):
    """The model cannot be fitted to this recording (no pairs within reach, nothing to estimate...)."""


class NotIdentifiedError(ModelError):
    """The recording says nothing about some parameter; the message says which and why."""


class NotConvergedError(KernelfitError):
    """Something needs an optimum and the fit did not reach one."""


class SimulationError(KernelfitError):
    """The simulated network explodes or cannot be simulated as asked."""


# --- what was stored or is to be written -----------------------------------------------------------------


class StorageError(KernelfitError):
    """A saved fit is damaged, foreign, of another version, or does not belong to the recording."""


class OutputError(KernelfitError):
    """The results folder cannot be written as asked."""


# --- what a user can live with ---------------------------------------------------------------------------


class KernelfitWarning(UserWarning):
    """Root of every warning of the package."""


class FitWarning(KernelfitWarning):
    """A fit has a property its reader must know: wide bins, a bound reached, a second optimum."""


class RecordingWarning(KernelfitWarning):
    """The recording was read, and something in it was changed or left out as asked."""


@dataclass(frozen=True, slots=True)
class Unavailable:
    """A quantity that cannot be computed: a value with a reason, printed by table, report and JSON alike."""

    reason: str

    def __str__(self) -> str:
        return f"could not be estimated: {self.reason}"
