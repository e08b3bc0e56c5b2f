"""Holding one parameter people read at a value, while everything else is climbed.

Most natural parameters are one working parameter: it is held. Where a natural parameter mixes several (an amplitude of
the difference of Gaussians), the kernel is written in other coordinates, of which it is one: the working parameter in
which it is linear gives its place to it. The likelihood is the same function; nothing but the coordinates changes.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import ClassVar

import numpy as np
from scipy.optimize import brentq

from kernelfit._typing import BoolArray, FloatArray
from kernelfit.errors import Unavailable
from kernelfit.fitting.bounds import shared_names
from kernelfit.fitting.problem import Estimate, Problem, leak_reason
from kernelfit.kernels import DistanceRange, Kernel
from kernelfit.kernels.base import Parameter

STRAIGHT = 1e-9  # relative departure from a straight line that is rounding


@dataclass(frozen=True, eq=False)
class Held:
    """A natural parameter as a coordinate x that can be held: logarithm of the value, or the value.

    Parameters
    ----------
    name, unit : as in the table of parameters
    on_log : whether x is the logarithm
    place : of x among the shared parameters of `problem`
    problem : the model in coordinates of which x is one
    beside : further shared parameters that stay where they are
    """

    name: str
    unit: str
    on_log: bool
    place: int
    problem: Problem
    beside: tuple[int, ...] = ()

    @property
    def mask(self) -> BoolArray:
        """(Q,) True for what is held."""
        mask = np.zeros(self.problem.n_shared, dtype=bool)
        mask[[self.place, *self.beside]] = True
        return mask

    def value(self, x: float) -> float:
        """The parameter as people read it."""
        return float(np.exp(x)) if self.on_log else float(x)

    def coordinate(self, value: float) -> float:
        """x of a value."""
        return float(np.log(value)) if self.on_log else float(value)

    def at(self, x: float) -> Problem:
        """The problem with the bounds that the other parameters have where x is held."""
        kernel = self.problem.kernel
        return self.problem.with_kernel(replace(kernel, held=x)) if isinstance(kernel, Reparametrised) else self.problem

    def limits(self) -> tuple[float, float]:
        """Lowest and highest x, infinite where there is none."""
        low, high = self.problem.bounds[self.place]
        return float(low), float(high)

    def limit_reason(self, upper: bool) -> str:
        """Why x cannot go past that limit, in words."""
        if self.place < self.problem.n_kernel:
            return self.problem.kernel.bound_reason(self.place, upper, self.problem.span)
        return leak_reason(self.problem.data.bin_width, upper=upper)

    def into(self, estimate: Estimate) -> Estimate:
        """An estimate of the fit in these coordinates."""
        return self._kernel_part(estimate, inward=True)

    def back(self, estimate: Estimate) -> Estimate:
        """An estimate in these coordinates as the fit has it."""
        return self._kernel_part(estimate, inward=False)

    def gradient(self, shared: FloatArray) -> FloatArray:
        """(Q,) derivative of x by the fit's working parameters, `shared` being these."""
        unit = np.zeros(shared.size)
        kernel = self.problem.kernel
        if isinstance(kernel, Reparametrised):
            n = self.problem.n_kernel
            unit[:n] = kernel.row(shared[:n], self.problem.span)
        else:
            unit[self.place] = 1.0
        return unit

    def _kernel_part(self, estimate: Estimate, inward: bool) -> Estimate:
        kernel = self.problem.kernel
        if not isinstance(kernel, Reparametrised):
            return estimate
        shared = estimate.shared.copy()
        n = self.problem.n_kernel
        change = kernel.outer if inward else kernel.theta
        shared[:n] = change(shared[:n], self.problem.span)
        return Estimate(estimate.own, shared)


def hold(problem: Problem, shared: FloatArray, name: str, taken: tuple[int, ...] = ()) -> Held | Unavailable:
    """The coordinate of a shared parameter, or the reason why it has none.

    Parameters
    ----------
    problem : the model on its recording
    shared : (Q,) the fit's working parameters
    name : as in the table of parameters; one of `shared_names`
    taken : working parameters that are held already and cannot give their place
    """
    k = shared_names(problem).index(name)
    kernel, span, theta = problem.kernel, problem.span, shared[: problem.n_kernel]
    beside = tuple(q for q, p in enumerate(kernel.parameters(span)) if p.discrete and q != k)  # cannot be climbed
    if k >= problem.n_kernel:
        leak = problem.fits_leak and k == problem.n_shared - 1
        return Held(name, "1/s" if leak else "per spike", leak, k, problem, beside)
    parameter = kernel.parameters(span)[k]
    on_log = parameter.scale == "log"
    used = np.flatnonzero(kernel.natural_jacobian(theta, span)[k])
    if parameter.discrete:
        return Unavailable(f"the likelihood jumps in {name}: it is profiled over the distances of the array")
    if used.size == 1 and used[0] == k:
        if k in taken:
            return Unavailable(f"{name} and the other parameter share a coordinate, and cannot be held together")
        return Held(name, parameter.unit, on_log, k, problem, beside)
    if kernel.penalty(span) is not None:
        return Unavailable(f"{name} mixes several parameters of a kernel with a penalty, which profiles do not handle")
    for place in used:
        other = Reparametrised(kernel, k, int(place))
        if int(place) not in taken and other.is_straight(theta, span):
            return Held(name, parameter.unit, on_log, int(place), problem.with_kernel(other), beside)
    return Unavailable(f"{name} mixes several parameters of the kernel and is linear in none that could give its place")


@dataclass(frozen=True)
class Reparametrised(Kernel):
    """A kernel with one of its natural parameters, on its own scale, in the place of one of its working parameters.

    Parameters
    ----------
    inner : the kernel
    natural_place : which natural parameter
    place : which working parameter, one in which the natural one is linear, gives its place
    held : the value at which it is held; the other parameters' bounds follow from it
    """

    name: ClassVar[str] = "reparametrised"
    inner: Kernel
    natural_place: int
    place: int
    held: float | None = None

    def parameters(self, span: DistanceRange) -> tuple[Parameter, ...]:
        return self.inner.parameters(span)

    def value(self, theta: FloatArray, d_um: FloatArray, span: DistanceRange) -> FloatArray:
        return self.inner.value(self.theta(theta, span), d_um, span)

    def gradient(self, theta: FloatArray, d_um: FloatArray, span: DistanceRange) -> FloatArray:
        inner = self.theta(theta, span)
        change = np.eye(inner.size)
        change[self.place] = self.row(inner, span)
        return np.asarray(np.linalg.solve(change.T, self.inner.gradient(inner, d_um, span)))

    def bounds(self, span: DistanceRange) -> FloatArray:
        bounds = self.inner.bounds(span).copy()
        own = bounds[self.place].copy()
        bounds[self.place] = self._limits(span)
        if self.held is None or not np.isfinite(own).all():
            return bounds
        for i in self._others(span):
            bounds[i] = self._kept_inside(i, bounds[i], own, span)
        return bounds

    def bound_reason(self, k: int, upper: bool, span: DistanceRange) -> str:
        return self.inner.bound_reason(self.natural_place if k == self.place else k, upper, span)

    # --- from one set of coordinates to the other -------------------------------------------------------

    def theta(self, outer: FloatArray, span: DistanceRange) -> FloatArray:
        """(K,) working parameters of the inner kernel."""
        theta = np.array(outer, dtype=np.float64)
        theta[self.place] = 0.0
        start = self._natural(theta, span)
        theta[self.place] = 1.0
        theta[self.place] = (outer[self.place] - start) / (self._natural(theta, span) - start)
        return theta

    def outer(self, theta: FloatArray, span: DistanceRange) -> FloatArray:
        """(K,) these coordinates of the inner kernel's working parameters."""
        outer = np.array(theta, dtype=np.float64)
        outer[self.place] = self._natural(theta, span)
        return outer

    def row(self, theta: FloatArray, span: DistanceRange) -> FloatArray:
        """(K,) derivative of the natural parameter, on its own scale, by the inner working parameters."""
        row = self.inner.natural_jacobian(theta, span)[self.natural_place]
        return np.asarray(row / np.exp(self._natural(theta, span)) if self._on_log(span) else row)

    def is_straight(self, theta: FloatArray, span: DistanceRange) -> bool:
        """Whether the natural parameter is linear in the working one whose place it takes, and bounds can be kept."""
        back = self.theta(self.outer(theta, span), span)
        near = bool(np.allclose(back, theta, rtol=STRAIGHT, atol=STRAIGHT))
        bounded = bool(np.isfinite(self.inner.bounds(span)[self.place]).all())
        return near and (not bounded or len(self._others(span)) == 1)

    def _natural(self, theta: FloatArray, span: DistanceRange) -> float:
        value = float(self.inner.natural(theta, span)[self.natural_place])
        return float(np.log(value)) if self._on_log(span) else value

    def _on_log(self, span: DistanceRange) -> bool:
        return self.inner.parameters(span)[self.natural_place].scale == "log"

    def _others(self, span: DistanceRange) -> list[int]:
        """Other bounded working parameters that the natural one depends on."""
        bounds = self.inner.bounds(span)
        bounded = np.asarray(np.isfinite(bounds).all(axis=1))
        somewhere = np.where(bounded[:, None], bounds, 1.0).mean(axis=1)
        used = np.flatnonzero(self.inner.natural_jacobian(somewhere, span)[self.natural_place])
        return [int(i) for i in used if i != self.place and bounded[i]]

    def _limits(self, span: DistanceRange) -> tuple[float, float]:
        """Range of the natural parameter: its own limits, and what the inner bounds leave of them."""
        parameter, bounds = self.inner.parameters(span)[self.natural_place], self.inner.bounds(span)
        low, high = (float(v) for v in parameter.to_working(np.array(parameter.limits(span))))
        if not np.isfinite(bounds[self.place]).all():
            return low, high
        theta = np.where(np.isfinite(bounds), bounds, 0.0)
        ends = [self._natural(theta[:, side], span) for side in (0, 1)]
        return max(low, min(ends)), min(high, max(ends))

    def _kept_inside(self, i: int, limits: FloatArray, own: FloatArray, span: DistanceRange) -> FloatArray:
        """Limits of parameter i between which the one that gave its place stays within its own."""

        def beyond(t: float, bound: float) -> float:
            outer = np.zeros(len(self.parameters(span)))
            outer[i], outer[self.place] = t, self.held
            return float(self.theta(outer, span)[self.place]) - bound

        low, high = float(limits[0]), float(limits[1])
        for bound, inward in ((own[0], 1.0), (own[1], -1.0)):
            at_low, at_high = (inward * beyond(t, float(bound)) for t in (low, high))
            if at_low < 0.0 < at_high:
                low = float(brentq(beyond, low, high, args=(float(bound),)))
            elif at_high < 0.0 < at_low:
                high = float(brentq(beyond, low, high, args=(float(bound),)))
        return np.array([low, high])
