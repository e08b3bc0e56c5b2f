"""The section on how sure the numbers are, as data: interval kinds side by side, blocks of time, what carries it."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from kernelfit._typing import FloatArray
from kernelfit.errors import Unavailable
from kernelfit.fitting.block_length import BlockCurve
from kernelfit.inference.profile import Profile
from kernelfit.inference.scales import shared_names
from kernelfit.inference.sureness import Sureness
from kernelfit.model.coupling import CovarianceKind
from kernelfit.report.content_tables import TABLE_DECIMALS, value_cell
from kernelfit.report.derived_data import MarkedKernel, marked_kernel
from kernelfit.report.numbers import count_text, duration_text, interval_text, number_text, range_text
from kernelfit.report.page import Cell, Column, Table
from kernelfit.report.profile_data import ProfilesData, profiles_data
from kernelfit.report.readings import LEVEL, kind_word, parameter_of
from kernelfit.report.sureness_data import BlocksData, Compared, InfluenceData, Interval, KindsData
from kernelfit.report.words import RATIO_WORTH_SAYING, block_text, level_text, listed

if TYPE_CHECKING:
    from kernelfit.fitting.result import CouplingFit

KINDS: tuple[CovarianceKind, ...] = ("model", "robust", "jackknife")
BOOTSTRAP, PROFILE = "bootstrap", "profile"
WIDER = 1.15  # jackknife over robust standard error: from here on a few stretches carry the estimate
CARRIES = 1.0  # robust standard errors that one stretch or unit moves a parameter by: worth a warning
OTHER_BLOCKS = "(The test of any coupling cuts blocks of its own, before there are estimates.)"
SHORT = {"amplitude": "amplitude", "length_um": "length", "leak_rate": "leak rate", "exponent": "exponent"}


@dataclass(frozen=True, eq=False)
class SureFigures:
    """Data of the figures, or the reason why there is none; no profiles where they were not asked for."""

    kinds: KindsData | Unavailable
    blocks: BlocksData | Unavailable
    influence: InfluenceData | Unavailable
    marked: MarkedKernel | Unavailable
    profiles: ProfilesData | Unavailable | None


@dataclass(frozen=True, eq=False)
class SureContent:
    """The section's own sentences, figures and tables; `derived` belongs to the section on the kernel."""

    sentences: tuple[str, ...]
    figures: SureFigures
    worth: Table | None
    refits: Table | None
    derived: Table


def sure_content(fit: CouplingFit, sureness: Sureness) -> SureContent:
    """Everything that the page says on how sure the numbers are, beyond standard errors."""
    figures = SureFigures(
        kinds=kinds_data(fit, sureness),
        blocks=blocks_data(fit),
        influence=influence_data(fit, sureness),
        marked=marked_kernel(fit, sureness.derived),
        profiles=profiles_data(fit, tuple(sureness.profiles.values())) if sureness.profiles else None,
    )
    return SureContent(
        sentences=tuple(
            s
            for s in (
                which_to_believe(fit),
                blocks_sentence(fit),
                stretches_sentence(fit),
                influence_sentence(fit, sureness),
                bootstrap_sentence(sureness),
            )
            if s
        ),
        figures=figures,
        worth=worth_table(fit),
        refits=refit_table(fit, sureness),
        derived=derived_table(fit, sureness),
    )


# --- figures ----------------------------------------------------------------------------------------------


def short_name(name: str) -> str:
    """A parameter as a figure's axis names it."""
    return SHORT.get(name, name.removesuffix("_um").replace("_", " "))


def axis_name(fit: CouplingFit, name: str) -> str:
    """The same with its unit: "length (µm)"."""
    unit = str(fit.parameters.loc[name, "unit"])
    return f"{short_name(name)} ({unit})" if unit not in {"", "nan"} else short_name(name)


def kinds_data(fit: CouplingFit, sureness: Sureness) -> KindsData | Unavailable:
    """Intervals of every kind for every parameter that has an estimate."""
    if not fit.verdict.found:
        return Unavailable("no coupling was found; the intervals of its amplitude stand in the table")
    compared = []
    for name in shared_names(fit):
        estimate = parameter_of(fit, name)
        if estimate is None or not estimate.known:
            continue
        intervals = [_wald(fit, name, kind) for kind in KINDS]
        if sureness.profiles:
            intervals.append(_profile(sureness.profiles.get(name)))
        intervals.append(_bootstrap(sureness, name))
        compared.append(Compared(axis_name(fit, name), estimate.value, tuple(intervals)))
    if not compared:
        return Unavailable("no parameter was estimated")
    return KindsData(
        kinds_title(fit.std_errors["ratio"].to_numpy(dtype=np.float64), compared),
        tuple(compared),
        kind_word(fit.covariance_kind),
        LEVEL,
    )


def _wald(fit: CouplingFit, name: str, kind: CovarianceKind) -> Interval:
    word = kind_word(kind)
    if kind == "jackknife" and fit.uncertainty.shared_jackknife is None:
        return Interval(word, math.nan, math.nan, "one block of time holds all that is known of a parameter")
    estimate = parameter_of(fit.with_covariance(kind), name)
    if estimate is None or not estimate.bounded:
        return Interval(word, math.nan, math.nan, estimate.reason if estimate else "")
    return Interval(word, estimate.lower, estimate.upper)


def _profile(profile: Profile | Unavailable | None) -> Interval:
    if profile is None or isinstance(profile, Unavailable):
        return Interval(PROFILE, math.nan, math.nan, "" if profile is None else profile.reason)
    ends = profile.scaled
    if isinstance(ends, Unavailable):
        return Interval(PROFILE, math.nan, math.nan, ends.reason)
    return Interval(
        PROFILE,
        -math.inf if ends.lower_open else ends.lower,
        math.inf if ends.upper_open else ends.upper,
        "; ".join(r for r in (ends.lower_reason, ends.upper_reason) if r),
    )


def _bootstrap(sureness: Sureness, name: str) -> Interval:
    if isinstance(sureness.bootstrap, Unavailable):
        return Interval(BOOTSTRAP, math.nan, math.nan, sureness.bootstrap.reason)
    table = sureness.bootstrap.intervals(LEVEL, "percentile")
    lower, upper = table.loc[[name], ["lower", "upper"]].to_numpy(dtype=np.float64)[0]
    return Interval(BOOTSTRAP, float(lower), float(upper), str(table["note"].to_dict()[name]))


def kinds_title(ratios: FloatArray, compared: Sequence[Compared]) -> str:
    """What intervals of several kinds say together: that they agree only where every end drawn does.

    Parameters
    ----------
    ratios : robust over model-based standard errors, NaN where there is none
    compared : parameters with the intervals that are drawn
    """
    known = ratios[np.isfinite(ratios)]
    if known.size and (known.max() >= RATIO_WORTH_SAYING or known.min() <= 1.0 / RATIO_WORTH_SAYING):
        shown = range_text(known.min(), known.max()) if known.size > 1 else number_text(float(known[0]), 2)
        return f"Robust intervals are {shown} times as wide as those that take the model at its word"
    several = [p for p in compared if sum(i.known for i in p.intervals) > 1]
    if not several:
        return "Intervals of every kind"
    differing = [p.name for p in several if not _ends_agree(p)]
    if differing:
        return f"Kinds of interval differ for {listed(differing)}"
    return "All kinds of interval agree"


def _ends_agree(parameter: Compared) -> bool:
    """Whether every kind reaches about as far from the estimate, on either side; an open end agrees with open ones."""
    drawn = [i for i in parameter.intervals if i.known]
    for reach in (
        [parameter.estimate - i.lower for i in drawn],
        [i.upper - parameter.estimate for i in drawn],
    ):
        if not max(reach) <= RATIO_WORTH_SAYING * min(reach):
            return False
    return True


def blocks_data(fit: CouplingFit) -> BlocksData | Unavailable:
    """The curve of standard errors against the length of the blocks."""
    curve = fit.uncertainty.block_curve
    used = fit.free & np.isfinite(curve.std_error[curve.chosen]) & (curve.std_error[curve.chosen] > 0)
    if not used.any() or curve.length_s.size < 2:
        return Unavailable("there are too few blocks of time")
    chosen = curve.std_error[curve.chosen][used]
    model = np.sqrt(np.diag(fit.uncertainty.shared_model))[used]
    return BlocksData(
        title=blocks_title(curve),
        length_s=curve.length_s,
        n_blocks=curve.n_blocks,
        names=tuple(short_name(n) for n, u in zip(shared_names(fit), used, strict=True) if u),
        relative=curve.std_error[:, used] / chosen,
        model_based=model / chosen,
        chosen_s=float(curve.length_s[curve.chosen]),
    )


def influence_data(fit: CouplingFit, sureness: Sureness) -> InfluenceData | Unavailable:
    """What leaving out each stretch and each unit does."""
    found = sureness.influence
    if isinstance(found, Unavailable):
        return found
    columns = [f"{name}_in_std_errors" for name in found.parameters]
    start, stop = (found.stretches[c].to_numpy(dtype=np.float64) for c in ("start_s", "stop_s"))
    by_stretch = found.stretches[columns].to_numpy(dtype=np.float64)
    by_unit = found.units[columns].to_numpy(dtype=np.float64)
    largest = float(np.nanmax(np.abs(np.concatenate([by_stretch, by_unit]))))
    title = (
        f"One part of the recording moves an estimate by {number_text(largest, 2)} standard errors"
        if largest > CARRIES
        else f"No stretch and no unit moves an estimate by more than {number_text(largest, 2)} standard errors"
    )
    site = fit.positions[fit.targets]
    return InfluenceData(
        title=title,
        names=tuple(short_name(n) for n in found.parameters),
        middle_s=(start + stop) / 2.0,
        width_s=stop - start,
        by_stretch=by_stretch,
        site_um=np.column_stack([site[:, 0], site[:, 1] if site.shape[1] > 1 else np.zeros(len(site))]),
        by_unit=by_unit,
        unit_ids=tuple(str(u) for u in found.units.index),
    )


# --- sentences --------------------------------------------------------------------------------------------


def which_to_believe(fit: CouplingFit) -> str:
    """Which interval to believe, where the kinds differ."""
    table = fit.std_errors
    ratios = table["ratio"].to_numpy(dtype=np.float64)
    if not np.isfinite(ratios).any() or np.nanmax(ratios) < RATIO_WORTH_SAYING:
        return ""
    wider = fit.uncertainty.jackknife_over_robust
    text = (
        "Where the two differ like that, believe the robust ones: stretches of the recording differ from each other "
        "by more than the model lets them, and the model-based interval does not know."
    )
    if wider >= WIDER:
        text += (
            f" Leaving out each block in turn (jackknife) gives standard errors up to {number_text(wider, 2)} times "
            "the robust ones: a few stretches carry much of the estimate, and the wider interval is the safer one."
        )
    return text


def blocks_sentence(fit: CouplingFit) -> str:
    """What the length of the blocks rests on."""
    curve = fit.uncertainty.block_curve
    if not np.isfinite(curve.std_error[curve.chosen]).any():
        return ""
    return f"{blocks_text(curve, block_text(fit.block_length_s))} {OTHER_BLOCKS}"


def blocks_title(curve: BlockCurve) -> str:
    """What the curve of standard errors against the length of the blocks shows, and no more."""
    if not curve.settled:
        return "Standard errors still grow with the length of the blocks"
    longer = curve.flat_beyond
    if longer is None:
        return f"No dependence between neighbouring blocks could be seen ({_chosen_blocks(curve)} blocks)"
    if longer:
        return "Standard errors do not grow with the length of the blocks"
    return "Standard errors grow with the length of the blocks, though neighbouring ones look independent"


def blocks_text(curve: BlockCurve, length: str) -> str:
    """The same as text, with the power of the test: few blocks show only strong dependence.

    Parameters
    ----------
    curve : of standard errors against the length of the blocks
    length : that of the blocks used, in words
    """
    if not curve.settled:
        return (
            f"Blocks of {length} are too short, and there are too few to join more of them: what one does to the "
            "estimates still foretells the next. Read the robust intervals as lower limits of the uncertainty."
        )
    n = _chosen_blocks(curve)
    seen = float(curve.threshold[curve.chosen]) - 1.0 / n  # the estimate of no correlation lies 1/n below 0
    text = (
        f"At blocks of {length} no dependence between neighbouring blocks could be seen ({n} blocks, which would show "
        f"a correlation above {number_text(seen, 2)})"
    )
    longer = curve.flat_beyond
    if longer is None:
        return f"{text}; there are too few blocks to try longer ones."
    if longer:
        return f"{text}, and over longer ones standard errors do not grow."
    return (
        f"{text}, but over longer ones standard errors grow by more than chance would have it. Read the robust "
        "intervals with care."
    )


def _chosen_blocks(curve: BlockCurve) -> int:
    return int(curve.n_blocks[curve.chosen])


def stretches_sentence(fit: CouplingFit) -> str:
    """What the recording is worth for the headline parameter, beside what was counted."""
    worth = fit.worth
    names = list(worth.index[np.isfinite(worth.to_numpy(dtype=np.float64)).all(axis=1)])
    if not names:
        return ""
    name = next((n for n in names if n == "length_um"), names[0])
    row = worth.loc[name]
    what = short_name(str(name))
    text = (
        f"For the {what}, {count_text(fit.n_spikes)} spikes in {duration_text(fit.duration_s)} hold about "
        f"{count_text(row['independent_stretches'])} independent stretches of {block_text(fit.block_length_s)}"
    )
    if row["ratio"] >= RATIO_WORTH_SAYING:
        text += (
            f" and are worth as much as {count_text(row['spikes'])} spikes in {duration_text(row['seconds'])} of a "
            "recording in which every bin were independent given the model"
        )
    return (
        f"{text}. The estimate is carried as if by {count_text(row['carrying_stretches'])} stretches that pull alike."
    )


def influence_sentence(fit: CouplingFit, sureness: Sureness) -> str:
    """Which stretch and which unit carry the result, and what a fit without them says."""
    found = sureness.influence
    if isinstance(found, Unavailable) or not len(found.refits):
        return ""
    parts = []
    for kind in ("stretch", "unit"):
        rows = found.refits[found.refits["left_out"] == kind]
        if not len(rows):
            continue
        table = found.stretches if kind == "stretch" else found.units
        size = [float(np.nanmax(np.abs(table[f"{p}_in_std_errors"]))) for p in rows["parameter"]]
        row = rows.iloc[int(np.argmax(size))]
        name = str(row["parameter"])
        before = _estimate(fit, name)
        unit = str(fit.parameters.loc[name, "unit"])
        reached = bool(row["converged"])
        after = before + float(row["refitted" if reached else "one_step"])
        how = "refitted" if reached else "in one step; the refit did not converge"
        what = f"the stretch from {row['which']}" if kind == "stretch" else f"unit {row['which']}"
        parts.append(
            f"without {what} the {short_name(name)} would be {number_text(after)} instead of "
            f"{number_text(before)}{' ' + unit if unit else ''} ({how})"
        )
    return f"What moves the estimates most: {listed(parts)}."


def _estimate(fit: CouplingFit, name: str) -> float:
    return float(fit.parameters["estimate"].to_dict()[name])


def bootstrap_sentence(sureness: Sureness) -> str:
    """What the bootstrap is, or why there is none."""
    if isinstance(sureness.bootstrap, Unavailable):
        return f"A bootstrap could not be made: {sureness.bootstrap.reason}."
    return f"The bootstrap interval ({level_text(LEVEL)}, percentile) is made of {sureness.bootstrap.sentence}"


# --- tables -----------------------------------------------------------------------------------------------


def worth_table(fit: CouplingFit) -> Table | None:
    """What the recording is worth for each parameter."""
    worth = fit.worth.dropna()
    if not len(worth):
        return None
    rows = tuple(
        (
            Cell(str(name)),
            value_cell(float(row["ratio"]), 2),
            Cell(count_text(row["spikes"]), float(row["spikes"])),
            Cell(duration_text(float(row["seconds"])), float(row["seconds"])),
            Cell(count_text(row["independent_stretches"]), float(row["independent_stretches"])),
            Cell(count_text(row["carrying_stretches"]), float(row["carrying_stretches"])),
        )
        for name, row in worth.iterrows()
    )
    return Table(
        caption=(
            f"What the recording is worth, of {count_text(fit.n_blocks)} stretches, {count_text(fit.n_spikes)} spikes "
            f"and {duration_text(fit.duration_s)}"
        ),
        columns=(
            Column("name", numeric=False),
            Column("robust / model-based"),
            Column("spikes"),
            Column("time"),
            Column("independent stretches"),
            Column("stretches that carry it"),
        ),
        rows=rows,
        file="worth.csv",
    )


def refit_table(fit: CouplingFit, sureness: Sureness) -> Table | None:
    """The stretch and the unit that move each parameter most, left out in one step and refitted."""
    found = sureness.influence
    if isinstance(found, Unavailable) or not len(found.refits):
        return None
    rows = []
    for _, row in found.refits.iterrows():
        name = str(row["parameter"])
        before = _estimate(fit, name)
        rows.append(
            (
                Cell(name),
                Cell(f"{row['left_out']} {row['which']}"),
                value_cell(before),
                value_cell(before + float(row["one_step"])),
                value_cell(before + float(row["refitted"])) if row["converged"] else Cell("did not converge"),
            )
        )
    return Table(
        caption="What carries the result: the estimates without the stretch and the unit that move them most",
        columns=(
            Column("name", numeric=False),
            Column("left out", numeric=False),
            Column("estimate"),
            Column("without it, one step"),
            Column("without it, refitted"),
        ),
        rows=tuple(rows),
        file="influence.csv",
    )


def derived_table(fit: CouplingFit, sureness: Sureness) -> Table:
    """What follows from the fit, with intervals; what there is none of comes without a number, with the reason."""
    rows = []
    for name, row in sureness.derived.iterrows():
        estimate, lower, upper = (float(row[c]) for c in ("estimate", "lower", "upper"))
        unit = str(row["unit"])
        shown = interval_text(estimate, lower, upper, max_decimals=TABLE_DECIMALS)
        rows.append(
            (
                Cell(str(name)),
                Cell(f"{sureness.reads[str(name)]}{f' ({unit})' if unit else ''}"),
                Cell(shown, estimate) if math.isfinite(estimate) else Cell("none"),
                Cell(str(row["note"])),
            )
        )
    return Table(
        caption=f"What follows from the fit, with {level_text(LEVEL)} intervals ({kind_word(fit.covariance_kind)})",
        columns=(
            Column("name", numeric=False),
            Column("what it is", numeric=False, wraps=True),
            Column("estimate (interval)"),
            Column("note", numeric=False, wraps=True),
        ),
        rows=tuple(rows),
        file="derived.csv",
    )
