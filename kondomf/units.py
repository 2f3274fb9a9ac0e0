"""Physical constants in the package's units: meV, K, angstrom, tesla (CODATA 2018; exact where the SI fixes them)."""

from scipy import constants as _si

MEV = _si.e * 1e-3
"""One millielectronvolt in joule."""
BOLTZMANN = _si.k / MEV
"""k_B in meV/K."""
BOHR_MAGNETON = _si.physical_constants["Bohr magneton"][0] / MEV
"""mu_B in meV/T."""
HBAR = _si.hbar / MEV
"""hbar in meV s."""
ELECTRON_MASS = _si.m_e
"""Free-electron mass in kg."""
FLUX_DENSITY = _si.e / _si.hbar * 1e-20
"""e/hbar in 1/(T angstrom^2): a field B in tesla times this is the inverse magnetic length squared, in 1/angstrom^2."""
FREQUENCY_PER_AREA = _si.hbar / (2 * _si.pi * _si.e) * 1e20
"""Onsager's hbar/(2 pi e): oscillation frequency in tesla of a k-space area in 1/angstrom^2."""


def velocity_m_per_s(hbar_v: float) -> float:
    """Velocity in m/s of a slope hbar*v given in meV angstrom."""
    return hbar_v * 1e-10 / HBAR
