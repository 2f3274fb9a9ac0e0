"""Classical magnets: their energy, its minima, the names of their patterns, and the starts made of them."""

import numpy as np
import pytest
from materials import EXCHANGE, T, dimensionless

from kondomf.meanfield.classical import (
    ClassicalEnergy,
    classical_magnets,
    collinear_patterns,
    moment_channels,
    pattern_name,
    random_spins,
)
from kondomf.meanfield.starts import standard_starts, starts
from kondomf.model import MagneticCell, build_model
from kondomf.model.build import exchange_matrix
from kondomf.model.lattice import B_SITE, CELL_VECTORS, FIRST, SECOND, THIRD
from kondomf.units import BOHR_MAGNETON

TWO_BY_TWO = [[2, 0], [0, 2]]
CELLS = ["1x1", "1x2", "sqrt3", TWO_BY_TWO, [[2, 1], [-1, 1]]]
COUPLINGS = {
    "kitaev": [-1.0, -0.8, 0.6],
    **EXCHANGE,
    "spin_layer__g_factor": [2.0, 2.5],
    "magnetic_field__tesla": [800.0, -300.0, 500.0],
}
"""Every exchange, and a field."""
ZIGZAG_MATERIAL = {"spin_layer__gamma_meV": 0.5, "spin_layer__heisenberg_3_meV": 0.2}


def model_of(cell, **keys):
    return build_model(dimensionless(cell=cell, **keys))


def energy_of(cell, **keys):
    return ClassicalEnergy.of(model_of(cell, **keys))


# ---- energy ------------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("cell", CELLS)
@pytest.mark.parametrize("form", ["kitaev", "so4"])
def test_the_energy_is_the_sum_of_s_m_s_over_the_bonds_and_of_the_zeeman_energy(cell, form):
    material = dimensionless(cell=cell, form=form, **COUPLINGS)
    model, layer = build_model(material), material.spin_layer
    spins = random_spins(np.random.default_rng(1), 1, model.cell.n_sites)[0]
    expected = BOHR_MAGNETON * np.sum(np.array(material.magnetic_field.tesla) @ layer.g_tensor @ spins.T)
    for kinds, j, k, gamma, gamma_prime in (
        (FIRST, layer.heisenberg_meV, layer.kitaev_meV, layer.gamma_meV, layer.gamma_prime_meV),
        (SECOND, layer.heisenberg_2_meV, [layer.kitaev_2_meV] * 3, 0.0, 0.0),
        (THIRD, layer.heisenberg_3_meV, [0.0] * 3, 0.0, 0.0),
    ):
        for start, end, _, kind in model.cell.bonds(kinds):
            expected += spins[start] @ exchange_matrix(kind, j, k[kind], gamma, gamma_prime) @ spins[end]
    assert float(ClassicalEnergy.of(model)(spins)) == pytest.approx(expected, rel=1e-12)


@pytest.mark.parametrize("cell", CELLS)
def test_product_states_have_the_spins_they_are_made_of_and_obey_the_constraint(cell):
    model = model_of(cell)
    spins = random_spins(np.random.default_rng(2), 1, model.cell.n_sites)[0]
    p = np.tensordot(moment_channels(model), spins, axes=2)
    assert model.c @ p == pytest.approx(np.zeros(len(model.c)))
    assert np.linalg.norm(p) == pytest.approx(np.sqrt(2 * model.cell.n_sites))  # 2 (2|s|)^2 on every site


@pytest.mark.parametrize("cell", CELLS)
def test_no_relaxation_raises_the_energy(cell):
    """Also where a spin couples to its own images, as in every cell one primitive cell wide."""
    energy = energy_of(cell, **COUPLINGS)
    spins = random_spins(np.random.default_rng(3), 12, len(energy.b))
    relaxed = energy.relaxed(spins)
    assert (energy(relaxed) <= energy(spins)).all()
    assert np.linalg.norm(relaxed, axis=-1) == pytest.approx(np.full(relaxed.shape[:2], 0.5))
    field = energy.b + np.tensordot(relaxed[0], energy.q, axes=2)
    along = (field * relaxed[0]).sum(axis=1, keepdims=True) * relaxed[0] * 4
    assert np.abs(field - along).max() < 1e-4 * energy.scale  # no torque is left


# ---- Kitaev-Heisenberg model -------------------------------------------------------------------------------------


def collinear(j, k):
    """Energies per site of the collinear patterns with their best axis, S = 1/2; counted by hand.

    On a bond of type g, parallel spins along the cubic axis a have (J + K delta_ga)/4. Of the zigzag and stripy
    patterns the odd bond may be that of the axis or not.
    """
    return {
        "ferromagnet": (3 * j + k) / 8,
        "Neel antiferromagnet": -(3 * j + k) / 8,
        "zigzag antiferromagnet": (j - abs(k)) / 8,
        "stripy antiferromagnet": (-j - abs(k)) / 8,
    }


@pytest.mark.parametrize("cell", ["1x2", TWO_BY_TWO])
@pytest.mark.parametrize("angle", range(5, 360, 50))
def test_collinear_magnets_have_the_classical_energies_of_the_kitaev_heisenberg_model(cell, angle):
    """Parameters of Phys. Rev. Lett. 110, 097204 (2013), "Zigzag magnetic order in the iridium oxide Na2IrO3"."""
    j, k = np.cos(np.radians(angle)), 2 * np.sin(np.radians(angle))
    model = model_of(cell, kitaev=k, spin_layer__heisenberg_meV=j)
    energy = ClassicalEnergy.of(model)
    found = {name: float(energy(spins)) / T / model.cell.n_sites for name, spins in classical_magnets(model).items()}
    assert found == pytest.approx(collinear(j, k), abs=1e-9)
    assert list(found.values()) == sorted(found.values())


@pytest.mark.parametrize(
    ("angle", "name"),
    [
        (-25.0, "Neel antiferromagnet"),
        (60.0, "Neel antiferromagnet"),
        (95.0, "zigzag antiferromagnet"),
        (150.0, "zigzag antiferromagnet"),
        (157.0, "ferromagnet"),
        (265.0, "ferromagnet"),
        (275.0, "stripy antiferromagnet"),
        (330.0, "stripy antiferromagnet"),
    ],
)
def test_the_four_phases_follow_each_other_with_the_classical_boundaries(angle, name):
    """J = cos, K = 2 sin of the angle: zigzag between J = 0 and J = -K (153.4 degrees), stripy opposite to it.

    The exact diagonalization of Phys. Rev. Lett. 110, 097204 (2013) has these four phases in this order, with liquids
    around the two Kitaev points and the boundary of zigzag and ferromagnet at 162 degrees (from memory).
    """
    j, k = np.cos(np.radians(angle)), 2 * np.sin(np.radians(angle))
    model = model_of("1x2", kitaev=k, spin_layer__heisenberg_meV=j)
    energy = ClassicalEnergy.of(model)
    magnets = classical_magnets(model)
    assert next(iter(magnets)) == name
    # No state, collinear or not, lies below the lowest eigenvalue of the exchange (Luttinger-Tisza bound).
    bound = np.linalg.eigvalsh(energy.q.reshape([model.n_majorana // 8 * 3] * 2)).min() * model.cell.n_sites / 8
    assert float(energy(magnets[name])) == pytest.approx(bound, rel=1e-9)


def test_the_stripy_state_halfway_between_heisenberg_and_kitaev_has_the_exact_energy():
    """(1 - a) s.s - 2 a s^g s^g in Pauli matrices is, at a = 1/2, a Heisenberg ferromagnet of coupling -J in turned
    axes, of energy -3J/8 per site; in spins 1/2 that is J = 2, K = -4. Phys. Rev. Lett. 105, 027204 (2010),
    "Kitaev-Heisenberg model on a honeycomb lattice: possible exotic phases in iridium oxides A2IrO3"."""
    energy = energy_of("1x2", kitaev=-4.0, spin_layer__heisenberg_meV=2.0)
    lowest = energy.lowest()[0]
    assert pattern_name(MagneticCell(((1, 0), (-1, 2))), lowest) == "stripy antiferromagnet"
    assert float(energy(lowest)) / T / 4 == pytest.approx(-3 * 2 / 8)


# ---- minima ------------------------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("cell", "keys", "name"),
    [
        ("1x2", {"kitaev": -1.0} | ZIGZAG_MATERIAL, "zigzag antiferromagnet"),
        (TWO_BY_TWO, {"kitaev": -1.0} | ZIGZAG_MATERIAL, "zigzag antiferromagnet"),
        ("1x1", {"kitaev": -1.0} | ZIGZAG_MATERIAL, "ferromagnet"),
        ("sqrt3", {"kitaev": 0.0, "spin_layer__heisenberg_2_meV": 1.0}, "120-degree antiferromagnet"),
        ("sqrt3", {"kitaev": -1.0, "spin_layer__heisenberg_meV": -1.0}, "ferromagnet"),
        (
            "1x1",
            {"kitaev": 0.0, "spin_layer__heisenberg_meV": 0.1, "magnetic_field__tesla": [0.0, 0.0, 1000.0]},
            "canted Neel antiferromagnet",
        ),
    ],
)
def test_the_lowest_magnet_of_a_cell_is_named_by_its_pattern(cell, keys, name):
    model = model_of(cell, **keys)
    magnets = classical_magnets(model)
    assert next(iter(magnets)) == name
    energies = [float(ClassicalEnergy.of(model)(spins)) for spins in magnets.values()]
    assert energies == sorted(energies)


def test_two_triangular_antiferromagnets_have_the_energy_of_120_degrees():
    """-1/2 of the bond energy on three bonds per site: textbook (from memory)."""
    energy = energy_of("sqrt3", kitaev=0.0, spin_layer__heisenberg_2_meV=1.0)
    assert float(energy(energy.lowest()[0])) / T / 6 == pytest.approx(-3 / 8, rel=1e-6)


def test_states_that_a_symmetry_connects_are_one_minimum():
    """The three zigzag domains of the 2 x 2 cell, and reversal."""
    energy = energy_of(TWO_BY_TWO, **{"kitaev": -1.0} | ZIGZAG_MATERIAL)
    lowest = [spins for spins in energy.lowest() if energy(spins) < energy(energy.lowest()[0]) + 1e-3 * energy.scale]
    assert len(lowest) == 1


@pytest.mark.parametrize("odd", [0, 1, 2])
def test_a_weak_bond_is_the_odd_one_of_a_zigzag_magnet_and_chains_run_along_the_others(odd):
    """K < 0 gains on parallel bonds, which zigzag chains have on two bond types."""
    kitaev = np.full(3, -1.0)
    kitaev[odd] = -0.5
    model = model_of(TWO_BY_TWO, kitaev=kitaev.tolist(), **ZIGZAG_MATERIAL)
    spins = classical_magnets(model)["zigzag antiferromagnet"]
    for i, j, _, kind in model.cell.bonds(FIRST):
        assert np.sign(spins[i] @ spins[j]) == (-1 if kind == odd else 1)


def test_without_the_magnetic_channel_there_are_no_magnets_to_start_from():
    assert classical_magnets(model_of("1x2", magnetic=False, kondo=1.0)) == {}


# ---- patterns ----------------------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("cell", "names"),
    [
        ("1x1", {"ferromagnet": 1, "Neel antiferromagnet": 1}),
        ("sqrt3", {"ferromagnet": 1, "Neel antiferromagnet": 1}),
        (
            "1x2",
            {"ferromagnet": 1, "Neel antiferromagnet": 1, "zigzag antiferromagnet": 1, "stripy antiferromagnet": 1},
        ),
        (
            TWO_BY_TWO,
            {"ferromagnet": 1, "Neel antiferromagnet": 1, "zigzag antiferromagnet": 3, "stripy antiferromagnet": 3},
        ),
    ],
)
def test_a_cell_holds_the_collinear_patterns_whose_wave_vector_it_folds_back(cell, names):
    found = [name for name, _ in collinear_patterns(model_of(cell).cell)]
    assert {name: found.count(name) for name in found} == names


def turned(rng):
    """A random rotation matrix (3, 3)."""
    q, r = np.linalg.qr(rng.standard_normal((3, 3)))
    q = q * np.sign(np.diag(r))
    return q * np.sign(np.linalg.det(q))


@pytest.mark.parametrize("seed", range(3))
def test_a_pattern_keeps_its_name_under_rotations_of_all_spins_and_for_moments_of_unequal_size(seed):
    rng = np.random.default_rng(seed)
    cell = model_of(TWO_BY_TWO).cell
    for name, signs in collinear_patterns(cell):
        sizes = rng.uniform(0.1, 0.5, cell.n_sites)
        moments = (signs * sizes)[:, None] * [0.0, 0.0, 1.0] @ turned(rng)
        assert pattern_name(cell, moments) == name


@pytest.mark.parametrize("between_sublattices", [0.0, 1.1])
@pytest.mark.parametrize("handedness", [1, -1])
def test_spins_turning_by_120_degrees_on_each_sublattice_are_called_so(between_sublattices, handedness):
    """Wave vector K: from cell to cell the angle grows by 2 pi/3 (n1 - n2), on B in either sense."""
    cell = model_of("sqrt3").cell
    n1, n2 = np.repeat(cell.offsets, 2, axis=0).T
    sublattice = np.arange(cell.n_sites) % 2
    angle = 2 * np.pi / 3 * (n1 - n2) * np.where(sublattice, handedness, 1) + between_sublattices * sublattice
    moments = np.stack([np.cos(angle), np.sin(angle), 0 * angle], axis=1) @ turned(np.random.default_rng(5))
    assert pattern_name(cell, moments) == "120-degree antiferromagnet"
    assert pattern_name(cell, moments + 0.6 * np.cross(moments[0], moments[2])) == "canted 120-degree antiferromagnet"


def test_the_patterns_agree_with_the_positions_of_the_sites():
    """Zigzag: chains of parallel spins along the bonds; stripy: ladders of parallel bonds, antiparallel to the next."""
    cell = model_of("1x2").cell
    position = np.array([cell.offsets[s // 2] @ CELL_VECTORS + s % 2 * B_SITE for s in range(4)])
    patterns = dict(collinear_patterns(cell))
    rows = np.rint(position[:, 1] / (np.sqrt(3) / 2) - 0.2).astype(int)  # rows of zigzag chains along a1
    assert np.ptp(patterns["zigzag antiferromagnet"] * (-1.0) ** rows) == 0
    assert np.ptp(patterns["stripy antiferromagnet"] * (-1.0) ** (rows + np.arange(4))) == 0


# ---- starts ------------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("cell", ["1x1", "1x2", "sqrt3", TWO_BY_TWO])
def test_the_first_eight_starts_of_a_search_span_liquids_in_all_copies_and_the_lowest_magnets(cell):
    model = model_of(cell, kondo=1.0, **ZIGZAG_MATERIAL)
    names = [start.name for start in starts(model, 8, 1)]
    magnets = list(classical_magnets(model))
    liquids = ["decoupled 0", *(f"hybridized {copy}" for copy in ("0", "M1", "M2", "M3"))]
    assert set(liquids) <= set(names)
    assert set(magnets[:3]) <= set(names)
    assert set(names[:3]) == {"decoupled 0", "hybridized 0", magnets[0]}
    assert list(starts(model, 3, 1))[2].name == magnets[0]


@pytest.mark.parametrize("sign", [1, -1])
def test_the_electrons_of_a_magnet_start_against_or_along_its_spins_as_the_kondo_coupling_wants(sign):
    model = model_of("1x2", kitaev=-1.0, kondo=sign * 2.0, **ZIGZAG_MATERIAL)
    p = standard_starts(model)["zigzag antiferromagnet"].p
    active = np.where((model.species == 1).all(axis=1), p, 0.0)
    spins = np.where((model.species == 0).all(axis=1), p, 0.0)
    assert np.abs(active).max() == pytest.approx(0.2)
    assert active @ model.v @ spins < 0


@pytest.mark.parametrize(
    ("cell", "copies"), [("1x1", (0, 1, 2, 3)), ("1x2", (0, 1)), ("sqrt3", (0, 1, 2, 3)), (TWO_BY_TWO, (0,))]
)
def test_gauge_copies_coincide_where_their_signs_repeat_with_the_cell(cell, copies):
    assert model_of(cell).distinct_copies == copies
