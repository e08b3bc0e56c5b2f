"""The invented demo recording and the truth it was made from.

Its tables lie in `datasets/` of a checkout and in `demo_data/` of an installed package.
"""

from __future__ import annotations

import json
from dataclasses import dataclass
from importlib.resources import files
from pathlib import Path

import numpy as np
import pandas as pd

from kernelfit._typing import FloatArray
from kernelfit.errors import StorageError
from kernelfit.kernels.base import KernelCurve
from kernelfit.kernels.parametric import Gaussian
from kernelfit.recording.recording import Recording
from kernelfit.recording.tables import read_recording

SPIKES, SITES, WINDOWS, TRUTH = "demo.spikes.csv.gz", "demo.sites.csv", "demo.windows.csv", "demo.truth.json"


@dataclass(frozen=True, eq=False)
class DemoTruth:
    """What the demo recording was simulated from.

    Parameters
    ----------
    scenario : the invented preparation, in a few sentences
    amplitude : jump of the drive per spike at `reference_um` (log rate ratio)
    length_um : length of the gaussian kernel, µm
    reference_um : distance at which the amplitude is stated, µm
    leak_rate : 1/s
    link : name of the rate link
    bin_width : seconds, of the simulation
    after_spike_constants_s, after_spike_coefficients : (M,) seconds, and what a unit's own spike adds to its
        drive, fading with them; alike for all units
    seed : of the simulation
    unit_ids : in the order of the sites table
    baseline_hz : (n_units,) rate of each unit without any coupling, Hz; 0 for the unit that never fired
    """

    scenario: str
    amplitude: float
    length_um: float
    reference_um: float
    leak_rate: float
    link: str
    bin_width: float
    after_spike_constants_s: FloatArray
    after_spike_coefficients: FloatArray
    seed: int
    unit_ids: tuple[str, ...]
    baseline_hz: FloatArray

    @property
    def kernel(self) -> KernelCurve:
        """The true J, a function of the distance in µm."""
        return Gaussian().at(amplitude=self.amplitude, length_um=self.length_um, reference_um=self.reference_um)

    @property
    def parameters(self) -> pd.DataFrame:
        """By name as in `CouplingFit.parameters`: value, unit."""
        return pd.DataFrame(
            {
                "value": [self.amplitude, self.length_um, self.leak_rate],
                "unit": ["per spike", "µm", "1/s"],
            },
            index=pd.Index(["amplitude", "length_um", "leak_rate"], name="name"),
        )

    @property
    def baselines(self) -> pd.DataFrame:
        """By unit: rate_hz, the rate without any coupling, Hz."""
        return pd.DataFrame(
            {"rate_hz": np.array(self.baseline_hz)}, index=pd.Index(self.unit_ids, name="unit", dtype=object)
        )


def load_demo() -> Recording:
    """The demo recording, read from its tables as any other recording.

    Raises
    ------
    StorageError : the installation lacks the tables
    """
    return read_recording(_table(SPIKES), _table(SITES), _table(WINDOWS))


def load_demo_truth() -> DemoTruth:
    """What the demo recording was made from.

    Raises
    ------
    StorageError : the installation lacks the file
    """
    stored = json.loads(_table(TRUTH).read_text(encoding="utf-8"))
    return DemoTruth(
        scenario=stored["scenario"],
        amplitude=stored["kernel"]["amplitude"],
        length_um=stored["kernel"]["length_um"],
        reference_um=stored["kernel"]["reference_um"],
        leak_rate=stored["leak_rate"],
        link=stored["link"],
        bin_width=stored["bin_width_s"],
        after_spike_constants_s=np.array(stored["after_spike"]["time_constants_s"]),
        after_spike_coefficients=np.array(stored["after_spike"]["coefficients"]),
        seed=stored["seed"],
        unit_ids=tuple(stored["baseline_hz"]),
        baseline_hz=np.array(list(stored["baseline_hz"].values()), dtype=np.float64),
    )


def _table(name: str) -> Path:
    """Path of one of the demo's files, in the installed package or in the checkout."""
    package = Path(str(files("kernelfit")))
    for folder in (package / "demo_data", package.parent / "datasets"):
        if (folder / name).is_file():
            return folder / name
    raise StorageError(f"{name}: not in this installation of kernelfit, which lacks the demo. Install it again.")
