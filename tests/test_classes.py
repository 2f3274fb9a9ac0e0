"""Chosen phases: their classes of fields, what lies outside them, and what a state is unstable towards."""

from dataclasses import replace

import numpy as np
import pytest
from materials import T, dimensionless

from kondomf.errors import InputError
from kondomf.meanfield import Settings, Start, named_start, solve
from kondomf.meanfield.classes import CLASSES, class_basis, phase_rotation, time_reversal
from kondomf.meanfield.curvature import curvature_at
from kondomf.meanfield.driver import descend
from kondomf.meanfield.problem import Problem
from kondomf.meanfield.zero_modes import correlator_change
from kondomf.meanfield.zone import uniform
from kondomf.model import build_model
from kondomf.model.majorana import CYCLIC, spinor
from kondomf.model.symmetries import candidate_generators, rotate_channels
from kondomf.phases import Order, summarize
from kondomf.phases.instability import soft_orders
from kondomf.report.tables import solution_table

HEAVY = {"kitaev": 0.3, "kondo": 2.2, "filling": 0.9, "form": "so4", "magnetic": False, "temperature": 0.02}
SOFT_SPINS = {"kitaev": 1.0, "kondo": 2.6, "search__phase": "decoupled"}


def home(solution):
    """Correlators <i gamma_a gamma_b> inside the cell."""
    return solution.correlators[np.flatnonzero(~solution.model.lattice_vectors.any(axis=1))[0]]


def energy(solution):
    return solution.free_energy_meV_per_cell / T


def solved(start="decoupled 0", settings=None, **keys):
    """Solution from one standard start."""
    material = dimensionless(**keys)
    return solve(material, only_starts=[named_start(material, start)], settings=settings)


def moments(g):
    """Differences i g0 ga - i gb gc, four times the spin, of every species of every site, from (n, n) correlators."""
    return np.array([[g[s, s + a] - g[s + b, s + c] for a, b, c in CYCLIC] for s in range(0, len(g), 4)])


def anomalous(solution):
    """Largest |<c c>| of the electrons, at any distance."""
    rows = np.zeros((4, 16), complex)
    for site in (0, 1):
        rows[2 * site : 2 * site + 2, 8 * site + 4 : 8 * site + 8] = spinor(site)
    return np.abs(rows @ solution.correlators @ rows.T).max()


# ---- classes of fields -------------------------------------------------------------------------------------------


@pytest.mark.parametrize("phase", [name for name in CLASSES if name != "any"])
def test_a_class_has_an_orthonormal_basis_and_a_descent_stays_in_it(phase):
    material = dimensionless(0.4, 2.0, 0.9, form="so4", points=4, temperature=0.1, spin_layer__gamma_meV=0.1)
    model = build_model(material)
    basis = class_basis(model, phase)
    assert basis.T @ basis == pytest.approx(np.eye(basis.shape[1]), abs=1e-12)
    problem = Problem(model, uniform(4, "c3"), basis)
    random = np.random.default_rng(3).standard_normal(model.n_channels)
    descent = descend(problem, problem.first_fields(random))
    change = (descent.point.phi - model.h)[model.active]
    assert descent.status == "minimum"
    assert np.abs(change - basis @ (basis.T @ change)).max() < 1e-9 * model.scale
    everything = Problem(model, uniform(4, "c3"))
    solution = descend(everything, descent.point.phi, Settings(mixing_steps=0, newton_steps=1))
    assert solution.history[0][3] < 1e-7 * model.scale  # stationary in the space of all fields: each is a symmetry


@pytest.mark.parametrize(
    ("phase", "keys"),
    [
        ("decoupled", {"kitaev": 1.0, "kondo": 3.2, "magnetic": False}),
        ("decoupled", {"kitaev": -1.0, "kondo": 3.2}),
        ("magnetic", {"kitaev": -1.0, "kondo": 0.5, "filling": 0.8, "temperature": 0.02}),
        ("paramagnetic", {"kitaev": -1.0, "kondo": 2.5, "filling": 0.75, "form": "so4", "temperature": 0.02}),
        ("heavy-fermi-liquid", HEAVY),
    ],
)
def test_a_class_lies_no_lower_than_all_fields_and_higher_where_its_curvature_says_so(phase, keys):
    keys = {"points": 4, "offset": "c3"} | keys
    inside = solve(dimensionless(search__phase=phase, search__starts=3, **keys))
    assert inside.status == "minimum-in-class"
    outside = solve(dimensionless(**keys), only_starts=[Start("from the class", inside.p)])
    assert outside.status == "minimum"
    if inside.curvature_full_space < -1e-6:
        assert energy(outside) < energy(inside) - 1e-6
    else:
        assert energy(outside) == pytest.approx(energy(inside), abs=1e-9)


def test_the_heavy_fermi_liquid_is_a_minimum_of_its_class_without_pairing_that_breaks_nothing():
    """t = 1, K = 0.3, J_K = 2.2, n = 0.9, T = 0.02 on 48 x 48: an independent implementation and the reduced equations
    of the phase; w is the isotropic hybridization, q = (2/3)<g f+f> the bond field."""
    solution = solve(dimensionless(points=48, search__phase="heavy-fermi-liquid", search__starts=1, **HEAVY))
    assert solution.status == "minimum-in-class"
    assert energy(solution) == pytest.approx(-3.18851111, abs=1e-8)
    assert Order(solution).hybridization == pytest.approx(np.full((2, 4), 0.50346357), abs=1e-6)
    assert solution.chemical_potential_meV / T == pytest.approx(-0.47737474, abs=1e-6)
    interaction = solution.p @ solution.model.v @ solution.p / 2 / T
    assert interaction == pytest.approx(-0.75 * 2.2 * 0.50346357**2 - 0.375 * 0.3 * 0.38937335**2, abs=1e-7)
    assert anomalous(solution) < 1e-10
    modes = solution.zero_modes
    assert (modes.count, modes.gauge, modes.broken_generators, modes.unexplained) == (6, 6, 0, 0)
    assert solution.curvature_full_space == pytest.approx(0, abs=1e-6)
    assert summarize(solution)["unstable_towards"] is None


def random_state(phase):
    """Correlators of random fields of a class."""
    model = build_model(dimensionless(**HEAVY))
    basis = class_basis(model, phase)
    phi = model.h.copy()
    phi[model.active] += T * basis @ np.random.default_rng(8).standard_normal(basis.shape[1])
    return model, Problem(model, uniform(4, "c3")).evaluate(phi).correlators


def pairs(model, g, conjugate):
    """<c c> or <c+ c> of all complex fermions, electrons and spinons."""
    rows = np.zeros((8, 16), complex)
    for site, species in np.ndindex(2, 2):
        place = 4 * site + 2 * species
        rows[place : place + 2, 8 * site + 4 * species : 8 * site + 4 * species + 4] = spinor(site)
    return np.abs((rows.conj() if conjugate else rows) @ g @ rows.T).max()


@pytest.mark.parametrize(("phase", "paired"), [("heavy-fermi-liquid", False), ("paramagnetic", True)])
def test_time_reversal_leaves_no_moments_and_charge_conservation_no_pairs(phase, paired):
    model, g = random_state(phase)
    onsite = g[np.flatnonzero(~model.lattice_vectors.any(axis=1))[0]]
    assert np.abs(moments(onsite)).max() < 1e-12
    assert pairs(model, g, True) > 0.1
    assert pairs(model, g, False) > 0.1 if paired else pairs(model, g, False) < 1e-12
    assert np.abs(onsite[:4, 4:8]).max() > 0.1


def action(model, signs, angle, pair_rotation=False):
    """Time reversal of the electrons with a number rotation, and signs for the spinons of each site, on the fields."""
    rotation = time_reversal(model) @ phase_rotation(model, angle)
    if pair_rotation:
        generator = next(g for g in candidate_generators(model) if g.name == "pair rotation y")
        rotation = rotation @ (2 * generator.x)  # the rotation by pi
    for site, sign in enumerate(signs):
        rotation[8 * site : 8 * site + 4] = 0
        rotation[8 * site : 8 * site + 4, 8 * site : 8 * site + 4] = sign * np.eye(4)
    return rotate_channels(model, rotation, True)


@pytest.mark.parametrize("signs", [(1, 1), (1, -1)])
@pytest.mark.parametrize("angle", [0.0, 0.4, 2.0])
def test_in_the_kitaev_form_no_hybridization_is_even_under_time_reversal(signs, angle):
    """The forms of time reversal that leave E_int alone: with iσ_y on the spinons in the so4 form, with signs in the
    kitaev form. None of the latter has a field that joins spinons and electrons."""
    so4, kitaev = (build_model(dimensionless(-0.7, 1.3, 0.9, form=form)) for form in ("so4", "kitaev"))
    for model, matrix, kept in (
        (so4, rotate_channels(so4, time_reversal(so4), True), True),
        (kitaev, rotate_channels(kitaev, time_reversal(kitaev), True), False),
        (kitaev, action(kitaev, signs, angle), True),
    ):
        v = model.v[np.ix_(model.active, model.active)]
        assert bool(np.abs(matrix @ v @ matrix.T - v).max() < 1e-10 * model.scale) is kept
    mixed = kitaev.hybridization[kitaev.active]
    assert np.abs(np.linalg.eigvals(action(kitaev, signs, angle)[np.ix_(mixed, mixed)]) - 1).min() > 0.1
    both = action(kitaev, (1, -1), 0.0, pair_rotation=True)  # a symmetry at n = 1 only
    assert np.abs(np.linalg.eigvals(both[np.ix_(mixed, mixed)]) - 1).min() < 1e-9


@pytest.mark.parametrize("phase", ["paramagnetic", "heavy-fermi-liquid"])
@pytest.mark.parametrize("forms", [("kitaev", "so4"), ("so4", "kitaev"), ("kitaev", "kitaev")])
def test_classes_that_the_kitaev_form_cannot_hold_are_refused_with_the_ways_out(phase, forms):
    keys = {"search__phase": phase, "mean_field__exchange_form": forms[0], "mean_field__kondo_form": forms[1]}
    with pytest.raises(InputError, match=rf'{phase}.*exchange_form and mean_field.kondo_form to "so4"'):
        dimensionless(**keys)


def test_a_magnetic_field_breaks_what_the_class_paramagnetic_keeps():
    with pytest.raises(InputError, match=r"time reversal, which magnetic_field.tesla breaks; set the field to zero"):
        dimensionless(search__phase="paramagnetic", form="so4", magnetic_field__tesla=[0.0, 0.0, 1.0])


@pytest.mark.parametrize("phase", ["decoupled", "magnetic"])
def test_classes_without_hybridization_have_none_and_tell_their_curvature_in_the_space_of_all_fields(phase):
    material = dimensionless(1.0, 3.2, magnetic=False, points=6, search__phase=phase, search__starts=4)
    solution = solve(material)
    assert solution.status == "minimum-in-class"
    assert np.abs(solution.p[solution.model.hybridization]).max() < 1e-12
    assert solution.curvature_min > 0
    assert solution.curvature_full_space < -0.1


def test_moments_are_free_in_the_class_magnetic_and_absent_in_the_class_decoupled():
    keys = {"kitaev": 0.0, "spin_layer__heisenberg_meV": -1.0, "form": "so4", "points": 4}
    found = {phase: solve(dimensionless(search__phase=phase, **keys)) for phase in ("decoupled", "magnetic")}
    moment = {phase: np.abs(home(solution)[0, 1:4]).max() for phase, solution in found.items()}
    assert moment["decoupled"] < 1e-10  # the constraints are solved to this
    assert moment["magnetic"] > 0.5
    # Free spinons have an entropy ln 4 per site, a saturated ferromagnet -|J|/4 on each of its three bonds per cell.
    electrons = energy(solved(kitaev=0.0, points=4)) + 0.005 * 2 * np.log(4)
    assert energy(found["magnetic"]) == pytest.approx(electrons - 0.75, abs=1e-6)
    assert energy(found["decoupled"]) > energy(found["magnetic"]) + 0.1
    assert summarize(found["magnetic"])["phase"].startswith("ferromagnet")


def test_a_class_that_a_field_drives_out_of_itself_says_so():
    """A magnetic field polarises the spins, and the class without moments leaves out the fields of these."""
    keys = {"kitaev": 0.3, "kondo": 0.5, "form": "so4", "points": 4, "temperature": 0.1, "search__phase": "decoupled"}
    closed, driven = (solved(magnetic_field__tesla=[0.0, 0.0, b], **keys) for b in (0.0, 500.0))
    assert closed.residual_full_space_meV < 1e-5
    assert driven.residual_meV < 1e-5
    assert driven.residual_full_space_meV > 1
    texts = [solution_table(summarize(solution)) for solution in (closed, driven)]
    assert ["fields that the class leaves out are driven" in text for text in texts] == [False, True]


# ---- what a state is unstable towards ----------------------------------------------------------------------------


def names(solution):
    return [share.order for share in soft_orders(solution)]


def test_the_spin_liquid_is_unstable_towards_hybridization():
    """K = +1, J_K = 3.2, n = 1, magnetic channel off: curvature of an independent implementation."""
    solution = solved(kitaev=1.0, kondo=3.2, magnetic=False, search__phase="decoupled")
    assert solution.status == "minimum-in-class"
    assert solution.curvature_full_space == pytest.approx(-0.180403, abs=1e-6)
    summary = summarize(solution)
    assert summary["unstable_towards"] == [{"order": "hybridization", "share": pytest.approx(1)}]
    assert "unstable towards hybridization (lowest curvature -0.180403)" in solution_table(summary)


@pytest.mark.parametrize("side", [-1, 1])
def test_with_moments_the_spin_liquid_first_turns_into_a_neel_antiferromagnet(side):
    """K = +1, n = 1: limit 2.48594 of an independent implementation; antiferromagnetic exchange prefers Neel order."""
    solution = solved(**SOFT_SPINS | {"kondo": 2.48594 + side * 2e-5})
    assert names(solution) == ["spin moments (Néel antiferromagnet)", "electron moments (Néel antiferromagnet)"]
    assert (summarize(solution)["unstable_towards"] is None) is (side < 0)
    text = "stable (" if side < 0 else "unstable towards spin moments (Néel antiferromagnet)"
    assert text in solution_table(summarize(solution))


@pytest.mark.parametrize(("filling", "pattern"), [(1.0, "Néel antiferromagnet"), (0.3, "ferromagnet")])
def test_free_spins_order_as_the_electrons_tell_them(filling, pattern):
    """Without exchange, half-filled electrons on a bipartite lattice couple unlike sublattices antiferromagnetically:
    Phys. Rev. B 76, 184430 (2007), "RKKY in half-filled bipartite lattices: Graphene as an example". A small Fermi
    surface makes the coupling ferromagnetic over many sites (common textbook knowledge, no source)."""
    solution = solved(kitaev=0.0, kondo=0.3, filling=filling, temperature=0.002, offset="c3", search__phase="decoupled")
    assert solution.curvature_full_space < -0.05
    assert names(solution)[0] == f"spin moments ({pattern})"
    assert solution.soft_mode.degeneracy == 3  # every direction of the moments


@pytest.mark.parametrize("copy", ["0", "M1", "M3"])
def test_every_gauge_copy_of_a_decoupled_state_is_unstable_towards_the_same_order(copy):
    """K = -1, J_K = 4.0995, n = 1: only the copy M3 is unstable (from 4.09890), which decides for all."""
    solution = solved(f"decoupled {copy}", kitaev=-1.0, kondo=4.0995, search__phase="decoupled")
    assert solution.curvature_full_space == pytest.approx(-1.45397e-4, abs=1e-8)
    assert solution.soft_mode.curvature == solution.curvature_full_space
    assert names(solution) == ["hybridization"]


def test_a_kept_saddle_names_its_instability_too():
    solution = solved(kitaev=1.0, kondo=3.2, magnetic=False, settings=Settings(keep_saddle=True))
    assert solution.status == "saddle"
    assert "instability" in solution_table(summarize(solution))
    assert names(solution) == ["hybridization"]


def test_a_paramagnet_of_ferromagnetic_spins_is_unstable_towards_their_order():
    keys = {"kitaev": -1.0, "kondo": 2.5, "filling": 0.75, "form": "so4", "temperature": 0.02, "points": 4}
    solution = solved("hybridized 0", search__phase="paramagnetic", offset="c3", **keys)
    assert solution.status == "minimum-in-class"
    assert np.abs(moments(home(solution))).max() < 1e-9
    assert names(solution)[0].startswith("spin moments (ferromagnet")


def test_the_axis_of_moments_is_named_where_the_couplings_choose_it():
    """Kitaev exchange on the z bonds alone makes Ising spins along z."""
    keys = {"kondo": 0.5, "form": "so4", "temperature": 0.1, "points": 4, "offset": "c3"}
    solution = solved(kitaev=[0.0, 0.0, -2.0], search__phase="decoupled", **keys)
    assert names(solution)[0] == "spin moments (ferromagnet along 0 0 1)"


def test_a_mode_changes_the_active_correlators_as_its_root_vector_and_holds_the_constraints():
    material = dimensionless(0.3, 2.2, 0.9, form="so4", temperature=0.05, points=4)
    problem = Problem(build_model(material), uniform(4, "c3"))
    point = descend(problem, problem.first_fields(named_start(material, "hybridized 0").p)).point
    curvature, model = curvature_at(problem, point), problem.model
    for mode in (0, 5, 20):
        if abs(curvature.eigenvalues[mode] - 1) > 1e-3:
            change = correlator_change(problem, point, curvature, mode)[model.position]
            expected = curvature.root_vectors[:, mode]
            cosine = change[model.active] @ expected / np.linalg.norm(change[model.active]) / np.linalg.norm(expected)
            assert abs(cosine) == pytest.approx(1, abs=1e-8)
            assert np.abs(model.c @ change).max() < 1e-10


@pytest.mark.parametrize(
    ("normal", "psi", "d", "orders"),
    [
        (1.0, 0.0, [0, 0, 0], ["bond order of the electrons"]),
        (0.0, 1.0, [0, 0, 0], ["singlet pairing"]),
        (0.0, 0.0, [0, 0.6j, 0.8], ["triplet pairing"]),
    ],
)
def test_changes_of_electron_bonds_are_told_apart(normal, psi, d, orders):
    """A change that holds <c+ c> alone, or <c c> = (psi + d.sigma) i sigma_y alone, on one bond."""
    solution = solved(kitaev=-1.0, kondo=1.0, points=2, temperature=0.1)
    sigma = np.array([[[0, 1], [1, 0]], [[0, -1j], [1j, 0]], [[1, 0], [0, -1]]])
    pair = (psi * np.eye(2) + np.tensordot(d, sigma, axes=1)) @ np.array([[0, 1], [-1, 0]])
    # <eta_A eta_B> = -i B with real B, and c = s eta: s B s^T = i <c c>, s* B s^T = i <c+ c>; s has orthogonal rows.
    a, b = spinor(0), spinor(1)
    block = 8 * (a.conj().T @ (1j * pair) @ b.conj() + a.T @ (1j * normal * np.eye(2)) @ b.conj()).real
    assert a @ block @ b.T == pytest.approx(1j * pair)
    assert a.conj() @ block @ b.T == pytest.approx(1j * normal * np.eye(2))
    change = np.zeros_like(solution.correlators)
    at = np.flatnonzero(~solution.model.lattice_vectors.any(axis=1))[0]
    change[at, 4:8, 12:16] = block
    change[at, 12:16, 4:8] = -block.T
    shares = soft_orders(replace(solution, soft_mode=replace(solution.soft_mode, change=change)))
    assert [share.order for share in shares] == orders
    assert shares[0].share == pytest.approx(1)


# ---- collapse ----------------------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("keys", "text"),
    [
        ({"search__phase": "heavy-fermi-liquid", "temperature": 1.0}, "the hybridization vanished: a decoupled state"),
        ({"search__phase": "heavy-fermi-liquid"}, None),
        ({"search__phase": "paramagnetic"}, "there is no pairing: a state of the class heavy-fermi-liquid"),
        ({"search__phase": "paramagnetic", "temperature": 1.0}, "the hybridization vanished: a decoupled state"),
        ({"search__phase": "magnetic", "kitaev": -1.0, "form": "kitaev", "filling": 1.0, "magnetic": True}, None),
        ({"search__phase": "magnetic", "temperature": 1.0}, "neither moments nor spinon bonds: free spins"),
        ({"search__phase": "magnetic", "form": "kitaev"}, "the moments vanished: a state of the class decoupled"),
        ({"search__phase": "decoupled", "form": "kitaev"}, None),
        ({"temperature": 1.0}, None),
    ],
)
def test_a_chosen_phase_whose_own_order_vanished_says_what_it_became(keys, text):
    summary = summarize(solve(dimensionless(**{"points": 4, "offset": "c3", "search__starts": 3} | HEAVY | keys)))
    assert summary["collapsed"] == text
    assert ("\ncollapsed " in solution_table(summary)) is (text is not None)
