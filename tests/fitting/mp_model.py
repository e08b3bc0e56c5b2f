"""The model of docs/model.md sections 2, 3 and 5 once more, cell by cell in 40-digit arithmetic.

Shares no code with the package but the counts of the grid and, for the spline, its basis functions.
"""

from __future__ import annotations

from dataclasses import dataclass

import mpmath
import numpy as np

mpmath.mp.dps = 40
mpf = mpmath.mpf
STEP = mpf(10) ** -12  # central differences: error of order STEP^2 = 1e-24


def kernel_value(kernel, theta, d, span):
    """J(d) from working parameters, by the formulas of docs/model.md section 5."""
    r, m = mpf(span.reference_um), span.n_coordinates
    name = kernel.name
    if name == "flat":
        return theta[0]
    if name == "exponential":
        return theta[0] * mpmath.exp(-(d - r) / mpmath.exp(theta[1]))
    if name == "gaussian":
        return theta[0] * mpmath.exp(-(d**2 - r**2) / (2 * mpmath.exp(theta[1]) ** 2))
    if name == "power-law":
        s = mpmath.exp(theta[1]) if kernel.fit_scale else r
        return theta[0] * ((1 + d / s) / (1 + r / s)) ** (-mpmath.exp(theta[-1]))
    if name == "difference-of-gaussians":
        narrow = mpmath.exp(theta[1])
        wide = narrow * (1 + mpmath.exp(theta[3]))
        fall = [mpmath.exp(-(d**2 - r**2) / (2 * s**2)) for s in (narrow, wide)]
        wide_amplitude = theta[2] / (1 - narrow / wide)  # working scale: A_n - A_w and A_w (1 - s_n/s_w)
        return (theta[0] + wide_amplitude) * fall[0] - wide_amplitude * fall[1]
    if name == "mexican-hat":
        s = mpmath.exp(theta[1])
        return theta[0] * (1 - d**2 / (m * s**2)) * mpmath.exp(-(d**2) / (2 * s**2))
    if name == "disc":
        return theta[0] if d < mpmath.exp(theta[1]) else mpf(0)
    if name == "spline":
        basis = kernel.basis(np.array([float(d)]), span)[0]
        return mpmath.fdot(theta, [mpf(float(b)) for b in basis])
    raise AssertionError(f"no formula for {name!r}: write it down here")


@dataclass(frozen=True)
class MpModel:
    """A problem of kernelfit.fitting.problem. Vectors hold own parameters, unit by unit, then shared ones."""

    problem: object
    recording: object

    def split(self, vector):
        n, p = self.problem.data.n_targets, 1 + self.problem.trace_decay.size
        return [vector[i * p : (i + 1) * p] for i in range(n)], vector[n * p :]

    def vector(self, estimate):
        return [mpf(float(v)) for v in [*estimate.own.ravel(), *estimate.shared]]

    def jump(self, i, j, shared):
        """W_ij, unit j driving unit i."""
        model, x = self.problem.model, self.recording.positions
        if i == j or frozenset((self.recording.unit_ids[i], self.recording.unit_ids[j])) in self.excluded:
            return mpf(0)
        d = mpmath.sqrt(mpmath.fsum((mpf(float(a)) - mpf(float(b))) ** 2 for a, b in zip(x[i], x[j], strict=True)))
        if d < 1 and model.same_site != "kernel":
            return shared[self.problem.n_kernel] if model.same_site == "own" else mpf(0)
        if model.max_distance is not None and d > model.max_distance:
            return mpf(0)
        return kernel_value(model.kernel, shared[: self.problem.n_kernel], d, self.problem.span)

    @property
    def excluded(self):
        return {frozenset(p) for p in self.recording.excluded_pairs}

    def predictor(self, vector):
        """eta of every cell of the sum, in order of bins, then targets; and the counts there."""
        own, shared = self.split(vector)
        model, grid, targets = self.problem.model, self.problem.grid, self.problem.data.targets
        width = mpf(model.bin_width)
        alpha = mpmath.exp(shared[-1]) if model.leak_rate is None else mpf(model.leak_rate)
        gamma = mpmath.exp(-alpha * width)
        decay = [mpmath.exp(-width / mpf(float(t))) for t in model.after_spike.constants(model.bin_width)]
        W = [[self.jump(i, j, shared) for j in range(grid.n_units)] for i in targets]
        spikes = {}
        for b, u, c in zip(grid.event_bin.tolist(), grid.event_unit.tolist(), grid.event_count.tolist(), strict=True):
            spikes.setdefault(b, {})[u] = c
        U = [mpf(0)] * len(targets)
        S = [[mpf(0)] * len(decay) for _ in targets]
        eta, counts = [], []
        for t in range(min([0, *spikes]), int(grid.stretches[-1, 1])):
            before, now = spikes.get(t - 1, {}), spikes.get(t, {})
            in_sum = any(a <= t < b for a, b in grid.stretches)
            for k, i in enumerate(targets):
                U[k] = gamma * (U[k] + mpmath.fsum(W[k][j] * c for j, c in before.items()))
                S[k] = [g * (s + before.get(i, 0)) for g, s in zip(decay, S[k], strict=True)]
                if in_sum:
                    eta.append(own[k][0] + U[k] + mpmath.fdot(own[k][1:], S[k]))
                    counts.append(now.get(int(i), 0))
        return eta, counts

    def log_likelihood(self, eta, counts):
        """Sum of y log(lambda D) - lambda D - log y!."""
        width = mpf(self.problem.model.bin_width)
        return mpmath.fsum(
            y * (e + mpmath.log(width)) - width * mpmath.exp(e) - mpmath.log(mpmath.factorial(y))
            for e, y in zip(eta, counts, strict=True)
        )

    def penalty(self, vector):
        """Ridge on after-spike coefficients and the kernel's own penalty, as taken off the log-likelihood."""
        own, shared = self.split(vector)
        ridge = mpf(self.problem.model.after_spike.ridge)
        total = ridge / 2 * mpmath.fsum(c**2 for row in own for c in row[1:])
        s = self.problem.model.kernel.penalty(self.problem.span)
        if s is not None:
            theta = shared[: self.problem.n_kernel]
            total += (
                mpmath.fsum(mpf(float(s[a, b])) * x * y for a, x in enumerate(theta) for b, y in enumerate(theta)) / 2
            )
        return total

    def objective(self, vector):
        return self.log_likelihood(*self.predictor(vector)) - self.penalty(vector)

    def derivatives(self, estimate):
        """Objective, score (P,) of the objective and information (P, P) = sum D f'^2/f grad grad' of the likelihood."""
        vector = self.vector(estimate)
        eta, counts = self.predictor(vector)
        mean = [mpf(self.problem.model.bin_width) * mpmath.exp(e) for e in eta]
        score, gradients = [], []
        for k in range(len(vector)):
            moved = [[*vector[:k], vector[k] + s * STEP, *vector[k + 1 :]] for s in (1, -1)]
            up, down = (self.predictor(v)[0] for v in moved)
            gradient = [(a - b) / (2 * STEP) for a, b in zip(up, down, strict=True)]
            pull = mpmath.fsum((y - m) * g for y, m, g in zip(counts, mean, gradient, strict=True))
            score.append(float(pull - (self.penalty(moved[0]) - self.penalty(moved[1])) / (2 * STEP)))
            gradients.append([float(g) for g in gradient])
        g, w = np.array(gradients), np.array([float(m) for m in mean])
        objective = self.log_likelihood(eta, counts) - self.penalty(vector)
        return objective, np.array(score), (g * w) @ g.T
