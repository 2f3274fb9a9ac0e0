"""One point of the mean-field problem: evaluation, derivatives, invariances, multipliers and the trust-region step."""

import itertools

import numpy as np
import pytest
from materials import EXCHANGE, T, dimensionless
from scipy.linalg import block_diag, expm

from kondomf.meanfield.curvature import curvature_at, gauge_copies
from kondomf.meanfield.driver import Settings, descend
from kondomf.meanfield.evaluate import response, thermal_weight
from kondomf.meanfield.problem import Problem, point_at
from kondomf.meanfield.starts import Start, noise, standard_starts
from kondomf.meanfield.steps import trust_region_minimum
from kondomf.meanfield.zone import ZoneRule, uniform
from kondomf.model import build_model
from kondomf.model.lattice import B_SITE, CELL_VECTORS
from kondomf.model.symmetries import Generator, candidate_generators, field_matrices

EVERYTHING = {
    "conduction_layer__next_hopping_meV": 0.13,
    "conduction_layer__kane_mele_meV": 0.06,
    "conduction_layer__rashba_meV": 0.11,
    **EXCHANGE,
    "kondo__neighbour_coupling_meV": 0.7,
    "spin_layer__g_factor": [2.0, 2.5],
    "magnetic_field__tesla": [800.0, 800.0, 800.0],
}
"""Every coupling that keeps the threefold rotation."""


def problem_of(points=4, offset="c3", **keys):
    return Problem(build_model(dimensionless(**({"temperature": 0.3} | keys))), uniform(points, offset))


def random_fields(model, seed=0):
    """Fields as far from h as the solver can take them: random in every active channel."""
    phi = model.h.copy()
    phi[model.active] += T * np.random.default_rng(seed).standard_normal(len(model.active)) / 2
    return phi


def functional(problem, phi):
    """F(phi) without constraints, and the residual r = h + V P - phi."""
    model, state = problem.model, problem.evaluate(phi)
    free_energy = state.omega + (model.h - phi) @ state.p + state.p @ model.v @ state.p / 2
    return free_energy, model.h + model.v @ state.p - phi


# ---- zone --------------------------------------------------------------------------------------------------------


def test_the_c3_rule_is_invariant_under_the_threefold_rotation_and_the_midpoint_rule_is_not():
    for offset, invariant in (("c3", True), ("midpoint", False)):
        k = uniform(5, offset).k
        both = np.concatenate([k, -k])
        turned = np.stack([both[:, 1] - both[:, 0], -both[:, 0]], axis=1)
        sets = [{tuple(x) for x in np.round(300 * points).astype(int) % 300} for points in (both, turned)]
        assert (sets[0] == sets[1]) is invariant


@pytest.mark.parametrize("points", [3, 4])
def test_half_of_the_midpoint_grid_stands_for_the_whole(points):
    half = problem_of(points, "midpoint", kondo=1.0)
    grid = (np.array(list(itertools.product(range(points), repeat=2))) + 0.5) / points
    assert len(half.zone.k) < 0.6 * len(grid)
    whole = Problem(half.model, ZoneRule(grid, np.full(len(grid), 1 / len(grid)), points, "midpoint"))
    phi = random_fields(half.model)
    one, other = half.evaluate(phi), whole.evaluate(phi)
    assert one.p == pytest.approx(other.p, abs=1e-13)
    assert one.omega == pytest.approx(other.omega, rel=1e-13)


# ---- derivatives -------------------------------------------------------------------------------------------------


def test_the_thermal_weight_is_a_divided_difference_or_its_limit_and_never_overflows():
    t, e = 0.7, np.array([-3.0, -0.2, -0.2, 1e-9, 0.4, 2000.0])
    x = thermal_weight(e, t)
    tanh = np.tanh(e / (2 * t))
    for n, m in itertools.combinations(range(len(e)), 2):
        expected = (tanh[n] - tanh[m]) / (e[n] - e[m]) if e[n] != e[m] else (1 - tanh[n] ** 2) / (2 * t)
        assert x[n, m] == pytest.approx(expected, rel=1e-7)
        assert x[n, m] == pytest.approx(x[m, n])
    assert np.diag(x) == pytest.approx((1 - tanh**2) / (2 * t))


@pytest.mark.parametrize("keys", [{"form": "so4"}, {"cell": "1x2", "points": 2}, EVERYTHING | {"offset": "midpoint"}])
def test_the_response_is_the_derivative_of_the_correlators_and_gives_the_gradient_of_f(keys):
    problem = problem_of(**({"points": 3, "kondo": 1.5} | keys))
    model = problem.model
    phi = random_fields(model)
    state = problem.evaluate(phi)
    channels = np.arange(model.n_channels)
    pi = response(model, problem.zone, state, channels)
    step = 0.02
    _, residual = functional(problem, phi)
    rng = np.random.default_rng(1)
    for direction in rng.standard_normal((6, model.n_channels)):
        forward, backward = (problem.evaluate(phi + s * step * direction).p for s in (1, -1))
        assert (forward - backward) / (2 * step) == pytest.approx(
            pi @ direction, abs=1e-7 * np.abs(pi @ direction).max()
        )
        up, down = (functional(problem, phi + s * step * direction)[0] for s in (1, -1))
        assert (up - down) / (2 * step) == pytest.approx(residual @ pi @ direction, rel=1e-6)
    assert pi == pytest.approx(pi.T)
    assert np.linalg.eigvalsh(pi).max() < 1e-12
    few = rng.permutation(channels)[:7]
    assert response(model, problem.zone, state, few) == pytest.approx(pi[np.ix_(few, few)])


def stationary(problem, name, **settings):
    """Point where the descent from a standard start ends; with keep_saddle the nearest stationary point."""
    return descend(problem, standard_starts(problem.model)[name].fields(problem.model), Settings(**settings)).point


@pytest.mark.parametrize(
    ("name", "keys", "sign"),
    [
        ("decoupled 0", {"kitaev": 1.0, "kondo": 3.2, "magnetic": False}, -1),
        ("hybridized 0", {"kondo": 4.0, "filling": 0.8}, 1),
        ("hybridized M1", {"kondo": 4.0, "filling": 0.8, "cell": "1x2", "points": 2}, 1),
    ],
)
def test_the_curvature_is_the_second_derivative_of_the_constrained_free_energy(name, keys, sign):
    """d2F = sum_i kappa_i y_i^2 with y = R^T dphi, at a saddle, a minimum and in a magnetic cell of two."""
    problem = problem_of(**({"temperature": 0.05} | keys))
    active = problem.model.active
    point = stationary(problem, name, keep_saddle=sign < 0)
    assert np.abs(point.residual).max() < 1e-6
    curvature = curvature_at(problem, point)
    assert np.sign(curvature.lowest + 1e-7) == sign
    directions = [*np.random.default_rng(2).standard_normal((3, len(active)))]
    if sign < 0:  # the unstable direction itself: fields V R z change P by R z
        directions.append(curvature.v @ curvature.root_vectors[:, 0])
    for direction in directions:
        y = curvature.coordinates(direction)
        expected = curvature.eigenvalues @ y**2
        direction, expected = direction / np.linalg.norm(y), expected / (y @ y)

        def displaced(step, direction=direction):
            phi = point.phi.copy()
            phi[active] += step * direction
            return point_at(problem, phi).free_energy - point.free_energy

        step = 0.05
        assert (displaced(step) + displaced(-step)) / step**2 == pytest.approx(expected, rel=1e-4, abs=1e-5)


@pytest.mark.parametrize("seed", range(5))
def test_the_curvature_of_a_gapped_state_with_frozen_density_does_not_depend_on_rounding(seed):
    """The density of a gapped state at low T hardly responds: its constraint must not turn noise into soft modes."""
    problem = problem_of(kitaev=1.0, kondo=3.0, temperature=0.005)
    model = problem.model
    point = stationary(problem, "ferromagnet")
    moved = point.phi.copy()
    moved[model.active] += 1e-6 * np.random.default_rng(seed).standard_normal(len(model.active))
    charge = model.c[0] @ response(model, problem.zone, point.state, np.arange(model.n_channels)) @ model.c[0]
    assert abs(charge) < 1e-12
    found = [curvature_at(problem, x).eigenvalues for x in (point, point_at(problem, moved))]
    assert all(e.min() > -1e-6 for e in found)
    assert np.sort(found[0])[:6] == pytest.approx(np.sort(found[1])[:6], abs=1e-6)


# ---- invariances -------------------------------------------------------------------------------------------------


def rotated_fields(model, phi, rotation):
    """Fields after the rotation gamma -> O gamma inside the sites, checked to lose nothing."""
    turned = (rotation @ field_matrices(model, phi) @ rotation.T)[model.position]
    back = (rotation.T @ field_matrices(model, turned) @ rotation)[model.position]
    assert back == pytest.approx(phi, abs=1e-9)
    return turned


def assert_same_energy(problem, phi, turned):
    """Equal F and equally long residuals at the points of both fields."""
    one, other = point_at(problem, phi), point_at(problem, turned)
    assert not np.allclose(one.phi, other.phi)
    assert other.free_energy == pytest.approx(one.free_energy, rel=1e-11)
    assert np.linalg.norm(other.residual) == pytest.approx(np.linalg.norm(one.residual), rel=1e-7)


def rotation_of(model, chosen, seed=3):
    """Product of finite rotations by random angles about the generators whose name starts with `chosen`."""
    generators: list[Generator] = [g for g in candidate_generators(model) if g.name.startswith(chosen)]
    angles = np.random.default_rng(seed).uniform(1, 5, len(generators))
    return np.linalg.multi_dot([expm(angle * g.x) for angle, g in zip(angles, generators, strict=True)])


@pytest.mark.parametrize("cell", ["1x1", "1x2"])
def test_the_so4_form_has_a_local_su2_gauge_group(cell):
    problem = problem_of(2, form="so4", kondo=1.5, cell=cell, filling=0.8)
    phi = random_fields(problem.model)
    assert_same_energy(problem, phi, rotated_fields(problem.model, phi, rotation_of(problem.model, "gauge")))


@pytest.mark.parametrize("cell", ["1x1", "1x2"])
def test_the_kitaev_form_has_a_local_z2_gauge_group(cell):
    problem = problem_of(2, form="kitaev", kondo=1.5, cell=cell, filling=0.8, **EVERYTHING)
    phi = random_fields(problem.model)
    flip = np.ones(problem.model.n_majorana)
    flip[8:12] = -1  # the spinons of site 1
    assert_same_energy(problem, phi, rotated_fields(problem.model, phi, np.diag(flip)))


@pytest.mark.parametrize("group", ["spin", ("electron number", "pair rotation")])
def test_spin_rotations_and_without_constraint_of_the_density_charge_rotations_are_symmetries(group):
    problem = problem_of(form="so4", kitaev=0.0, spin_layer__heisenberg_meV=0.8, kondo=1.5)
    phi = random_fields(problem.model)
    turned = rotated_fields(problem.model, phi, rotation_of(problem.model, group))
    (f, r), (f_turned, r_turned) = functional(problem, phi), functional(problem, turned)
    assert not np.allclose(turned, phi)
    assert f_turned == pytest.approx(f, rel=1e-12)
    assert np.linalg.norm(r_turned) == pytest.approx(np.linalg.norm(r), rel=1e-12)


def threefold(model, phi):
    """Fields of a 1x1 cell after turning lattice and spins by 120 degrees about [111] through an A site."""
    turn = np.array([[-0.5, np.sqrt(0.75)], [-np.sqrt(0.75), -0.5]])

    def image(sublattice, cell):
        position = (np.array(cell) @ CELL_VECTORS + sublattice * B_SITE) @ turn - sublattice * B_SITE
        return np.rint(position @ np.linalg.inv(CELL_VECTORS)).astype(int)

    spinons = np.zeros((4, 4))
    spinons[[0, 2, 3, 1], range(4)] = 1
    angle = 2 * np.pi / 3 / np.sqrt(3)  # about each axis
    electrons = expm(angle * sum(g.x for g in candidate_generators(model) if g.name.startswith("spin")))[4:8, 4:8]
    rotation = block_diag(*[spinons, electrons] * 2)
    matrices = rotation @ field_matrices(model, phi) @ rotation.T
    turned = np.zeros_like(matrices)
    for (i, j), (source, r) in itertools.product(np.ndindex(2, 2), enumerate(model.lattice_vectors)):
        shift = image(j, r) - image(i, (0, 0))
        target = np.flatnonzero((model.lattice_vectors == shift).all(axis=1))
        block = slice(8 * i, 8 * i + 8), slice(8 * j, 8 * j + 8)
        for index in target:
            turned[index][block] += matrices[source][block]
    return turned[model.position]


@pytest.mark.parametrize("form", ["so4", "kitaev"])
def test_turning_lattice_and_spins_together_leaves_every_coupling_unchanged(form):
    problem = problem_of(form=form, kondo=1.5, filling=0.8, **EVERYTHING)
    model = problem.model
    assert threefold(model, model.h) == pytest.approx(model.h, abs=1e-9)
    phi = random_fields(model)
    full_turn = np.where(model.hybridization, -phi, phi)  # the electrons are spinors
    assert threefold(model, threefold(model, threefold(model, phi))) == pytest.approx(full_turn, abs=1e-9)
    assert_same_energy(problem, phi, threefold(model, phi))


@pytest.mark.parametrize("points", [3, 4])
def test_a_gauge_copy_is_the_point_of_its_own_fields(points):
    """Also on a grid of odd points, which a shift of the spinon momentum does not map on itself."""
    problem = problem_of(points, kondo=1.5)
    point = point_at(problem, np.where(problem.model.hybridization, 0.0, random_fields(problem.model)))
    for copy in gauge_copies(problem, point):
        again = point_at(problem, copy.phi)
        assert copy.free_energy == pytest.approx(again.free_energy, rel=1e-12)
        assert copy.residual == pytest.approx(again.residual, abs=1e-6)


@pytest.mark.parametrize("cell", ["1x1", "1x2", "sqrt3"])
def test_gauge_copies_of_a_decoupled_state_have_the_same_energy_and_correlators_up_to_their_signs(cell):
    problem = problem_of(2, cell=cell, kondo=1.5)
    model = problem.model
    phi = np.where(model.hybridization, 0.0, random_fields(model))
    point = point_at(problem, phi)
    copies = gauge_copies(problem, point)
    for copy, signs in zip(copies, model.gauge_signs[list(model.distinct_copies[1:])], strict=True):
        again = point_at(problem, copy.phi)
        assert again.free_energy == pytest.approx(point.free_energy, rel=1e-12)
        assert again.p == pytest.approx(signs * point.p, abs=1e-11)
        assert copy.residual == pytest.approx(again.residual, abs=1e-7)


def folded(zone, matrix):
    """The primitive wave vectors that a supercell sees on `zone`: K = N k modulo 1."""
    size = abs(round(np.linalg.det(matrix)))
    inverse = np.linalg.inv(matrix)
    shifts = {tuple(np.round(inverse @ m % 1, 9) % 1) for m in itertools.product(range(size), repeat=2)}
    assert len(shifts) == size
    k = np.concatenate([zone.k @ inverse.T + np.array(shift) for shift in sorted(shifts)])
    return ZoneRule(k, np.tile(zone.weight, size) / size, zone.points, zone.offset)


def embedded(primitive, model, values):
    """Values (N,) of the channels of the primitive model on the channels of the same model in a larger cell."""
    result = np.zeros(model.n_channels)
    for p, (a, b, *r) in enumerate(model.table):
        start = model.cell.primitive_cell(a // 8, np.zeros(2, int))
        shift = model.cell.primitive_cell(b // 8, np.array(r)) - start
        channel, sign = primitive.find(int(a) % 16, int(b) % 16, tuple(int(x) for x in shift))
        result[p] = sign * values[channel]
    return result


@pytest.mark.parametrize("cell", ["1x2", "sqrt3", [[2, 1], [-1, 1]], [[2, 0], [0, 2]]])
def test_a_solution_of_the_primitive_cell_is_one_of_every_larger_cell(cell):
    """Same F per cell, still stationary, and its curvatures are among those of the larger cell."""
    keys = {"kondo": 4.0, "filling": 0.8, "temperature": 0.1, "spin_layer__heisenberg_2_meV": 0.1}
    large = problem_of(2, cell=cell, **keys)
    small = Problem(build_model(dimensionless(**keys)), folded(large.zone, np.array(large.model.cell.matrix)))
    descent = descend(small, standard_starts(small.model)["hybridized 0"].fields(small.model))
    assert descent.status == "minimum"
    assert np.abs(descent.point.p[small.model.hybridization]).max() > 0.1
    point = point_at(large, embedded(small.model, large.model, descent.point.phi))
    assert point.free_energy == pytest.approx(large.model.cell.size * descent.point.free_energy, rel=1e-10)
    assert np.abs(point.residual).max() < 1e-5
    found = curvature_at(large, point).eigenvalues
    assert all(np.abs(found - kappa).min() < 1e-7 for kappa in curvature_at(small, descent.point).eigenvalues)


# ---- multipliers -------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("start", ["decoupled 0", "hybridized 0", "Neel antiferromagnet", "noise"])
@pytest.mark.parametrize(
    ("keys", "points", "offset"),
    [
        ({"filling": 1.0}, 4, "c3"),  # holds the Dirac points
        ({"filling": 0.75}, 3, "midpoint"),  # holds the M points
        ({"filling": 0.83}, 4, "midpoint"),
        ({"filling": 0.01}, 6, "c3"),
        ({"filling": 1.99}, 6, "c3"),
        ({"filling": 0.9, "kitaev": -0.005, "form": "so4"}, 4, "c3"),
        ({"filling": 0.9, "cell": "1x2"}, 2, "c3"),
    ],
)
@pytest.mark.parametrize("temperature", [1e-6, 0.05])
def test_multipliers_satisfy_all_constraints(start, keys, points, offset, temperature):
    problem = problem_of(points, offset, kondo=2.0, temperature=temperature, **keys)
    model = problem.model
    known = standard_starts(model) | {"noise": Start("noise", noise(model, np.random.default_rng(7), 0.5))}
    point = point_at(problem, known[start].fields(model))
    assert np.abs(model.c @ point.p - model.target).max() <= 1e-9
    assert point.is_finite


# ---- trust region ------------------------------------------------------------------------------------------------


def value(eigenvalues, gradient, y):
    """gradient.y + y.diag(eigenvalues).y/2 of points y (..., d)."""
    return y @ gradient + y**2 @ eigenvalues / 2


@pytest.mark.parametrize("seed", range(10))
@pytest.mark.parametrize("along", [None, 0.0, 1e-9])
def test_the_trust_region_step_is_the_lowest_point_of_the_disc(seed, along):
    """Against all points of a fine grid, also where the gradient has no or hardly a part along the lowest curvature."""
    rng = np.random.default_rng(seed)
    eigenvalues, gradient, radius = rng.uniform(-1, 1, 2), rng.standard_normal(2), rng.uniform(0.2, 3)
    if along is not None:
        gradient[eigenvalues.argmin()] = along
    y, _ = trust_region_minimum(eigenvalues, gradient, radius, 1e-12)
    r, angle = np.meshgrid(np.linspace(0, radius, 300), np.linspace(0, 2 * np.pi, 1200))
    brute = value(eigenvalues, gradient, np.stack([r * np.cos(angle), r * np.sin(angle)], axis=-1)).min()
    assert np.linalg.norm(y) <= radius * (1 + 1e-5)
    assert brute - 1e-3 * radius < value(eigenvalues, gradient, y) <= brute + 1e-5


@pytest.mark.parametrize("seed", range(10))
@pytest.mark.parametrize("along", [None, 0.0, 1e-9])
def test_the_trust_region_step_meets_the_conditions_of_a_global_minimum(seed, along):
    """(H + nu) y = -g with H + nu >= 0, nu >= 0 and |y| = radius unless nu = 0.

    SIAM J. Sci. Stat. Comput. 4, 553 (1983), "Computing a trust region step".
    """
    rng = np.random.default_rng(seed)
    d = int(rng.integers(1, 40))
    eigenvalues, gradient, radius = rng.uniform(-1, 2, d), rng.standard_normal(d), 10 ** rng.uniform(-2, 2)
    if along is not None:
        gradient[eigenvalues.argmin()] = along
    y, nu = trust_region_minimum(eigenvalues, gradient, radius, 1e-12)
    assert nu >= 0
    assert (eigenvalues + nu).min() >= 0
    defect = (eigenvalues + nu) * y + gradient
    assert np.abs(defect).max() < 1e-9 * radius + 1e-12
    if nu > 1e-10:
        assert np.linalg.norm(y) == pytest.approx(radius, rel=1e-5)


def test_a_step_without_directions_is_empty():
    y, _ = trust_region_minimum(np.zeros(0), np.zeros(0), 1.0, 1e-10)
    assert y.shape == (0,)
