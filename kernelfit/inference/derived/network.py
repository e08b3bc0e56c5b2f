"""What the couplings do together: spikes that a spike adds, and how near the fitted network is to instability.

Both rest on E[f'_i] J(d_ij) / alpha, to first order and in continuous time, with E[f'_i] taken as observed (under the
exponential link the mean rate). In the sum over bins a spike's effect is short by x / (e^x - 1), x = alpha times the
bin width. Effects of a unit's own spikes are not in it.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy.linalg import eigh

from kernelfit._typing import FloatArray
from kernelfit.errors import Unavailable
from kernelfit.inference.derived.figure import DerivedFigure, Lost
from kernelfit.inference.derived.pairs import Pairs
from kernelfit.inference.derived.setting import Law, Setting


def jump_by_distance(law: Law, pairs: Pairs) -> FloatArray:
    """(D + 1,) J at each distance of the array, then on one site (0 where it has no coefficient)."""
    setting = law.setting
    has_same_site = law.shared.size - setting.n_kernel - (setting.leak_rate is None) == 1
    return np.append(law(pairs.distinct_um), law.shared[setting.n_kernel] if has_same_site else 0.0)


@dataclass(frozen=True, kw_only=True)
class ExtraSpikes(DerivedFigure):
    """sum_i E[f'_i] J(d_ij) / alpha over the units explained, averaged over the units j that fire."""

    def value(self, law: Law) -> float | Lost:
        pairs = law.setting.pairs
        if isinstance(pairs, Unavailable):
            return Lost(pairs.reason)
        return float(pairs.spikes_by_distance @ jump_by_distance(law, pairs)) / law.leak


@dataclass(frozen=True, kw_only=True)
class SpectralRadius(DerivedFigure):
    """Largest absolute eigenvalue of E[f'_i] J(d_ij) / alpha.

    Units that are not explained have no row, so theirs are zero; among the others J is symmetric, and the matrix has
    the real eigenvalues of sqrt(E[f'_i] E[f'_j]) J(d_ij) / alpha.
    """

    def value(self, law: Law) -> float | Lost:
        pairs = law.setting.pairs
        return Lost(pairs.reason) if isinstance(pairs, Unavailable) else abs(leading_mode(law, pairs)[0])

    def gradient(self, law: Law) -> FloatArray | None:
        """By the mode of the eigenvalue: d lambda = v' dM v."""
        pairs, setting = law.setting.pairs, law.setting
        if isinstance(pairs, Unavailable):
            return None
        value, mode = leading_mode(law, pairs)
        weight = pairs.weights_of(mode * np.sqrt(pairs.slope_hz)) / law.leak * np.sign(value)
        n = setting.n_kernel
        slope = np.zeros(law.shared.size)
        slope[:n] = setting.kernel.gradient(law.shared[:n], pairs.distinct_um, setting.span) @ weight[:-1]
        if setting.leak_rate is None:
            slope[-1] = -abs(value)
        if law.shared.size - n - (setting.leak_rate is None) == 1:
            slope[n] = weight[-1]
        return slope


def leading_mode(law: Law, pairs: Pairs) -> tuple[float, FloatArray]:
    """The eigenvalue largest in absolute value, signed, and its mode (n_targets,) of length 1."""
    root = np.sqrt(pairs.slope_hz)
    matrix = root[:, None] * pairs.among_targets(jump_by_distance(law, pairs)) * root / law.leak
    value, mode = eigh(matrix)
    k = int(np.argmax(np.abs(value)))
    return float(value[k]), np.asarray(mode[:, k])


def stability_words(radius: float, lower: float, upper: float, *, suppresses: bool) -> str:
    """How close to instability the fitted network is, given the spectral radius with its interval."""
    if suppresses:
        return "the strongest pattern of the couplings holds activity down, which by itself cannot make it unstable"
    if radius >= 1.0:
        return "at 1 and above the fitted couplings by themselves would keep activity growing: a steady state cannot be"
    room = f"couplings {1.0 / radius:.2g} times as strong would make the fitted network unstable (at 1)"
    if not np.isfinite(upper):
        return room
    if upper >= 1.0:
        return f"{room}; the interval reaches 1, so instability is not excluded"
    return f"{room}; the interval ({lower:.2g} to {upper:.2g}) stays below 1"


def network_figures(setting: Setting) -> tuple[DerivedFigure, ...]:
    """extra_spikes and spectral_radius."""
    return (
        ExtraSpikes(
            name="extra_spikes",
            unit="spikes per spike",
            reads="spikes that one spike of an average unit adds among the units recorded, to first order",
            of_time=True,
        ),
        SpectralRadius(
            name="spectral_radius",
            unit="",
            reads="factor by which the couplings multiply a small rise of activity per round; unstable at 1",
            least=0.0,
            on_log=True,
            of_time=True,
        ),
    )
