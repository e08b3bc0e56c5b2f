"""Are successive rescaled gaps independent? The distance of KS sees only their law, not their order."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from statsmodels.tsa.stattools import acf, q_stat

from kernelfit._typing import FloatArray
from kernelfit._validation import check_whole
from kernelfit.errors import Unavailable

VALUES_PER_LAG = 4  # fewer values than this per lag, and the chi-square law of the statistic is far off


@dataclass(frozen=True, slots=True)
class SerialIndependence:
    """Ljung-Box statistic of values in time order.

    Parameters
    ----------
    statistic : n (n + 2) sum over lags of r_k^2 / (n - k)
    n_lags : lags in the sum, and the degrees of freedom
    p_value : of the null that successive values are independent
    """

    statistic: float
    n_lags: int
    p_value: float


def serial_independence(values: FloatArray, *, n_lags: int = 10) -> SerialIndependence | Unavailable:
    """Ljung-Box test of values in time order, for example the z values of a unit's gaps.

    Parameters
    ----------
    values : (n,) in time order
    n_lags : autocorrelations summed

    Returns
    -------
    SerialIndependence, or the reason why there is none

    Raises
    ------
    ArgumentError : n_lags below 1 or not a whole number

    References
    ----------
    Ljung & Box (1978), Biometrika 65, 297-303.
    """
    check_whole(n_lags, "n_lags", 1, "; 10 is usual")
    if values.size < VALUES_PER_LAG * n_lags:
        return Unavailable(f"{values.size} gaps are too few for {n_lags} lags; {VALUES_PER_LAG * n_lags} are needed.")
    if np.ptp(values) == 0:
        return Unavailable("all gaps are equal, so there is no autocorrelation.")
    # by Fourier transform: the pooled process of a long recording has hundreds of thousands of gaps
    statistic, p_value = q_stat(acf(values, nlags=n_lags, fft=True)[1:], values.size)
    return SerialIndependence(statistic=float(statistic[-1]), n_lags=n_lags, p_value=float(p_value[-1]))
