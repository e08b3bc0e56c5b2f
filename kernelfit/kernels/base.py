"""What a distance law is: names, J(d), its derivatives, bounds and starts.

Objects hold options, never parameters. A new family is a subclass of `Kernel` with a name, `parameters`,
`value` and `gradient`; everything else has a default that follows from the parameters. Parameters travel on
their **working scale** (amplitudes as they are, lengths and exponents as logarithms); `natural` turns them
into what a reader wants.
"""

from __future__ import annotations

from abc import ABC, abstractmethod
from dataclasses import dataclass, field, fields
from itertools import product
from typing import ClassVar, Literal

import numpy as np
from numpy.typing import ArrayLike

from kernelfit._typing import BoolArray, FloatArray
from kernelfit._validation import DISTANCES, given_as, is_number, is_whole, numbers
from kernelfit.errors import ArgumentError, NotIdentifiedError

SHORTEST_IN_REFERENCES = 0.2  # lengths are bounded to [d_ref / 5, 5 x largest distance]
LONGEST_IN_LARGEST = 5.0
START_AMPLITUDE = 0.01  # per spike; a start at 0 would leave the shape without a derivative
START_SEPARATION = np.log(2.0)  # starts closer than a factor of two would end in the same optimum
SAME_DISTANCE_UM = 1e-6  # distances closer than this are one: equal ones on a grid differ by rounding
GRID_POINTS = {1: 24, 2: 12}  # points per shape parameter on the coarse grid; more than two parameters: 6
EXPONENT_CEILING = 600.0  # exp of more overflows; reached only by lengths far below the bounds

SmoothingChoice = Literal["likelihood", "validation"]  # who chooses a smoothing parameter where no number is given


@dataclass(frozen=True, slots=True)
class DistanceRange:
    """The distances a kernel is asked about.

    Parameters
    ----------
    reference_um : distance at which amplitudes are stated, µm
    smallest_um, largest_um : smallest and largest distance of the pairs in the kernel, µm
    n_coordinates : number of coordinates of a position, 1 to 3

    Raises
    ------
    ArgumentError : a reference not above zero; distances negative, not finite or out of order
    """

    reference_um: float
    smallest_um: float
    largest_um: float
    n_coordinates: int = 2

    def __post_init__(self) -> None:
        require_positive("reference_um", self.reference_um)
        known = is_number(self.smallest_um) and is_number(self.largest_um)
        if not (known and 0.0 <= self.smallest_um <= self.largest_um):
            raise ArgumentError(
                f"{given_as('smallest_um', self.smallest_um)}, {given_as('largest_um', self.largest_um)}: the range "
                "of distances must be finite, not negative, and in this order. Check the positions."
            )
        if not (is_whole(self.n_coordinates) and self.n_coordinates in (1, 2, 3)):
            raise ArgumentError(
                f"{given_as('n_coordinates', self.n_coordinates)}: a position has 1, 2 or 3 coordinates."
            )

    @property
    def length_limits(self) -> tuple[float, float]:
        """Shortest and longest length a kernel may be given on these distances, µm."""
        # max(): with a small max_distance the largest distance of the kernel can lie far below the reference
        longest = LONGEST_IN_LARGEST * max(self.largest_um, self.reference_um)
        return SHORTEST_IN_REFERENCES * self.reference_um, longest


@dataclass(frozen=True, slots=True)
class Parameter:
    """One parameter of a kernel.

    Parameters
    ----------
    name : as it stands in tables, with the unit of length in it ("length_um")
    unit : "per spike", "µm" or ""
    scale : how the working value maps to the natural one: "linear" (as it is) or "log" (its exponential)
    shape : True where J is not linear in it; the others are found by least squares given the shape
    discrete : True where J jumps in it: it is profiled over candidates, and its derivative is stated as zero
    lower, upper : bounds on the natural scale. None: no bound for a linear parameter, and
        `DistanceRange.length_limits` for a log one in µm. Any other shape parameter must be given both.

    Raises
    ------
    ArgumentError : a shape parameter without the bounds it needs, or bounds out of order
    """

    name: str
    unit: str
    scale: Literal["linear", "log"] = "linear"
    shape: bool = False
    discrete: bool = False
    lower: float | None = None
    upper: float | None = None

    def __post_init__(self) -> None:
        bounded = self.lower is not None and self.upper is not None
        if self.shape and not bounded and not self.is_length:
            raise ArgumentError(
                f"parameter {self.name!r}: a shape parameter needs bounds. Give lower and upper."
            )
        if self.lower is not None and self.upper is not None and not self.lower < self.upper:
            raise ArgumentError(
                f"parameter {self.name!r}: lower={self.lower} is not under upper={self.upper}."
            )
        if self.scale == "log" and self.lower is not None and self.lower <= 0:
            raise ArgumentError(
                f"parameter {self.name!r}: lower={self.lower} has no logarithm; take one above 0."
            )

    @property
    def is_length(self) -> bool:
        """True for a length on the log scale, whose bounds follow from the distances."""
        return self.scale == "log" and self.unit == "µm"

    def limits(self, span: DistanceRange) -> tuple[float, float]:
        """Lower and upper bound on the natural scale, infinite where there is none."""
        lowest = 0.0 if self.scale == "log" else -np.inf
        default = span.length_limits if self.is_length else (lowest, np.inf)
        return (
            default[0] if self.lower is None else self.lower,
            default[1] if self.upper is None else self.upper,
        )

    def to_working(self, natural: FloatArray | float) -> FloatArray:
        """Natural value(s) on the working scale."""
        value = np.asarray(natural, dtype=np.float64)
        if self.scale == "linear":
            return value
        with np.errstate(divide="ignore"):  # a bound of 0 is -inf on the log scale
            return np.asarray(np.log(value), dtype=np.float64)


AMPLITUDE = Parameter("amplitude", "per spike")
LENGTH = Parameter("length_um", "µm", scale="log", shape=True)


@dataclass(frozen=True)
class Kernel(ABC):
    """Coupling J against distance d (µm). Subclasses are frozen dataclasses whose fields are options.

    K is the number of parameters, m the number of distances. `theta` is always on the working scale; `span`
    says which distances the kernel is asked about and where amplitudes are stated.

    Parameters
    ----------
    ridge : weight r of the penalty r/2 sum a^2 on the amplitudes a (every parameter that is not a shape), as if each
        came from a normal distribution about 0 with standard deviation 1/sqrt(r) per spike; 0, the default: none

    Raises
    ------
    ArgumentError : a ridge that is not a finite number, 0 or above
    """

    name: ClassVar[str]
    ridge: float = field(default=0.0, kw_only=True)

    def __post_init__(self) -> None:
        if not (is_number(self.ridge) and self.ridge >= 0):
            raise ArgumentError(f"ridge={self.ridge!r}: must be a finite number, 0 or above.")
        object.__setattr__(self, "ridge", float(self.ridge))  # numpy's numbers cannot be written as JSON

    # --- what a family must say -----------------------------------------------------------------------

    @abstractmethod
    def parameters(self, span: DistanceRange) -> tuple[Parameter, ...]:
        """The parameters, in the order of theta."""

    @abstractmethod
    def value(self, theta: FloatArray, d_um: FloatArray, span: DistanceRange) -> FloatArray:
        """J at each distance, (m,), effect per spike, from theta (K,) and distances (m,) in µm."""

    @abstractmethod
    def gradient(self, theta: FloatArray, d_um: FloatArray, span: DistanceRange) -> FloatArray:
        """dJ/dtheta, (K, m), with theta on the working scale; zero in a discrete parameter."""

    # --- scales and bounds ----------------------------------------------------------------------------

    def natural(self, theta: FloatArray, span: DistanceRange) -> FloatArray:
        """(K,) the parameters as a reader wants them: amplitudes per spike, lengths in µm."""
        is_log = self._is_log(span)
        return np.where(is_log, np.exp(np.where(is_log, theta, 0.0)), theta)

    def natural_jacobian(self, theta: FloatArray, span: DistanceRange) -> FloatArray:
        """(K, K) derivative of natural parameter (row) by working parameter (column)."""
        return np.diag(np.where(self._is_log(span), self.natural(theta, span), 1.0))

    def working(self, natural: FloatArray, span: DistanceRange) -> FloatArray:
        """(K,) inverse of `natural`."""
        parameters = self.parameters(span)
        return np.array([float(p.to_working(v)) for p, v in zip(parameters, natural, strict=True)])

    def bounds(self, span: DistanceRange) -> FloatArray:
        """(K, 2) lower and upper bound on the working scale, infinite where there is none."""
        return np.array([p.to_working(np.array(p.limits(span))) for p in self.parameters(span)])

    def bound_reason(self, k: int, upper: bool, span: DistanceRange) -> str:
        """Why parameter k cannot go past its upper (or lower) bound, in words for the reader of a fit."""
        parameter = self.parameters(span)[k]
        limit = parameter.limits(span)[int(upper)]
        if not np.isfinite(self.bounds(span)[k, int(upper)]):
            return f"{parameter.name} has no bound on this side"
        if parameter.is_length and upper:
            return (
                f"longer than {limit:.4g} µm, five times the largest distance of the array: cannot be told "
                "from a kernel that does not change with distance"
            )
        if parameter.is_length:
            return (
                f"shorter than {limit:.4g} µm, a fifth of the reference distance: the array has no pairs "
                "close enough to see the kernel fall"
            )
        return f"{'above' if upper else 'below'} {limit:.4g}, where the family's own range ends"

    # --- starts ---------------------------------------------------------------------------------------

    def shape_grid(self, span: DistanceRange) -> FloatArray:
        """(G, K) coarse grid of working thetas over the shape parameters; amplitudes are placeholders.

        Lengths run from half the reference to twice the largest distance, other shape parameters between
        their bounds; without shape parameters the grid is one row.
        """
        parameters = self.parameters(span)
        n_points = GRID_POINTS.get(sum(p.shape for p in parameters), 6)
        axes: list[FloatArray] = []
        for p, (low, high) in zip(parameters, self.bounds(span), strict=True):
            if not p.shape:
                axes.append(np.array([START_AMPLITUDE]))
                continue
            if p.is_length and p.lower is None and p.upper is None:
                low = max(low, np.log(0.5 * span.reference_um))
                high = min(high, np.log(2.0 * max(span.largest_um, span.reference_um)))
            axes.append(np.linspace(low, high, n_points))
        return np.array(list(product(*axes)), dtype=np.float64)

    def start_shapes(self, distance_um: FloatArray, span: DistanceRange) -> FloatArray:
        """(G, K) working thetas whose shapes `starts` tries, given the distances (µm) of its points."""
        return self.shape_grid(span)

    def starts(
        self,
        distance_um: FloatArray,
        coupling: FloatArray,
        weight: FloatArray,
        span: DistanceRange,
        n: int = 3,
    ) -> list[FloatArray]:
        """Start values from an empirical kernel: each shape on the coarse grid with its best amplitudes.

        Parameters
        ----------
        distance_um, coupling, weight : (m,) distances, rough estimates of J there, their inverse variances;
            points that are not finite or have no weight are left out
        n : how many starts at most; they differ by a factor of two in at least one shape parameter

        Returns
        -------
        At least one theta (K,) on the working scale, within the bounds, the best fit first.
        """
        keep = np.isfinite(distance_um) & np.isfinite(coupling) & np.isfinite(weight) & (weight > 0)
        d, target = distance_um[keep], coupling[keep]
        root = np.sqrt(weight[keep] / weight[keep].max()) if keep.any() else np.empty(0)
        linear = np.array([not p.shape for p in self.parameters(span)])
        penalty = self.penalty(span)
        candidates: list[tuple[float, FloatArray]] = []
        for row in self.start_shapes(d, span):
            theta = row.copy()
            residual = 0.0
            if d.size:
                basis = self.gradient(theta, d, span)[linear].T
                theta[linear], residual = _least_squares(basis, target, root, _part(penalty, linear))
            candidates.append((residual, theta))
        return _apart([theta for _, theta in sorted(candidates, key=lambda c: c[0])], ~linear, n)

    # --- what the data must carry ---------------------------------------------------------------------

    def penalty(self, span: DistanceRange) -> FloatArray | None:
        """(K, K) S of the quadratic penalty 1/2 theta' S theta taken off the log-likelihood, or None."""
        if self.ridge == 0:
            return None
        return np.diag([0.0 if p.shape else self.ridge for p in self.parameters(span)])

    def roughness(self, span: DistanceRange) -> FloatArray | None:
        """(K, K) R of the part 1/2 smoothing theta' R theta of the penalty; None for a family without smoothing."""
        return None

    @property
    def smoothing_choice(self) -> SmoothingChoice | None:
        """Who chooses the smoothing, where the data are to."""
        return None

    def with_smoothing(self, value: float) -> Kernel:
        """The same kernel with this number for its smoothing.

        Raises
        ------
        ArgumentError : a family without smoothing
        """
        raise ArgumentError(f"kernel {self.name!r} has no smoothing. Use kf.kernels.Spline.")

    @property
    def smoothest(self) -> str:
        """What is left of the kernel under endless smoothing, in words."""
        return "the kernel as it is"

    def check_identified(self, distinct_um: FloatArray, span: DistanceRange) -> tuple[str, ...]:
        """Can these distances carry the parameters? Sentences a reader must know; usually none.

        Parameters
        ----------
        distinct_um : (D,) sorted distinct distances of the pairs in the kernel, µm

        Raises
        ------
        NotIdentifiedError : fewer distinct distances than parameters
        """
        n_parameters = len(self.parameters(span))
        if distinct_um.size >= n_parameters:
            return ()
        shown = ", ".join(f"{d:.4g}" for d in distinct_um)
        raise NotIdentifiedError(
            f"The kernel {self.name!r} has {n_parameters} parameters, and the pairs in it have only "
            f"{distinct_um.size} distinct distance{'s' * (distinct_um.size != 1)} ({shown} µm): its shape "
            "cannot be estimated. Use kernel='flat', raise max_distance, or record from more sites."
        )

    def radius_candidates(self, distinct_um: FloatArray) -> FloatArray | None:
        """Values (µm) over which a discrete length is profiled, or None where the family has none."""
        return None

    # --- as a function, as a description --------------------------------------------------------------

    def curve(self, theta: FloatArray, span: DistanceRange) -> KernelCurve:
        """The kernel at these parameters (working scale), as a function of distance."""
        return KernelCurve(self, theta, span)

    def describe(self) -> dict[str, float | int | str]:
        """The options by name, ready for JSON; `kernel_from_description` reads them back. A ridge of 0 goes unsaid."""
        return {f.name: getattr(self, f.name) for f in fields(self) if f.name != "ridge" or self.ridge != 0}

    def _is_log(self, span: DistanceRange) -> BoolArray:
        return np.array([p.scale == "log" for p in self.parameters(span)])


@dataclass(frozen=True, eq=False)
class KernelCurve:
    """A kernel with its parameters: call it with distances in µm to get J, the effect per spike.

    Parameters
    ----------
    kernel : the family with its options
    theta : (K,) parameters on the working scale; a copy is kept, read-only
    span : distances it was made for; `span.reference_um` is where its amplitude is stated

    Raises
    ------
    ArgumentError : parameters that are not finite or not as many as the family has
    """

    kernel: Kernel
    theta: FloatArray
    span: DistanceRange

    def __post_init__(self) -> None:
        theta = np.array(self.theta, dtype=np.float64)
        names = [p.name for p in self.kernel.parameters(self.span)]
        if theta.shape != (len(names),) or not np.isfinite(theta).all():
            raise ArgumentError(
                f"theta={theta.tolist()}: the kernel {self.kernel.name!r} needs {len(names)} finite values "
                f"({', '.join(names)})."
            )
        theta.setflags(write=False)
        object.__setattr__(self, "theta", theta)

    def __call__(self, distance_um: ArrayLike) -> FloatArray:
        """J at each distance, in the shape of `distance_um`.

        Raises
        ------
        ArgumentError : a distance that is negative or not finite
        """
        d = numbers(distance_um, "distance_um", DISTANCES, least=0.0)
        return self.kernel.value(self.theta, d.ravel(), self.span).reshape(d.shape)

    @property
    def reference_um(self) -> float:
        """Distance at which amplitudes are stated, µm."""
        return self.span.reference_um

    @property
    def natural(self) -> dict[str, float]:
        """The parameters by name on their natural scale."""
        values = self.kernel.natural(self.theta, self.span)
        return {p.name: float(v) for p, v in zip(self.kernel.parameters(self.span), values, strict=True)}

    def __repr__(self) -> str:
        inside = ", ".join(f"{name}={value:.4g}" for name, value in self.natural.items())
        return f"KernelCurve({self.kernel.name}: {inside}, reference_um={self.reference_um:.4g})"


# --- small parts shared by the families -------------------------------------------------------------------


def require_positive(name: str, value: object) -> None:
    """Refuse a value that is not a finite number above zero (ArgumentError)."""
    if not (is_number(value) and value > 0):
        raise ArgumentError(f"{given_as(name, value)} must be a finite number above 0.")


def require_number(name: str, value: object) -> None:
    """Refuse a value that is not a finite number (ArgumentError)."""
    if not is_number(value):
        raise ArgumentError(f"{given_as(name, value)} must be a finite number.")


def at_reference(reference_um: float, n_coordinates: int = 2) -> DistanceRange:
    """The range of a kernel that is stated by hand, where no array gives the distances."""
    require_positive("reference_um", reference_um)
    return DistanceRange(reference_um, reference_um, reference_um, n_coordinates)


def exponential(x: FloatArray) -> FloatArray:
    """exp(x), capped where it would overflow."""
    return np.asarray(np.exp(np.minimum(x, EXPONENT_CEILING)), dtype=np.float64)


def _part(penalty: FloatArray | None, linear: BoolArray) -> FloatArray | None:
    return None if penalty is None else penalty[np.ix_(linear, linear)]


def _least_squares(
    basis: FloatArray, target: FloatArray, root_weight: FloatArray, penalty: FloatArray | None
) -> tuple[FloatArray, float]:
    """Weighted (penalised) least squares: coefficients and residual sum of squares. Any rank will do."""
    design, y = basis * root_weight[:, None], target * root_weight
    if penalty is not None:
        value, vector = np.linalg.eigh(penalty)
        design = np.vstack([design, (vector * np.sqrt(np.maximum(value, 0.0))).T])
        y = np.concatenate([y, np.zeros(len(value))])
    size = np.linalg.norm(design, axis=0)
    size[size == 0] = 1.0
    scaled, *_ = np.linalg.lstsq(design / size, y, rcond=1e-10)
    coefficients = np.asarray(scaled / size, dtype=np.float64)
    return coefficients, float(np.sum((y - design @ coefficients) ** 2))


def _apart(ranked: list[FloatArray], shape: BoolArray, n: int) -> list[FloatArray]:
    """The first n that differ from every better one by `START_SEPARATION` in some shape parameter."""
    chosen = ranked[:1]
    for theta in ranked[1:]:
        if len(chosen) >= n:
            break
        gaps = [np.max(np.abs(theta - other)[shape], initial=0.0) for other in chosen]
        if min(gaps) >= START_SEPARATION:
            chosen.append(theta)
    return chosen
