"""Majorana representation and Wick decoupling against exact matrices in Fock space."""

import itertools
from dataclasses import replace

import numpy as np
import pytest
from fock_space import PAULI, Gibbs, majoranas, quadratic
from materials import T, dimensionless

from kondomf.meanfield.problem import Problem, point_at
from kondomf.meanfield.zone import ZoneRule
from kondomf.model import build_model
from kondomf.model.build import exchange_matrix
from kondomf.model.majorana import (
    CONSTRAINT,
    DENSITY,
    ELECTRON,
    SPINON,
    hopping_coefficients,
    majorana,
    spin,
    spinor,
)
from kondomf.model.terms import Terms, canonical
from kondomf.units import BOHR_MAGNETON

FORMS = ["so4", "kitaev"]
TORUS = ZoneRule(np.zeros((1, 2)), np.ones(1), 1, "gamma point")
"""One wave vector k = 0: a cell closed onto itself, where the Gaussian state is that of finitely many Majoranas."""
GAMMA8, GAMMA16 = majoranas(8), majoranas(16)
SIXTEEN = np.eye(16)


def operator(gamma, bilinear, site=0, species=SPINON):
    """Dense matrix of a bilinear of one species of one site."""
    coefficients = np.zeros((len(gamma), len(gamma)))
    for value, mu, nu in bilinear:
        coefficients[majorana(site, species, mu), majorana(site, species, nu)] += value
    return quadratic(gamma, coefficients)


def spins(gamma, form, site=0, species=SPINON):
    return [operator(gamma, bilinear, site, species) for bilinear in spin(form)]


def annihilators(gamma, site=0, species=ELECTRON, sublattice=None):
    """Dense c_up, c_down of a site; its sublattice is that of its number unless given."""
    rows = spinor(site % 2 if sublattice is None else sublattice)
    return [sum(x * gamma[majorana(site, species, mu)] for mu, x in enumerate(row)).toarray() for row in rows]


def between(left, matrix, right):
    """sum_ab left+_a matrix_ab right_b."""
    return sum(matrix[a, b] * left[a].conj().T @ right[b] for a, b in np.ndindex(2, 2))


def hermitian(x):
    return x + x.conj().T


def dagger_spin(c):
    return [between(c, sigma / 2, c) for sigma in PAULI]


def physical_states():
    """Basis (16, 8) of the states of one site with C^x = C^y = C^z = 0."""
    total = sum(x @ x for x in (operator(GAMMA8, bilinear) for bilinear in CONSTRAINT))
    values, vectors = np.linalg.eigh(total)
    return vectors[:, values < 1e-12]


# ---- Majorana representation -------------------------------------------------------------------------------------


def test_majoranas_of_the_fock_space_anticommute_to_twice_the_identity():
    for (i, x), (j, y) in itertools.product(enumerate(GAMMA8), repeat=2):
        assert (x @ y + y @ x).toarray() == pytest.approx(2 * (i == j) * SIXTEEN)


def test_half_of_the_spinon_states_are_physical():
    assert physical_states().shape == (16, 8)


@pytest.mark.parametrize("form", FORMS)
def test_spin_one_half_algebra_holds_on_the_physical_states(form):
    p = physical_states()
    x, y, z = spins(GAMMA8, form)
    for a, b, c in ((x, y, z), (y, z, x), (z, x, y)):
        assert (a @ b - b @ a) @ p == pytest.approx(1j * c @ p)
    assert sum(s @ s for s in (x, y, z)) @ p == pytest.approx(0.75 * p)


def test_the_so4_form_obeys_the_spin_algebra_in_the_whole_parton_space_and_commutes_with_the_constraint():
    x, y, z = spins(GAMMA8, "so4")
    for a, b, c in ((x, y, z), (y, z, x), (z, x, y)):
        assert a @ b - b @ a == pytest.approx(1j * c)
    for s, bilinear in itertools.product((x, y, z), CONSTRAINT):
        constraint = operator(GAMMA8, bilinear)
        assert s @ constraint == pytest.approx(constraint @ s)


def test_the_forms_differ_by_half_the_constraint():
    for one, other, bilinear in zip(spins(GAMMA8, "kitaev"), spins(GAMMA8, "so4"), CONSTRAINT, strict=True):
        assert one - other == pytest.approx(operator(GAMMA8, bilinear) / 2)


def test_the_constraint_is_single_occupation_without_pairing_of_complex_spinons():
    up, down = annihilators(GAMMA8, species=SPINON)
    x, y, z = (operator(GAMMA8, bilinear) for bilinear in CONSTRAINT)
    assert z == pytest.approx(up.conj().T @ up + down.conj().T @ down - SIXTEEN)
    pair = up.conj().T @ down.conj().T
    assert x == pytest.approx(-hermitian(pair))
    assert y == pytest.approx(-hermitian(1j * pair))


@pytest.mark.parametrize("sublattice", [0, 1])
def test_electrons_are_fermions_with_the_spin_and_density_of_the_bilinears(sublattice):
    c = annihilators(GAMMA8, sublattice=sublattice)
    for (i, a), (j, b) in itertools.product(enumerate(c), repeat=2):
        assert a @ b.conj().T + b.conj().T @ a == pytest.approx((i == j) * SIXTEEN)
        assert a @ b + b @ a == pytest.approx(0 * SIXTEEN)
    for s, exact in zip(spins(GAMMA8, "so4", species=ELECTRON), dagger_spin(c), strict=True):
        assert s == pytest.approx(exact)
    assert operator(GAMMA8, DENSITY, species=ELECTRON) == pytest.approx(between(c, np.eye(2), c) - SIXTEEN)


def two_sites(start, end):
    """Electron operators of two sites on the given sublattices, and their eight Majoranas: first site 0-3, then 4-7."""
    c = annihilators(GAMMA8, species=SPINON, sublattice=start)
    return c, annihilators(GAMMA8, species=ELECTRON, sublattice=end)


def test_nearest_neighbour_hopping_is_minus_half_t_times_the_sum_of_like_bilinears():
    a, b = two_sites(0, 1)
    coefficients = np.zeros((8, 8))
    coefficients[range(4), range(4, 8)] = -0.5
    assert quadratic(GAMMA8, coefficients) == pytest.approx(hermitian(between(a, -np.eye(2), b)))


@pytest.mark.parametrize(("start", "end"), list(itertools.product((0, 1), repeat=2)))
def test_any_spin_dependent_hopping_between_two_sites_is_its_majorana_form(start, end):
    rng = np.random.default_rng(3)
    matrix = rng.standard_normal((2, 2)) + 1j * rng.standard_normal((2, 2))
    a, b = two_sites(start, end)
    coefficients = np.zeros((8, 8))
    coefficients[:4, 4:] = hopping_coefficients(matrix, start, end)
    assert quadratic(GAMMA8, coefficients) == pytest.approx(hermitian(between(a, matrix, b)))


@pytest.mark.parametrize("sublattice", [0, 1])
def test_any_hermitian_one_site_term_is_the_upper_triangle_of_its_majorana_form_up_to_its_trace(sublattice):
    rng = np.random.default_rng(4)
    matrix = hermitian(rng.standard_normal((2, 2)) + 1j * rng.standard_normal((2, 2)))
    c, _ = two_sites(sublattice, sublattice)
    coefficients = np.zeros((8, 8))
    coefficients[:4, :4] = np.triu(hopping_coefficients(matrix, sublattice, sublattice), 1)
    exact = between(c, matrix, c) - np.trace(matrix) / 2 * SIXTEEN
    assert quadratic(GAMMA8, coefficients) == pytest.approx(exact)


def test_wick_decoupling_is_exact_in_gibbs_states_of_quadratic_hamiltonians():
    rng = np.random.default_rng(5)
    gibbs = Gibbs.of(quadratic(GAMMA8, rng.standard_normal((8, 8)) * (1 - np.eye(8))), 2.0)
    pair = {(a, b): 1j * (GAMMA8[a] @ GAMMA8[b]) for a, b in itertools.permutations(range(8), 2)}
    p = {key: gibbs.mean(x).real for key, x in pair.items()}
    for a, b, c, d in itertools.combinations(range(8), 4):
        exact = gibbs.mean(pair[a, b] @ pair[c, d])
        assert exact == pytest.approx(p[a, b] * p[c, d] - p[a, c] * p[b, d] + p[a, d] * p[b, c], abs=1e-12)


def test_a_bilinear_and_its_reverse_are_one_channel_of_opposite_sign():
    one, sign = canonical((3, (0, 0)), (9, (1, -1)))
    other, opposite = canonical((9, (2, 0)), (3, (1, 1)))
    assert one == other
    assert sign == -opposite


def test_the_square_of_a_majorana_is_no_channel():
    with pytest.raises(ValueError, match="constant"):
        canonical((3, (1, 0)), (3, (1, 0)))


def test_without_the_magnetic_channel_only_the_first_product_of_the_wick_sum_is_missing():
    places = [(n, (0, 0)) for n in range(4)]
    forms = {}
    for magnetic in (True, False):
        terms = Terms(magnetic)
        terms.add_quartic(1.0, *places)
        table, _, v = terms.arrays()
        forms[magnetic] = {
            (tuple(table[p, :2]), tuple(table[q, :2])): v[p, q]
            for p, q in np.argwhere(v)
            if tuple(table[p]) < tuple(table[q])
        }
    assert forms[False] == {((0, 2), (1, 3)): -1.0, ((0, 3), (1, 2)): 1.0}
    assert forms[True] == forms[False] | {((0, 1), (2, 3)): 1.0}


# ---- a whole model -----------------------------------------------------------------------------------------------


def exact_torus(material):
    """Hamiltonian of `material` on one cell closed onto itself, from spin and electron operators in Fock space."""
    layer, electrons, kondo = material.spin_layer, material.conduction_layer, material.kondo
    form = material.mean_field.exchange_form
    sites = (0, 1)
    big = [spins(GAMMA16, form, site) for site in sites]
    c = [annihilators(GAMMA16, site) for site in sites]
    small = [dagger_spin(x) for x in c]
    h = hermitian(between(c[0], -3 * material.model_hopping_meV * np.eye(2), c[1]))
    offset = electrons.sublattice_offset_meV / 2
    h += between(c[0], offset * np.eye(2), c[0]) - between(c[1], offset * np.eye(2), c[1])
    for kind, k in enumerate(layer.kitaev_meV):
        m = exchange_matrix(kind, layer.heisenberg_meV, k, layer.gamma_meV, layer.gamma_prime_meV)
        m = m + layer.heisenberg_3_meV * np.eye(3)
        h += sum(m[a, b] * big[0][a] @ big[1][b] for a, b in np.argwhere(m))
    for site in sites:
        local = spins(GAMMA16, material.mean_field.kondo_form, site)
        for axis, factor in enumerate(kondo.anisotropy):
            h += kondo.coupling_meV * factor * local[axis] @ small[site][axis]
            h += 3 * kondo.neighbour_coupling_meV * factor * local[axis] @ small[1 - site][axis]
        field = BOHR_MAGNETON * np.array(material.magnetic_field.tesla)
        for zeeman, s in ((field @ layer.g_tensor, big[site]), (field @ electrons.g_tensor, small[site])):
            h += sum(value * x for value, x in zip(zeeman, s, strict=True))
    return h


def gaussian_state(model, phi):
    """Gibbs state of sum_p phi_p O_p on the closed cell."""
    coefficients = np.zeros((16, 16))
    np.add.at(coefficients, (model.table[:, 0], model.table[:, 1]), phi)
    return Gibbs.of(quadratic(GAMMA16, coefficients), model.temperature)


@pytest.mark.parametrize(("form", "kondo_form"), [("so4", "so4"), ("kitaev", "so4"), ("kitaev", "kitaev")])
def test_energy_entropy_and_free_energy_are_those_of_the_exact_gaussian_state(form, kondo_form):
    """<H> = h.P + P.V.P/2 and F = <H> - T S, with every term but those between second neighbours at once."""
    material = dimensionless(
        [-1.0, 0.7, 0.4],
        2.0,
        form=form,
        mean_field__kondo_form=kondo_form,
        kondo__anisotropy=[1.0, 0.8, 1.3],
        kondo__neighbour_coupling_meV=-0.45,
        magnetic_field__tesla=[900.0, -2000.0, 1500.0],
        spin_layer__g_factor=[2.0, 2.5],
        conduction_layer__sublattice_offset_meV=0.6,
        spin_layer__heisenberg_meV=0.5,
        spin_layer__gamma_meV=0.3,
        spin_layer__gamma_prime_meV=-0.2,
        spin_layer__heisenberg_3_meV=0.35,
    )
    model = replace(build_model(material), temperature=T)
    problem = Problem(model, TORUS)
    phi = T * np.random.default_rng(6).standard_normal(model.n_channels)
    state = problem.evaluate(phi)
    gibbs = gaussian_state(model, phi)
    p = np.array([gibbs.mean(1j * GAMMA16[a] @ GAMMA16[b]).real for a, b in model.table[:, :2]])
    assert np.abs(p).max() > 0.3
    assert state.p == pytest.approx(p, abs=1e-12)
    assert state.omega == pytest.approx(gibbs.free_energy, rel=1e-12)
    assert state.entropy == pytest.approx(gibbs.entropy, rel=1e-11)
    exact = exact_torus(material)
    assert model.h @ p + p @ model.v @ p / 2 == pytest.approx(gibbs.mean(exact).real, rel=1e-11)

    point = point_at(problem, phi)
    solved = gaussian_state(model, point.phi)
    remaining = np.abs(point.multipliers).sum() * point.constraint_error  # F is freed of it to first order
    assert point.free_energy == pytest.approx(solved.mean(exact).real - T * solved.entropy, abs=remaining + 1e-8)
    assert point.free_energy > Gibbs.of(exact, T).free_energy + 1  # an upper bound in the parton space
