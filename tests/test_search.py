"""Searches and state files: reproducible, honest about every start, written and read whole or not at all."""

import json
from dataclasses import fields, replace

import h5py
import numpy as np
import pytest
from materials import dimensionless

from kondomf.errors import InputError
from kondomf.meanfield import (
    Minimum,
    Settings,
    Start,
    Trial,
    chance_of_another,
    distinct_minima,
    load_state,
    named_start,
    save_state,
    solve,
)
from kondomf.meanfield.starts import starts
from kondomf.model import build_model

# ---- search ------------------------------------------------------------------------------------------------------

SMALL = {"kondo": 3.5, "filling": 0.9, "points": 2, "temperature": 0.05, "search__starts": 8}


@pytest.fixture(scope="module")
def searched():
    return solve(dimensionless(**SMALL))


def same(one, other):
    """Equal in every field but the time it took and what is rebuilt from the inputs."""
    for field in fields(one):
        if field.name not in ("wall_seconds", "model", "zone"):
            a, b = getattr(one, field.name), getattr(other, field.name)
            assert np.array_equal(a, b) if isinstance(a, np.ndarray) else a == b, field.name
    assert one.zone.points == other.zone.points
    assert np.array_equal(one.zone.k, other.zone.k)


def test_the_same_seed_gives_the_same_solution_to_the_last_digit(searched):
    lines = []
    same(searched, solve(dimensionless(**SMALL), progress=lines.append))
    assert len(lines) == len(searched.trials) == 8
    assert lines[0].startswith("start 1 (decoupled 0)")
    assert searched.trials[-1].start == "random 1"


def test_another_seed_changes_the_random_starts_only():
    model = build_model(dimensionless(**SMALL))
    one, other = (list(starts(model, 10, seed)) for seed in (1, 2))
    assert [start.name for start in one] == [start.name for start in other]
    assert np.array_equal(one[0].p, other[0].p)
    assert not np.array_equal(one[-1].p, other[-1].p)


def test_a_search_returns_the_lowest_minimum_of_its_starts_and_counts_every_matrix(searched):
    minima = [trial.free_energy_meV_per_cell for trial in searched.trials if trial.status == "minimum"]
    assert len(minima) > 1
    assert searched.free_energy_meV_per_cell == min(minima)
    assert searched.inputs == dimensionless(**SMALL).to_dict()
    assert searched.evaluations > 8 * len(searched.zone.k)
    assert searched.zone_error_meV > 0


def test_extra_starts_come_first_and_can_be_the_best(searched):
    material = dimensionless(**SMALL | {"search__starts": 1})
    again = solve(material, extra_starts=[Start("neighbour", searched.p)])
    assert [trial.start for trial in again.trials] == ["neighbour", "decoupled 0"]
    assert again.free_energy_meV_per_cell == pytest.approx(searched.free_energy_meV_per_cell, rel=1e-12)


def test_large_grids_are_searched_at_half_the_points_and_end_on_the_whole(searched):
    """The coarse grid only chooses: the result is that of the fine one alone."""
    keys = SMALL | {"points": 16, "search__starts": 3}
    material = dimensionless(**keys)
    both, fine = solve(material), solve(material, only_starts=[Start("", searched.p)])
    assert both.zone.points == 16
    assert len(both.trials) == 3
    assert both.free_energy_meV_per_cell == pytest.approx(fine.free_energy_meV_per_cell, rel=1e-12)


def test_an_unknown_start_is_an_input_error_that_lists_the_known_ones():
    with pytest.raises(InputError, match="hybridized M3"):
        named_start(dimensionless(), "lucky")


# ---- state files -------------------------------------------------------------------------------------------------


@pytest.fixture
def state(searched, tmp_path):
    path = tmp_path / "state.h5"
    save_state(searched, path)
    return path


def test_a_state_file_gives_back_the_whole_solution(searched, state):
    loaded = load_state(state)
    same(loaded, searched)
    assert loaded.wall_seconds == searched.wall_seconds
    assert np.array_equal(loaded.model.v, searched.model.v)
    assert loaded.model.temperature == searched.model.temperature


def test_a_solution_without_certificate_survives_too(tmp_path):
    material = dimensionless(**SMALL)
    chosen = [named_start(material, "hybridized 0")]
    unfinished = solve(material, only_starts=chosen, settings=Settings(mixing_steps=1, newton_steps=0))
    save_state(unfinished, tmp_path / "state.h5")
    same(load_state(tmp_path / "state.h5"), unfinished)
    assert unfinished.zero_modes is None


def test_an_existing_file_is_kept_unless_told_otherwise(searched, state):
    before = state.read_bytes()
    with pytest.raises(InputError, match=r"exists.*--overwrite"):
        save_state(replace(searched, start="other"), state)
    assert state.read_bytes() == before
    save_state(replace(searched, start="other"), state, overwrite=True)
    assert load_state(state).start == "other"


def changed(attribute, value):
    def spoil(path):
        with h5py.File(path, "r+") as file:
            file.attrs[attribute] = value

    return spoil


def without(name):
    def spoil(path):
        with h5py.File(path, "r+") as file:
            del file[name]

    return spoil


def other_channels(path):
    with h5py.File(path, "r+") as file:
        file["channels"][0] = 0


@pytest.mark.parametrize(
    ("spoil", "complaint"),
    [
        (lambda path: path.write_bytes(path.read_bytes()[: path.stat().st_size // 2]), "truncated"),
        (lambda path: path.write_bytes(b""), "not HDF5"),
        (lambda path: path.write_text("name = 'no state'"), "not HDF5"),
        (lambda path: path.unlink(), "no state file"),
        (changed("schema", 99), "schema 99.*solve the material again"),
        (changed("schema", "new"), "solve the material again"),
        (changed("format", "kondomf run"), "kondomf run"),
        (changed("evidence", "{"), "cannot be read"),
        (changed("evidence", json.dumps({"status": "minimum"})), "solve the material again"),
        (changed("inputs", json.dumps({"name": "x"})), "spin_layer"),
        (without("phi"), "cannot be read"),
        (other_channels, "other channels"),
    ],
)
def test_a_file_that_is_no_readable_state_is_refused_with_its_name_and_a_remedy(state, spoil, complaint):
    spoil(state)
    with pytest.raises(InputError, match=complaint) as caught:
        load_state(state)
    assert str(state) in str(caught.value)


def test_a_state_needs_an_existing_folder(searched, tmp_path):
    with pytest.raises(InputError, match="create it first"):
        save_state(searched, tmp_path / "missing" / "state.h5")
    assert list(tmp_path.iterdir()) == []


# ---- what a search says of itself --------------------------------------------------------------------------------


def test_ends_of_equal_free_energy_and_hybridization_are_one_minimum_and_saddles_are_none():
    trials = [
        Trial("a", "minimum", -3000.0, 0.3),
        Trial("b", "minimum", -3000.00001, 0.3),
        Trial("c", "minimum", -3000.0, 0.2),
        Trial("d", "minimum", -2999.0, 0.3),
        Trial("e", "saddle", -3001.0, 0.1),
        Trial("f", "not-converged", -3002.0, 0.1),
    ]
    minima = distinct_minima(trials)
    assert [(minimum.found, minimum.hybridization) for minimum in minima] == [(2, 0.3), (1, 0.2), (1, 0.3)]
    assert minima[0].free_energy_meV_per_cell == -3000.00001


def test_the_chance_of_another_minimum_is_the_share_of_starts_whose_minimum_was_met_once():
    """Good-Turing: Biometrika 40, 237 (1953), "The population frequencies of species and the estimation of population
    parameters" (from memory)."""
    assert chance_of_another([Minimum(-2.0, 0.0, 3), Minimum(-1.0, 0.1, 1), Minimum(0.0, 0.2, 1)]) == 2 / 5
    assert chance_of_another([Minimum(-2.0, 0.0, 4)]) == 0
    assert chance_of_another([]) is None


def test_the_minima_of_a_search_account_for_all_starts_that_ended_in_one():
    """K = -t, J_K = 3.2 t, n = 1: the decoupled and the hybridized minimum, and magnets, are all met."""
    solution = solve(dimensionless(-1.0, 3.2, search__starts=6, points=8))
    minima = solution.minima
    assert sum(minimum.found for minimum in minima) == sum(trial.status == "minimum" for trial in solution.trials)
    assert len(minima) >= 2
    assert minima[0].free_energy_meV_per_cell == pytest.approx(solution.free_energy_meV_per_cell, abs=1e-6)
    assert [m.free_energy_meV_per_cell for m in minima] == sorted(m.free_energy_meV_per_cell for m in minima)
