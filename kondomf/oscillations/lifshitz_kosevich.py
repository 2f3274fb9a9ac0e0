"""Textbook relations of quantum oscillations: damping factors, Onsager's relation, cyclotron mass of a Dirac electron.

Source: Magnetic Oscillations in Metals (Cambridge University Press, 1984), chapters 2 and 3; the Dirac electron: Rev.
Mod. Phys. 81, 109 (2009), "The electronic properties of graphene".
Masses are in units of the free-electron mass. All functions broadcast their arguments.
"""

import numpy as np
from numpy.typing import ArrayLike, NDArray

from kondomf.units import BOLTZMANN, ELECTRON_MASS, FLUX_DENSITY, FREQUENCY_PER_AREA, HBAR, MEV

Array = NDArray[np.float64]

KELVIN_FACTOR = 2 * np.pi**2 * BOLTZMANN * ELECTRON_MASS / (HBAR**2 * MEV * FLUX_DENSITY * 1e20)
"""2 pi^2 k_B m_e / (hbar e) = 14.69 T/K, the constant of X = 14.69 (m / m_e) T / B."""


def thermal_argument(temperature_K: ArrayLike, field_T: ArrayLike, mass: ArrayLike) -> Array:
    """X = 2 pi^2 k_B T m / (hbar e B), dimensionless."""
    return np.asarray(KELVIN_FACTOR * np.asarray(mass) * np.asarray(temperature_K) / np.asarray(field_T))


def thermal_factor(temperature_K: ArrayLike, field_T: ArrayLike, mass: ArrayLike, harmonic: int = 1) -> Array:
    """R_T = p X / sinh(p X) of the harmonic p, between 0 and 1; no overflow for large X."""
    x = np.maximum(harmonic * thermal_argument(temperature_K, field_T, mass), 1e-300)
    return np.asarray(-2 * x * np.exp(-x) / np.expm1(-2 * x))


def dingle_factor(dingle_temperature_K: ArrayLike, field_T: ArrayLike, mass: ArrayLike, harmonic: int = 1) -> Array:
    """R_D = exp(-p X(T_D)), the damping by a level broadening Gamma = pi k_B T_D."""
    return np.asarray(np.exp(-harmonic * thermal_argument(dingle_temperature_K, field_T, mass)))


def dingle_broadening_meV(dingle_temperature_K: ArrayLike) -> Array:
    """Gamma = pi k_B T_D in meV."""
    return np.asarray(np.pi * BOLTZMANN * np.asarray(dingle_temperature_K, dtype=float))


def onsager_frequency_T(area_per_angstrom2: ArrayLike) -> Array:
    """F_osc = hbar A / (2 pi e) in tesla for an extremal area A in 1/angstrom^2."""
    return np.asarray(FREQUENCY_PER_AREA * np.asarray(area_per_angstrom2))


def onsager_area_per_angstrom2(frequency_T: ArrayLike) -> Array:
    """A = 2 pi e F_osc / hbar in 1/angstrom^2."""
    return np.asarray(np.asarray(frequency_T) / FREQUENCY_PER_AREA)


def dirac_cyclotron_mass(energy_meV: ArrayLike, hbar_v_meV_angstrom: ArrayLike) -> Array:
    """m / m_e = |E| / (m_e v^2) of a Dirac electron whose Fermi level lies E from the Dirac point."""
    velocity = np.asarray(hbar_v_meV_angstrom) * 1e-10 / HBAR
    return np.asarray(np.abs(energy_meV) * MEV / (ELECTRON_MASS * velocity**2))


def dirac_frequency_T(energy_meV: ArrayLike, hbar_v_meV_angstrom: ArrayLike) -> Array:
    """F_osc = E^2 / (2 e hbar v^2) of the circle |k| = |E| / hbar v."""
    return onsager_frequency_T(np.pi * (np.asarray(energy_meV) / np.asarray(hbar_v_meV_angstrom)) ** 2)
