"""Tables for figures and files: amplitude against temperature, oscillation against field."""

from collections.abc import Sequence
from dataclasses import dataclass, fields

import numpy as np
from numpy.typing import ArrayLike, NDArray

from kondomf.effective import FourBandModel
from kondomf.errors import InputError
from kondomf.oscillations.levels import level_density_per_angstrom2, positive
from kondomf.oscillations.lifshitz_kosevich import dirac_cyclotron_mass, thermal_argument, thermal_factor
from kondomf.oscillations.pole_sum import NO_BROADENING, Broadening, pole_sum, unhybridized_frequency_T
from kondomf.units import BOHR_MAGNETON, BOLTZMANN, MEV

Array = NDArray[np.float64]

UNITS = {"grand_potential": "J/m^2", "magnetization": "A"}
"""Observables and the unit of their amplitude; a magnetisation per area in A is J/(T m^2)."""


@dataclass(frozen=True)
class AmplitudeTable:
    """Amplitude of one harmonic for fields (N_B,) and temperatures (N_T,); arrays are (N_B, N_T) unless noted.

    observable, unit: a key of UNITS and its unit; mass: cyclotron mass of the unhybridized electrons in m_e, of the
    first model; amplitude: modulus of the pole sum, in the unit; lk_amplitude: Lifshitz-Kosevich amplitude of the same
    Dirac electrons without hybridization and broadening, in the same unit; relative, lk_relative: both divided by their
    largest value at the same field; frequency_T: frequency of the pole sum.
    """

    observable: str
    unit: str
    harmonic: int
    mass: float
    fields_T: Array
    temperatures_K: Array
    amplitude: Array
    relative: Array
    lk_amplitude: Array
    lk_relative: Array
    frequency_T: Array

    def columns(self) -> dict[str, Array]:
        """One row per field and temperature, fields outermost: name of the column with its unit -> (N_B * N_T,)."""
        field, temperature = np.meshgrid(self.fields_T, self.temperatures_K, indexing="ij")
        table = {"field_T": field, "temperature_K": temperature}
        for name in ("amplitude", "lk_amplitude"):
            table[f"{self.observable}_{name}_{_SUFFIX[self.observable]}"] = getattr(self, name)
        table |= {"relative": self.relative, "lk_relative": self.lk_relative, "frequency_T": self.frequency_T}
        return {name: array.ravel() for name, array in table.items()}


_SUFFIX = {"grand_potential": "J_per_m2", "magnetization": "A"}


@dataclass(frozen=True)
class Trace:
    """Oscillation against field at one temperature, harmonics summed; arrays (N_B,).

    magnetization_A: -d(Omega)/dB per area; magnetization_muB_per_cell: the same in Bohr magnetons per unit cell.
    """

    temperature_K: float
    field_T: Array
    inverse_field_per_T: Array
    grand_potential_J_per_m2: Array
    magnetization_A: Array
    magnetization_muB_per_cell: Array

    def columns(self) -> dict[str, Array]:
        """Name of the column with its unit -> (N_B,)."""
        return {entry.name: getattr(self, entry.name) for entry in fields(self) if entry.name != "temperature_K"}


def lifshitz_kosevich_amplitude(
    model: FourBandModel,
    field_T: ArrayLike,
    temperature_K: ArrayLike,
    harmonic: int = 1,
    observable: str = "magnetization",
    *,
    fermi_level_meV: float = 0.0,
) -> Array:
    """Lifshitz-Kosevich amplitude of the model's Dirac electrons at b = 0, in the unit of the observable.

    Omega_p = k_B T N_phi / (p sinh(p X)),  M_p = (2 pi p F_osc / B^2) Omega_p. Shape (N_B, N_T).
    """
    _known(observable)
    field = positive("field_T", field_T)[:, None]
    temperature = positive("temperature_K", temperature_K)
    mass = dirac_cyclotron_mass(fermi_level_meV - model.dirac_energy_meV, model.hbar_v_meV_angstrom)
    x = np.maximum(harmonic * thermal_argument(temperature, field, mass), 1e-300)
    damped = thermal_factor(temperature, field, mass, harmonic) / x
    omega = BOLTZMANN * temperature / harmonic * level_density_per_angstrom2(model, field) * damped * MEV * 1e20
    if observable == "grand_potential":
        return np.asarray(omega)
    return np.asarray(2 * np.pi * harmonic * unhybridized_frequency_T(model, fermi_level_meV) / field**2 * omega)


def amplitude_table(
    model: FourBandModel | Sequence[FourBandModel],
    fields_T: ArrayLike,
    temperatures_K: ArrayLike,
    harmonic: int = 1,
    observable: str = "magnetization",
    *,
    fermi_level_meV: float = 0.0,
    broadening: Broadening = NO_BROADENING,
) -> AmplitudeTable:
    """Amplitudes for fields (N_B,) in tesla and temperatures (N_T,) in kelvin beside the Lifshitz-Kosevich curve.

    model: one model for all temperatures, or one for each, when its parameters depend on temperature.
    Raises InputError: a field or temperature not above zero, an unknown observable, a wrong number of models.
    """
    _known(observable)
    field, temperature = positive("fields_T", fields_T), positive("temperatures_K", temperatures_K)
    models = [model] * temperature.size if isinstance(model, FourBandModel) else list(model)
    if len(models) != temperature.size:
        raise InputError(f"{len(models)} models for {temperature.size} temperatures: give one model, or one for each")
    columns = [
        pole_sum(each, field, kelvin, harmonic, fermi_level_meV=fermi_level_meV, broadening=broadening)
        for each, kelvin in zip(models, temperature, strict=True)
    ]
    name = {"grand_potential": "grand_potential_J_per_m2", "magnetization": "magnetization_A"}[observable]
    amplitude = np.abs(np.concatenate([getattr(column, name) for column in columns], axis=1))
    textbook = lifshitz_kosevich_amplitude(
        models[0], field, temperature, harmonic, observable, fermi_level_meV=fermi_level_meV
    )
    distance = fermi_level_meV - models[0].dirac_energy_meV
    return AmplitudeTable(
        observable=observable,
        unit=UNITS[observable],
        harmonic=harmonic,
        mass=float(dirac_cyclotron_mass(distance, models[0].hbar_v_meV_angstrom)),
        fields_T=field,
        temperatures_K=temperature,
        amplitude=amplitude,
        relative=_relative(amplitude),
        lk_amplitude=textbook,
        lk_relative=_relative(textbook),
        frequency_T=np.concatenate([column.frequency_T for column in columns], axis=1),
    )


def trace(
    model: FourBandModel,
    fields_T: ArrayLike,
    temperature_K: float,
    harmonics: int = 10,
    *,
    fermi_level_meV: float = 0.0,
    broadening: Broadening = NO_BROADENING,
) -> Trace:
    """Oscillating grand potential and magnetisation at fields (N_B,) in tesla, harmonics 1 ... harmonics summed.

    Raises InputError: a field or temperature not above zero, harmonics below 1.
    """
    if harmonics < 1:
        raise InputError(f"harmonics = {harmonics}: give 1 or more")
    field = positive("fields_T", fields_T)
    parts = [
        pole_sum(model, field, temperature_K, p, fermi_level_meV=fermi_level_meV, broadening=broadening)
        for p in range(1, harmonics + 1)
    ]
    magnetization = np.sum([part.magnetization_A.real[:, 0] for part in parts], axis=0)
    return Trace(
        temperature_K=float(temperature_K),
        field_T=field,
        inverse_field_per_T=1 / field,
        grand_potential_J_per_m2=np.sum([part.grand_potential_J_per_m2.real[:, 0] for part in parts], axis=0),
        magnetization_A=magnetization,
        magnetization_muB_per_cell=magnetization * model.cell_area_angstrom2 / (BOHR_MAGNETON * MEV * 1e20),
    )


def _relative(amplitude: Array) -> Array:
    """Amplitudes divided by the largest of their row; a row of zeros stays zero."""
    largest = amplitude.max(axis=1, keepdims=True)
    return np.asarray(amplitude / np.where(largest > 0, largest, 1.0))


def _known(observable: str) -> None:
    if observable not in UNITS:
        raise InputError(f"observable = {observable!r}: give one of {', '.join(UNITS)}")
