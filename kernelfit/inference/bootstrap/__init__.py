"""Bootstrap of a fit: kinds, weights on blocks of time, the result (docs/model.md section 8)."""

from kernelfit.inference.bootstrap.block_weights import BlockWeights
from kernelfit.inference.bootstrap.kind import BootstrapKind
from kernelfit.inference.bootstrap.one_step import OneStep
from kernelfit.inference.bootstrap.parametric import Parametric
from kernelfit.inference.bootstrap.registry import KINDS, kind_from
from kernelfit.inference.bootstrap.replicated import Replicated
from kernelfit.inference.bootstrap.result import Bootstrap
from kernelfit.inference.bootstrap.run import BootstrapProgress, BootstrapProgressCallback
from kernelfit.inference.bootstrap.weight_laws import WEIGHT_LAWS, WeightLaw

__all__ = [
    "KINDS",
    "WEIGHT_LAWS",
    "BlockWeights",
    "Bootstrap",
    "BootstrapKind",
    "BootstrapProgress",
    "BootstrapProgressCallback",
    "OneStep",
    "Parametric",
    "Replicated",
    "WeightLaw",
    "kind_from",
]
