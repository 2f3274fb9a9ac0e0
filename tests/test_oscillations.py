"""Laws of the pole sum: exact levels, textbook limits, and what hybridization changes."""

from dataclasses import replace
from functools import cache

import numpy as np
import pytest
from scipy import constants
from scipy.special import erfc

from kondomf.effective import FourBandModel
from kondomf.errors import InputError
from kondomf.oscillations import (
    Broadening,
    amplitude_table,
    dingle_broadening_meV,
    dingle_factor,
    dirac_cyclotron_mass,
    dirac_frequency_T,
    dirac_scale_meV2,
    fermi_line_frequencies_T,
    landau_levels_meV,
    level_density_per_angstrom2,
    lifshitz_kosevich_amplitude,
    onsager_area_per_angstrom2,
    onsager_frequency_T,
    pole_sum,
    thermal_argument,
    thermal_factor,
    trace,
    unhybridized_frequency_T,
)
from kondomf.units import BOHR_MAGNETON, BOLTZMANN, FLUX_DENSITY, HBAR, MEV

SLOPE = HBAR * 1e16
"""hbar v in meV angstrom of v = 10^6 m/s."""
FIELD = 114.0**2 / (2 * SLOPE**2 * FLUX_DENSITY)
"""Field in tesla at which 2 e hbar v^2 B = (114 meV)^2."""
LIGHT = FourBandModel(
    b_meV=0.0, dirac_energy_meV=600.0, hbar_v_meV_angstrom=SLOPE, heavy_level_meV=0.0, cell_area_angstrom2=24.0
)
"""Dirac electrons 600 meV below their Dirac point: about 28 levels at FIELD."""


@cache
def _brute_force(model, field, temperature, fermi_level, shifts):
    """Omega per area (J/m^2) of the exact levels minus their smooth background, and its fundamental.

    The grand potential of level l, times a window that is 1 around the Fermi level's orbits and 0 (to 1e-12) at l = 0,
    is summed over l = j + integers for `shifts` values of j in [0, 1). The mean over j is the smooth background, the
    first Fourier coefficient the fundamental: no use is made of Matsubara sums or poles.
    """
    scale = float(dirac_scale_meV2(model, field))
    index = (fermi_level - model.dirac_energy_meV) ** 2 / scale
    level = np.arange(int(2.2 * index) + 40)[:, None] + np.arange(shifts) / shifts
    window = erfc((level - 1.6 * index - 8) / 1.7) * erfc((0.4 * index - level) / 1.7) / 4
    y = np.sqrt(scale * level)
    energy = np.concatenate([model.energies(y), model.energies(-y)], axis=-1)
    omega = -temperature * np.logaddexp(0, -(energy - fermi_level) / temperature).sum(-1)
    total = (window * omega).sum(axis=0) * float(level_density_per_angstrom2(model, field)) * MEV * 1e20
    fundamental = 2 * np.real((total * np.exp(-2j * np.pi * np.arange(shifts) / shifts)).mean())
    return total[0] - total.mean(), fundamental


def _summed_harmonics(model, fields, temperature, fermi_level, harmonics):
    parts = [
        pole_sum(model, fields, temperature / BOLTZMANN, p, fermi_level_meV=fermi_level).grand_potential_J_per_m2[:, 0]
        for p in range(1, harmonics + 1)
    ]
    return np.real(np.sum(parts, axis=0)), np.abs(parts[0]).max()


@pytest.mark.parametrize("fermi_level", [0.0, 1.0, 3.0])
@pytest.mark.parametrize("temperature", [0.1, 0.4, 1.6])
@pytest.mark.parametrize("b", [1.0, 2.0])
@pytest.mark.parametrize("dirac_energy", [600.0, -600.0])
def test_pole_sum_is_the_sum_over_exact_levels_point_by_point(dirac_energy, b, temperature, fermi_level):
    model = replace(LIGHT, b_meV=b, dirac_energy_meV=dirac_energy)
    fields = np.linspace(0.93, 1.0, 12) * FIELD
    expected = [_brute_force(model, field, temperature, fermi_level, 144)[0] for field in fields]
    found, amplitude = _summed_harmonics(model, fields, temperature, fermi_level, 100)
    assert np.abs(found - expected).max() < 5e-9 * amplitude


@pytest.mark.parametrize("fermi_level", [0.0, 2.0])
@pytest.mark.parametrize("temperature", [0.2, 0.6, 2.0])
@pytest.mark.parametrize("b", [0.0, 0.5, 1.5, 5.0])
def test_amplitude_is_that_of_the_exact_levels_over_ten_periods(b, temperature, fermi_level):
    """Least squares of the exact fundamental on real and imaginary part of the predicted one: 1 and 0."""
    model = replace(LIGHT, b_meV=b)
    fields = 1 / np.linspace(1 / FIELD, 1 / FIELD + 11 / unhybridized_frequency_T(model, fermi_level), 90)
    exact = np.array([_brute_force(model, field, temperature, fermi_level, 32)[1] for field in fields])
    predicted = pole_sum(model, fields, temperature / BOLTZMANN, fermi_level_meV=fermi_level)
    wave = predicted.grand_potential_J_per_m2[:, 0]
    largest = np.abs(pole_sum(LIGHT, FIELD, 0.1).grand_potential_J_per_m2).max()
    assert np.abs(wave).max() > 1e-6 * largest
    scale = 1 / np.abs(wave)
    fit = np.linalg.lstsq(np.stack([wave.real * scale, -wave.imag * scale], axis=1), exact * scale)[0]
    assert fit == pytest.approx([1, 0], abs=1e-3)


@pytest.mark.parametrize(
    ("b", "heavy_level", "ratio", "temperature", "fermi_level"),
    [
        (0.0, -50.0, 0.1, 0.2, 0.0),
        (20.0, -50.0, 0.1, 0.2, 0.0),
        (20.0, 150.0, 0.3, 0.4, 1.0),
        (20.0, 150.0, -0.3, 0.4, 1.0),
        (5.0, 0.0, -0.001, 0.4, 1.0),
        (1.0, 0.0, -0.0004, 0.2, 0.5),
    ],
)
def test_pole_sum_with_spinon_velocity_is_the_sum_over_exact_levels(b, heavy_level, ratio, temperature, fermi_level):
    """In the first four cases the spinons have a Fermi line of their own, with more than ten levels inside."""
    model = replace(LIGHT, b_meV=b, heavy_level_meV=heavy_level, hbar_u_meV_angstrom=ratio * SLOPE)
    fields = np.linspace(0.93, 1.0, 10) * FIELD
    expected = [_brute_force(model, field, temperature, fermi_level, 128)[0] for field in fields]
    found, amplitude = _summed_harmonics(model, fields, temperature, fermi_level, 64)
    assert np.abs(found - expected).max() < 2e-8 * amplitude


def test_landau_levels_are_those_of_the_ladder_operator_matrix():
    """k.sigma = sqrt(2 e B / hbar) [[0, a], [a^+, 0]] on upper oscillator states 0 ... N-1, lower 0 ... N (closed)."""
    model = FourBandModel(
        b_meV=3.0,
        dirac_energy_meV=40.0,
        hbar_v_meV_angstrom=5000.0,
        heavy_level_meV=-2.0,
        hbar_u_meV_angstrom=-700.0,
        cell_area_angstrom2=24.0,
    )
    highest, field = 6, 8.0
    k_sigma = np.zeros((2 * highest + 1, 2 * highest + 1))
    for n in range(highest):
        k_sigma[n, highest + n + 1] = k_sigma[highest + n + 1, n] = np.sqrt(2 * FLUX_DENSITY * field * (n + 1))
    one = np.eye(2 * highest + 1)
    h = np.block([[40 * one + 5000 * k_sigma, 3 * one], [3 * one, -2 * one - 700 * k_sigma]])
    zeroth, rest = landau_levels_meV(model, field, highest)
    assert rest.shape == (1, highest, 4)
    assert np.sort(np.concatenate([zeroth, rest.ravel()])) == pytest.approx(np.linalg.eigvalsh(h), abs=1e-9)


def test_first_landau_level_of_a_dirac_electron_is_36_meV_at_one_tesla():
    """Rev. Mod. Phys. 81, 109 (2009), "The electronic properties of graphene": sqrt(2 e hbar v^2 B)."""
    zeroth, rest = landau_levels_meV(replace(LIGHT, dirac_energy_meV=0.0, heavy_level_meV=-1e4), 1.0, 1)
    assert zeroth.max() == pytest.approx(0, abs=1e-12)
    assert rest.max() == pytest.approx(36.3, abs=0.05)


def test_thermal_damping_is_the_textbook_factor():
    """X = 14.69 (m/m_e) T/B and R_T = X / sinh X: Magnetic Oscillations in Metals (1984), chapter 2."""
    assert thermal_argument(1.0, 1.0, 1.0) == pytest.approx(14.69, abs=0.005)
    x = thermal_argument(2.0, 10.0, 0.5)
    assert thermal_factor(2.0, 10.0, 0.5, harmonic=3) == pytest.approx(3 * x / np.sinh(3 * x))
    assert thermal_factor([0.0, 1e9], 1.0, 1.0) == pytest.approx([1.0, 0.0])


def test_frequency_of_a_dirac_line_follows_from_the_carrier_density():
    """F_osc = h n / (4 e) for two spins and two valleys (Luttinger's count), 10.3 T at 10^12 per cm^2."""
    k = 0.02
    density = 4 * k**2 / (4 * np.pi) * 1e20
    frequency = constants.h * density / (4 * constants.e)
    assert onsager_frequency_T(np.pi * k**2) == pytest.approx(frequency, rel=1e-9)
    assert dirac_frequency_T(SLOPE * k, SLOPE) == pytest.approx(frequency, rel=1e-9)
    assert onsager_area_per_angstrom2(frequency) == pytest.approx(np.pi * k**2, rel=1e-9)


def test_cyclotron_mass_is_the_derivative_of_the_area_with_energy():
    """m = (hbar^2 / 2 pi) dA/dE: Magnetic Oscillations in Metals (1984), chapter 2."""
    energy, step = 100.0, 1e-3
    area = [np.pi * ((energy + sign * step) / SLOPE) ** 2 * 1e20 for sign in (1, -1)]
    mass = constants.hbar**2 / (2 * np.pi) * (area[0] - area[1]) / (2 * step * MEV) / constants.m_e
    assert dirac_cyclotron_mass(energy, SLOPE) == pytest.approx(mass, rel=1e-6)


@pytest.mark.parametrize("observable", ["grand_potential", "magnetization"])
def test_without_hybridization_the_amplitude_is_that_of_lifshitz_and_kosevich(observable):
    """Up to terms of the order k_B T / E_D."""
    temperatures = np.array([1.0, 4.0, 10.0])
    table = amplitude_table(LIGHT, [5.0, 10.0], temperatures, observable=observable)
    textbook = lifshitz_kosevich_amplitude(LIGHT, [5.0, 10.0], temperatures, observable=observable)
    assert table.amplitude == pytest.approx(textbook, rel=2e-3)
    assert table.lk_amplitude == pytest.approx(textbook)
    mass = dirac_cyclotron_mass(600.0, SLOPE)
    expected = thermal_factor(temperatures, 5.0, mass) / thermal_factor(temperatures[0], 5.0, mass)
    assert table.lk_relative[0] == pytest.approx(expected)


def test_dirac_electrons_have_the_berry_phase_pi():
    """The levels pass mu at F_osc / B = l, not l + 1/2, and the grand potential is largest there: the phase is zero up
    to the correction -1 / (4 pi l) that the curvature of l*(E) leaves at T = 0."""
    level = np.array([30.0, 41.0, 52.0])
    wave = pole_sum(LIGHT, unhybridized_frequency_T(LIGHT) / level, 0.05).grand_potential_J_per_m2[:, 0]
    assert np.angle(wave) == pytest.approx(-1 / (4 * np.pi * level), rel=0.02)


@pytest.mark.parametrize("b", [0.0, 2.0])
def test_magnetization_is_minus_the_derivative_of_the_grand_potential(b):
    model = replace(LIGHT, b_meV=b, heavy_level_meV=1.0, hbar_u_meV_angstrom=-0.002 * SLOPE)
    for harmonic in (1, 3):
        step = 1e-5
        up, down = (
            pole_sum(model, FIELD + sign * step, 5.0, harmonic).grand_potential_J_per_m2[0, 0] for sign in (1, -1)
        )
        found = pole_sum(model, FIELD, 5.0, harmonic).magnetization_A[0, 0]
        assert abs(found + (up - down) / (2 * step)) < 1e-7 * abs(found)


def test_hybridization_makes_the_amplitude_rise_with_temperature_before_it_falls():
    """Phys. Rev. Lett. 115, 146401 (2015): for mu at the heavy level the leading factor is exp(-c (w + b^2 / w)) with
    w = pi k_B T, which is largest at w = b; the prefactor T moves the maximum a little up."""
    temperatures = np.linspace(0.3, 30, 400)
    peaks = []
    for b in (1.0, 2.0):
        relative = amplitude_table(replace(LIGHT, b_meV=b), FIELD, temperatures).relative[0]
        peak = int(relative.argmax())
        assert relative[0] < 0.9
        assert 0 < peak < temperatures.size - 1
        peaks.append(temperatures[peak] * np.pi * BOLTZMANN / b)
    assert (np.diff(amplitude_table(LIGHT, FIELD, temperatures).relative[0]) < 0).all()
    assert min(peaks) > 0.3
    assert max(peaks) < 2


def test_frequency_is_the_slope_of_the_phase():
    model = replace(LIGHT, b_meV=2.0, heavy_level_meV=-1.0, hbar_u_meV_angstrom=-0.001 * SLOPE)
    step = 1e-7
    phases = [
        np.angle(pole_sum(model, 1 / (0.1 + sign * step), 5.0, 2).grand_potential_J_per_m2[0, 0]) for sign in (1, -1)
    ]
    slope = np.angle(np.exp(1j * (phases[0] - phases[1]))) / (2 * step * 2 * np.pi * 2)
    assert pole_sum(model, 10.0, 5.0, 2).frequency_T[0, 0] == pytest.approx(slope, rel=1e-6)


def test_frequency_goes_from_the_hybridized_fermi_line_to_the_unhybridized_one_with_temperature():
    model = replace(LIGHT, b_meV=5.0, heavy_level_meV=2.0)
    cold, warm = pole_sum(model, 1.0, [0.01, 40.0]).frequency_T[0]
    assert fermi_line_frequencies_T(model) == pytest.approx([cold], rel=1e-4)
    assert abs(cold / unhybridized_frequency_T(model) - 1) > 0.03
    assert warm == pytest.approx(unhybridized_frequency_T(model), rel=3e-3)


@pytest.mark.parametrize(("ratio", "lines"), [(-0.001, 0), (0.001, 2)])
def test_no_fermi_line_exists_where_the_levels_are_gapped(ratio, lines):
    """Opposite slopes of electrons and spinons open a gap at mu, equal ones only shift the crossing."""
    model = replace(LIGHT, b_meV=20.0, heavy_level_meV=0.6, hbar_u_meV_angstrom=ratio * SLOPE)
    gap = np.abs(model.energies(np.linspace(-3000, 3000, 60001))).min()
    assert (gap > 0.03) == (lines == 0)
    frequencies = fermi_line_frequencies_T(model)
    assert len(frequencies) == lines
    for frequency in frequencies:
        y = np.sqrt(frequency * dirac_scale_meV2(model, 1.0))
        assert np.abs(np.append(model.energies(y), model.energies(-y))).min() < 1e-9


def test_electron_broadening_is_the_dingle_factor():
    temperature = 3.0
    broad = Broadening(electron_meV=float(dingle_broadening_meV(temperature)))
    sharp, damped = (
        np.abs(pole_sum(LIGHT, 10.0, 4.0, broadening=width).magnetization_A) for width in (Broadening(), broad)
    )
    factor = float(dingle_factor(temperature, 10.0, dirac_cyclotron_mass(600.0, SLOPE)))
    assert (damped / sharp)[0, 0] == pytest.approx(factor, rel=2e-3)


def test_spinon_broadening_leaves_unhybridized_electrons_alone():
    width = Broadening(spinon_meV=0.5)
    plain = pole_sum(LIGHT, 10.0, 4.0).magnetization_A
    assert pole_sum(LIGHT, 10.0, 4.0, broadening=width).magnetization_A == pytest.approx(plain)
    mixed = replace(LIGHT, b_meV=1.0)
    sharp, broad = (pole_sum(mixed, 10.0, 1.0, broadening=each).magnetization_A for each in (Broadening(), width))
    assert abs(broad / sharp - 1).max() > 0.01


def test_vanishing_amplitudes_neither_overflow_nor_lose_their_frequency():
    model = replace(LIGHT, b_meV=30.0)
    table = amplitude_table(model, [0.01, 0.5], [0.1, 300.0])
    assert np.isfinite(table.amplitude).all()
    assert table.amplitude[0, 0] == 0
    assert np.isfinite(table.frequency_T).all()


def test_fermi_level_at_the_dirac_point_does_not_oscillate():
    found = pole_sum(replace(LIGHT, dirac_energy_meV=0.0), 10.0, 1.0)
    assert (found.grand_potential_J_per_m2 == 0).all()
    assert np.isnan(found.frequency_T).all()


def test_trace_sums_the_harmonics_and_converts_to_bohr_magnetons():
    model = replace(LIGHT, b_meV=1.0)
    fields = np.linspace(9, 10, 5)
    found = trace(model, fields, 4.0, harmonics=2)
    parts = [pole_sum(model, fields, 4.0, p).magnetization_A.real[:, 0] for p in (1, 2)]
    assert found.magnetization_A == pytest.approx(parts[0] + parts[1])
    moment = found.magnetization_A * model.cell_area_angstrom2 * 1e-20
    assert found.magnetization_muB_per_cell == pytest.approx(moment / (BOHR_MAGNETON * MEV))
    assert found.inverse_field_per_T == pytest.approx(1 / fields)
    assert {len(column) for column in found.columns().values()} == {5}


def test_table_with_a_model_for_each_temperature_has_the_columns_of_the_single_ones():
    models = [replace(LIGHT, b_meV=b) for b in (2.0, 1.0, 0.0)]
    temperatures = [1.0, 2.0, 5.0]
    table = amplitude_table(models, [5.0, 10.0], temperatures)
    for position, (model, temperature) in enumerate(zip(models, temperatures, strict=True)):
        single = amplitude_table(model, [5.0, 10.0], temperature)
        assert table.amplitude[:, position] == pytest.approx(single.amplitude[:, 0], rel=1e-12)
    columns = table.columns()
    assert {array.shape for array in columns.values()} == {(6,)}
    assert columns["temperature_K"][:3] == pytest.approx(temperatures)
    assert columns["magnetization_amplitude_A"] == pytest.approx(table.amplitude.ravel())


@pytest.mark.parametrize(
    ("call", "words"),
    [
        (lambda: pole_sum(LIGHT, 0.0, 1.0), "field_T"),
        (lambda: pole_sum(LIGHT, [[1.0]], 1.0), "field_T"),
        (lambda: pole_sum(LIGHT, 1.0, [1.0, -2.0]), "temperature_K = -2"),
        (lambda: pole_sum(LIGHT, 1.0, 1.0, 0), "harmonic"),
        (lambda: pole_sum(LIGHT, 1.0, 1e-9), "at least"),
        (lambda: trace(LIGHT, 1.0, 1.0, 0), "harmonics"),
        (lambda: Broadening(electron_meV=-1.0), "electron_meV"),
        (lambda: amplitude_table(LIGHT, 1.0, 1.0, observable="colour"), "grand_potential, magnetization"),
        (lambda: amplitude_table([LIGHT], 1.0, [1.0, 2.0]), "1 models for 2"),
        (lambda: landau_levels_meV(LIGHT, np.nan, 3), "field_T"),
        (lambda: landau_levels_meV(LIGHT, 1.0, 0), "highest"),
    ],
)
def test_impossible_input_is_refused_by_name(call, words):
    with pytest.raises(InputError, match=words):
        call()
