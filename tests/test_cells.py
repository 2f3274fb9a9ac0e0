"""Magnets, cells and couplings beyond the primitive cell: solutions against classical energies and symmetries."""

import numpy as np
import pytest
from materials import T, dimensionless

from kondomf.meanfield import named_start, solve
from kondomf.meanfield.classical import ClassicalEnergy
from kondomf.meanfield.curvature import curvature_at, gauge_copies
from kondomf.meanfield.problem import Problem, point_at
from kondomf.meanfield.zone import uniform
from kondomf.model import MagneticCell, build_model
from kondomf.phases import Order, gap, label

SMALL = {"points": 2, "offset": "c3", "temperature": 0.01}
MAGNETIC = {"search__phase": "magnetic"}
ROW = ((1, 0), (-1, 2))
"""The cell "1x2"."""


def solved(start, **keys):
    material = dimensionless(**(SMALL | keys))
    return solve(material, only_starts=[named_start(material, start)])


def named(solution):
    return label(solution, Order(solution), gap(solution)).name


def energy(solution):
    return solution.free_energy_meV_per_cell / T


# ---- product states ----------------------------------------------------------------------------------------------


def free_layers(material):
    """F per primitive cell of the electrons alone: free spinons besides them have the entropy ln 4 per site."""
    model = build_model(material)
    point = point_at(Problem(model, uniform(material.zone.points, material.zone.offset)), model.h)
    return (point.free_energy + model.temperature * np.log(4) * model.cell.n_sites) / model.cell.size


@pytest.mark.parametrize(
    ("start", "keys"),
    [
        ("zigzag antiferromagnet", {"cell": "1x2", "kitaev": 1.0, "spin_layer__heisenberg_meV": -0.3}),
        ("stripy antiferromagnet", {"cell": "1x2", "kitaev": -1.0, "spin_layer__heisenberg_meV": 0.5}),
        (
            "zigzag antiferromagnet",
            {"cell": "1x2", "kitaev": -1.0, "spin_layer__gamma_meV": 0.5, "spin_layer__heisenberg_3_meV": 0.2},
        ),
        ("Neel antiferromagnet", {"kitaev": -0.3, "spin_layer__heisenberg_meV": 1.0}),
        ("ferromagnet", {"kitaev": 0.3, "spin_layer__heisenberg_meV": -1.0}),
        ("120-degree antiferromagnet", {"cell": "sqrt3", "kitaev": 0.0, "spin_layer__heisenberg_2_meV": 1.0}),
    ],
)
def test_a_cold_magnet_without_bonds_has_the_classical_energy_of_its_spins_and_that_of_the_electrons(start, keys):
    solution = solved(start, form="so4", filling=0.8, **MAGNETIC, **keys)
    model, order = solution.model, Order(solution)
    assert solution.status == "minimum-in-class"
    assert order.spinon_bond < 1e-9
    assert np.linalg.norm(order.spin_moment, axis=1) == pytest.approx(np.full(model.cell.n_sites, 0.5), abs=1e-6)
    classical = float(ClassicalEnergy.of(model)(order.spin_moment)) / model.cell.size
    electrons = free_layers(dimensionless(**(SMALL | keys), form="so4", filling=0.8))
    # The entropy left in the saturated spins is below 1e-6 at this temperature.
    assert solution.free_energy_meV_per_cell == pytest.approx(electrons + classical, abs=1e-4)
    assert named(solution) == f"{start.replace('Neel', 'Néel')} with metal"


def kitaev_heisenberg(a, start, **keys):
    """(1 - a) s.s - 2 a s^g s^g in Pauli matrices, in the two-cell rectangle, electrons apart."""
    couplings = {"kitaev": -0.8 * a, "spin_layer__heisenberg_meV": 0.4 * (1 - a)}
    return solved(start, cell="1x2", **couplings, **MAGNETIC, **keys)


def test_neel_order_gives_way_to_stripy_order_at_one_third():
    """Where both have the classical energy; exact diagonalization has the boundary near a = 0.4:
    Phys. Rev. Lett. 105, 027204 (2010) (from memory)."""
    for a, name in ((0.32, "Néel"), (0.35, "stripy")):
        magnets = (kitaev_heisenberg(a, f"{x} antiferromagnet", form="so4") for x in ("Neel", "stripy"))
        lowest = min(magnets, key=energy)
        assert lowest.status == "minimum-in-class"
        assert named(lowest) == f"{name} antiferromagnet with metal"


def test_stripy_order_gives_way_to_the_spin_liquid_in_the_form_that_is_exact_for_the_liquid():
    """Near a = 0.67 in mean-field theory; exact diagonalization: near 0.8, Phys. Rev. Lett. 105, 027204 (2010) (from
    memory). The theory favours the liquid, as it has the fluctuations of the liquid and none of the magnet."""
    for a, stripy_is_lower in ((0.65, True), (0.75, False)):
        stripy, liquid = (
            kitaev_heisenberg(a, x, points=4, temperature=0.002) for x in ("stripy antiferromagnet", "decoupled 0")
        )
        assert stripy.status == liquid.status == "minimum-in-class"
        assert named(stripy) == "stripy antiferromagnet with metal"
        assert named(liquid) == "Kitaev spin liquid with metal (FL*)"
        assert (energy(stripy) < energy(liquid)) == stripy_is_lower


# ---- neighbour Kondo coupling ------------------------------------------------------------------------------------


@pytest.mark.parametrize(("start", "neighbours"), [("ferromagnet", 3), ("Neel antiferromagnet", -3)])
def test_in_a_magnet_the_neighbour_coupling_adds_to_the_local_one_with_the_sign_of_the_order(start, neighbours):
    """Without hybridization an electron feels the field of its own spin and of the three around it."""
    keys = {"kitaev": 0.0, "spin_layer__heisenberg_meV": -0.5 if neighbours > 0 else 0.5, "filling": 0.9, "form": "so4"}
    both = solved(start, kondo=0.5, kondo__neighbour_coupling_meV=0.2, **keys, **MAGNETIC)
    local = solved(start, kondo=0.5 + neighbours * 0.2, **keys, **MAGNETIC)
    assert both.status == local.status == "minimum-in-class"
    assert np.abs(Order(both).electron_moment).max() > 0.01
    assert energy(both) == pytest.approx(energy(local), abs=1e-9)


def test_a_state_that_hybridizes_on_the_bonds_alone_is_not_called_decoupled():
    keys = {"kitaev": 0.1, "kondo": 0.0, "kondo__neighbour_coupling_meV": 3.0, "form": "so4", "magnetic": False}
    solution = solved("hybridized 0", filling=0.9, points=4, **keys)
    order = Order(solution)
    assert solution.status == "minimum"
    assert order.bond_hybridization > 0.1
    assert not named(solution).endswith("with metal")
    assert "metal" not in named(solution)


# ---- symmetries --------------------------------------------------------------------------------------------------


def turned(times, **keys):
    """Keys after turning lattice and spins: a1 -> a2 - a1, a2 -> -a1; bonds and spin axes x -> y -> z -> x."""
    cell = np.array(ROW) @ np.linalg.matrix_power([[-1, 1], [-1, 0]], times)
    return {"cell": cell.tolist()} | {name: np.roll(value, times).tolist() for name, value in keys.items()}


COUPLINGS = {
    "spin_layer__gamma_meV": 0.5,
    "spin_layer__gamma_prime_meV": -0.1,
    "spin_layer__heisenberg_3_meV": 0.2,
    "spin_layer__kitaev_2_meV": 0.1,
    "kondo__neighbour_coupling_meV": 0.3,
    "filling": 0.8,
}


def test_turning_cell_couplings_and_field_together_leaves_the_energy_of_a_magnet_unchanged():
    """The grid turns with its cell."""
    found = []
    for times in range(3):
        unlike = turned(
            times,
            kitaev=[-1.0, -0.7, -0.9],
            kondo__anisotropy=[1.0, 0.8, 1.3],
            magnetic_field__tesla=[300.0, 500.0, -400.0],
        )
        solution = solved(
            "zigzag antiferromagnet", kondo=1.0, conduction_layer__rashba_meV=0.1, **COUPLINGS, **unlike, **MAGNETIC
        )
        assert solution.status == "minimum-in-class"
        found.append(energy(solution))
    assert found[1:] == pytest.approx(found[:1] * 2, abs=1e-9)


def test_turning_cell_and_couplings_together_leaves_the_energy_of_a_hybridized_state_unchanged():
    found = []
    for times in range(3):
        unlike = turned(times, kitaev=[-0.5, -0.3, -0.4])
        solution = solved("hybridized 0", kondo=4.0, magnetic=False, form="so4", **COUPLINGS, **unlike)
        assert solution.status == "minimum"
        assert Order(solution).hybridization.min() > 0.1
        found.append(energy(solution))
    assert found[1:] == pytest.approx(found[:1] * 2, abs=1e-8)


@pytest.mark.parametrize("cell", ["1x1", "1x2", [[2, 0], [0, 2]]])
def test_copies_that_are_not_distinct_for_a_cell_have_the_same_curvature_and_the_distinct_ones_do_not(cell):
    """The two-cell rectangle has copies of two kinds, the 2 x 2 cell of one."""
    material = dimensionless(1.0, 3.0, magnetic=False, cell=cell)  # a uniform hybridization destabilises one copy
    problem = Problem(build_model(material), uniform(4 if cell == "1x1" else 2, "midpoint"))
    model = problem.model
    point = point_at(problem, named_start(material, "decoupled 0").fields(model))
    copies = [point_at(problem, signs * point.phi) for signs in model.gauge_signs]
    lowest = [curvature_at(problem, copy).lowest for copy in copies]
    kinds = {round(value, 6) for value in lowest}
    assert len(kinds) <= len(model.distinct_copies)
    assert len(kinds) > 1 or len(model.distinct_copies) == 1
    assert {round(lowest[copy], 6) for copy in model.distinct_copies} == kinds


def test_a_magnet_without_bonds_is_its_only_gauge_copy():
    solution = solved("ferromagnet", kitaev=0.3, spin_layer__heisenberg_meV=-1.0, form="so4", **MAGNETIC)
    problem = Problem(solution.model, solution.zone)
    assert gauge_copies(problem, point_at(problem, solution.phi)) == []


@pytest.mark.parametrize(
    ("matrix", "threefold"),
    [
        (((1, 0), (0, 1)), True),
        (ROW, False),
        (((1, 1), (-1, 2)), True),
        (((2, 0), (0, 2)), True),
        (((2, 1), (-1, 1)), False),
        (((2, 1), (-1, 3)), True),
    ],
)
def test_cells_know_whether_they_keep_the_threefold_rotation(matrix, threefold):
    assert MagneticCell(matrix).is_threefold == threefold


def test_order_parameters_are_found_in_a_cell_that_holds_a_bond_from_its_other_end_only():
    solution = solved("decoupled 0", cell="sqrt3", kitaev=-1.0)
    order = Order(solution)
    assert order.spinon_bonds == pytest.approx(np.ones(9), abs=1e-4)
    for energies in order.bond_energies.values():
        assert energies == pytest.approx([energies[0]] * 3, abs=1e-6 * T)
    assert order.pairing == pytest.approx((0, 0), abs=1e-9)
    p = np.where(solution.model.hybridization, 0.0, solution.p)
    assert sum(map(sum, order.bond_energies.values())) == pytest.approx(p @ solution.model.v @ p / 2, rel=1e-9)
