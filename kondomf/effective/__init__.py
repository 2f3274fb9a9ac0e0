"""Which few-parameter model describes the low energies?"""

from kondomf.effective.extract import Extraction, from_solution
from kondomf.effective.four_band import BandDeviation, FourBandModel, band_deviation, from_reduced, reduced_bands
from kondomf.effective.reduced import ReducedInputs, ReducedSolution, solve_reduced
from kondomf.effective.result import EffectiveResult, effective_model, read_model

__all__ = [
    "BandDeviation",
    "EffectiveResult",
    "Extraction",
    "FourBandModel",
    "ReducedInputs",
    "ReducedSolution",
    "band_deviation",
    "effective_model",
    "from_reduced",
    "from_solution",
    "read_model",
    "reduced_bands",
    "solve_reduced",
]
