"""The model: lattice, exchange, one-body terms and symmetries against geometry and published formulas."""

import itertools

import numpy as np
import pytest
from fock_space import PAULI
from materials import T, dimensionless

from kondomf.meanfield.evaluate import bloch_matrix
from kondomf.model import MagneticCell, build_model
from kondomf.model.build import exchange_matrix
from kondomf.model.lattice import B_SITE, CELL_VECTORS, FIRST, SECOND, THIRD
from kondomf.model.majorana import ELECTRON, SPINON, majorana
from kondomf.model.symmetries import symmetry_generators
from kondomf.units import BOHR_MAGNETON

FORMS = ["so4", "kitaev"]
CELLS = [((1, 0), (0, 1)), ((1, 0), (-1, 2)), ((1, 1), (-1, 2)), ((2, 0), (0, 2)), ((2, 1), (-1, 1)), ((1, 3), (0, 2))]


# ---- lattice -----------------------------------------------------------------------------------------------------


def positions(sublattice, cells):
    return np.asarray(cells) @ CELL_VECTORS + sublattice * B_SITE


def ends(bond):
    return positions(bond.start, (0, 0)), positions(bond.end, bond.cell)


@pytest.mark.parametrize(("kinds", "distance"), [(FIRST, 1 / np.sqrt(3)), (SECOND, 1.0), (THIRD, 2 / np.sqrt(3))])
def test_the_bonds_are_all_pairs_at_the_neighbour_distance_each_once(kinds, distance):
    pairs = set()
    for start, end, cell in itertools.product((0, 1), (0, 1), itertools.product(range(-3, 4), repeat=2)):
        length = np.linalg.norm(positions(end, cell) - positions(start, (0, 0)))
        if abs(length - distance) < 1e-9:
            pairs.add(frozenset({(start, end, cell), (end, start, (-cell[0], -cell[1]))}))
    found = {frozenset({(b.start, b.end, b.cell), (b.end, b.start, (-b.cell[0], -b.cell[1]))}) for b in kinds}
    assert found == pairs
    assert len(found) == len(kinds)


@pytest.mark.parametrize("kinds", [FIRST, SECOND, THIRD])
def test_a_threefold_rotation_of_the_lattice_permutes_bond_types_cyclically(kinds):
    turn = np.array([[-0.5, np.sqrt(0.75)], [-np.sqrt(0.75), -0.5]])  # 120 degrees, acting on rows
    vectors = {(b.start, b.end, b.type): np.subtract(*ends(b)[::-1]) for b in kinds}
    for (start, end, kind), vector in vectors.items():
        turned, image = vector @ turn, vectors[start, end, (kind + 1) % 3]
        same = [turned, -turned] if start == end else [turned]  # the two ends of such a bond are alike
        assert any(np.allclose(v, image) for v in same)


def test_a_second_neighbour_bond_carries_the_type_missing_on_its_path_and_a_third_one_that_of_the_opposite_bond():
    step = {b.type: np.subtract(*ends(b)[::-1]) for b in FIRST}
    for bond in SECOND:
        one, two = (step[k] for k in range(3) if k != bond.type)
        vector = np.subtract(*ends(bond)[::-1])
        assert np.allclose(np.abs(vector @ (one - two)), 1)
    for bond in THIRD:
        assert np.subtract(*ends(bond)[::-1]) == pytest.approx(-2 * step[bond.type])


@pytest.mark.parametrize("matrix", CELLS)
@pytest.mark.parametrize("kinds", [FIRST, SECOND, THIRD])
def test_every_magnetic_cell_holds_each_primitive_bond_once_per_primitive_cell(matrix, kinds):
    cell = MagneticCell(matrix)
    assert cell.size == len(cell.offsets) == abs(round(np.linalg.det(matrix)))
    found = []
    for i, j, r, kind in cell.bonds(kinds):
        start = cell.primitive_cell(i, np.zeros(2, int))
        shift = cell.primitive_cell(j, np.array(r)) - start
        found.append((tuple(start), i % 2, j % 2, tuple(shift), kind))
    expected = [(o, b.start, b.end, b.cell, b.type) for o in cell.offsets for b in kinds]
    assert sorted(found) == sorted(expected)


@pytest.mark.parametrize("matrix", CELLS)
def test_locating_a_site_is_the_inverse_of_its_primitive_cell(matrix):
    cell = MagneticCell(matrix)
    for primitive in itertools.product(range(-4, 5), repeat=2):
        site, vector = cell.locate(primitive, 1)
        assert site % 2 == 1
        assert tuple(cell.primitive_cell(site, np.array(vector))) == primitive


def test_a_singular_cell_is_refused():
    with pytest.raises(ValueError, match="singular"):
        _ = MagneticCell(((1, 2), (2, 4))).size


# ---- exchange ----------------------------------------------------------------------------------------------------


def test_exchange_matrices_follow_from_the_z_bond_by_cyclic_permutation_of_the_axes():
    """z bond: Phys. Rev. Lett. 112, 077204 (2014), "Generic spin model for the honeycomb iridates beyond the Kitaev
    limit"; Gamma' joins the axis of the bond to the two others."""
    x, y, z = (exchange_matrix(kind, 1.0, 10.0, 0.1, 0.01) for kind in range(3))
    assert z.tolist() == [[1, 0.1, 0.01], [0.1, 1, 0.01], [0.01, 0.01, 11]]
    cyclic = np.roll(np.eye(3), 1, axis=0)  # takes the axes x, y, z to y, z, x
    assert x == pytest.approx(cyclic @ z @ cyclic.T)
    assert y == pytest.approx(cyclic @ x @ cyclic.T)
    assert z == pytest.approx(cyclic @ y @ cyclic.T)


ORDERS = {"ferromagnet": "1x1", "Neel": "1x1", "zigzag": "1x2", "stripy": "1x2"}


def moments(order, cell):
    """Sign of the moment of every site; zigzag chains run along x and z bonds, stripes have parallel y bonds."""
    sublattice = np.arange(cell.n_sites) % 2
    row = np.array([cell.offsets[site // 2][1] for site in range(cell.n_sites)])
    return {
        "ferromagnet": np.ones(cell.n_sites),
        "Neel": (-1.0) ** sublattice,
        "zigzag": (-1.0) ** row,
        "stripy": (-1.0) ** (row + sublattice),
    }[order]


def polarised(model, signs):
    """Correlators of spins fully along +y or -y."""
    p = np.zeros(model.n_channels)
    for site, sign in enumerate(signs):
        for mu, nu, value in ((0, 2, sign), (3, 1, -sign)):
            channel, orientation = model.find(majorana(site, SPINON, mu), majorana(site, SPINON, nu), (0, 0))
            p[channel] = orientation * value
    return p


@pytest.mark.parametrize("order", ORDERS)
@pytest.mark.parametrize("form", FORMS)
def test_magnets_have_their_classical_energy_or_none_without_the_magnetic_channel(order, form):
    """Sums over the 3 + 6 + 3 neighbours of a site with S = 1/2 along y, counted by hand."""
    j, k, j2, k2, j3 = 1.0, 0.3, 0.17, 0.05, 0.11
    first, second, third = {
        "ferromagnet": (3 * j + k, 3 * j2 + k2, 3 * j3),
        "Neel": (-3 * j - k, 3 * j2 + k2, -3 * j3),
        "zigzag": (j - k, k2 - j2, -3 * j3),
        "stripy": (k - j, k2 - j2, 3 * j3),
    }[order]
    keys = {"heisenberg_meV": j, "heisenberg_2_meV": j2, "kitaev_2_meV": k2, "heisenberg_3_meV": j3}
    keys |= {"gamma_meV": 0.2, "gamma_prime_meV": 0.1}  # these couple y to x and z only
    layer = {f"spin_layer__{key}": value for key, value in keys.items()}
    for magnetic, expected in ((True, T * (first / 8 + second / 4 + third / 8)), (False, 0.0)):
        model = build_model(dimensionless(k, form=form, cell=ORDERS[order], magnetic=magnetic, **layer))
        p = polarised(model, moments(order, model.cell))
        assert p @ model.v @ p / 2 / model.cell.n_sites == pytest.approx(expected, rel=1e-12, abs=1e-9)


# ---- electron bands ----------------------------------------------------------------------------------------------

SPIN_ORBIT = {"conduction_layer__kane_mele_meV": 0.06, "conduction_layer__rashba_meV": 0.11}
ONE_BODY = SPIN_ORBIT | {
    "conduction_layer__next_hopping_meV": 0.13,
    "conduction_layer__sublattice_offset_meV": 0.21,
    "magnetic_field__tesla": [500.0, -300.0, 900.0],
}
K_POINT, M_POINT = (1 / 3, 2 / 3), (1 / 2, 0.0)


def bands(k, species=ELECTRON, **keys):
    """Majorana levels e(k) (8,) of one species without multipliers, in units of t, ascending."""
    model = build_model(dimensionless(**keys))
    phases = np.exp(2j * np.pi * (np.atleast_2d(k) @ model.lattice_vectors.T))
    own = [majorana(site, species, mu) for site in (0, 1) for mu in range(4)]
    return np.linalg.eigvalsh(bloch_matrix(model, model.h, phases)[0][np.ix_(own, own)]) / T


def geometric_bloch(k, *, hopping, next_hopping, offset, kane_mele, rashba, zeeman):
    """The published one-body Hamiltonian of the honeycomb lattice, in real space, then in k: (4, 4), A up ... B down.

    Second neighbours i -> l -> j turn left (nu = +1) or right; d_ij is a unit vector from i to j.
    Phys. Rev. Lett. 95, 226801 (2005), "Quantum spin Hall effect in graphene".
    """
    normal, along = np.ones(3) / np.sqrt(3), np.array([1, -1, 0]) / np.sqrt(2)
    in_plane = np.array([along, np.cross(normal, along)])  # the z bond and its left, in spin axes
    axis = B_SITE / np.linalg.norm(B_SITE)
    frame = np.array([axis, [-axis[1], axis[0]]])  # the same two in the lattice plane
    h = np.zeros((4, 4), complex)
    near = [
        (s, e, c) for b in FIRST for s, e, c in ((b.start, b.end, b.cell), (b.end, b.start, tuple(-x for x in b.cell)))
    ]
    for start, end, cell in near:
        d = (positions(end, cell) - positions(start, (0, 0))) * np.sqrt(3)
        spin_d = (frame @ d) @ in_plane
        matrix = -hopping * np.eye(2) + 1j * rashba * np.tensordot(np.cross(spin_d, normal), PAULI, 1)
        h[2 * start : 2 * start + 2, 2 * end : 2 * end + 2] += matrix * np.exp(2j * np.pi * np.dot(k, cell))
        for start2, _, cell2 in (x for x in near if x[0] == end):
            total = (cell[0] + cell2[0], cell[1] + cell2[1])
            if total == (0, 0):
                continue
            assert start2 == end
            d2 = positions(start, total) - positions(end, cell)
            turn = np.sign(d[0] * d2[1] - d[1] * d2[0])
            matrix = -next_hopping * np.eye(2) + 1j * kane_mele * turn * np.tensordot(normal, PAULI, 1)
            h[2 * start : 2 * start + 2, 2 * start : 2 * start + 2] += matrix * np.exp(2j * np.pi * np.dot(k, total))
    h += np.kron(np.diag([offset / 2, -offset / 2]), np.eye(2)) + np.kron(np.eye(2), np.tensordot(zeeman, PAULI, 1) / 2)
    return h


@pytest.mark.parametrize("k", [(0.0, 0.0), M_POINT, K_POINT, (0.123, 0.456), (-0.31, 0.07)])
def test_all_one_body_terms_together_have_the_bands_of_the_published_hamiltonian(k):
    """The Majorana levels are the electron levels at k and minus those at -k."""
    keys = {"hopping": 1.0, "next_hopping": 0.13, "offset": 0.21, "kane_mele": 0.06, "rashba": 0.11}
    zeeman = 2 * BOHR_MAGNETON * np.array([500.0, -300.0, 900.0]) / T
    one, other = (np.linalg.eigvalsh(geometric_bloch(sign * np.array(k), **keys, zeeman=zeeman)) for sign in (1, -1))
    assert bands(k, **ONE_BODY) == pytest.approx(np.sort(np.concatenate([one, -other])), abs=1e-12)


@pytest.mark.parametrize("k", [(0.0, 0.0), M_POINT, (0.2, 0.7)])
def test_honeycomb_bands(k):
    """E = +-t|f| - t'(|f|^2 - 3): Rev. Mod. Phys. 81, 109 (2009), "The electronic properties of graphene"."""
    f = abs(1 + np.exp(2j * np.pi * k[0]) + np.exp(2j * np.pi * k[1]))
    assert bands(k) == pytest.approx(np.repeat([-f, f], 4), abs=1e-12)
    next_hopping = 0.1
    e = np.array([-f, f]) - next_hopping * (f**2 - 3)
    both = np.sort(np.repeat(np.concatenate([e, -e]), 2))
    assert bands(k, conduction_layer__next_hopping_meV=next_hopping) == pytest.approx(both, abs=1e-12)


def test_levels_at_the_dirac_point_are_the_published_ones():
    """Gap 6 sqrt(3) lambda (Phys. Rev. Lett. 95, 226801 (2005), "Quantum spin Hall effect in graphene"), which Rashba
    coupling closes at lambda_R = 2 sqrt(3) lambda and a sublattice offset at 6 sqrt(3) lambda
    (Phys. Rev. Lett. 95, 146802 (2005), "Z2 topological order and the quantum spin Hall effect")."""
    kane_mele, rashba, offset = (f"conduction_layer__{x}_meV" for x in ("kane_mele", "rashba", "sublattice_offset"))
    x, l, r, d = 0.05, 3 * np.sqrt(3) * 0.05, 0.11, 0.3

    def both_signs(*levels):
        return pytest.approx(np.sort(np.concatenate([levels, np.negative(levels)])), abs=1e-12)

    assert bands(K_POINT, **{offset: d}) == both_signs(*[d / 2] * 4)
    assert bands(K_POINT, **{rashba: r}) == both_signs(0, 0, 3 * r, -3 * r)
    assert bands(K_POINT, **{kane_mele: x}) == both_signs(l, l, l, l)
    assert bands(K_POINT, **{kane_mele: x, rashba: r}) == both_signs(l, l, l - 3 * r, l + 3 * r)
    assert bands(K_POINT, **{kane_mele: x, offset: d}) == both_signs(l - d / 2, l - d / 2, l + d / 2, l + d / 2)


def test_a_field_splits_electrons_and_free_spins_by_g_times_the_bohr_magneton():
    b = 1000.0
    field = {"magnetic_field__tesla": (b * np.ones(3) / np.sqrt(3)).tolist()}
    split = 2.3 * BOHR_MAGNETON * b / T
    f = abs(1 + np.exp(2j * np.pi * 0.2) + np.exp(2j * np.pi * 0.7))
    levels = [x + s * split / 2 for x in (-f, f) for s in (-1, -1, 1, 1)]
    assert bands((0.2, 0.7), conduction_layer__g_factor=2.3, **field) == pytest.approx(np.sort(levels))
    # One number, or in plane and out of plane for a field along the normal; a spin flip costs twice the level.
    for g in (2.3, [0.7, 2.3]):
        free = bands((0.2, 0.7), SPINON, kitaev=0.0, form="so4", spin_layer__g_factor=g, **field)
        assert free == pytest.approx(np.repeat([-split / 2, split / 2], 4))


# ---- continuous symmetries ---------------------------------------------------------------------------------------

GAUGE = {f"gauge {axis} site {site}" for axis in "xyz" for site in (0, 1)}
SPIN = {f"spin {axis}" for axis in "xyz"}
CHARGE = {"electron number", "pair rotation x", "pair rotation y"}


@pytest.mark.parametrize(
    ("keys", "expected"),
    [
        ({"form": "so4", "kitaev": 0.0, "spin_layer__heisenberg_meV": 1.0}, GAUGE | SPIN | CHARGE),
        ({"form": "so4"}, GAUGE | CHARGE),
        ({"form": "kitaev"}, CHARGE),
        ({"form": "kitaev", "conduction_layer__next_hopping_meV": 0.1}, {"electron number"}),
        ({"form": "so4", "mean_field__kondo_form": "kitaev"}, CHARGE),
        (
            {"form": "so4", "kitaev": 0.0, "magnetic_field__tesla": [0.0, 0.0, 5.0]},
            GAUGE | {"spin z"} | CHARGE,
        ),
        ({"form": "so4", "kitaev": 0.0, "conduction_layer__rashba_meV": 0.1}, GAUGE | CHARGE),
        ({"form": "so4", "kitaev": 0.0, "kondo__anisotropy": [1.0, 1.0, 2.0]}, GAUGE | {"spin z"} | CHARGE),
    ],
)
def test_each_coupling_keeps_the_continuous_symmetries_it_should(keys, expected):
    model = build_model(dimensionless(**({"kitaev": 0.5, "kondo": 1.0} | keys)))
    assert {generator.name for generator in symmetry_generators(model)} == expected
