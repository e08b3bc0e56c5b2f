"""What the figures of profile likelihoods show, as data."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
import pandas as pd
from scipy.interpolate import PchipInterpolator, RectBivariateSpline

from kernelfit._typing import BoolArray, FloatArray
from kernelfit.errors import Unavailable
from kernelfit.inference.profile import Profile
from kernelfit.inference.profile_amplitudes import CompatibleAmplitudes
from kernelfit.inference.profile_contour import ProfileContour
from kernelfit.inference.profile_ends import ProfileInterval
from kernelfit.report.bootstrap_data import parameter_words
from kernelfit.report.numbers import distance_label, number_text, range_text, spaced_unit
from kernelfit.report.readings import kind_word
from kernelfit.report.sureness_data import Interval
from kernelfit.report.words import level_text, listed

if TYPE_CHECKING:
    from kernelfit.fitting.result import CouplingFit

FINE = 201  # points of a curve as drawn
FINE_SURFACE = 90  # points along each side of a surface as drawn
UNEVEN = 1.3  # one half of an interval over the other, on the scale of the parameter: worth a title
TOGETHER = 0.3  # correlation of two parameters over their region: worth a title


@dataclass(frozen=True, eq=False)
class ProfiledParameter:
    """The profile of one parameter: fall of the log-likelihood by value, where it is cut, and its intervals."""

    name: str  # in words: "length"
    unit: str
    on_log: bool
    jumps: bool  # a point for each value instead of a curve
    estimate: float
    value: FloatArray  # (n,) rising
    fall: FloatArray  # (n,) of the log-likelihood, 0 at its top, nats; of the kind that is the headline
    model_fall: FloatArray  # (n,) as it is, where the headline is scaled; otherwise the same
    cut: float  # how far `fall` must fall
    intervals: tuple[Interval, ...]  # headline profile, standard errors, other profile


@dataclass(frozen=True, eq=False)
class ProfilesData:
    """Profiles of the parameters of a fit, side by side."""

    title: str
    caption: str
    level: float
    parameters: tuple[ProfiledParameter, ...]

    def numbers(self) -> pd.DataFrame:
        """parameter, value, fall, model_fall: the curves"""
        blocks = [
            pd.DataFrame({"parameter": p.name, "value": p.value, "fall": p.fall, "model_fall": p.model_fall})
            for p in self.parameters
        ]
        return pd.concat(blocks, ignore_index=True)


def profiles_data(fit: CouplingFit, profiles: Sequence[Profile | Unavailable]) -> ProfilesData | Unavailable:
    """The figure of several profiles of one fit; those that could not be had are left out."""
    known = [p for p in profiles if isinstance(p, Profile)]
    if not known:
        reasons = [p.reason for p in profiles if isinstance(p, Unavailable)]
        return Unavailable(reasons[0] if reasons else "no parameter was profiled")
    table = fit.parameters
    parameters = tuple(_parameter(fit, p, table) for p in known)
    return ProfilesData(_title(known, fit), _caption(fit, known), known[0].level, parameters)


def _parameter(fit: CouplingFit, profile: Profile, table: pd.DataFrame) -> ProfiledParameter:
    curve = profile.curve
    value, drop = (curve[c].to_numpy(dtype=np.float64) for c in ("value", "log_likelihood_drop"))
    jumps = profile.name in {p.name for p in fit.model.kernel.parameters(fit.span) if p.discrete}
    if not jumps:
        value, drop = _smooth(value, curve["signed_root"].to_numpy(dtype=np.float64), profile.on_log)
    scaled = isinstance(profile.scaled, ProfileInterval)
    headline = profile.scaled if isinstance(profile.scaled, ProfileInterval) else profile.interval
    lower, upper = table.loc[[profile.name], ["lower", "upper"]].to_numpy(dtype=np.float64)[0]
    intervals = [
        Interval(f"profile, {'robust' if scaled else 'model'}", headline.lower, headline.upper, ""),
        Interval("standard errors", float(lower), float(upper), ""),
    ]
    if scaled:
        intervals.append(Interval("profile, model", profile.interval.lower, profile.interval.upper, ""))
    return ProfiledParameter(
        name=parameter_words(profile.name, fit),
        unit=profile.unit,
        on_log=profile.on_log,
        jumps=jumps,
        estimate=profile.estimate,
        value=value,
        fall=-drop / (profile.variance_ratio if scaled else 1.0),
        model_fall=-drop,
        cut=headline.critical,
        intervals=tuple(intervals),
    )


def _smooth(value: FloatArray, root: FloatArray, on_log: bool) -> tuple[FloatArray, FloatArray]:
    """The curve between its points: the signed root is near a straight line, which cubics follow."""
    x = np.log(value) if on_log else value
    fine = np.unique(np.concatenate([np.linspace(x[0], x[-1], FINE), x]))
    drop = 0.5 * PchipInterpolator(x, root)(fine) ** 2
    return (np.exp(fine) if on_log else fine), np.asarray(drop)


def _headline(profile: Profile) -> ProfileInterval:
    return profile.scaled if isinstance(profile.scaled, ProfileInterval) else profile.interval


def _title(profiles: Sequence[Profile], fit: CouplingFit) -> str:
    """An open end first; then the most uneven interval; else that the standard errors will do."""
    if not fit.verdict.found:
        return "No coupling found: the likelihood hardly depends on what would describe it"
    for profile in profiles:
        ends = _headline(profile)
        name = parameter_words(profile.name, fit)
        if ends.lower_open and ends.upper_open:
            return f"The recording sets the {name} no limit on either side"
        if ends.upper_open:
            return f"The recording sets the {name} no upper limit: at least {_text(ends.lower, profile)}"
        if ends.lower_open:
            return f"The recording sets the {name} no lower limit: at most {_text(ends.upper, profile)}"
    uneven = {p.name: _unevenness(p) for p in profiles}
    worst = max(profiles, key=lambda p: abs(math.log(uneven[p.name])))
    name = parameter_words(worst.name, fit)
    if abs(math.log(uneven[worst.name])) > math.log(UNEVEN):
        side = "up" if uneven[worst.name] > 1.0 else "down"
        ends = _headline(worst)
        return f"The interval of the {name} reaches farther {side}: {_between(ends, worst)}"
    return "The likelihood falls evenly on both sides: standard errors tell the same intervals"


def _unevenness(profile: Profile) -> float:
    """Upper over lower half of the interval on the scale where standard errors are symmetric."""
    ends = _headline(profile)
    low, middle, high = (math.log(v) if profile.on_log else v for v in (ends.lower, profile.estimate, ends.upper))
    return (high - middle) / (middle - low) if low < middle < high else 1.0


def _text(value: float, profile: Profile) -> str:
    return f"{number_text(value)}{spaced_unit('per second' if profile.unit == '1/s' else profile.unit)}"


def _between(ends: ProfileInterval, profile: Profile) -> str:
    unit = spaced_unit("per second" if profile.unit == "1/s" else profile.unit)
    return f"{range_text(ends.lower, ends.upper)}{unit}"


def _caption(fit: CouplingFit, profiles: Sequence[Profile]) -> str:
    level = level_text(profiles[0].level)
    scaled = any(isinstance(p.scaled, ProfileInterval) for p in profiles)
    penalised = " The log-likelihood includes the penalties of the model." if profiles[0].penalised else ""
    kinds = (
        "Thick line: fall of the log-likelihood divided by the robust variance over the one the curve implies "
        f"({listed([f'{number_text(p.variance_ratio)} for the {parameter_words(p.name, fit)}' for p in profiles])}); "
        "thin line: the fall as it is."
        if scaled
        else "Line: fall of the log-likelihood."
    )
    return (
        "Profile likelihood: each parameter held at one value after the other, all others estimated anew. "
        f"{kinds} Dashed: how far it must fall ({level}). Under each curve, where it is cut, beside the interval by "
        f"{kind_word(fit.covariance_kind)} standard errors. An arrow is an end that is never reached.{penalised}"
    )


# --- two parameters -------------------------------------------------------------------------------------------


@dataclass(frozen=True, eq=False)
class ContourData:
    """Fall of the log-likelihood over two parameters, on a fine grid, and the falls at which regions end."""

    title: str
    caption: str
    names: tuple[str, str]
    units: tuple[str, str]
    on_log: tuple[bool, bool]
    estimate: tuple[float, float]
    x: FloatArray  # (n,)
    y: FloatArray  # (m,)
    drop: FloatArray  # (n, m) of the kind that is the headline
    cuts: FloatArray  # (3,) falling shares: 50, 90, 95 %
    levels: FloatArray
    model_drop: FloatArray | None  # as it is, where the headline is scaled
    model_cut: float  # of the widest level
    correlation: float  # over the region

    def numbers(self) -> pd.DataFrame:
        """x, y, drop: the surface as drawn"""
        x, y = np.meshgrid(self.x, self.y, indexing="ij")
        return pd.DataFrame({"x": x.ravel(), "y": y.ravel(), "drop": self.drop.ravel()})


def contour_data(fit: CouplingFit, contour: ProfileContour) -> ContourData:
    """The figure of a contour: its surface between the points of the grid."""
    scaled = not isinstance(contour.scaled_drop, Unavailable)
    a, b = (
        np.log(v) if log else v for v, log in zip((contour.values_a, contour.values_b), contour.on_log, strict=True)
    )
    fine_a, fine_b = np.linspace(a[0], a[-1], FINE_SURFACE), np.linspace(b[0], b[-1], FINE_SURFACE)

    def surface(drop: FloatArray) -> FloatArray:
        degree = min(3, len(a) - 1), min(3, len(b) - 1)
        return np.asarray(RectBivariateSpline(a, b, drop, kx=degree[0], ky=degree[1])(fine_a, fine_b))

    model = surface(contour.drop)
    drop = model if isinstance(contour.scaled_drop, Unavailable) else surface(contour.scaled_drop)
    cuts = contour.critical_scaled if scaled else contour.critical
    inside = np.argwhere(drop <= cuts[-1])
    together = float(np.corrcoef(fine_a[inside[:, 0]], fine_b[inside[:, 1]])[0, 1]) if len(inside) > 2 else 0.0
    names = parameter_words(contour.names[0], fit), parameter_words(contour.names[1], fit)
    shares = listed([level_text(float(level)) for level in contour.levels])
    kind = "scaled by the robust variances" if scaled else "as it is"
    thin = f" Thin line: {level_text(float(contour.levels[-1]))} by the log-likelihood as it is." if scaled else ""
    return ContourData(
        title=_contour_title(names, together, drop <= cuts[-1]),
        caption=(
            f"Fall of the log-likelihood ({kind}) with {names[0]} and {names[1]} held, all else estimated anew. "
            f"Regions that hold both with {shares}, the darkest the smallest; the point is the estimate.{thin}"
        ),
        names=names,
        units=contour.units,
        on_log=contour.on_log,
        estimate=(float(contour.estimate[0]), float(contour.estimate[1])),
        x=np.exp(fine_a) if contour.on_log[0] else fine_a,
        y=np.exp(fine_b) if contour.on_log[1] else fine_b,
        drop=drop,
        cuts=cuts,
        levels=contour.levels,
        model_drop=model if scaled else None,
        model_cut=float(contour.critical[-1]),
        correlation=together,
    )


def _contour_title(names: tuple[str, str], together: float, inside: BoolArray) -> str:
    """Where the region runs off the grid first, which ends where the walks did; else how the two go together."""
    first, second = names
    for name, other, rim in (
        (first, second, (inside[0], inside[-1])),
        (second, first, (inside[:, 0], inside[:, -1])),
    ):
        for side, edge in zip(("lower", "upper"), rim, strict=True):
            if edge.any():
                return f"No {side} limit to the {name}, whatever the {other}"
    if abs(together) < TOGETHER:
        return f"The recording tells {first} and {second} apart"
    return f"A larger {first} goes with a {'larger' if together > 0 else 'smaller'} {second}"


# --- the amplitude at each length -----------------------------------------------------------------------------


@dataclass(frozen=True, eq=False)
class AmplitudesData:
    """Amplitudes kept at each length, and how far the best of each lies below the best of all."""

    title: str
    caption: str
    stated_at: str
    word: str  # "length" or "radius"
    length_um: FloatArray  # (n,) of the curves as drawn
    best: FloatArray
    lower: FloatArray
    upper: FloatArray
    model_lower: FloatArray | None  # where the headline is scaled
    model_upper: FloatArray | None
    drop: FloatArray  # (n,) nats
    held_um: FloatArray  # (L,) the lengths that were held
    estimate: tuple[float, float] | None  # length and amplitude of the fit, where coupling was found

    def numbers(self) -> pd.DataFrame:
        """length_um, best, lower, upper, drop"""
        return pd.DataFrame(
            {
                "length_um": self.length_um,
                "best": self.best,
                "lower": self.lower,
                "upper": self.upper,
                "drop": self.drop,
            }
        )


def amplitudes_data(fit: CouplingFit, amplitudes: CompatibleAmplitudes) -> AmplitudesData:
    """The figure of the amplitudes compatible with each length."""
    table = amplitudes.table
    scaled = bool(table["scaled_lower"].notna().all())
    columns = ("scaled_lower", "scaled_upper") if scaled else ("lower", "upper")
    word = parameter_words("length_um", fit)
    kind = "robust profile intervals" if scaled else "model-based profile intervals"
    thin = " Thin lines: the likelihood as it is." if scaled else ""
    held = table["length_um"].to_numpy(dtype=np.float64)
    jumps = word == "radius"
    fine = held if jumps or held.size < 2 else np.geomspace(held[0], held[-1], FINE)
    natural = fit.kernel_curve.natural

    def curve(column: str) -> FloatArray:
        values = table[column].to_numpy(dtype=np.float64)
        if fine is held or not np.isfinite(values).all():
            return np.asarray(np.interp(np.log(fine), np.log(held), values))
        return np.asarray(PchipInterpolator(np.log(held), values)(np.log(fine)))

    reference = f"at {distance_label(fit.reference_distance_um)}"
    stated_at = reference if amplitudes.stated_at.endswith("µm") else amplitudes.stated_at
    return AmplitudesData(
        title=_amplitudes_title(table[columns[0]].min(), table[columns[1]].max(), held, word, stated_at, amplitudes),
        caption=(
            f"Above, amplitudes that a likelihood ratio keeps at each {word} ({level_text(amplitudes.level)} {kind}): "
            f"line, the best; band, all kept.{thin} Below, how far the log-likelihood of the best lies under that of "
            f"the best {word} tried. Marks at the foot: what was held. {_leak_sentence(amplitudes)}"
        ),
        stated_at=stated_at,
        word=word,
        length_um=fine,
        best=curve("estimate"),
        lower=curve(columns[0]),
        upper=curve(columns[1]),
        model_lower=curve("lower") if scaled else None,
        model_upper=curve("upper") if scaled else None,
        drop=curve("log_likelihood_drop"),
        held_um=held,
        estimate=(natural["length_um"], natural["amplitude"]) if fit.verdict.found else None,
    )


def _amplitudes_title(
    lowest: float, highest: float, held: FloatArray, word: str, stated_at: str, amplitudes: CompatibleAmplitudes
) -> str:
    if not math.isfinite(amplitudes.largest):
        return f"Not at every {word} does the recording limit the amplitude"
    span = f"{number_text(held[0], 2)} to {distance_label(held[-1])}"
    if lowest > 0.0 or highest < 0.0:
        ends = " and ".join(number_text(v) for v in (lowest, highest))
        return f"Whatever the {word} ({span}), J {stated_at} lies between {ends} per spike"
    limit = number_text(amplitudes.largest)
    return f"Whatever the {word} ({span}), |J| {stated_at} is below {limit} per spike"


def _leak_sentence(amplitudes: CompatibleAmplitudes) -> str:
    if amplitudes.leak == "re-estimated":
        return "The leak rate is estimated anew at each."
    verb = "was held" if amplitudes.leak == "held" else "is fixed by the model"
    return f"The leak rate {verb} at {number_text(amplitudes.leak_rate)} per second."
