"""What the figure of bootstrap replicates shows, as data."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
import pandas as pd

from kernelfit._typing import FloatArray
from kernelfit.inference.bootstrap import Bootstrap
from kernelfit.report.numbers import count_text, range_text, spaced_unit
from kernelfit.report.readings import LEVEL, length_word
from kernelfit.report.sureness_data import Interval

if TYPE_CHECKING:
    from kernelfit.fitting.result import CouplingFit

METHOD_WORDS = {"percentile": "percentile", "basic": "basic", "studentised": "studentised", "bca": "BCa"}


@dataclass(frozen=True, eq=False)
class ReplicatedParameter:
    """Replicates of one parameter on its natural scale, its estimate and its intervals by method."""

    name: str  # in words: "length"
    unit: str
    on_log: bool
    estimate: float
    values: FloatArray  # replicates that gave an estimate
    intervals: tuple[Interval, ...]


@dataclass(frozen=True, eq=False)
class ReplicatesData:
    """Distributions of bootstrap replicates; `caption` says what they are and on how many they rest."""

    title: str
    caption: str
    level: float
    parameters: tuple[ReplicatedParameter, ...]

    def numbers(self) -> pd.DataFrame:
        """parameter, kind, estimate, lower, upper, note"""
        rows = [(p.name, i.kind, p.estimate, i.lower, i.upper, i.reason) for p in self.parameters for i in p.intervals]
        return pd.DataFrame(rows, columns=["parameter", "kind", "estimate", "lower", "upper", "note"])


def replicates_data(bootstrap: Bootstrap, level: float = LEVEL) -> ReplicatesData:
    """Every parameter that moves: its replicates, and its intervals by each method beside that of the fit.

    Parameters
    ----------
    bootstrap : replicates of a fit
    level : of all intervals; that of the fit itself stands at 95 % and is left out at others
    """
    fit = bootstrap.fit
    methods = [m for m in METHOD_WORDS if m != "bca" or bootstrap.kind.by_blocks]
    tables = {METHOD_WORDS[m]: bootstrap.intervals(level, m) for m in methods}
    if level == LEVEL:
        tables[f"{fit.covariance_kind}, no replicates"] = fit.parameters
    natural = bootstrap.table
    on_log = bootstrap.scale.on_log
    parameters = []
    for q, name in enumerate(bootstrap.names):
        values = natural.loc[bootstrap.converged, name].to_numpy(dtype=np.float64)
        estimate = float(tables[METHOD_WORDS["percentile"]]["estimate"].to_numpy(dtype=np.float64)[q])
        if values.size < 2 or np.ptp(values) == 0.0 or not np.isfinite(estimate):
            continue
        intervals = tuple(_interval(word, table, name) for word, table in tables.items())
        words = parameter_words(name, fit)
        parameters.append(ReplicatedParameter(words, bootstrap.units[q], bool(on_log[q]), estimate, values, intervals))
    return ReplicatesData(_title(parameters, bootstrap), bootstrap.sentence, level, tuple(parameters))


def _interval(word: str, table: pd.DataFrame, name: str) -> Interval:
    lower, upper = table.loc[[name], ["lower", "upper"]].to_numpy(dtype=np.float64)[0]
    return Interval(word, float(lower), float(upper), str(table["note"].to_dict()[name]))


def parameter_words(name: str, fit: CouplingFit) -> str:
    """A parameter as an axis names it: "length", "narrow amplitude", "leak rate"."""
    return length_word(fit) if name == "length_um" else name.removesuffix("_um").replace("_", " ")


def _title(parameters: list[ReplicatedParameter], bootstrap: Bootstrap) -> str:
    """Where the replicates put the parameter that is known worst, its interval taken relative to its estimate."""
    known = [(p, p.intervals[0]) for p in parameters if p.intervals[0].known]
    if not known:
        return f"{count_text(bootstrap.n_replicates)} replicates, too few for an interval or none to describe"
    if not bootstrap.fit.verdict.found:
        return "No coupling found: replicates around nothing but the amplitude that was come upon"
    parameter, interval = max(known, key=lambda pi: (pi[1].upper - pi[1].lower) / abs(pi[0].estimate))
    ends = range_text(interval.lower, interval.upper)
    unit = spaced_unit("per second" if parameter.unit == "1/s" else parameter.unit)
    return f"Known worst is the {parameter.name}: the replicates put it at {ends}{unit}"
