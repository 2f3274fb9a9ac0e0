"""The calculation of one sweep point: what it keeps of a solution, and how it goes on from its neighbour."""

import json

import numpy as np
import pytest
from materials import T, dimensionless

from kondomf.errors import InputError
from kondomf.meanfield import solve
from kondomf.phases import summarize
from kondomf.sweep.point import NUMBERS, solve_point
from kondomf.sweep.record import unit_of


def inputs(**keys):
    keys = {"kitaev": -1.0, "kondo": 4.0, "points": 4, "offset": "c3", "search__starts": 2} | keys
    return dimensionless(**keys).to_dict()


@pytest.fixture(scope="module")
def bound():
    """The Kondo insulator, solved without a neighbour."""
    return solve_point(inputs(), 7, None)


def test_a_point_is_the_solution_of_its_material_with_its_seed(bound):
    summary = summarize(solve(dimensionless(kondo=4.0, points=4, offset="c3", search__starts=2, search__seed=7)))
    assert bound.status == summary["status"] == "minimum"
    for name in NUMBERS:
        assert bound.scalars[name] == summary[name], name
    assert bound.scalars["hybridization"] == np.max(summary["hybridization_singular_values"])
    assert bound.scalars["pairing"] == max(summary["pairing"]["singlet"], summary["pairing"]["triplet"])
    assert bound.scalars["zero_modes"] == summary["zero_modes"]["count"]
    assert bound.scalars["phase_evidence"].split("; ") == summary["phase_evidence"]
    assert bound.scalars["spin_moment"] == pytest.approx(0, abs=1e-9)


def test_what_a_point_keeps_can_be_stored(bound):
    assert json.loads(json.dumps(bound.scalars, allow_nan=False)) == bound.scalars
    for name, value in bound.scalars.items():
        assert value is None or type(value) in (float, int, str), name
    for name, array in bound.arrays.items():
        assert array.dtype.kind in "fi", name
        assert np.isfinite(array).all(), name
    assert bound.arrays["hybridization_singular_values"].shape == (2, 4)
    assert bound.arrays["spin_moments"].shape == bound.arrays["electron_moments"].shape == (2, 3)
    assert bound.arrays["channels"].shape == (len(bound.arrays["p"]), 4)
    assert {unit_of(name) for name in ("phi_meV", "gap_meV", "free_energy_meV_per_cell")} == {"meV", "meV/cell"}


def test_the_same_material_and_seed_give_the_same_bits_again(bound):
    again = solve_point(inputs(), 7, None)
    assert again.scalars == bound.scalars
    for name, array in bound.arrays.items():
        assert array.tobytes() == again.arrays[name].tobytes(), name


def test_the_seed_of_the_point_replaces_that_of_the_material():
    keys = {"search__starts": 14, "temperature": 0.3, "points": 2}
    one, same, other = (
        solve_point(inputs(search__seed=seed, **keys), own, None) for seed, own in ((1, 5), (2, 5), (1, 6))
    )
    assert one.scalars == same.scalars
    assert other.scalars["evaluations"] != one.scalars["evaluations"]
    assert other.scalars["free_energy_meV_per_cell"] == pytest.approx(one.scalars["free_energy_meV_per_cell"])


def test_the_solution_of_the_same_material_is_confirmed_from_its_own_correlators(bound):
    again = solve_point(inputs(search__starts=1), 7, bound.arrays)
    energy = bound.scalars["free_energy_meV_per_cell"]
    assert again.scalars["start"] == "neighbour"
    assert again.scalars["free_energy_meV_per_cell"] == pytest.approx(energy, abs=1e-7 * T)
    assert again.scalars["evaluations"] < bound.scalars["evaluations"]


def test_a_neighbour_leads_to_a_state_that_the_other_starts_miss(bound):
    """The one start of its own ends in the decoupled state, a minimum at J_K = 3.5; the hybridized one is lower."""
    material = inputs(kondo=3.5, search__starts=1, points=6)
    alone = solve_point(material, 7, None)
    assert alone.scalars["hybridization"] < 1e-6
    led = solve_point(material, 7, bound.arrays)
    assert led.scalars["hybridization"] > 0.5
    assert led.scalars["free_energy_meV_per_cell"] < alone.scalars["free_energy_meV_per_cell"]
    assert led.scalars["start"] == "neighbour"
    assert led.scalars["starts_at_lowest"] == 1


def test_a_neighbour_with_other_channels_is_carried_over():
    """Without Kondo coupling the model has no hybridization to hand on, with it the channels grow."""
    parent = solve_point(inputs(kondo=0.0), 7, None)
    child = solve_point(inputs(), 7, parent.arrays)
    assert len(parent.arrays["p"]) < len(child.arrays["p"])
    assert child.status == "minimum"
    back = solve_point(inputs(kondo=0.0), 7, child.arrays)
    assert back.scalars["free_energy_meV_per_cell"] == pytest.approx(parent.scalars["free_energy_meV_per_cell"])


def test_the_starts_that_end_lowest_are_counted(bound):
    """At J_K = 3.5 the decoupled start stays above the hybridized one."""
    first = solve_point(inputs(kondo=3.5), 7, None)
    again = solve_point(inputs(kondo=3.5), 7, bound.arrays)
    assert first.scalars["starts_at_lowest"] == 1
    assert again.scalars["starts_at_lowest"] == 2


def test_a_chosen_class_is_minimised_in_itself():
    keys = {"kitaev": 0.3, "kondo": 2.2, "filling": 0.9, "form": "so4", "magnetic": False, "temperature": 0.02}
    result = solve_point(inputs(search__phase="heavy-fermi-liquid", search__starts=1, points=4, **keys), 1, None)
    assert result.status == "minimum-in-class"
    assert result.scalars["phase"] == "heavy Fermi liquid"
    assert result.scalars["pairing"] < 1e-10


def test_a_material_that_is_none_is_refused_as_a_sweep_point():
    data = inputs()
    data["kondo"]["coupling_meV"] = "strong"
    with pytest.raises(InputError, match=r"sweep point: kondo.coupling_meV"):
        solve_point(data, 1, None)
