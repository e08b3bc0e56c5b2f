"""kernelfit: how strongly, how far and for how long a spike at one place changes firing at another."""

from kernelfit.errors import KernelfitError, KernelfitWarning, Unavailable
from kernelfit.recording.recording import Recording
from kernelfit.recording.table_writing import write_recording
from kernelfit.recording.tables import read_recording

__version__ = "0.1.0"

__all__ = [
    "KernelfitError",
    "KernelfitWarning",
    "Recording",
    "Unavailable",
    "__version__",
    "read_recording",
    "write_recording",
]
