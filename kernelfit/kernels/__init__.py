"""Distance laws: how coupling depends on distance. They know distances and parameters, and no data."""

from kernelfit.kernels.base import DistanceRange, Kernel, KernelCurve, Parameter, SmoothingChoice
from kernelfit.kernels.centre_surround import DifferenceOfGaussians, MexicanHat
from kernelfit.kernels.disc import Disc
from kernelfit.kernels.geometry import PairGeometry, pair_geometry, same_site_labels
from kernelfit.kernels.parametric import Exponential, Flat, Gaussian, PowerLaw
from kernelfit.kernels.registry import KERNELS, kernel_from, kernel_from_description
from kernelfit.kernels.spline import Spline, difference_penalty

__all__ = [
    "KERNELS",
    "DifferenceOfGaussians",
    "Disc",
    "DistanceRange",
    "Exponential",
    "Flat",
    "Gaussian",
    "Kernel",
    "KernelCurve",
    "MexicanHat",
    "PairGeometry",
    "Parameter",
    "PowerLaw",
    "SmoothingChoice",
    "Spline",
    "difference_penalty",
    "kernel_from",
    "kernel_from_description",
    "pair_geometry",
    "same_site_labels",
]
