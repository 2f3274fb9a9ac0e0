"""Branches followed to their ends: published limits, spinodals and continuous transitions, crossings, temperatures."""

import numpy as np
import pytest
from materials import T, dimensionless
from scipy.integrate import quad
from scipy.optimize import brentq

from kondomf.errors import InputError
from kondomf.material.honeycomb import density_of_states
from kondomf.meanfield import named_start
from kondomf.meanfield.branches import follow_branches
from kondomf.meanfield.continuation import CONTINUOUS, LIMIT, SPINODAL, Family, Follower
from kondomf.meanfield.driver import descend
from kondomf.phases.along import describe

KONDO, TEMPERATURE = "kondo.coupling_meV", "mean_field.temperature_meV"


def followed(start, key, at, to, precision=0.05, copies=True, **keys):
    """Points and end of the branch that the start leads to at `at`, followed to `to`; energies in units of t."""
    family = Family(dimensionless(**keys), key, T * min(at, to), T * max(at, to))
    follower = Follower(family, precision, copies)
    problem = family.at(T * at)
    begin = problem.first_fields(named_start(family.material_at(T * at), start).p)
    down = descend(problem, begin)
    assert down.status == "minimum"
    return follower.follow(follower.branch_point(T * at, problem, down.point), T * to)


@pytest.mark.parametrize(
    ("kitaev", "magnetic", "copy", "limit", "kind"),
    [
        (1.0, False, "0", 2.71094, CONTINUOUS),
        (1.0, True, "0", 2.48594, SPINODAL),
        (-1.0, True, "0", 4.28970, SPINODAL),
        (-1.0, True, "M1", 4.10011, SPINODAL),
        (-1.0, True, "M3", 4.09890, SPINODAL),
        (-1.0, True, "all", 4.09890, SPINODAL),
    ],
)
def test_the_decoupled_state_is_followed_to_its_published_limit(kitaev, magnetic, copy, limit, kind):
    """n = 1, T = 0.005 on 12 x 12: an independent implementation; judged in one copy, or by the softest of all."""
    start = f"decoupled {copy.replace('all', '0')}"
    points, end = followed(start, KONDO, 2, 5, copies=copy == "all", kitaev=kitaev, magnetic=magnetic)
    assert end.x / T == pytest.approx(limit, abs=1e-4)
    assert end.kind == kind
    assert np.ptp([point.free_energy for point in points]) < 1e-6  # nothing of it knows the Kondo coupling


def test_a_continuous_transition_is_met_from_both_sides():
    """The hybridization of K = +t grows from zero where the decoupled state ends."""
    keys = {"kitaev": 1.0, "magnetic": False, "points": 6, "offset": "c3", "temperature": 0.03}
    _, end = followed("decoupled 0", KONDO, 2.4, 3.2, **keys)
    assert end.kind == CONTINUOUS
    x, start = end.beyond
    follower = Follower(Family(dimensionless(**keys), KONDO, 2.4 * T, 3.2 * T), 0.05)
    problem = follower.family.at(x)
    down = descend(problem, problem.first_fields(start.p))
    points, back = follower.follow(follower.branch_point(x, problem, down.point), 2.4 * T)
    assert back.kind == CONTINUOUS
    assert back.x == pytest.approx(end.x, abs=0.1)
    assert np.abs(points[0].point.p[problem.model.hybridization]).max() > 1e-3


def test_a_spinodal_is_where_the_curvature_vanishes_like_a_square_root():
    keys = {"kitaev": 1.0, "magnetic": False, "points": 6, "offset": "c3"}
    points, end = followed("hybridized 0", KONDO, 3.2, 2.0, precision=0.002, **keys)
    assert end.kind == SPINODAL
    assert points[-1].soft > 0
    assert abs(end.state.soft) < 1e-3
    follower = Follower(Family(dimensionless(**keys), KONDO, 2 * T, 3.2 * T), 0.002)
    near, further = (follower.follow(points[-1], end.x + distance)[0][-1] for distance in (0.02, 0.08))
    assert further.soft / near.soft == pytest.approx(2, rel=0.03)


def test_the_slope_of_f_along_a_branch_is_the_kondo_energy_over_its_coupling():
    """Hellmann-Feynman: dF/dJ_K = <sum S.s>, at fixed filling and temperature."""
    points, _ = followed("hybridized 0", KONDO, 4.0, 3.0, kitaev=-0.5, filling=0.9, points=4, offset="c3")
    family = Family(dimensionless(-0.5, 0, 0.9, points=4, offset="c3"), KONDO, 3 * T, 4 * T)
    follower = Follower(family, 0.05)
    here = points[len(points) // 2]
    below, above = (follower.at(here, here.x + d) for d in (-0.5, 0.5))
    p, v = here.point.p, (family.at(here.x + 1).model.v - here.model.v)
    assert above.free_energy - below.free_energy == pytest.approx(p @ v @ p / 2, rel=1e-5)


def linear_response_temperature(kondo, filling):
    """k_B T/t below which b > 0: linearised equations of the isotropic heavy Fermi liquid, t_f = 0 just above.

    The spinons are free moments there (bond fields vanish at k_B T > K/16), so 1 = (3/8) J_K (2/2) sum over bands of
    (f(e - mu) - 1/2)/(0 - (e - mu)); one spin, per site.
    """

    def chi(e, mu, t):
        x = (e - mu) / (2 * t)
        return 1 / (4 * t) if abs(x) < 1e-6 else np.tanh(x) / (2 * (e - mu))

    def zone(function):
        return sum(quad(lambda g: density_of_states(g) * function(g), *ends, limit=200)[0] for ends in ((0, 1), (1, 3)))

    def excess(t):
        def density(mu):
            return zone(lambda g: 2 - np.tanh((g - mu) / (2 * t)) - np.tanh((-g - mu) / (2 * t))) / 2 - filling

        mu = brentq(density, -2, 2)
        return 0.375 * kondo * zone(lambda g: chi(g, mu, t) + chi(-g, mu, t)) - 1

    return brentq(excess, 0.02, 1)


def test_the_hybridization_of_the_heavy_fermi_liquid_vanishes_where_its_linearised_equation_says():
    keys = {"kitaev": 0.1, "kondo": 3.5, "filling": 0.9, "form": "so4", "magnetic": False, "offset": "c3", "points": 10}
    _, end = followed("hybridized 0", TEMPERATURE, 0.15, 0.5, search__phase="heavy-fermi-liquid", **keys)
    assert end.kind == CONTINUOUS
    assert end.x / T == pytest.approx(linear_response_temperature(3.5, 0.9), rel=1e-4)


def test_all_branches_are_found_with_their_crossing():
    """K = -1, n = 1, magnetic channel off: decoupled and hybridized branch cross at 3.22033, as with it on."""
    diagram = follow_branches(dimensionless(magnetic=False, search__starts=4), KONDO, 2500, 3500, precision=0.05)
    first = [t for t in diagram.transitions if t.lowest]
    assert [(t.kind, round(t.x / T, 4)) for t in first] == [("first order", 3.2203)]
    one, other = (diagram.branches[i] for i in first[0].branches)
    assert {one.ends[0].kind, other.ends[1].kind} == {LIMIT}
    found = describe(diagram)
    assert found.to_dict()["transitions"][0]["branches"] == [1, 2]
    assert "FL*" in found.branches[0].phase
    table = found.branches[1].table
    assert (np.diff(table["x"]) > 0).all()
    assert table["hybridization"].min() > 0.5


@pytest.mark.parametrize(
    ("key", "low", "high", "words"),
    [
        ("zone.points", 4, 8, "no coupling"),
        (KONDO, 3, 2, "FROM below TO"),
        (KONDO, 2, 2, "FROM below TO"),
        ("kondo.couplign_meV", 1, 2, "kondo.coupling_meV"),
        ("conduction_layer.filling", 1.5, 2.5, "filling"),
    ],
)
def test_a_parameter_that_cannot_be_followed_is_refused(key, low, high, words):
    with pytest.raises(InputError, match=words):
        follow_branches(dimensionless(points=2), key, low, high)
