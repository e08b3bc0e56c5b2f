"""Distance laws: how coupling depends on distance. They know distances and parameters, and no data."""

from kernelfit.kernels.base import DistanceRange, Kernel, KernelCurve, Parameter
from kernelfit.kernels.geometry import PairGeometry, pair_geometry, same_site_labels
from kernelfit.kernels.parametric import Exponential, Flat, Gaussian, PowerLaw

__all__ = [
    "DistanceRange",
    "Exponential",
    "Flat",
    "Gaussian",
    "Kernel",
    "KernelCurve",
    "PairGeometry",
    "Parameter",
    "PowerLaw",
    "pair_geometry",
    "same_site_labels",
]
