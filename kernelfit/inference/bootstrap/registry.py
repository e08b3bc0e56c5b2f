"""Kinds of bootstrap by name."""

from __future__ import annotations

from kernelfit._validation import given_as
from kernelfit.errors import ArgumentError
from kernelfit.inference.bootstrap.block_weights import BlockWeights
from kernelfit.inference.bootstrap.kind import BootstrapKind
from kernelfit.inference.bootstrap.one_step import OneStep
from kernelfit.inference.bootstrap.parametric import Parametric

KINDS: dict[str, type[BootstrapKind]] = {kind.name: kind for kind in (OneStep, BlockWeights, Parametric)}


def kind_from(kind: str | BootstrapKind) -> BootstrapKind:
    """The kind of a name, with its default options.

    Raises
    ------
    ArgumentError : no such kind
    """
    if isinstance(kind, BootstrapKind):
        return kind
    if isinstance(kind, str) and kind in KINDS:
        return KINDS[kind]()
    names = ", ".join(repr(name) for name in KINDS)
    raise ArgumentError(
        f"{given_as('kind', kind)} is not known. Say {names}, or give kf.bootstrap.BlockWeights('multinomial')."
    )
