"""Does the model describe the recording? Time rescaling, KS tests, independence, gain over constant rates."""

from kernelfit.diagnostics.goodness import Goodness, KsCurve, goodness_of_fit, saturated_log_likelihood
from kernelfit.diagnostics.independence import SerialIndependence

__all__ = ["Goodness", "KsCurve", "SerialIndependence", "goodness_of_fit", "saturated_log_likelihood"]
