"""Which few-parameter model describes the low energies?"""

from kondomf.effective.four_band import BandDeviation, FourBandModel, band_deviation, from_reduced, reduced_bands
from kondomf.effective.reduced import ReducedInputs, ReducedSolution, solve_reduced

__all__ = [
    "BandDeviation",
    "FourBandModel",
    "ReducedInputs",
    "ReducedSolution",
    "band_deviation",
    "from_reduced",
    "reduced_bands",
    "solve_reduced",
]
