"""Builds the mean-field model of a material. A new coupling is a few lines here and nothing elsewhere."""

from itertools import combinations

import numpy as np
from numpy.typing import NDArray

from kondomf.material import Material
from kondomf.model.lattice import BOND_DIRECTION, FIRST, NORMAL, SECOND, THIRD, MagneticCell
from kondomf.model.majorana import (
    CONSTRAINT,
    DENSITY,
    ELECTRON,
    SPINON,
    Bilinear,
    hopping_coefficients,
    majorana,
    spin,
)
from kondomf.model.model import MeanFieldModel
from kondomf.model.terms import Terms
from kondomf.units import BOHR_MAGNETON

HERE = (0, 0)
PAULI = np.array([[[0, 1], [1, 0]], [[0, -1j], [1j, 0]], [[1, 0], [0, -1]]])
Place = tuple[int, int, tuple[int, int]]
"""Site, species and lattice vector of a spin operator."""


def build_model(material: Material) -> MeanFieldModel:
    """Channels, fields, quadratic form and constraints of `material` on the spin lattice, all energies in meV."""
    cell = MagneticCell(tuple(tuple(int(x) for x in row) for row in material.cell_matrix))  # type: ignore[arg-type]
    terms = Terms(magnetic=material.mean_field.magnetic_channel)
    _add_conduction(terms, cell, material)
    _add_exchange(terms, cell, material)
    _add_kondo(terms, cell, material)
    _add_zeeman(terms, cell, material)
    constraints = _constraints(terms, cell)
    table, h, v = terms.arrays()
    c = np.zeros((len(constraints), len(h)))
    for row, (_, entries) in enumerate(constraints):
        for p, value in entries:
            c[row, p] += value
    target = np.zeros(len(constraints))
    target[0] = cell.n_sites * (material.model_filling - 1)
    names = tuple(name for name, _ in constraints)
    return MeanFieldModel(cell, table, h, v, c, target, names, material.temperature_meV)


def exchange_matrix(kind: int, heisenberg: float, kitaev: float, gamma: float, gamma_prime: float) -> NDArray:
    """Exchange matrix M (3, 3) of a bond of type 0, 1, 2 = x, y, z: S_i.M.S_j."""
    a, b, c = (kind + 1) % 3, (kind + 2) % 3, kind
    m = heisenberg * np.eye(3)
    m[c, c] += kitaev
    m[a, b] = m[b, a] = gamma
    m[a, c] = m[c, a] = m[b, c] = m[c, b] = gamma_prime
    return m


def _add_spin_product(terms: Terms, value: float, one: Bilinear, at: Place, other: Bilinear, to: Place) -> None:
    """Add value * (spin bilinear `one` at `at`) * (spin bilinear `other` at `to`)."""
    (i, si, ri), (j, sj, rj) = at, to
    for x, mu, nu in one:
        for y, rho, tau in other:
            left = (majorana(i, si, mu), ri), (majorana(i, si, nu), ri)
            right = (majorana(j, sj, rho), rj), (majorana(j, sj, tau), rj)
            terms.add_quartic(value * x * y, *left, *right)


def _add_exchange(terms: Terms, cell: MagneticCell, material: Material) -> None:
    layer = material.spin_layer
    s = spin(material.mean_field.exchange_form)
    first = [(layer.heisenberg_meV, k, layer.gamma_meV, layer.gamma_prime_meV) for k in layer.kitaev_meV]
    second = [(layer.heisenberg_2_meV, layer.kitaev_2_meV, 0.0, 0.0)] * 3
    third = [(layer.heisenberg_3_meV, 0.0, 0.0, 0.0)] * 3
    for kinds, couplings in ((FIRST, first), (SECOND, second), (THIRD, third)):
        for i, j, r, kind in cell.bonds(kinds):
            m = exchange_matrix(kind, *couplings[kind])
            for alpha, beta in np.argwhere(m):
                value = float(m[alpha, beta])
                _add_spin_product(terms, value, s[alpha], (i, SPINON, HERE), s[beta], (j, SPINON, r))


def _add_kondo(terms: Terms, cell: MagneticCell, material: Material) -> None:
    """J_K S_i.s_i on every site and J_1 (S_i.s_j + S_j.s_i) on every first-neighbour bond, anisotropic alike."""
    sites = range(cell.n_sites)
    pairs = [(material.kondo.coupling_meV, (i, SPINON, HERE), (i, ELECTRON, HERE)) for i in sites]
    for i, j, r, _ in cell.bonds(FIRST):
        pairs.append((material.kondo.neighbour_coupling_meV, (i, SPINON, HERE), (j, ELECTRON, r)))
        pairs.append((material.kondo.neighbour_coupling_meV, (j, SPINON, r), (i, ELECTRON, HERE)))
    big, small = spin(material.mean_field.kondo_form), spin("so4")
    for coupling, at, to in pairs:
        for alpha, factor in enumerate(material.kondo.anisotropy):
            _add_spin_product(terms, coupling * factor, big[alpha], at, small[alpha], to)


def _add_zeeman(terms: Terms, cell: MagneticCell, material: Material) -> None:
    field = BOHR_MAGNETON * np.asarray(material.magnetic_field.tesla)
    couplings = (
        (SPINON, field @ material.spin_layer.g_tensor, spin(material.mean_field.exchange_form)),
        (ELECTRON, field @ material.conduction_layer.g_tensor, spin("so4")),
    )
    for species, zeeman, operators in couplings:
        for site in range(cell.n_sites):
            for value, operator in zip(zeeman, operators, strict=True):
                for x, mu, nu in operator:
                    first, second = majorana(site, species, mu), majorana(site, species, nu)
                    terms.add_one_body(float(value) * x, (first, HERE), (second, HERE))


def _add_conduction(terms: Terms, cell: MagneticCell, material: Material) -> None:
    """Hopping -t, second-neighbour hopping -t', offset +-Delta/2 on A and B, Kane-Mele and Rashba coupling.

    Kane-Mele: i lambda nu_ij c+_i (sigma.n) c_j on second neighbours, nu = +1 when the path turns left
    (Phys. Rev. Lett. 95, 226801 (2005)). Rashba: i lambda_R c+_i (sigma x d_ij).n c_j on first neighbours.
    """
    layer = material.conduction_layer
    sigma_n = np.tensordot(NORMAL, PAULI, axes=1)
    for i, j, r, kind in cell.bonds(FIRST):
        rashba = np.tensordot(np.cross(BOND_DIRECTION[kind], NORMAL), PAULI, axes=1)
        _add_hopping(terms, i, j, r, -material.model_hopping_meV * np.eye(2) + 1j * layer.rashba_meV * rashba)
    for i, j, r, kind in cell.bonds(SECOND):
        turn = _TURN[kind] * (1 if i % 2 == 0 else -1)
        _add_hopping(terms, i, j, r, -layer.next_hopping_meV * np.eye(2) + 1j * layer.kane_mele_meV * turn * sigma_n)
    for site in range(cell.n_sites):
        offset = layer.sublattice_offset_meV / 2 * (1 if site % 2 == 0 else -1)
        coefficients = hopping_coefficients(offset * np.eye(2), site % 2, site % 2)
        for mu, nu in combinations(range(4), 2):
            first, second = majorana(site, ELECTRON, mu), majorana(site, ELECTRON, nu)
            terms.add_one_body(float(coefficients[mu, nu]), (first, HERE), (second, HERE))


# Second-neighbour steps +a2 (type x), +a1 (type y), a2 - a1 (type z) from an A site: see the model tests.
_TURN = (1, -1, -1)


def _add_hopping(terms: Terms, i: int, j: int, r: tuple[int, int], matrix: NDArray) -> None:
    coefficients = hopping_coefficients(matrix, i % 2, j % 2)
    for mu, nu in np.ndindex(4, 4):
        first, second = majorana(i, ELECTRON, mu), majorana(j, ELECTRON, nu)
        terms.add_one_body(float(coefficients[mu, nu]), (first, HERE), (second, r))


def _constraints(terms: Terms, cell: MagneticCell) -> list[tuple[str, list[tuple[int, float]]]]:
    """Density of the cell, then C^x, C^y, C^z of every site, as lists of (channel, coefficient)."""

    def entries(site: int, species: int, bilinear: Bilinear) -> list[tuple[int, float]]:
        result = []
        for x, mu, nu in bilinear:
            p, sign = terms.channel((majorana(site, species, mu), HERE), (majorana(site, species, nu), HERE))
            result.append((p, sign * x))
        return result

    sites = range(cell.n_sites)
    rows = [("density", [entry for site in sites for entry in entries(site, ELECTRON, DENSITY)])]
    for site in sites:
        for axis, bilinear in zip("xyz", CONSTRAINT, strict=True):
            rows.append((f"constraint_{axis} of site {site}", entries(site, SPINON, bilinear)))
    return rows
