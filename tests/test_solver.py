"""The solver: published limits, check values, certified saddles, descents that never rise."""

import numpy as np
import pytest
from materials import T, dimensionless
from scipy.optimize import brentq

from kondomf.meanfield import Settings, Start, named_start, solve
from kondomf.meanfield.driver import descend
from kondomf.meanfield.evaluate import bloch_matrix
from kondomf.meanfield.problem import Problem, point_at
from kondomf.meanfield.starts import spin_liquid, starts
from kondomf.meanfield.zone import uniform
from kondomf.model import build_model
from kondomf.model.lattice import FIRST
from kondomf.model.majorana import ELECTRON, SPINON, majorana

COPIES = ["0", "M1", "M2", "M3"]
VAN_HOVE = {"kondo": 3.5, "filling": 0.75, "magnetic": False}


def solved(start, keep_saddle=False, **keys):
    """Solution from one start, a standard one by its name; energies in `keys` in units of t."""
    material = dimensionless(**keys)
    chosen = named_start(material, start) if isinstance(start, str) else start
    return solve(material, only_starts=[chosen], settings=Settings(keep_saddle=keep_saddle))


def home(solution):
    """Correlators <i gamma_a gamma_b> inside the cell."""
    return solution.correlators[np.flatnonzero(~solution.model.lattice_vectors.any(axis=1))[0]]


def singular_values(solution, site=0):
    block = slice(8 * site, 8 * site + 4), slice(8 * site + 4, 8 * site + 8)
    return np.linalg.svd(home(solution)[block])[1]


def energy(solution):
    return solution.free_energy_meV_per_cell / T


# ---- published limits --------------------------------------------------------------------------------------------


def test_without_kondo_coupling_the_spins_form_the_exact_kitaev_spin_liquid():
    """-1.5746 per cell in Pauli units (Ann. Phys. 321, 2 (2006), "Anyons in an exactly solved model and beyond"); bond
    correlator 0.5249 = 1.5746/3 (Phys. Rev. Lett. 98, 247201 (2007), "Exact results for spin dynamics and
    fractionalization in the Kitaev model")."""
    solution = solved("decoupled 0", points=48, temperature=0.001)
    model, p = solution.model, solution.p
    assert solution.status == "minimum"
    assert p @ model.v @ p / 2 / T == pytest.approx(-1.5746 / 4, abs=2e-5)
    assert energy(solution) == pytest.approx(-3.5428527, abs=1e-7)
    for i, j, r, kind in model.cell.bonds(FIRST):
        pairs = (model.find(majorana(i, SPINON, mu), majorana(j, SPINON, mu), r) for mu in (0, kind + 1))
        matter, bond = (sign * p[channel] for channel, sign in pairs)
        assert abs(matter) == pytest.approx(0.5249, abs=1e-4)
        assert abs(bond) == pytest.approx(1)
        assert matter * bond < 0  # the sign of K


@pytest.mark.parametrize(("kz", "gap"), [(1.9, 0.0), (2.1, 0.05)])
def test_the_spin_liquid_is_gapless_until_one_bond_exceeds_the_sum_of_the_others(kz, gap):
    """Gap (|K_z| - |K_x| - |K_y|)/2 in units of S = 1/2: Ann. Phys. 321, 2 (2006)."""
    solution = solved("decoupled 0", kitaev=[-1.0, -1.0, -kz], points=24, offset="c3", temperature=0.002)
    model = solution.model
    k = np.stack(np.meshgrid(*[np.arange(240) / 240] * 2), axis=-1).reshape(-1, 2)
    own = [majorana(site, SPINON, mu) for site in (0, 1) for mu in range(4)]
    h = bloch_matrix(model, solution.phi, np.exp(2j * np.pi * k @ model.lattice_vectors.T))[:, own][:, :, own]
    lowest = np.abs(np.linalg.eigvalsh(h)).min() / T
    assert solution.status == "minimum"
    assert lowest == pytest.approx(gap, abs=2e-3)


def test_the_van_hove_filling_is_three_quarters():
    """n = 3/4 puts the Fermi level at -t, where the saddle points of the band are."""
    material = dimensionless(filling=0.75, temperature=0.001)
    problem = Problem(build_model(material), uniform(48, "c3"))
    point = point_at(problem, named_start(material, "decoupled 0").fields(problem.model))
    assert -point.multipliers[0] / T == pytest.approx(-1, abs=1e-3)


def test_one_spin_and_one_electron_per_site_gain_three_eighths_of_the_kondo_coupling():
    """-3/8 J_K per site without hopping or exchange; the exact singlet has -3/4 J_K."""
    solution = solved("hybridized 0", kitaev=0.0, kondo=1.0, hopping=1e-9, points=2)
    assert solution.status == "minimum"
    assert energy(solution) == pytest.approx(-2 * 3 / 8, abs=1e-8)
    assert singular_values(solution) == pytest.approx(np.ones(4), abs=1e-8)


# ---- check values of independent implementations -----------------------------------------------------------------


def symmetric_start(model):
    """Leads to the symmetric saddle at n = 3/4 when saddles are kept."""
    p = 0.27 * spin_liquid(model)
    for site, mu in np.ndindex(2, 4):
        channel, sign = model.find(majorana(site, SPINON, mu), majorana(site, ELECTRON, mu), (0, 0))
        p[channel] = sign * (1 - 2 * site) * (0.64, 0.55, 0.82, 0.89)[mu]
    return Start("symmetric", p)


@pytest.mark.parametrize(
    ("start", "keys", "free_energy", "values", "zeros"),
    [
        ("hybridized 0", VAN_HOVE, -3.3489601, [0.7164, 0.7139, 0.6696, 0.5876], 1),
        ("hybridized M1", VAN_HOVE, -3.3489209, [0.7165, 0.7138, 0.6692, 0.5875], 1),
        ("hybridized 0", VAN_HOVE | {"offset": "c3"}, -3.34892611, None, 1),
        ("hybridized M1", VAN_HOVE | {"offset": "c3"}, -3.34892611, None, 1),
        ("decoupled 0", {"kondo": 3.2}, -3.5434009, [0, 0, 0, 0], 0),
        ("hybridized 0", {"kondo": 4.0}, -3.9316563, [0.8522, 0.8522, 0.8462, 0.8462], 3),
    ],
)
def test_minima_have_the_energies_and_hybridizations_of_independent_implementations(
    start, keys, free_energy, values, zeros
):
    """K = -1, T = 0.005 on 12 x 12: two independent implementations. Zero modes: U(1) at 3/4, charge SU(2) at n = 1."""
    solution = solved(start, **keys)
    assert solution.status == "minimum"
    assert energy(solution) == pytest.approx(free_energy, abs=1e-6 if len(str(free_energy)) < 11 else 1e-8)
    assert solution.residual_meV < 1e-9 * 4 * T
    assert solution.curvature_min > (0.1 if zeros == 0 else -1e-6)
    for site in (0, 1) if values else ():
        assert singular_values(solution, site) == pytest.approx(values, abs=6e-5)
    modes = solution.zero_modes
    assert (modes.count, modes.gauge, modes.broken_generators, modes.unexplained) == (zeros, 0, zeros, 0)


def test_the_symmetric_saddle_at_van_hove_filling_is_called_a_saddle_and_left_downhill():
    """F = -3.3484413 with two curvatures -0.0044: two independent implementations."""
    start = symmetric_start(build_model(dimensionless(**VAN_HOVE)))
    saddle = solved(start, True, **VAN_HOVE)
    assert saddle.status == "saddle"
    assert energy(saddle) == pytest.approx(-3.3484413, abs=1e-6)
    assert saddle.curvatures[:2] == pytest.approx([-0.0044, -0.0044], abs=5e-5)
    assert singular_values(saddle) == pytest.approx([0.7154, 0.7154, 0.6743, 0.5747], abs=6e-5)
    left = solved(Start("saddle", saddle.p), **VAN_HOVE)
    assert left.status == "minimum"
    assert energy(left) < energy(saddle) - 1e-4


@pytest.mark.parametrize("copy", COPIES)
def test_the_decoupled_state_is_called_a_saddle_from_every_gauge_copy(copy):
    solution = solved(f"decoupled {copy}", True, kitaev=1.0, kondo=3.2, magnetic=False)
    assert solution.status == "saddle"
    assert np.abs(singular_values(solution)).max() < 1e-9
    assert solution.curvature_min == pytest.approx(-0.18040348, abs=1e-7)  # the same from each copy


@pytest.mark.parametrize(
    ("kitaev", "magnetic", "copy", "limit"),
    [
        (-1.0, True, "0", 4.28970),
        (-1.0, True, "M1", 4.10011),
        (-1.0, True, "M2", 4.10011),
        (-1.0, True, "M3", 4.09890),
        (1.0, False, "0", 2.71094),
        (1.0, True, "0", 2.48594),
    ],
)
def test_each_gauge_copy_of_the_decoupled_state_becomes_unstable_at_its_own_coupling(kitaev, magnetic, copy, limit):
    """n = 1, T = 0.005 on 12 x 12: an independent implementation."""
    for kondo, stable in ((limit - 2e-5, True), (limit + 2e-5, False)):
        material = dimensionless(kitaev, kondo, magnetic=magnetic)
        problem = Problem(build_model(material), uniform(12, "midpoint"))
        start = named_start(material, f"decoupled {copy}").fields(problem.model)
        descent = descend(problem, start, Settings(keep_saddle=True))
        assert (descent.curvature.lowest > 0) is stable  # of this copy; curvature_min is that of all


def test_the_first_order_transition_at_half_filling_is_at_its_published_coupling():
    """J_K* = 3.22033 between decoupled and hybridized state, K = -1, n = 1: two independent implementations."""
    decoupled = solved("decoupled 0", kondo=3.2)

    def difference(kondo):
        hybridized = solved("hybridized 0", kondo=kondo)
        assert hybridized.status == decoupled.status == "minimum"
        return energy(hybridized) - energy(decoupled)

    assert brentq(difference, 3.215, 3.225, xtol=1e-5) == pytest.approx(3.22033, abs=1e-4)


# ---- descent -----------------------------------------------------------------------------------------------------

SEVERAL = [
    {"kitaev": -1.0},
    {"kitaev": -1.0, **VAN_HOVE},
    {"kitaev": 1.0, "kondo": 3.0},
    {"kitaev": -0.05, "kondo": 2.0, "filling": 0.9, "temperature": 0.02, "form": "so4"},
    {"kitaev": -0.3, "kondo": 1.0, "filling": 1.2, "spin_layer__heisenberg_meV": 0.4, "spin_layer__gamma_meV": 0.2},
    {"kitaev": -0.5, "kondo": 1.5, "filling": 0.9, "cell": "1x2", "points": 2, "temperature": 0.05},
]


@pytest.mark.parametrize("keys", SEVERAL)
def test_f_never_rises_along_a_descent_and_its_ends_are_what_they_are_called(keys):
    material = dimensionless(**({"points": 4, "offset": "c3"} | keys))
    model = build_model(material)
    for start in starts(model, 10, 1):
        problem = Problem(model, uniform(material.zone.points, material.zone.offset))
        calls = []
        descent = descend(problem, start.fields(model), progress=lambda *step, calls=calls: calls.append(step))
        assert tuple(calls) == descent.history
        f = np.array([entry[2] for entry in descent.history])
        assert np.diff(f).max(initial=0.0) <= 1e-11 * model.scale
        assert descent.point.free_energy == f[-1]
        assert descent.status == "minimum", start.name
        assert np.abs(descent.point.residual).max() <= 1e-9 * model.scale
        assert descent.point.constraint_error <= 1e-9


@pytest.mark.parametrize("points", [2, 3])
@pytest.mark.parametrize("copy", COPIES)
def test_an_unstable_decoupled_state_is_left_from_every_gauge_copy_on_even_and_odd_grids(points, copy):
    material = dimensionless(1.0, 3.2, magnetic=False, temperature=0.05)
    problem = Problem(build_model(material), uniform(points, "c3"))
    start = named_start(material, f"decoupled {copy}").fields(problem.model)
    saddle = descend(problem, start, Settings(keep_saddle=True))
    left = descend(problem, start)
    assert (saddle.status, left.status) == ("saddle", "minimum")
    assert left.point.free_energy < saddle.point.free_energy - 1


@pytest.mark.parametrize("bad", [np.nan, np.inf, 1e300, 1e150])
@pytest.mark.filterwarnings("ignore:.*encountered in:RuntimeWarning")
def test_fields_that_are_no_numbers_end_as_not_converged(bad):
    material = dimensionless(kondo=2.0, points=2)
    problem = Problem(build_model(material), uniform(2, "c3"))
    descent = descend(problem, np.full(problem.model.n_channels, bad), Settings(mixing_steps=2, newton_steps=2))
    assert descent.status == "not-converged"
    assert descent.message


def test_too_few_steps_end_as_not_converged_with_a_remedy():
    material = dimensionless(**VAN_HOVE)
    chosen = named_start(material, "hybridized 0")
    solution = solve(material, only_starts=[chosen], settings=Settings(mixing_steps=1, newton_steps=1))
    assert solution.status == "not-converged"
    assert not solution.converged
    assert "try another start" in solution.message
    assert len(solution.history) == 3


@pytest.mark.parametrize("keys", [{"kondo": 4.0, "filling": 0.9}, {"kondo": 2.0, "filling": 0.8}])
def test_the_entropy_is_minus_the_temperature_derivative_of_f_at_a_solution(keys):
    t, step = 0.06, 1e-3
    middle = solved("hybridized 0", temperature=t, points=4, **keys)
    above, below = (solved(Start("", middle.p), temperature=t + s * step, points=4, **keys) for s in (1, -1))
    assert middle.status == above.status == below.status == "minimum"
    slope = (energy(above) - energy(below)) / (2 * step)
    assert middle.entropy_kB_per_cell == pytest.approx(-slope, rel=1e-3)
    assert middle.entropy_kB_per_cell > 0.1
