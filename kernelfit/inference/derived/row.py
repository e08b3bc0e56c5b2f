"""One row of the table of derived figures, and what becomes of it where the figure is not always there."""

from __future__ import annotations

from collections import Counter
from collections.abc import Iterable
from dataclasses import dataclass, replace

import numpy as np

from kernelfit.inference.derived.figure import DerivedFigure, Lost


@dataclass(frozen=True)
class Row:
    """Estimate, standard error and interval; NaN where there is none, with the reason among the notes."""

    estimate: float = np.nan
    std_error: float = np.nan
    lower: float = np.nan
    upper: float = np.nan
    notes: tuple[str, ...] = ()

    def with_note(self, note: str) -> Row:
        """The same with one more note; "" adds none."""
        return replace(self, notes=(*self.notes, note)) if note else self

    @property
    def has_interval(self) -> bool:
        """Whether anything is known of how uncertain it is."""
        return bool(np.isfinite(self.std_error) or not np.isnan(self.lower))


@dataclass(frozen=True)
class Losses:
    """Share of the sampling distribution in which a figure is lost, by side, and the commonest reason."""

    below: float
    above: float
    unknown: float
    reason: str

    @classmethod
    def among(cls, found: Iterable[Lost | None], n: int) -> Losses:
        """Counted in n points of the distribution."""
        lost = [one for one in found if one is not None]
        sides = Counter(one.side for one in lost)
        reasons = Counter(one.reason for one in lost)
        reason = reasons.most_common(1)[0][0] if reasons else ""
        return cls(sides["below"] / max(n, 1), sides["above"] / max(n, 1), sides["unknown"] / max(n, 1), reason)

    @property
    def share(self) -> float:
        """Lost on any side."""
        return self.below + self.above + self.unknown


def opened(figure: DerivedFigure, row: Row, lost: Losses, tail: float, among: str, *, at_edge: bool) -> Row:
    """Ends opened where more than `tail` of the distribution has lost the figure, or the array could not show it.

    Parameters
    ----------
    among : what the losses were counted in, in words ("draws", "replicates")
    at_edge : True where the distances of the array themselves limit the interval, as they do for a radius
    """
    too_low, too_high = lost.below + lost.unknown > tail, lost.above + lost.unknown > tail
    out_low = row.lower < figure.seen_from and not at_edge
    out_high = row.upper > figure.seen_to and not at_edge
    ends = (("lower", too_low, out_low), ("upper", too_high, out_high))
    for side, lost_there, out_there in ends:
        if lost_there:
            row = row.with_note(f"{side} end open: in {100 * lost.share:.2g} % of {among} {lost.reason}")
        elif out_there:
            row = row.with_note(f"{side} end open: it lies beyond the distances with pairs")
    return replace(
        row,
        lower=figure.least if too_low or out_low else row.lower,
        upper=figure.most if too_high or out_high else row.upper,
    )
