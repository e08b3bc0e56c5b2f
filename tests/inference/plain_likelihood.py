"""The binned likelihood written out in the plainest way, for profiles by brute force (docs/model.md section 3).

No after-spike term, exponential link, one window: baselines then have a closed form, and what is left to climb are the
few shared parameters, which a general-purpose optimiser does.
"""

from __future__ import annotations

import numpy as np
from scipy.optimize import brentq, minimize
from scipy.signal import lfilter
from scipy.special import gammaln

TIGHT = {"xatol": 1e-5, "fatol": 1e-9, "maxfev": 4000}


class PlainLikelihood:
    """Counts and distances of a recording, and the log-likelihood with the baselines at their best."""

    def __init__(self, recording, bin_s):
        start, stop = recording.window_bounds[0]
        n = int((stop - start) / bin_s + 1e-6)
        self.bin_s = bin_s
        self.y = np.zeros((n, recording.n_units))
        for i, unit in enumerate(recording.unit_ids):
            bins = ((recording.spike_times(unit) - start) / bin_s + 1e-6).astype(int)
            np.add.at(self.y[:, i], bins[bins < n], 1.0)
        difference = recording.positions[:, None] - recording.positions[None]
        self.distance = np.sqrt(np.sum(difference**2, axis=-1))
        self.other = ~np.eye(recording.n_units, dtype=bool)
        distances = self.distance[self.other].reshape(recording.n_units, -1)
        self.reference = float(np.median(distances.min(axis=1)))  # every unit stands on a site of its own
        self.constant = float(gammaln(self.y + 1.0).sum())

    def traces(self, leak):
        """(T, n) leaky count of each unit's spikes before the bin: s_t = gamma (s_(t-1) + y_(t-1))."""
        gamma = np.exp(-leak * self.bin_s)
        return lfilter([0.0, gamma], [1.0, -gamma], self.y, axis=0)

    def at(self, jump, leak):
        """Log-likelihood of a kernel (a function of distance) and a leak rate, maximised over the baselines."""
        drive = self.traces(leak) @ np.where(self.other, jump(self.distance), 0.0).T
        spikes = self.y.sum(axis=0)
        with np.errstate(over="ignore"):
            baseline = np.log(spikes / (np.exp(drive).sum(axis=0) * self.bin_s))
        eta = baseline + drive
        return float(np.sum(self.y * eta) - spikes.sum() + self.y.sum() * np.log(self.bin_s)) - self.constant


def profile_ends(log_likelihood, value, others, cut_drop, *, scale):
    """Ends of a profile interval by brute force: a grid of refits on either side, a root between two of its points.

    Parameters
    ----------
    log_likelihood : of (value, others)
    value, others : where it is highest, roughly
    cut_drop : how far it must fall, nats
    scale : step of the grid, a quarter or so of a half-width
    """

    def refit(v, start):
        found = minimize(lambda x: -log_likelihood(v, x), start, method="Nelder-Mead", options=TIGHT)
        return -found.fun, found.x

    best = minimize(lambda x: -log_likelihood(x[0], x[1:]), [value, *others], method="Nelder-Mead", options=TIGHT)
    highest, middle, start = -best.fun, float(best.x[0]), best.x[1:]
    ends = []
    for sign in (-1.0, 1.0):
        known, inside, x = start, middle, middle
        for _ in range(60):
            x += sign * scale
            here, known = refit(x, known)
            if highest - here > cut_drop:
                break
            inside = x
        ends.append(
            brentq(lambda v, k=known: highest - refit(v, k)[0] - cut_drop, *sorted((inside, x)), xtol=1e-5 * scale)
        )
    return ends
