"""What would a magnetometer or a transport probe see?"""

from kondomf.oscillations.curves import AmplitudeTable, Trace, amplitude_table, lifshitz_kosevich_amplitude, trace
from kondomf.oscillations.levels import dirac_scale_meV2, landau_levels_meV, level_density_per_angstrom2
from kondomf.oscillations.lifshitz_kosevich import (
    dingle_broadening_meV,
    dingle_factor,
    dirac_cyclotron_mass,
    dirac_frequency_T,
    onsager_area_per_angstrom2,
    onsager_frequency_T,
    thermal_argument,
    thermal_factor,
)
from kondomf.oscillations.pole_sum import (
    NO_BROADENING,
    Broadening,
    Harmonic,
    fermi_line_frequencies_T,
    pole_sum,
    unhybridized_frequency_T,
)
from kondomf.oscillations.predict import Prediction, predict

__all__ = [
    "NO_BROADENING",
    "AmplitudeTable",
    "Broadening",
    "Harmonic",
    "Prediction",
    "Trace",
    "amplitude_table",
    "dingle_broadening_meV",
    "dingle_factor",
    "dirac_cyclotron_mass",
    "dirac_frequency_T",
    "dirac_scale_meV2",
    "fermi_line_frequencies_T",
    "landau_levels_meV",
    "level_density_per_angstrom2",
    "lifshitz_kosevich_amplitude",
    "onsager_area_per_angstrom2",
    "onsager_frequency_T",
    "pole_sum",
    "predict",
    "thermal_argument",
    "thermal_factor",
    "trace",
    "unhybridized_frequency_T",
]
