"""kernelfit: how strongly, how far and for how long a spike at one place changes firing at another."""

from kernelfit import kernels
from kernelfit.demo import load_demo
from kernelfit.engine.simulate import simulate_recording
from kernelfit.errors import FitWarning, KernelfitError, KernelfitWarning, Unavailable
from kernelfit.fitting.progress import Progress
from kernelfit.fitting.result import CouplingFit
from kernelfit.fitting.storage import load_fit
from kernelfit.inference import bootstrap
from kernelfit.model import terms
from kernelfit.model.coupling import CouplingModel
from kernelfit.recording.recording import Recording
from kernelfit.recording.table_writing import write_recording
from kernelfit.recording.tables import read_recording
from kernelfit.version import __version__

__all__ = [
    "CouplingFit",
    "CouplingModel",
    "FitWarning",
    "KernelfitError",
    "KernelfitWarning",
    "Progress",
    "Recording",
    "Unavailable",
    "__version__",
    "bootstrap",
    "kernels",
    "load_demo",
    "load_fit",
    "read_recording",
    "simulate_recording",
    "terms",
    "write_recording",
]
