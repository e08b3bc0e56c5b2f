"""The families by name. A new one is one class in one file, and one line here."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import fields
from difflib import get_close_matches
from typing import cast

from kernelfit._validation import given_as
from kernelfit.errors import ArgumentError
from kernelfit.kernels.base import Kernel
from kernelfit.kernels.centre_surround import DifferenceOfGaussians, MexicanHat
from kernelfit.kernels.disc import Disc
from kernelfit.kernels.parametric import Exponential, Flat, Gaussian, PowerLaw
from kernelfit.kernels.spline import Spline

KERNELS: dict[str, type[Kernel]] = {
    Flat.name: Flat,
    Exponential.name: Exponential,
    Gaussian.name: Gaussian,
    PowerLaw.name: PowerLaw,
    DifferenceOfGaussians.name: DifferenceOfGaussians,
    MexicanHat.name: MexicanHat,
    Disc.name: Disc,
    Spline.name: Spline,
}


def kernel_from(kernel: str | Kernel) -> Kernel:
    """The kernel meant by a name (with its default options) or by an object (as it is).

    Raises
    ------
    ArgumentError : no family of that name, or neither a name nor a kernel
    """
    if isinstance(kernel, Kernel):
        return kernel
    if isinstance(kernel, str):
        return _family(kernel)()
    if isinstance(kernel, type) and issubclass(kernel, Kernel):
        raise ArgumentError(f"kernel={kernel.__name__}: a class; make an object: {kernel.__name__}().")
    raise ArgumentError(
        f"{given_as('kernel', kernel)}: need a name ({', '.join(KERNELS)}) or an object: kernels.Gaussian()."
    )


def kernel_from_description(name: str, options: Mapping[str, float | int | str]) -> Kernel:
    """The kernel whose `name` and `describe()` these are.

    Raises
    ------
    ArgumentError : no family of that name, an option it does not have, or a value out of range
    """
    family = _family(name)
    known = sorted((f.name for f in fields(family)), key=lambda option: option == "ridge")  # the common one last
    unknown = sorted(set(options) - set(known))
    if unknown:
        raise ArgumentError(
            f"kernel {name!r}: no option {unknown[0]!r}. Its options: {', '.join(known) or 'none'}."
        )
    make = cast(Callable[..., Kernel], family)  # each family has options of its own
    return make(**options)


def _family(name: str) -> type[Kernel]:
    if name in KERNELS:
        return KERNELS[name]
    close = get_close_matches(name.lower().replace("_", "-").replace(" ", "-"), KERNELS, n=1)
    meant = f" Did you mean {close[0]!r}?" if close else ""
    raise ArgumentError(f"kernel={name!r}: no such kernel.{meant} Known: {', '.join(KERNELS)}.")
