"""How the two competing models let the amplitude depend on temperature and field, up to a factor.

Lifshitz-Kosevich in two dimensions at a fixed frequency, for the harmonic p and X = 2 pi^2 k_B T m / (hbar e B):

    magnetization  ~ R_T R_D,     grand potential  ~ B^2 R_T R_D,     R_T = p X / sinh(p X),  R_D = exp(-p X(T_D)).

Hybridized: modulus of the pole sum of the four-band model with a hybridization b that does not depend on temperature
or field, and the electron broadening Gamma_c = pi k_B T_D.

Source: Magnetic Oscillations in Metals (Cambridge University Press, 1984), chapter 2; `oscillations.pole_sum`.
"""

from abc import ABC, abstractmethod
from dataclasses import dataclass, replace
from typing import ClassVar

import numpy as np
from numpy.typing import NDArray

from kondomf.effective import FourBandModel
from kondomf.oscillations import (
    Broadening,
    dingle_broadening_meV,
    dingle_factor,
    dirac_cyclotron_mass,
    pole_sum,
    thermal_argument,
    thermal_factor,
)
from kondomf.units import BOLTZMANN

Array = NDArray[np.float64]


@dataclass(frozen=True)
class Shape(ABC):
    """A model of amplitude(T, B) up to a factor, with its free parameters: one above zero, then T_D if `dingle`.

    observable: magnetization or grand_potential; harmonic: p.
    """

    observable: str
    harmonic: int
    dingle: bool

    name: ClassVar[str]
    key: ClassVar[str]
    unit: ClassVar[str]
    own_mass: ClassVar[bool]
    """Does the first parameter set the mass of the Dingle factor?"""

    @property
    def parameters(self) -> tuple[tuple[str, str], ...]:
        """Name and unit of the parameters."""
        return ((self.key, self.unit), ("Dingle temperature", "K"))[: 1 + self.dingle]

    @abstractmethod
    def amplitude(self, values: Array, field_T: Array, temperature_K: Array) -> Array:
        """Amplitude for parameters `values` (P,) at the points (N,); N numbers of an arbitrary common unit."""

    @abstractmethod
    def grid(self, field_T: Array, temperature_K: Array) -> Array:
        """Values of the first parameter, ascending, over the range to which data at these points can respond."""

    @abstractmethod
    def mass(self, value: float) -> float:
        """Mass in m_e that governs the Dingle factor at this value of the first parameter."""


@dataclass(frozen=True)
class LifshitzKosevich(Shape):
    """Electrons of the free cyclotron mass m."""

    name = "Lifshitz-Kosevich"
    key = "mass"
    unit = "m_e"
    own_mass = True

    def amplitude(self, values: Array, field_T: Array, temperature_K: Array) -> Array:
        damped = thermal_factor(temperature_K, field_T, values[0], self.harmonic)
        if self.dingle:
            damped = damped * dingle_factor(values[1], field_T, values[0], self.harmonic)
        return damped if self.observable == "magnetization" else field_T**2 * damped

    def grid(self, field_T: Array, temperature_K: Array) -> Array:
        """From hardly damped at the highest T/B, p X = 0.05, to vanishing at the lowest, p X = 30."""
        ratio = self.harmonic * thermal_argument(temperature_K, field_T, 1.0)
        return np.geomspace(0.05 / ratio.max(), 30 / ratio.min(), 40)

    def mass(self, value: float) -> float:
        return value


@dataclass(frozen=True)
class Hybridized(Shape):
    """Four-band model with a free b; its E_D, v, epsilon_f and u stay as they are."""

    model: FourBandModel

    name = "hybridized"
    key = "hybridization b"
    unit = "meV"
    own_mass = False

    def amplitude(self, values: Array, field_T: Array, temperature_K: Array) -> Array:
        model = replace(self.model, b_meV=float(values[0]))
        dingle = float(values[1]) if self.dingle else 0.0
        broadening = Broadening(electron_meV=float(dingle_broadening_meV(dingle)))
        result = np.empty(field_T.shape)
        for kelvin in np.unique(temperature_K):
            rows = temperature_K == kelvin
            found = pole_sum(model, field_T[rows], kelvin, self.harmonic, broadening=broadening)
            magnetization = self.observable == "magnetization"
            complex_amplitude = found.magnetization_A if magnetization else found.grand_potential_J_per_m2
            result[rows] = np.abs(complex_amplitude[:, 0])
        return result

    def grid(self, field_T: Array, temperature_K: Array) -> Array:
        """The exponent of the first pole at epsilon_f = 0 is -kappa (pi k_B T + b^2 / (pi k_B T)), X = kappa pi k_B T.

        From kappa b^2 / (pi k_B T) = 1e-3 at most to b = 10 pi k_B T and kappa b = 20 at least.
        """
        thermal = np.pi * BOLTZMANN * temperature_K
        kappa = self.harmonic * thermal_argument(temperature_K, field_T, self.mass(0.0)) / thermal
        lowest = np.sqrt(1e-3 * (thermal / kappa).min())
        return np.geomspace(lowest, max(10 * thermal.max(), 20 / kappa.min()), 60)

    def mass(self, value: float) -> float:
        """The mass of the electrons without hybridization, whatever b is."""
        return float(dirac_cyclotron_mass(self.model.dirac_energy_meV, self.model.hbar_v_meV_angstrom))
