"""Thermodynamic derivatives of a solution: against re-solved neighbours, textbook limits, symmetries, refusals."""

import json
from functools import cache

import numpy as np
import pytest
from materials import T, dimensionless
from scipy.special import zeta

from kondomf.material import material_from_dict
from kondomf.material.honeycomb import density_of_states, energy_quadrature
from kondomf.meanfield import Settings, Start, carried_over, named_start, solve
from kondomf.meanfield.starts import magnet
from kondomf.meanfield.thermodynamics import CHARGE, HEAT, SLOPE, SPIN, thermodynamics
from kondomf.model import build_model
from kondomf.model.majorana import ELECTRON, SPINON, majorana, spin
from kondomf.units import BOHR_MAGNETON

TIGHT = Settings(residual=1e-11)
HEISENBERG = {"kitaev": 0.2, "kondo": 0.5, "filling": 0.9, "temperature": 0.1, "spin_layer__g_factor": [2.2, 1.8]}
STATES = {
    "decoupled": ("decoupled 0", {"kondo": 1.0, "filling": 0.9, "temperature": 0.1}),
    "hybridized": ("hybridized 0", {"kondo": 3.5, "filling": 0.75, "temperature": 0.05, "magnetic": False}),
    "weak moments": ("hybridized 0", {"kondo": 4.0, "filling": 0.9, "temperature": 0.05}),
    "heavy Fermi liquid": (
        "hybridized 0",
        {"kitaev": 0.3, "kondo": 2.2, "filling": 0.9, "temperature": 0.04, "magnetic": False, "form": "so4"}
        | {"search__phase": "heavy-fermi-liquid"},
    ),
    "antiferromagnet": ("antiferromagnet", HEISENBERG | {"spin_layer__heisenberg_meV": 1.0}),
    "antiferromagnet so4": (
        "antiferromagnet",
        HEISENBERG | {"spin_layer__heisenberg_meV": 1.0, "spin_layer__gamma_meV": 0.2, "form": "so4"},
    ),
    "in a field": (
        "ferromagnet",
        HEISENBERG | {"spin_layer__heisenberg_meV": -1.0, "magnetic_field__tesla": [0.0, 500.0, 900.0]},
    ),
}


def keys_of(name):
    return {"points": 4, "offset": "c3"} | STATES[name][1]


@cache
def state(name):
    return solved(STATES[name][0], **keys_of(name))


MAGNETS = {"ferromagnet": [0.0, 0.0, 0.5], "antiferromagnet": [0.3, 0.3, 0.3]}


def solved(name, **keys):
    material = dimensionless(**keys)
    if name in MAGNETS:
        model = build_model(material)
        signs = np.where((np.arange(model.cell.n_sites) % 2 == 1) & (name == "antiferromagnet"), -1, 1)
        start = Start(name, magnet(model, np.outer(signs, MAGNETS[name])))
    else:
        start = named_start(material, name)
    solution = solve(material, only_starts=[start], settings=TIGHT)
    assert solution.converged, solution.message
    return solution


def neighbour(solution, **keys):
    """The state that `solution` turns into under other keys."""
    material = dimensionless(**keys)
    start = carried_over(build_model(material), "neighbour", solution.model.table, solution.p)
    result = solve(material, only_starts=[start], settings=TIGHT)
    assert result.converged, result.message
    return result


def neighbours(name, key, step):
    """The states at `key` plus and minus `step`."""
    value = np.asarray(keys_of(name)[key])
    return [neighbour(state(name), **keys_of(name) | {key: (value + s * step).tolist()}) for s in (1, -1)]


def moment(solution):
    """Magnetic moment -(g_S S + g_c s) in mu_B per primitive cell from the correlators, (3,)."""
    material = material_from_dict(solution.inputs)
    home = solution.correlators[np.flatnonzero(~solution.model.lattice_vectors.any(axis=1))[0]]
    layers = (
        (SPINON, material.spin_layer.g_tensor, spin(material.mean_field.exchange_form)),
        (ELECTRON, material.conduction_layer.g_tensor, spin("so4")),
    )
    total = np.zeros(3)
    for species, g, operators in layers:
        for site in range(solution.model.cell.n_sites):
            place = [majorana(site, species, mu) for mu in range(4)]
            total -= g @ [sum(x * home[place[mu], place[nu]] for x, mu, nu in operator) for operator in operators]
    return total / solution.model.cell.size


# ---- derivatives against re-solved neighbours ---------------------------------------------------------------------


@pytest.mark.parametrize("name", STATES)
def test_specific_heat_and_drift_of_the_chemical_potential_are_those_of_states_solved_at_two_temperatures(name):
    found = thermodynamics(state(name))
    t, step = keys_of(name)["temperature"], 5e-5
    hot, cold = neighbours(name, "temperature", step)
    slope = (hot.entropy_kB_per_cell - cold.entropy_kB_per_cell) / (2 * step)
    assert found.specific_heat_kB_per_cell == pytest.approx(t * slope, rel=2e-5)
    drift = (hot.chemical_potential_meV - cold.chemical_potential_meV) / (2 * step * T)
    assert found.chemical_potential_slope_kB == pytest.approx(drift, rel=1e-4)
    assert found.entropy_kB_per_cell == state(name).entropy_kB_per_cell


@pytest.mark.parametrize("name", STATES)
def test_entropy_and_specific_heat_are_the_derivatives_of_the_free_energy(name):
    """S = -dF/dT and C = -T d2F/dT2."""
    found = thermodynamics(state(name))
    t, step = keys_of(name)["temperature"], 3e-4
    hot, cold = (x.free_energy_meV_per_cell / T for x in neighbours(name, "temperature", step))
    here = state(name).free_energy_meV_per_cell / T
    assert found.entropy_kB_per_cell == pytest.approx(-(hot - cold) / (2 * step), rel=1e-4)
    assert found.specific_heat_kB_per_cell == pytest.approx(-t * (hot + cold - 2 * here) / step**2, rel=1e-3)


@pytest.mark.parametrize("name", STATES)
def test_the_compressibility_is_that_of_states_solved_at_two_fillings(name):
    above, below = neighbours(name, "filling", 1e-4)
    slope = 2e-4 / (above.chemical_potential_meV - below.chemical_potential_meV)
    assert thermodynamics(state(name)).compressibility_per_meV == pytest.approx(slope, rel=1e-5)


@pytest.mark.parametrize("name", STATES)
def test_the_spin_susceptibility_is_that_of_states_solved_in_two_opposite_fields(name):
    """The heavy Fermi liquid without its class, which admits no moments."""
    keys = keys_of(name) | {"search__phase": "any"}
    middle = np.array(keys.pop("magnetic_field__tesla", [0.0, 0.0, 0.0]))
    found = thermodynamics(state(name)).spin_susceptibility_muB_per_tesla_per_cell
    step = 0.25
    slope = np.empty((3, 3))
    for axis, unit in enumerate(np.eye(3)):
        up, down = (
            neighbour(state(name), magnetic_field__tesla=(middle + s * step * unit).tolist(), **keys) for s in (1, -1)
        )
        slope[:, axis] = (moment(up) - moment(down)) / (2 * step)
    assert found == pytest.approx(slope, rel=1e-3, abs=3e-4 * np.abs(slope).max())
    assert found == pytest.approx(found.T, rel=1e-9, abs=1e-15)
    assert np.linalg.eigvalsh(found).min() > 0


def test_magnetic_cells_do_not_change_the_values_per_primitive_cell():
    keys = keys_of("antiferromagnet") | {"offset": "midpoint"}
    small = thermodynamics(solved("antiferromagnet", **keys))
    large = thermodynamics(solved("antiferromagnet", **keys | {"cell": [[2, 0], [0, 2]], "points": 2}))
    assert large.specific_heat_kB_per_cell == pytest.approx(small.specific_heat_kB_per_cell, rel=1e-7)
    assert large.compressibility_per_meV == pytest.approx(small.compressibility_per_meV, rel=1e-7)
    # A soft anisotropy chooses one of several directions of the moments; they share the principal values.
    one, other = (np.linalg.eigvalsh(x.spin_susceptibility_muB_per_tesla_per_cell) for x in (small, large))
    assert one == pytest.approx(other, rel=1e-6)


# ---- textbook limits ----------------------------------------------------------------------------------------------


def test_free_spins_have_half_of_the_curie_susceptibility():
    """A limit of the method. Partons f with <f+f> = 1 only on average have levels -+g mu_B B/2 and moments
    (g mu_B/2) tanh(g mu_B B/4T): half of the Curie law (g mu_B)^2/4T of a spin 1/2 (any textbook), because half of
    their states, the empty and the doubly occupied, hold no spin."""
    keys = {"kitaev": 0.0, "points": 2, "temperature": 0.01, "conduction_layer__g_factor": 0.0}
    for form in ("kitaev", "so4"):
        found = thermodynamics(solved("decoupled 0", form=form, **keys))
        curie = (2 * BOHR_MAGNETON) ** 2 / (4 * 0.01 * T) / BOHR_MAGNETON
        assert found.spin_susceptibility_muB_per_tesla_per_cell == pytest.approx(2 * 0.5 * curie * np.eye(3), rel=1e-9)


def test_the_molar_susceptibility_of_free_spins_is_in_cgs_units():
    """0.375 emu K/mol is the Curie constant of spins 1/2 with g = 2 (textbook); two spins a cell, half of it each."""
    keys = {"kitaev": 0.0, "points": 2, "temperature": 0.01, "conduction_layer__g_factor": 0.0}
    found = thermodynamics(solved("decoupled 0", **keys))
    kelvin = 0.01 * T / 0.08617333
    assert found.spin_susceptibility_emu_per_mol[0, 0] * kelvin == pytest.approx(0.375, rel=1e-3)


def test_free_electrons_have_pauli_susceptibility_and_linear_specific_heat():
    """chi = (g mu_B)^2/4 rho, dn/dmu = rho/2, C = (pi^2/3) T rho with rho the states per energy, both spins, of a cell,
    up to order T^2 (textbook: Sommerfeld expansion); exactly, integrals over the thermal width of
    rho (Rev. Mod. Phys. 81, 109 (2009), "The electronic properties of graphene")."""
    t = 0.06
    solution = solved(
        "decoupled 0", kitaev=0.0, filling=0.9, points=48, spin_layer__g_factor=0.0, temperature=t, offset="c3"
    )
    found = thermodynamics(solution)
    mu = solution.chemical_potential_meV / T
    g, weight = energy_quadrature(400)
    x = (np.array([-g, g]) - mu) / t
    width, drift, heat = (2 * np.sum(weight * x**k / np.cosh(x / 2) ** 2) / 4 for k in range(3))
    rho = 2 * density_of_states(abs(mu))
    for compressibility, specific_heat, rel in (
        (width / t, heat - drift**2 / width, 2e-3),
        (rho, np.pi**2 / 3 * t * rho, 0.1),
    ):
        assert found.compressibility_per_meV * T == pytest.approx(compressibility / 2, rel=rel)
        assert found.spin_susceptibility_muB_per_tesla_per_cell == pytest.approx(
            BOHR_MAGNETON * compressibility / T * np.eye(3), rel=rel, abs=1e-12
        )
        assert found.specific_heat_kB_per_cell == pytest.approx(specific_heat, rel=rel)


def test_the_cold_spin_liquid_has_the_specific_heat_of_its_matter_cones_and_of_its_flat_bond_majoranas():
    """Two Majorana cones of velocity v = sqrt(3)/4 |K| a, the slope of the exact spectrum, give
    C = 2 (area of the cell) 9 zeta(3)/(4 pi) T^2/v^2 (textbook: massless fermions in two dimensions); with the whole
    matter band |K| g/2 (Ann. Phys. 321, 2 (2006)) and the three flat levels |K| 0.5249/2 of this mean-field theory the
    agreement is that of the grid. Electrons of large hopping add nothing."""
    t = 0.02
    found = thermodynamics(solved("decoupled 0", points=64, offset="c3", temperature=t, hopping=100.0))
    g, weight = energy_quadrature(400)
    matter = weight @ schottky(g / 2 / t)
    cones = 2 * np.sqrt(3) / 2 * 9 * zeta(3) / (4 * np.pi) * t**2 / (3 / 16)
    assert matter == pytest.approx(cones, rel=0.02)
    assert found.specific_heat_kB_per_cell == pytest.approx(matter + 3 * schottky(0.5249 / 2 / t), rel=5e-3)


def schottky(x):
    """Specific heat of a fermion level at x = E/T."""
    return (x / 2 / np.cosh(x / 2)) ** 2


@pytest.mark.parametrize("temperature", [5e-3, 1e-4, 1e-9])
def test_a_cold_kondo_insulator_has_neither_specific_heat_nor_compressibility_but_virtual_excitations(temperature):
    """Heavy Fermi liquid at n = 1. A field does nothing to its singlets if both g are equal; else they mix with
    triplets (Van Vleck)."""
    keys = {"kitaev": 0.01, "kondo": 2.5, "form": "so4", "magnetic": False, "points": 4, "offset": "c3"}
    keys |= {"search__phase": "heavy-fermi-liquid", "temperature": temperature}
    for g, least, most in ((2.0, 0.0, 1e-12), (3.0, 1e-6, 1e-5)):
        found = thermodynamics(solved("hybridized 0", spin_layer__g_factor=g, **keys))
        assert 0 <= found.specific_heat_kB_per_cell < 1e-8
        assert 0 <= found.compressibility_per_meV < 1e-11
        chi = found.spin_susceptibility_muB_per_tesla_per_cell
        assert chi == pytest.approx(chi[0, 0] * np.eye(3), rel=1e-6, abs=1e-12)
        assert least <= chi[0, 0] < most


# ---- symmetry -----------------------------------------------------------------------------------------------------


def test_the_susceptibility_keeps_the_threefold_rotation_about_the_field():
    keys = keys_of("in a field") | {"magnetic_field__tesla": [800.0] * 3}
    chi = thermodynamics(solved("ferromagnet", **keys)).spin_susceptibility_muB_per_tesla_per_cell
    rotation = np.eye(3)[[1, 2, 0]]
    assert rotation @ chi @ rotation.T == pytest.approx(chi, rel=1e-6)
    normal = np.ones(3) / np.sqrt(3)
    along, across = normal @ chi @ normal, (np.trace(chi) - normal @ chi @ normal) / 2
    assert along < 0.9 * across


def test_gauge_rotations_do_not_enter_the_response():
    """Six zero modes of the heavy Fermi liquid are gauge directions: its susceptibility is finite and isotropic."""
    found = thermodynamics(state("heavy Fermi liquid"))
    chi = found.spin_susceptibility_muB_per_tesla_per_cell
    assert state("heavy Fermi liquid").zero_modes.gauge == 6
    assert chi == pytest.approx(chi[0, 0] * np.eye(3), rel=1e-8, abs=1e-8 * chi[0, 0])
    assert "magnetic channel off" in found.remarks[SPIN]


FERROMAGNET = {"kitaev": 0.0, "kondo": 0.5, "filling": 0.9, "temperature": 0.1, "points": 4, "form": "so4"}
FERROMAGNET["spin_layer__heisenberg_meV"] = -1.0


def test_an_isotropic_ferromagnet_has_an_infinite_transverse_susceptibility_and_says_so():
    found = thermodynamics(solved("ferromagnet", **FERROMAGNET))
    chi = found.spin_susceptibility_muB_per_tesla_per_cell
    assert np.isposinf(chi[[0, 1], [0, 1]]).all()
    assert 0 < chi[2, 2] < 1e-3
    assert chi[~np.eye(3, dtype=bool)] == pytest.approx(np.zeros(6), abs=1e-12)
    assert "diverges" in found.remarks[SPIN]
    assert HEAT not in found.remarks
    plain = json.loads(json.dumps(found.to_dict(), allow_nan=False))
    assert plain[SPIN][0][0] is None
    assert plain[SPIN][2][2] == chi[2, 2]
    assert plain[HEAT] == found.specific_heat_kB_per_cell > 0


def test_where_zero_modes_leave_the_orientation_open_the_remark_says_so_and_a_finite_change_finds_no_less():
    """At n = 1 the charge SU(2) turns density into pairing: doping picks the softest orientation, as a field flops an
    antiferromagnet."""
    keys = {"kondo": 4.0, "points": 4, "offset": "c3", "temperature": 0.05}
    solution = solved("hybridized 0", **keys)
    found = thermodynamics(solution)
    doped = neighbour(solution, filling=1.0001, **keys)
    assert doped.filling - 1 == pytest.approx(1e-4)
    assert 1e-4 / doped.chemical_potential_meV > (1 - 1e-4) * found.compressibility_per_meV
    assert "orientation" in found.remarks[CHARGE]
    assert SPIN not in found.remarks  # no spin rotation is a symmetry of the Kitaev exchange


# ---- refusals -----------------------------------------------------------------------------------------------------


def refused(found, word):
    values = [getattr(found, name) for name in (HEAT, SPIN, CHARGE, SLOPE)]
    return values == [None] * 4 and all(word in found.remarks[name] for name in (HEAT, SPIN, CHARGE, SLOPE))


def test_a_saddle_and_a_state_that_is_not_converged_have_no_derivatives_and_say_why():
    material = dimensionless(1.0, 3.2, magnetic=False, points=4)
    for settings, status in ((Settings(keep_saddle=True), "saddle"), (Settings(0.0, 0, 0), "not-converged")):
        solution = solve(material, only_starts=[named_start(material, "decoupled 0")], settings=settings)
        found = thermodynamics(solution)
        assert solution.status == status
        assert refused(found, status)
        assert found.entropy_kB_per_cell == solution.entropy_kB_per_cell
        assert json.loads(json.dumps(found.to_dict(), allow_nan=False))[SPIN] is None


def test_a_state_held_in_its_class_by_force_has_no_derivatives():
    """A field makes moments, which the class forbids."""
    keys = keys_of("heavy Fermi liquid") | {"magnetic_field__tesla": [0.0, 0.0, 20.0]}
    assert refused(thermodynamics(solved("hybridized 0", **keys)), "class")


def test_a_class_that_hides_an_instability_towards_magnetism_has_no_susceptibility_but_a_specific_heat():
    found = thermodynamics(solved("decoupled 0", **FERROMAGNET | {"search__phase": "decoupled"}))
    assert found.spin_susceptibility_muB_per_tesla_per_cell is None
    assert "saddle" in found.remarks[SPIN]
    assert found.specific_heat_kB_per_cell > 0
    assert found.compressibility_per_meV > 0


def test_zone_errors_fall_with_the_grid():
    found = [thermodynamics(solved("decoupled 0", filling=0.9, temperature=0.1, points=p)) for p in (8, 16)]
    for name in (HEAT, SPIN, CHARGE):
        assert 1 >= found[0].zone_errors[name] > 3 * found[1].zone_errors[name] > 0
