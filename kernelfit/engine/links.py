"""What the sweep needs of a rate link, by its code. A new link is one branch in each function here.

The dense part of a cell is mean = D f(eta), slope = D f'(eta), weight = D f'(eta)^2 / f(eta); a spike adds log f and
f'/f.
For the exponential link, the canonical one of Poisson counts, the three dense rows are one and the same.
"""

from __future__ import annotations

import math

from kernelfit._typing import FloatArray
from kernelfit.engine.arithmetic import exp_into
from kernelfit.engine.compiled import compiled
from kernelfit.model.links import EXP


@compiled
def is_canonical(link: int) -> bool:
    """True where slope and weight equal the mean, so that one row serves for all three."""
    return link == EXP


@compiled
def fill_cells(
    link: int,
    eta: FloatArray,
    bin_width: float,
    mean: FloatArray,
    slope: FloatArray,
    weight: FloatArray,
    scratch: FloatArray,
) -> None:
    """Dense rows of a tile from its linear predictor; `slope` and `weight` are left alone where the link is
    canonical."""
    exp_into(eta, math.log(bin_width), mean, scratch)


@compiled
def log_rate(link: int, eta: float) -> float:
    """log f(eta)."""
    return eta


@compiled
def log_rate_slope(link: int, eta: float) -> float:
    """f'(eta) / f(eta)."""
    return 1.0
