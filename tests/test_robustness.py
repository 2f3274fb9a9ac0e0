"""Hard cases of the solver: frozen moments, soft valleys, van Hove fillings, flat bands, low temperatures."""

import numpy as np
import pytest
from materials import dimensionless

from kondomf.meanfield.curvature import curvature_at
from kondomf.meanfield.driver import Settings, certify, descend, is_stationary
from kondomf.meanfield.problem import Problem, point_at
from kondomf.meanfield.starts import noise
from kondomf.meanfield.zone import uniform
from kondomf.model import build_model

POLARISED = {"kitaev": 1.0, "kondo": 3.0, "filling": 0.9}
HARD = {
    "polarised moments": POLARISED,
    "polarised moments, low temperature": POLARISED | {"temperature": 5e-4},
    "soft valley": {"kitaev": -0.05, "kondo": 2.0, "filling": 0.9},
    "soft valley, van Hove filling": {"kitaev": 0.05, "kondo": 1.5, "filling": 0.75, "magnetic": False},
    "flat spinon bands": {"kitaev": -1e-3, "kondo": 1.5, "filling": 0.9},
    "free moments": {"kitaev": -0.3, "kondo": 0.0, "filling": 0.75},
    "off-diagonal exchange": {"kitaev": -0.3, "kondo": 3.0, "filling": 0.9, "spin_layer__gamma_meV": 0.15},
    "low temperature": {"kitaev": -1.0, "kondo": 2.5, "filling": 0.9, "temperature": 1e-4},
    "strong field": {"kitaev": -0.3, "kondo": 2.0, "filling": 0.9, "magnetic_field__tesla": [300.0, 300.0, 300.0]},
}


def problem_of(keys, points=6):
    return Problem(build_model(dimensionless(**keys)), uniform(points, "midpoint"))


def random_fields(problem, seed):
    return problem.first_fields(noise(problem.model, np.random.default_rng(seed), 0.5))


@pytest.mark.parametrize("case", HARD)
def test_random_starts_end_in_certified_minima_and_f_never_rises(case):
    for seed in range(3):
        problem = problem_of(HARD[case])
        descent = descend(problem, random_fields(problem, seed))
        assert descent.status == "minimum", (seed, descent.message)
        assert is_stationary(descent.point, problem.model.scale, Settings())
        assert np.diff([f for _, _, f, _ in descent.history]).max() <= 1e-11 * problem.model.scale


def test_the_verdict_on_a_polarised_state_does_not_depend_on_multipliers_that_its_gap_leaves_free():
    """The local constraint of a saturated spin answers by exp(-gap/T) only: shifted multipliers keep the state, but
    the curvature next to the end of their range is negative."""
    problem = problem_of(POLARISED)
    model = problem.model
    point = descend(problem, random_fields(problem, 0)).point
    row = model.c[1:4].T @ np.array([1.0, 0.0, 0.0])
    lowest = []
    for shift in (0.0, 100.0, 200.0, 300.0, 350.0):
        shifted = point_at(problem, point.phi + shift * row)
        assert shifted.p == pytest.approx(point.p, abs=1e-8)
        lowest.append(curvature_at(problem, shifted).lowest)
        assert certify(problem, shifted, Settings())[0].status == "minimum", shift
    assert min(lowest) < -1e-3


def test_multipliers_predicted_to_first_order_leave_a_constraint_error_of_second_order():
    problem = problem_of({"kitaev": -1.0, "kondo": 4.0, "filling": 0.8, "temperature": 0.05}, 4)
    model, active = problem.model, problem.model.active
    point = descend(problem, random_fields(problem, 1)).point
    here = curvature_at(problem, point)
    change = np.random.default_rng(2).standard_normal(len(active))
    errors = {}
    for size in (4.0, 8.0):
        for name, step in (("plain", change), ("answered", change + here.feedback @ change)):
            phi = point.phi.copy()
            phi[active] += size * step
            errors[name, size] = np.abs(model.c @ problem.evaluate(phi).p - model.target).max()
    assert errors["plain", 8.0] / errors["plain", 4.0] == pytest.approx(2, rel=0.1)
    assert errors["answered", 8.0] / errors["answered", 4.0] == pytest.approx(4, rel=0.1)
