"""What does a measurement say about the parameters?"""

from kondomf.measured.amplitudes import AmplitudeData, read_amplitudes
from kondomf.measured.fit import FitResult, fit_amplitudes
from kondomf.measured.search import ModelFit, Parameter
from kondomf.measured.shapes import Hybridized, LifshitzKosevich, Shape

__all__ = [
    "AmplitudeData",
    "FitResult",
    "Hybridized",
    "LifshitzKosevich",
    "ModelFit",
    "Parameter",
    "Shape",
    "fit_amplitudes",
    "read_amplitudes",
]
