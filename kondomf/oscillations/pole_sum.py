"""Oscillating grand potential and magnetisation of the four-band model, as a sum over Matsubara frequencies.

Let y = hbar v s k. An energy E is a level of the four-band model where

    (E - E_D - y)(E - epsilon_f - (u/v) y) = b^2,     l = y^2 / (2 e hbar v^2 B) = F / B,

so that at a complex energy each root y gives a complex level index l*(E) and a complex frequency F(E) = l* B, which
does not depend on the field. Poisson's formula for the sum over levels and the poles of the Fermi function give, for
the grand potential per area,

    Omega_osc = 2 T N_phi sum_p (1/p) Re sum_n sum_roots exp(2 pi i p F(E_n) / B),   E_n = mu + i omega_n,

with omega_n = pi T (2 n + 1) and N_phi = degeneracy * e B / h. Of F and its complex conjugate (the other sign of
omega_n) the one with Im F > 0 enters. A root counts if Re F > 0: only then does it lie on the path l = 0 ... infinity
when that is turned onto the imaginary axis. There is no term from l = 0, which counts half of l >= 1, once per cone.

Electron and spinon broadening Gamma_c, Gamma_f shift E by +-i Gamma in E - E_D and in E - epsilon_f (the sign of
omega_n). For b = 0 the sum over n is the Lifshitz-Kosevich formula with its corrections in T / E_D.

Source: Phys. Rev. Lett. 115, 146401 (2015), "Quantum oscillations without a Fermi surface and the anomalous de
Haas-van Alphen effect", for u = 0 and a band insulator; the method: Magnetic Oscillations in Metals (1984), chapter 2.
"""

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray

from kondomf.effective import FourBandModel
from kondomf.errors import InputError
from kondomf.oscillations.levels import dirac_scale_meV2, level_density_per_angstrom2, positive
from kondomf.oscillations.lifshitz_kosevich import dirac_frequency_T
from kondomf.units import BOLTZMANN, MEV

Array = NDArray[np.float64]
Complex = NDArray[np.complex128]

DROPPED = 45.0
"""Terms below exp(-45) of the largest one are left out, far below rounding."""
_MOST_FREQUENCIES = 10_000_000
_BLOCK = 1_000_000


@dataclass(frozen=True)
class Broadening:
    """Half widths of the levels in meV: electron_meV = Gamma_c = pi k_B T_Dingle, spinon_meV = Gamma_f, both >= 0."""

    electron_meV: float = 0.0
    spinon_meV: float = 0.0

    def __post_init__(self) -> None:
        for name in ("electron_meV", "spinon_meV"):
            if not 0 <= getattr(self, name) < np.inf:
                raise InputError(f"broadening {name} = {getattr(self, name):g}: give zero or a finite value above zero")


NO_BROADENING = Broadening()


@dataclass(frozen=True)
class Harmonic:
    """One harmonic p for fields (N_B,) and temperatures (N_T,); all arrays have shape (N_B, N_T).

    grand_potential_J_per_m2, magnetization_A: complex; the real parts are the oscillating grand potential per area and
    -d(Omega)/dB per area (J/(T m^2) = A), the moduli their amplitudes. frequency_T: (1/2 pi p) d(phase)/d(1/B) of the
    grand potential's sum over poles, NaN where no pole contributes.
    """

    harmonic: int
    grand_potential_J_per_m2: Complex
    magnetization_A: Complex
    frequency_T: Array


def kinetic_roots(model: FourBandModel, electron: Complex, spinon: Complex) -> Complex:
    """Roots y in meV of (electron - y)(spinon - (u/v) y) = b^2 for electron = E - E_D, spinon = E - epsilon_f.

    electron, spinon: meV, shape S. Returns shape S + (2,), or S + (1,) for u = 0, y = electron - b^2 / spinon.
    """
    ratio, b2 = model.velocity_ratio, model.b_meV**2
    if ratio == 0:
        return np.asarray(electron - b2 / spinon)[..., None]
    linear = spinon + ratio * electron
    constant = electron * spinon - b2
    root = np.sqrt((spinon - ratio * electron) ** 2 + 4 * ratio * b2)
    # Of the two signs of the square root the one that adds up: no cancellation for u << v.
    half = (linear + np.where((linear.conj() * root).real >= 0, root, -root)) / 2
    return np.stack([constant / half, half / ratio], axis=-1)


def complex_frequencies_T(
    model: FourBandModel, temperature_meV: float, fermi_level_meV: float, broadening: Broadening = NO_BROADENING
) -> Complex:
    """F(E_n) in tesla of all poles that contribute at k_B T, shape (M,), with Re F > 0 and Im F > 0.

    The roots obey |E - E_D - y| <= b or |E - epsilon_f - (u/v) y| <= b, so that Re F < 0 as soon as omega_n exceeds
    max(|mu - E_D|, |mu - epsilon_f|) + 2 b: the sum is finite and nothing is cut off here.

    Raises InputError if that needs more than 1e7 Matsubara frequencies.
    """
    electron = fermi_level_meV - model.dirac_energy_meV
    spinon = fermi_level_meV - model.heavy_level_meV
    highest = max(abs(electron), abs(spinon)) + 2 * abs(model.b_meV)
    count = int(highest / (2 * np.pi * temperature_meV)) + 1
    if count > _MOST_FREQUENCIES:
        lowest = highest / (2 * np.pi * _MOST_FREQUENCIES * BOLTZMANN)
        raise InputError(f"temperature {temperature_meV / BOLTZMANN:g} K: give at least {lowest:.1e} K for this model")
    omega = np.pi * temperature_meV * (2 * np.arange(count) + 1)
    y = kinetic_roots(
        model,
        np.asarray(electron + 1j * (omega + broadening.electron_meV)),
        np.asarray(spinon + 1j * (omega + broadening.spinon_meV)),
    )
    square = (y**2).ravel() / dirac_scale_meV2(model, 1.0)
    square = square[square.real > 0]
    return np.asarray(square.real + 1j * np.abs(square.imag))


def pole_sum(
    model: FourBandModel,
    field_T: ArrayLike,
    temperature_K: ArrayLike,
    harmonic: int = 1,
    *,
    fermi_level_meV: float = 0.0,
    broadening: Broadening = NO_BROADENING,
) -> Harmonic:
    """The harmonic p of grand potential and magnetisation for all pairs of fields (N_B,) and temperatures (N_T,).

    Raises InputError: a field or temperature that is not above zero, harmonic below 1, a temperature so low that it
    needs more than 1e7 Matsubara frequencies.
    """
    field = positive("field_T", field_T)
    temperature = BOLTZMANN * positive("temperature_K", temperature_K)
    if harmonic < 1:
        raise InputError(f"harmonic = {harmonic}: give 1 for the fundamental or a larger whole number")
    columns = [
        _sums(complex_frequencies_T(model, t, fermi_level_meV, broadening), field, harmonic) for t in temperature
    ]
    scale, zeroth, first = (np.stack(parts, axis=1) for parts in zip(*columns, strict=True))
    field = field[:, None]
    factor = 2 * temperature / harmonic * level_density_per_angstrom2(model, 1.0) * np.exp(scale) * MEV * 1e20
    mean = np.full(scale.shape, np.nan + 0j)
    np.divide(first, zeroth, out=mean, where=zeroth != 0)
    return Harmonic(
        harmonic=harmonic,
        grand_potential_J_per_m2=factor * field * zeroth,
        magnetization_A=-factor * (zeroth - 2j * np.pi * harmonic / field * first),
        frequency_T=mean.real,
    )


def _sums(frequencies: Complex, field: Array, harmonic: int) -> tuple[Array, Complex, Complex]:
    """sum exp(2 pi i p F / B) and sum F exp(2 pi i p F / B) over the poles F (M,), for fields (N,).

    Returns (s, S_0, S_1), each (N,): the sums are exp(s) S_0 and exp(s) S_1; where they underflow S_1 / S_0 does not.
    """
    if not frequencies.size:
        return np.zeros_like(field), np.zeros(field.size, complex), np.zeros(field.size, complex)
    lowest = frequencies.imag.min()
    decay = 2 * np.pi * harmonic * (frequencies.imag - lowest)
    frequencies = frequencies[decay <= DROPPED * field.max()]
    sums = []
    for part in np.array_split(field, 1 + frequencies.size * field.size // _BLOCK):
        terms = np.exp(2j * np.pi * harmonic * (frequencies - 1j * lowest) / part[:, None])
        sums.append(np.stack([terms.sum(axis=1), terms @ frequencies]))
    both: Complex = np.concatenate(sums, axis=1)
    return -2 * np.pi * harmonic * lowest / field, both[0], both[1]


def unhybridized_frequency_T(model: FourBandModel, fermi_level_meV: float = 0.0) -> float:
    """Frequency of the light electrons' line without hybridization, (mu - E_D)^2 / (2 e hbar v^2).

    This is what `Harmonic.frequency_T` tends to where pi k_B T or b dominates |mu - epsilon_f|.
    """
    return float(dirac_frequency_T(fermi_level_meV - model.dirac_energy_meV, model.hbar_v_meV_angstrom))


def fermi_line_frequencies_T(model: FourBandModel, fermi_level_meV: float = 0.0) -> list[float]:
    """Onsager frequencies of the lines where a hybridized band crosses the Fermi level, F(mu), ascending.

    `Harmonic.frequency_T` tends to one of them as T -> 0 in low fields, where the levels lie closer than b and
    |mu - epsilon_f|. Empty if mu lies in the hybridization gap. For u = 0 and mu = epsilon_f no finite line exists.
    """
    electron, spinon = fermi_level_meV - model.dirac_energy_meV, fermi_level_meV - model.heavy_level_meV
    if spinon == 0 and model.velocity_ratio == 0:
        return []
    y = kinetic_roots(model, np.array(electron + 0j), np.array(spinon + 0j))
    return sorted(float(dirac_frequency_T(root.real, model.hbar_v_meV_angstrom)) for root in y if root.imag == 0)
