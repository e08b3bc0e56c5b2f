"""The methods paragraph, ready for a paper, and the published methods it leans on: only those a fit used."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from kernelfit.errors import Unavailable
from kernelfit.kernels.spline import Spline
from kernelfit.recording.recording import Recording
from kernelfit.report.numbers import (
    count_text,
    distance_label,
    number_text,
    time_text,
)
from kernelfit.report.readings import LEVEL, TEST_LEVEL, length_word, link_name
from kernelfit.report.words import level_text, listed

if TYPE_CHECKING:
    from kernelfit.diagnostics.goodness import Goodness
    from kernelfit.fitting.result import CouplingFit

HAWKES = "Hawkes AG (1971) Biometrika 58: 83-90."
TRUCCOLO = "Truccolo W, Eden UT, Fellows MR, Donoghue JP, Brown EN (2005) J Neurophysiol 93: 1074-1089."
WHITE = "White H (1982) Econometrica 50: 1-25."
LIANG = "Liang KY, Zeger SL (1986) Biometrika 73: 13-22."
BELL = "Bell RM, McCaffrey DF (2002) Survey Methodology 28: 169-181."
HANSEN = "Hansen BE (1996) Econometrica 64: 413-430."
HANSEN_EDGE = "Hansen BE (2000) Econometrica 68: 575-603."
RAO = "Rao CR (1948) Math Proc Camb Philos Soc 44: 50-57."
EILERS = "Eilers PHC, Marx BD (1996) Stat Sci 11: 89-121."
BROWN = "Brown EN, Barbieri R, Ventura V, Kass RE, Frank LM (2002) Neural Comput 14: 325-346."
HASLINGER = "Haslinger R, Pipa G, Brown E (2010) Neural Comput 22: 2477-2506."
LILLIEFORS = "Lilliefors HW (1969) J Am Stat Assoc 64: 387-389."
GERHARD = "Gerhard F, Haslinger R, Pipa G (2011) Neural Comput 23: 1452-1483."
BENJAMINI = "Benjamini Y, Hochberg Y (1995) J R Stat Soc B 57: 289-300."
MASSART = "Massart P (1990) Ann Probab 18: 1269-1283."

_LINKS = {
    "exp": "the exponential of the drive",
    "softplus": "the softplus function of the drive",
    "logistic": "a logistic function of the drive",
    "rectified": "the drive where it is above a small floor",
}
_SHAPES = {
    "flat": "the same at all distances",
    "exponential": "an exponential function of the distance",
    "gaussian": "a Gaussian function of the distance",
    "power-law": "a power law of the distance",
    "difference-of-gaussians": "the difference of two Gaussian functions of the distance",
    "mexican-hat": "a balanced Mexican-hat function of the distance",
    "disc": "constant up to a radius and zero beyond",
    "spline": "a spline of the distance",
}


@dataclass(frozen=True, slots=True)
class Methods:
    """The paragraph and its references, in the order of first use."""

    paragraph: str
    references: tuple[str, ...]


def methods(fit: CouplingFit, recording: Recording, goodness: Goodness) -> Methods:
    """What was done, in the words of a methods section, with version, settings and counts."""
    sentences = [
        _data_sentence(fit, recording),
        *_model_sentences(fit),
        *_estimation_sentences(fit),
        *_test_sentences(fit, goodness),
        f"Computations were done with kernelfit {fit.version}.",
    ]
    references = [HAWKES, TRUCCOLO]
    if isinstance(fit.model.kernel, Spline):
        references.append(EILERS)
    references.append(HANSEN)
    if fit.covariance_kind == "robust":
        references += [WHITE, LIANG]
    if fit.covariance_kind == "jackknife":
        references.append(BELL)
    if length_word(fit) == "radius":
        references.append(HANSEN_EDGE)
    if _score_tested(fit):
        references.append(RAO)
    references += [BROWN, HASLINGER, LILLIEFORS, BENJAMINI, GERHARD, MASSART]
    return Methods(" ".join(sentences), tuple(references))


def _score_tested(fit: CouplingFit) -> bool:
    return fit.after_spike_test is not None and not isinstance(fit.after_spike_test, Unavailable)


def _data_sentence(fit: CouplingFit, recording: Recording) -> str:
    windows = recording.window_bounds.shape[0]
    in_windows = f" in {count_text(windows)} windows" if windows > 1 else ""
    left_out = []
    if recording.exclusion_bounds.shape[0]:
        seconds = float(np.sum(recording.exclusion_bounds[:, 1] - recording.exclusion_bounds[:, 0]))
        left_out.append(
            f"{count_text(recording.exclusion_bounds.shape[0])} excluded stretches ({number_text(seconds)} s in all)"
        )
    if recording.excluded_pairs:
        left_out.append(f"{count_text(len(recording.excluded_pairs))} pairs of units")
    silent = int((recording.counts == 0).sum())
    without = f"; {listed(left_out)} were left out" if left_out else ""
    if silent:
        units = "one silent unit was" if silent == 1 else f"{count_text(silent)} silent units were"
        without += f"; {units} not explained"
    return (
        f"Spike trains of {count_text(recording.n_units)} units ({count_text(fit.n_spikes)} spikes in "
        f"{count_text(fit.duration_s)} s{in_windows}{without}) were fitted with a mutually exciting point "
        "process in discrete time (Hawkes 1971; Truccolo et al. 2005) with bins of "
        f"{time_text(fit.model.bin_width)}."
    )


def _model_sentences(fit: CouplingFit) -> list[str]:
    model = fit.model
    kernel = model.kernel
    link = link_name(fit)
    leak = (
        f"with a leak rate held at {number_text(model.leak_rate)} per second"
        if model.leak_rate is not None
        else "with a leak rate estimated from the data"
    )
    shape = _SHAPES.get(kernel.name, f"the {kernel.name} function of the distance")
    source = " (P-spline; Eilers & Marx 1996)" if isinstance(kernel, Spline) else ""
    reach = "" if model.max_distance is None else f" up to {distance_label(model.max_distance)}"
    same_site = {
        "exclude": "Pairs of units on one site (closer than 1 µm) were left out of the coupling.",
        "own": "Pairs of units on one site (closer than 1 µm) had one coefficient of their own.",
        "kernel": "Pairs of units on one site were part of the kernel at their distance.",
    }[model.same_site]
    sentences = [
        f"The rate of a unit was {_LINKS.get(link, link)}, the sum of a baseline of its own and of the "
        f"effects of all other units' earlier spikes{reach}; each spike changed the drive by J(d) at once, "
        f"an effect that decayed exponentially {leak}.",
        f"J was {shape}{source}, stated at the reference distance of "
        f"{distance_label(fit.reference_distance_um)}, the median distance between neighbouring sites.",
        same_site,
    ]
    constants = model.after_spike.constants(model.bin_width)
    if constants.size:
        sentences.append(
            f"Effects of a unit's own earlier spikes were modelled per unit by {count_text(constants.size)} "
            f"exponential traces with time constants from {time_text(float(constants[0]))} to "
            f"{time_text(float(constants[-1]))}."
        )
    if model.warm_up_s > 0.0:
        sentences.append(
            f"The first {time_text(model.warm_up_s)} after the start of each window and each exclusion fed "
            "the state and were left out of the likelihood."
        )
    return sentences


def _estimation_sentences(fit: CouplingFit) -> list[str]:
    penalties = []
    smoothing = fit.model.kernel.smoothing if isinstance(fit.model.kernel, Spline) else 0.0
    if isinstance(smoothing, float) and smoothing > 0.0:
        penalties.append(f"a difference penalty of {number_text(smoothing)} on the spline")
    ridge = fit.model.after_spike.ridge
    if isinstance(ridge, float) and ridge > 0.0:
        penalties.append(f"a ridge penalty of {number_text(ridge)} on the coefficients of own spikes")
    by = f"penalised maximum likelihood ({listed(penalties)})" if penalties else "maximum likelihood"
    sentences = [f"All parameters were estimated jointly by {by}."]
    sentences.append(
        "Whether there is any coupling was tested on the scores of the fit without it, over a grid of leak rates, by "
        f"random sign flips of blocks of time cut for that test (Hansen 1996; seed {fit.seed})."
    )
    if not fit.converged:
        sentences.append("The estimation did not converge.")
    blocks = f"{count_text(fit.n_blocks)} blocks of {time_text(fit.block_length_s)} of recording"
    if fit.covariance_kind == "robust":
        sentences.append(
            f"Intervals are {level_text(LEVEL)} Wald intervals with a sandwich covariance (White 1982; "
            f"Liang & Zeger 1986) from scores summed over {blocks}, joined until neighbouring ones no longer went "
            "together; lengths and rates were treated on the log scale."
        )
    elif fit.covariance_kind == "jackknife":
        sentences.append(
            f"Intervals are {level_text(LEVEL)} Wald intervals with a jackknife covariance (Bell & McCaffrey 2002), "
            f"one step from the fit without each of {blocks}; lengths and rates were treated on the log scale."
        )
    else:
        sentences.append(
            f"Intervals are {level_text(LEVEL)} Wald intervals from the expected information; lengths and "
            "rates were treated on the log scale."
        )
    if length_word(fit) == "radius":
        sentences.append(
            "The radius was profiled over the distances of the array; its interval holds the radii that a "
            "likelihood-ratio test keeps, with the critical value of an edge (Hansen 2000) and the ratio scaled by "
            "that of robust to model-based variance."
        )
    if not fit.verdict.found:
        sentences.append(
            "As no coupling was found, intervals of amplitudes use the critical value of that test, which allows for "
            "the search over lengths and leak rates, and hold 0; lengths and the leak rate are not stated."
        )
    if _score_tested(fit):
        sentences.append("What effects of own earlier spikes would add was asked by a score test (Rao 1948).")
    return sentences


def _test_sentences(fit: CouplingFit, goodness: Goodness) -> list[str]:
    return [
        "The fit was checked by time rescaling (Brown et al. 2002) with randomised placement of spikes "
        f"within bins (Haslinger et al. 2010; seed {goodness.seed}); rescaled intervals of each unit were "
        "compared with an exponential distribution of estimated mean by the Kolmogorov-Smirnov statistic "
        "(Lilliefors 1969), at a false discovery rate of "
        f"{number_text(100 * TEST_LEVEL)} % over units (Benjamini & Hochberg 1995), and "
        "those of all units taken together likewise (Gerhard et al. 2011); bands of the plots follow "
        "Massart (1990)."
    ]
