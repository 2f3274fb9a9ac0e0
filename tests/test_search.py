"""Searches and state files: reproducible, honest about every start, written and read whole or not at all."""

import json
from dataclasses import fields, replace

import h5py
import numpy as np
import pytest
from materials import dimensionless

from kondomf.errors import InputError
from kondomf.meanfield import (
    Settings,
    Start,
    Trial,
    chance_not_excluded,
    chance_of_another,
    distinct_minima,
    load_state,
    named_start,
    save_state,
    solve,
)
from kondomf.meanfield.starts import magnet, starts
from kondomf.model import build_model

# ---- search ------------------------------------------------------------------------------------------------------

SMALL = {"kondo": 3.5, "filling": 0.9, "points": 2, "temperature": 0.05, "search__starts": 8}


@pytest.fixture(scope="module")
def searched():
    return solve(dimensionless(**SMALL))


def same(one, other):
    """Equal in every field but the time it took and what is rebuilt from the inputs."""
    for field in fields(one):
        a, b = getattr(one, field.name), getattr(other, field.name)
        if field.name == "others":
            assert len(a) == len(b)
            for state, again in zip(a, b, strict=True):
                same(state, again)
        elif field.name == "soft_mode" and a is not None:
            assert (a.curvature, a.degeneracy) == (b.curvature, b.degeneracy)
            assert np.array_equal(a.change, b.change)
        elif field.name not in ("wall_seconds", "model", "zone"):
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
    assert searched.free_energy_meV_per_cell == pytest.approx(min(minima), rel=1e-14)
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


def changed(name, value):
    def spoil(path):
        with h5py.File(path, "r+") as file:
            if name in file:
                del file[name]
                file[name] = value
            else:
                file.attrs[name] = value

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


def test_a_state_file_holds_the_other_minima_and_gives_starts_that_lead_back_to_each(searched, state):
    loaded = load_state(state)
    assert len(loaded.others) == len(searched.others) >= 1
    for kept, start in zip(loaded.minima, loaded.starts(loaded.model), strict=True):
        again = solve(dimensionless(**SMALL), only_starts=[start])
        assert again.free_energy_meV_per_cell == pytest.approx(kept.free_energy_meV_per_cell, rel=1e-12)
    weaker = build_model(dimensionless(**SMALL | {"kondo": 0.0}))  # without the channels of the hybridization
    assert [len(start.p) for start in loaded.starts(weaker)] == [weaker.n_channels] * len(loaded.minima)


def test_the_trials_of_a_very_long_search_fit_into_a_state_file(searched, tmp_path):
    long = replace(searched, trials=searched.trials * 200)
    save_state(long, tmp_path / "state.h5")
    assert load_state(tmp_path / "state.h5").trials == long.trials


# ---- distinct minima ---------------------------------------------------------------------------------------------


def test_every_kept_minimum_has_its_own_certificate_and_none_is_kept_twice(searched):
    states = (searched, *searched.others)
    assert len(states) >= 2
    assert searched.minima == states
    energies = [state.free_energy_meV_per_cell for state in states]
    assert energies == sorted(energies)
    for state in states:
        assert state.status == "minimum"
        assert state.residual_meV < 1e-5
        assert state.curvature_min > -1e-6
        assert state.zero_modes is not None
        assert state.zone_error_meV > 0
    assert not any(state.others for state in searched.others)
    assert sum(state.found for state in states) == sum(trial.status == "minimum" for trial in searched.trials)
    assert [state.found for state in states] == [count for _, count in distinct_minima(searched.trials)]


def test_large_grids_keep_the_other_minima_too():
    """K = -t, J_K = 3.3 t, n = 1, just beyond the first-order transition: the decoupled minimum lies higher."""
    material = dimensionless(-1.0, 3.3, points=16, offset="c3")
    chosen = [named_start(material, name) for name in ("decoupled 0", "hybridized 0")]
    solution = solve(material, only_starts=chosen)
    (other,) = solution.others
    assert (solution.start, other.start) == ("hybridized 0", "decoupled 0")
    assert other.zone.points == 16
    assert solution.status == other.status == "minimum"
    assert solution.free_energy_meV_per_cell < other.free_energy_meV_per_cell


def test_only_as_many_states_are_kept_as_asked_for(searched):
    one = solve(dimensionless(**SMALL), most_kept=1)
    assert one.others == ()
    assert one.trials == searched.trials
    assert one.free_energy_meV_per_cell == searched.free_energy_meV_per_cell


@pytest.mark.parametrize("keys", [{"kitaev": 0.0, "spin_layer__heisenberg_meV": -0.4}, {"kitaev": -0.7, "kondo": 0.5}])
def test_domains_of_a_magnet_are_one_minimum(keys):
    """Heisenberg exchange turns with the spins; Kitaev exchange along x, y, z turns with the lattice (offset c3)."""
    material = dimensionless(form="so4", filling=0.9, points=4, offset="c3", temperature=0.02, **keys)
    model = build_model(material)
    chosen = [Start(f"{axis}", magnet(model, np.array([spin, spin]))) for axis, spin in enumerate(np.eye(3) / 2)]
    solution = solve(material, only_starts=chosen)
    assert [trial.status for trial in solution.trials] == ["minimum"] * 3
    assert solution.trials[0].net_moment > 0.4
    assert (solution.found, solution.others) == (3, ())


def test_states_of_equal_f_and_hybridization_are_told_apart_by_their_moments():
    one = Trial("a", "minimum", -3000.0, 0.3, 0.2, 0.1, 0.2)
    assert one.same_state(replace(one, start="b", free_energy_meV_per_cell=-3000.0 + 1e-6))
    for name in ("hybridization", "spin_moment", "electron_moment", "net_moment"):
        assert not one.same_state(replace(one, **{name: 0.0}))
    assert not one.same_state(replace(one, free_energy_meV_per_cell=-3000.01))


def test_a_start_that_ended_lower_without_being_a_minimum_is_not_hidden():
    """K = -t, J_K = 3.5 t, n = 1: the hybridized state is lowest, but two steps do not reach it."""
    material = dimensionless(-1.0, 3.5, points=6, offset="c3")
    chosen = [named_start(material, name) for name in ("decoupled 0", "hybridized 0")]
    full = solve(material, only_starts=chosen)
    assert full.start == "hybridized 0"
    assert full.ended_lower is None
    again = [Start("decoupled again", full.others[0].p), chosen[1]]
    short = solve(material, only_starts=again, settings=Settings(mixing_steps=2, newton_steps=0))
    assert [trial.status for trial in short.trials] == ["minimum", "not-converged"]
    assert short.start == "decoupled again"
    assert short.status == "minimum"
    assert short.ended_lower == short.trials[1]
    assert short.ended_lower.free_energy_meV_per_cell < short.free_energy_meV_per_cell
    assert 'not the lowest state: start "hybridized 0"' in short.message
    assert "more starts" in short.message


# ---- what a search says of itself --------------------------------------------------------------------------------


def test_the_minima_of_a_search_are_counted_lowest_first_and_other_ends_are_none():
    def end(start, status, energy, hybridization):
        return Trial(start, status, energy, hybridization, 0.0, 0.0, 0.0)

    trials = [
        end("a", "minimum", -3000.0, 0.3),
        end("b", "minimum", -3000.000001, 0.3),
        end("c", "minimum", -3000.0, 0.2),
        end("d", "minimum", -2999.0, 0.3),
        end("e", "saddle", -3001.0, 0.1),
        end("f", "not-converged", -3002.0, 0.1),
    ]
    assert [(trial.start, count) for trial, count in distinct_minima(trials)] == [("b", 2), ("c", 1), ("d", 1)]


def test_the_chance_of_another_minimum_is_the_share_of_starts_whose_minimum_was_met_once():
    """Good-Turing: Biometrika 40, 237 (1953), "The population frequencies of species and the estimation of population
    parameters" (from memory)."""
    assert chance_of_another([3, 1, 1]) == 2 / 5
    assert chance_of_another([4]) == 0
    assert chance_of_another([]) is None


def test_the_estimate_is_on_average_the_chance_that_the_last_of_independent_starts_met_a_new_minimum():
    """Seeded draws from a known distribution over minima: sum_m p_m (1 - p_m)^7 for the last of 8."""
    chances = np.array([0.5, 0.2, 0.1, 0.05, 0.05, 0.05, 0.05])
    draws = np.random.default_rng(5).multinomial(8, chances, size=4000)
    estimates = [chance_of_another([int(count) for count in counts if count]) for counts in draws]
    assert np.mean(estimates) == pytest.approx(chances @ (1 - chances) ** 7, abs=0.01)


def test_starts_without_a_new_minimum_leave_open_the_chance_that_they_would_all_have_missed():
    assert chance_not_excluded(1) == pytest.approx(0.95)
    assert (1 - chance_not_excluded(8)) ** 8 == pytest.approx(0.05)
    assert chance_not_excluded(8) > chance_not_excluded(100)
