"""Laws of the isotropic reduced equations and of the four-band model drawn from them (t = 1 unless named)."""

import json
from dataclasses import replace
from functools import partial

import numpy as np
import pytest
from scipy import constants

from kondomf.effective import FourBandModel, band_deviation, from_reduced, reduced_bands, solve_reduced
from kondomf.effective.reduced import _evaluate
from kondomf.errors import InputError

# Solutions obtained beforehand by other implementations of the same equations; all digits of the first row also from
# plain zone sums on uniform grids of 24 x 24 to 400 x 400 points.
CHECK_VALUES = [
    (
        (0.3, 2.2, 0.9, 0.02),
        {"b": 0.41535745, "t_f": 0.01460150, "mu": -0.47737472, "lam": 0.06366697, "w": 0.50346357, "q": 0.38937335},
        1e-8,
    ),
    ((0.006, 1.6, 0.95, 1e-4), {"b": 0.158351094, "lam": 8.82520450e-3}, 1e-9),
    ((0.006, 1.0, 0.95, 1e-4), {"b": 0.018589770, "mu": -0.504337945}, 1e-9),
    ((0.006, 1.0, 0.95, 1e-4), {"lam": 3.74169e-4, "t_f": 3.78024e-4}, 1e-9),
    ((0.006, 0.9, 0.95, 1e-4), {"b": 0.008620310}, 1e-9),
]
FIRST = (1.0, 0.3, 2.2, 0.9, 0.02)
BY_HAND = FourBandModel(
    b_meV=3.0, dirac_energy_meV=40.0, hbar_v_meV_angstrom=5000.0, heavy_level_meV=-2.0, cell_area_angstrom2=24.0
)


@pytest.mark.parametrize(("inputs", "expected", "tolerance"), CHECK_VALUES)
def test_check_values_are_reached_in_all_their_digits(inputs, expected, tolerance):
    solution = solve_reduced(1.0, *inputs)
    assert solution.status == "minimum-in-class"
    assert solution.residual_meV < 1e-12
    assert solution.quadrature_error < 1e-12
    for name, value in expected.items():
        assert getattr(solution, name) == pytest.approx(value, rel=0, abs=tolerance), name


def _bloch_matrix(solution, k1, k2):
    """h of the unreduced problem at k.a1, k.a2 in the basis (c_A, c_B, f_A, f_B), hybridization b on A and -b on B."""
    hop = 1 + np.exp(1j * k1) + np.exp(1j * k2)
    h = np.zeros((*np.shape(k1), 4, 4), dtype=complex)
    for block, level, amplitude in (
        (0, -solution.mu, solution.inputs.hopping_meV),
        (2, solution.lam, solution.t_f),
    ):
        h[..., block, block] = h[..., block + 1, block + 1] = level
        h[..., block, block + 1] = -amplitude * hop
        h[..., block + 1, block] = -amplitude * hop.conj()
    for site, sign in ((0, 1), (1, -1)):
        h[..., site, 2 + site] = h[..., 2 + site, site] = sign * solution.b
    return h


def test_the_four_by_four_matrix_on_a_zone_grid_has_the_same_correlators_and_free_energy():
    solution = solve_reduced(*FIRST)
    _, kitaev, kondo, filling, temperature = FIRST
    k = 2 * np.pi * (np.arange(96) + 0.5) / 96
    k1, k2 = np.meshgrid(k, k)
    energy, state = np.linalg.eigh(_bloch_matrix(solution, k1, k2))
    occupation = 1 / (np.exp(energy / temperature) + 1)
    density = np.einsum("...an,...n,...bn->...ab", state.conj(), occupation, state)
    hop = 1 + np.exp(1j * k1) + np.exp(1j * k2)
    assert 2 * density[..., 0, 0].real.mean() == pytest.approx(filling, abs=1e-9)
    assert 2 * density[..., 2, 2].real.mean() == pytest.approx(1, abs=1e-9)
    assert -2 * density[..., 0, 2].real.mean() == pytest.approx(solution.w, abs=1e-9)
    assert 2 / 3 * (density[..., 2, 3] * hop).real.mean() == pytest.approx(solution.q, abs=1e-9)
    omega = -2 * temperature * np.log1p(np.exp(-energy / temperature)).sum(-1).mean()
    free_energy = omega + 2 * solution.mu * filling - 2 * solution.lam
    free_energy += 0.75 * kondo * solution.w**2 + 0.375 * kitaev * solution.q**2
    assert solution.free_energy_meV_per_cell == pytest.approx(free_energy, abs=1e-9)
    assert solution.free_energy_meV_per_cell == pytest.approx(-3.18851111, abs=1e-8)


@pytest.mark.parametrize(
    ("position", "derivative"),
    [
        (1, lambda s: -3 / 8 * s.q**2),
        (2, lambda s: -3 / 4 * s.w**2),
        (3, lambda s: 2 * s.mu),
        (4, lambda s: -s.entropy_kB_per_cell),
    ],
    ids=["K", "J_K", "n", "T"],
)
@pytest.mark.parametrize("inputs", [FIRST, (1.0, -0.3, 2.2, 1.2, 0.02), (1.0, 0.006, 1.0, 0.95, 1e-4)])
def test_free_energy_is_stationary_so_that_its_derivatives_are_explicit(inputs, position, derivative):
    step = 1e-4 * abs(inputs[position])
    values = []
    for sign in (1, -1):
        moved = list(inputs)
        moved[position] += sign * step
        values.append(solve_reduced(*moved).free_energy_meV_per_cell)
    slope = (values[0] - values[1]) / (2 * step)
    assert slope == pytest.approx(derivative(solve_reduced(*inputs)), rel=2e-5, abs=1e-5)


@pytest.mark.parametrize("temperature", [0.03, 1e-3])
@pytest.mark.parametrize("fields", [(0.05, 0.02, -0.4, 0.01), (1e-9, -0.02, -0.4, 0.01), (0.05, 0.0, 0.2, 0.0)])
def test_response_is_the_derivative_of_the_correlators(fields, temperature):
    state = _evaluate(np.array(fields), 1.0, temperature)
    step = 1e-3 * temperature
    for column in range(4):
        shift = step * np.eye(4)[column]
        up, down = (_evaluate(np.array(fields) + sign * shift, 1.0, temperature) for sign in (1, -1))
        numerical = (up.correlators - down.correlators) / (2 * step)
        assert np.abs(numerical - state.response[:, column]).max() < 2e-6 * max(1, np.abs(state.response).max())


def test_correlators_do_not_change_when_the_quadrature_is_refined():
    for temperature in (1e-1, 1e-3, 1e-5, 1e-7):
        for fields in ((0.02, 4e-4, -0.5, 3e-4), (0.3, -0.01, -1.0, 0.05), (0.0, 0.0, -0.5, 0.0)):
            coarse, fine = (
                _evaluate(np.array(fields), 1.0, temperature, *rule).correlators for rule in ((12, 3.0), (20, 1.7))
            )
            assert np.abs(coarse - fine).max() < 1e-11


def test_ferromagnetic_exchange_turns_the_sign_of_the_spinon_hopping():
    solution = solve_reduced(1.0, -0.3, 2.2, 0.9, 0.02)
    assert solution.status == "minimum-in-class"
    assert solution.t_f == pytest.approx(-0.3 / 8 * solution.q)
    assert solution.t_f < -1e-3
    assert solution.b == pytest.approx(3 / 8 * 2.2 * solution.w)


def test_particles_and_holes_are_equivalent():
    less, more = (solve_reduced(1.0, 0.1, 2.0, n, 0.01) for n in (0.9, 1.1))
    assert less.b == pytest.approx(more.b, rel=1e-10)
    assert less.mu == pytest.approx(-more.mu, rel=1e-9)
    assert less.lam == pytest.approx(-more.lam, rel=1e-9)


def test_all_energies_scale_together():
    one, thousand = solve_reduced(1.0, 0.1, 2.0, 0.9, 0.01), solve_reduced(1000.0, 100.0, 2000.0, 0.9, 10.0)
    for name in ("b", "t_f", "mu", "lam", "free_energy_meV_per_cell"):
        assert getattr(thousand, name) == pytest.approx(1000 * getattr(one, name), rel=1e-10)


def test_half_filled_kondo_insulator_has_its_levels_at_the_centre_however_cold():
    solution = solve_reduced(1.0, 0.006, 1.6, 1.0, 1e-6)
    assert (solution.mu, solution.lam) == (0.0, 0.0)
    assert solution.b > 0.05
    assert solution.entropy_kB_per_cell < 1e-9


@pytest.mark.parametrize("filling", [0.999, 0.999999])
def test_weakly_doped_kondo_insulator_is_the_limit_of_the_undoped_one_even_when_cold(filling):
    """The Fermi level then lies within a hair of a band edge; the hybridization differs by less than the doping."""
    undoped = solve_reduced(1.0, -0.1, 3.0, 1.0, 3e-6)
    doped = solve_reduced(1.0, -0.1, 3.0, filling, 3e-6)
    assert doped.status == "minimum-in-class"
    assert doped.b == pytest.approx(undoped.b, abs=max(1e-6, 2 * abs(filling - 1)))
    assert abs(doped.mu) > 0.1


def test_free_spins_above_the_crossover_temperature_have_four_ln_two_of_entropy_per_cell():
    """Two spins per cell, each with four parton states since the constraint holds on average; the Dirac electrons'
    share falls with T^2 and is below the tolerance."""
    cold = solve_reduced(1.0, 0.0, 0.5, 1.0, 1e-4)
    assert cold.b == 0
    assert cold.status == "minimum-in-class"
    assert cold.entropy_kB_per_cell == pytest.approx(4 * np.log(2), abs=1e-6)


def test_decoupled_spinons_have_the_bond_correlator_of_the_kitaev_spin_liquid():
    """0.5249 = 1.5746 / 3: Phys. Rev. Lett. 98, 247201 (2007), "Exact results for spin dynamics and fractionalization
    in the Kitaev model"."""
    solution = solve_reduced(1.0, 0.5, 0.2, 0.95, 1e-4)
    assert solution.b == 0
    assert abs(solution.q) == pytest.approx(0.52487, abs=2e-5)


def test_strong_kondo_coupling_binds_every_electron_to_its_spin():
    """Without hopping E = -(3/8) J_K w^2 per site with w = 1: -(3/4) J_K per cell."""
    solution = solve_reduced(1.0, 0.0, 1e4, 1.0, 1.0)
    assert solution.w == pytest.approx(1, abs=1e-6)
    assert solution.free_energy_meV_per_cell == pytest.approx(-7.5e3, rel=1e-6)


def test_hybridization_vanishes_continuously_with_temperature_and_free_energy_is_concave():
    temperatures = np.linspace(0.004, 0.06, 15)
    solutions = [solve_reduced(1.0, 0.05, 1.6, 0.95, float(t)) for t in temperatures]
    b = np.array([s.b for s in solutions])
    assert b[0] > 0.1
    assert b[-1] == 0
    assert (np.diff(b) <= 0).all()
    entropy = np.array([s.entropy_kB_per_cell for s in solutions])
    assert (np.diff(entropy) > 0).all()


def test_ferromagnetic_kondo_coupling_leaves_the_spinons_alone():
    solution = solve_reduced(1.0, 0.1, -2.0, 0.9, 0.01)
    assert (solution.b, solution.status) == (0.0, "minimum-in-class")


@pytest.mark.parametrize(
    ("inputs", "words"),
    [
        ((0.0, 0.1, 1.0, 0.9, 0.01), "hopping_meV"),
        ((1.0, 0.1, 1.0, 2.0, 0.01), "filling"),
        ((1.0, 0.1, 1.0, 0.9, 0.0), "temperature_meV"),
        ((1.0, 0.1, 1.0, 0.9, 1e-11), "temperature_meV = 1e-11"),
        ((1.0, np.nan, 1.0, 0.9, 0.01), "kitaev_meV"),
    ],
)
def test_impossible_input_is_refused_by_name(inputs, words):
    with pytest.raises(InputError, match=words):
        solve_reduced(*inputs)


@pytest.fixture(scope="module")
def strong():
    """A solution whose spinon hopping is large enough to see its sign."""
    return solve_reduced(1000.0, 600.0, 2200.0, 0.98, 5.0)


def test_four_band_model_is_the_expansion_of_the_bloch_matrix_at_the_dirac_point(strong):
    """The error falls with the square of the distance; with the other sign of u it falls linearly."""
    a = 5.0
    model = from_reduced(strong, a)
    direction = 0.4
    errors, wrong = [], []
    for k in (2e-3, 1e-3):
        kx, ky = k * np.cos(direction), k * np.sin(direction)
        phases = 4 * np.pi / 3 + a * kx, 2 * np.pi / 3 + a * (kx / 2 + np.sqrt(3) / 2 * ky)
        full = np.linalg.eigvalsh(_bloch_matrix(strong, *(np.array(phase) for phase in phases)))
        errors.append(np.abs(model.bands(np.array([k]))[0] - full).max())
        turned = replace(model, hbar_u_meV_angstrom=-model.hbar_u_meV_angstrom)
        wrong.append(np.abs(turned.bands(np.array([k]))[0] - full).max())
    assert strong.t_f > 10
    assert errors[0] < 0.05 * wrong[0]
    assert errors[0] / errors[1] == pytest.approx(4, rel=0.05)
    assert wrong[0] / wrong[1] == pytest.approx(2, rel=0.05)


def test_four_band_energies_are_those_of_its_matrix():
    """H = [[E_D + v k.sigma, b], [b, eps_f + u k.sigma]], diagonalised as it stands."""
    model = replace(BY_HAND, hbar_u_meV_angstrom=-70.0)
    kx, ky = 0.004, -0.003
    k_sigma = np.array([[0, kx - 1j * ky], [kx + 1j * ky, 0]])
    one = np.eye(2)
    h = np.block([[40 * one + 5000 * k_sigma, 3 * one], [3 * one, -2 * one - 70 * k_sigma]])
    assert model.bands(np.array([0.005]))[0] == pytest.approx(np.linalg.eigvalsh(h), abs=1e-10)


def test_reduced_bands_are_the_eigenvalues_of_the_bloch_matrix(strong):
    k1, k2 = np.array([0.3, 1.1, 2.9]), np.array([-0.8, 2.0, 0.4])
    assert reduced_bands(strong, k1, k2) == pytest.approx(np.linalg.eigvalsh(_bloch_matrix(strong, k1, k2)), abs=1e-9)


def test_deviation_from_the_full_bands_shrinks_with_the_doping():
    deviations = []
    for filling in (0.9, 0.99):
        solution = solve_reduced(1000.0, 6.0, 600.0, filling, 10.0)
        assert solution.b == 0
        deviations.append(band_deviation(from_reduced(solution, 5.0), partial(reduced_bands, solution), 30.0))
    assert deviations[1].max_meV < 0.5 * deviations[0].max_meV
    assert deviations[1].rms_meV <= deviations[1].max_meV
    assert abs(deviations[1].fermi_area_ratio - 1) < 0.2 * abs(deviations[0].fermi_area_ratio - 1)


def test_window_without_states_near_the_dirac_points_gives_no_deviation():
    """The heavy Fermi line of this solution surrounds the zone centre."""
    solution = solve_reduced(1000.0, 6.0, 1600.0, 0.95, 0.1)
    deviation = band_deviation(from_reduced(solution, 5.0), partial(reduced_bands, solution), 1.0)
    assert (deviation.states, deviation.max_meV) == (0, None)


def test_records_survive_json(strong):
    model = from_reduced(strong, 5.0)
    for record in (strong, model, band_deviation(model, partial(reduced_bands, strong), 50.0)):
        assert json.loads(json.dumps(record.to_dict())).keys() == record.to_dict().keys()
    velocity = np.sqrt(3) / 2 * 5e-10 * constants.e / constants.hbar
    assert model.to_dict()["electron_velocity_m_per_s"] == pytest.approx(velocity, rel=1e-9)


def test_impossible_models_are_refused_by_name(strong):
    with pytest.raises(InputError, match="hbar_v_meV_angstrom"):
        replace(BY_HAND, hbar_v_meV_angstrom=0.0)
    with pytest.raises(InputError, match="b_meV"):
        replace(BY_HAND, b_meV=np.nan)
    with pytest.raises(InputError, match="lattice constant"):
        from_reduced(strong, 0.0)
    with pytest.raises(InputError, match="window"):
        band_deviation(from_reduced(strong, 5.0), partial(reduced_bands, strong), -1.0)
