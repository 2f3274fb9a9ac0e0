"""The plan of a sweep: a spanning tree, seeds from coordinates, and every mistake found before anything runs."""

import itertools
from dataclasses import replace

import pytest
from test_sweep_synthetic import SHAPE, SIZE, write_sweep

from kondomf.errors import InputError
from kondomf.sweep.plan import load_sweep
from kondomf.sweep.record import Axis, PointKey


@pytest.fixture
def plan(tmp_path):
    return load_sweep(write_sweep(tmp_path))


def axes_of(tmp_path, line):
    return load_sweep(write_sweep(tmp_path, f'material = "material.toml"\n[axes]\n{line}\n')).axes


def test_axes_phases_and_material_are_read(plan, tmp_path):
    assert plan.shape == SHAPE
    assert plan.size == SIZE == len(set(plan.points()))
    assert plan.phases == ("any", "heavy-fermi-liquid")
    assert plan.material.name == "invented for tests"
    assert plan.material_path == tmp_path / "material.toml"
    assert plan.axes[0] == Axis("kondo.coupling_meV", (0.0, 300.0, 600.0))


def test_the_phases_default_to_any(tmp_path):
    path = write_sweep(tmp_path, 'material = "material.toml"\n[axes]\n"kondo.coupling_meV" = [1, 2]\n')
    assert load_sweep(path).phases == ("any",)


def test_every_point_hangs_on_its_root_by_a_chain_of_single_steps_inside_its_class(plan):
    for key in plan.points():
        while (parent := plan.parent(key)) is not None:
            assert parent.phase == key.phase
            assert sum(a != b for a, b in zip(parent.index, key.index, strict=True)) == 1
            assert sum(parent.index) == sum(key.index) - 1
            key = parent
        assert key.index == (0, 0)


def test_the_tree_runs_along_the_first_axis_and_from_there_along_the_second(plan):
    assert plan.parent(PointKey("any", (2, 0))) == PointKey("any", (1, 0))
    assert plan.parent(PointKey("any", (2, 3))) == PointKey("any", (2, 2))


def test_children_are_the_inverse_of_parent(plan):
    edges = {(key, child) for key in plan.points() for child in plan.children(key)}
    assert edges == {(plan.parent(key), key) for key in plan.points() if plan.parent(key)}


def test_a_parent_ranks_before_its_children(plan):
    assert all(plan.rank(plan.parent(key)) < plan.rank(key) for key in plan.points() if plan.parent(key))


def test_no_two_points_share_a_seed_and_all_fit_in_31_bits(plan):
    seeds = [plan.seed(key) for key in plan.points()]
    assert len(set(seeds)) == SIZE
    assert all(0 <= seed < 2**31 for seed in seeds)


def test_a_point_keeps_its_seed_when_an_axis_grows_and_loses_it_with_the_seed_of_the_material(plan):
    coupling, filling = plan.axes
    grown = replace(plan, axes=(Axis(coupling.key, (-300.0, *coupling.values)), filling))
    assert grown.seed(PointKey("any", (2, 3))) == plan.seed(PointKey("any", (1, 3)))
    search = plan.material.search.model_copy(update={"seed": 2})
    other = replace(plan, material=plan.material.model_copy(update={"search": search}))
    assert other.seed(PointKey("any", (1, 3))) != plan.seed(PointKey("any", (1, 3)))


def test_each_class_gets_the_exchange_form_it_needs(plan):
    free = plan.material_at(PointKey("any", (1, 2)))
    heavy = plan.material_at(PointKey("heavy-fermi-liquid", (1, 2)))
    assert (free.mean_field.exchange_form, free.search.phase) == ("kitaev", "any")
    assert (heavy.mean_field.exchange_form, heavy.mean_field.kondo_form) == ("so4", "so4")
    assert heavy.search.phase == "heavy-fermi-liquid"
    assert heavy.kondo.coupling_meV == free.kondo.coupling_meV == 300.0
    assert heavy.conduction_layer.filling == free.conduction_layer.filling == 0.95


def test_a_linear_axis_has_round_values(tmp_path):
    ((axis),) = axes_of(tmp_path, '"kondo.coupling_meV" = { from = 0.0, to = 1.0, points = 11 }')
    assert axis.values == tuple(i / 10 for i in range(11))


def test_a_logarithmic_axis_has_equal_ratios(tmp_path):
    ((axis),) = axes_of(tmp_path, '"kondo.coupling_meV" = { from = 1, to = 1000, points = 4, spacing = "log" }')
    assert axis.values == (1.0, 10.0, 100.0, 1000.0)


def test_one_point_makes_an_axis(tmp_path):
    ((axis),) = axes_of(tmp_path, '"kondo.coupling_meV" = { from = 5, to = 5, points = 1 }')
    assert axis.values == (5.0,)


def test_whole_numbers_can_be_swept(tmp_path):
    path = write_sweep(
        tmp_path, 'material = "material.toml"\n[axes]\n"zone.points" = { from = 12, to = 24, points = 3 }'
    )
    plan = load_sweep(path)
    points = [plan.material_at(key).zone.points for key in plan.points()]
    assert points == [12, 18, 24]


BAD_AXES = {
    '"kondo.coupling" = [1, 2]': "coupling_meV",
    '"mean_field.exchange_form" = [1, 2]': "no numeric key",
    '"kondo.coupling_meV" = []': "list of numbers",
    '"kondo.coupling_meV" = "900"': "list of numbers",
    '"kondo.coupling_meV" = [1, true]': "list of numbers",
    '"kondo.coupling_meV" = [1, nan]': "list of numbers",
    '"kondo.coupling_meV" = [1, 2, 1.0]': "twice",
    '"kondo.coupling_meV" = { from = 2, to = 2, points = 3 }': "twice",
    '"kondo.coupling_meV" = { from = 1, to = 2 }': "points = None",
    '"kondo.coupling_meV" = { from = 1, to = 2, points = 0 }': "points = 0",
    '"kondo.coupling_meV" = { from = 1, to = 2, points = 2.0 }': "points = 2.0",
    '"kondo.coupling_meV" = { from = 1, to = 2, points = 1 }': "cannot reach",
    '"kondo.coupling_meV" = { from = 1, points = 2 }': "to = None",
    '"kondo.coupling_meV" = { from = 1, to = 2, points = 2, step = 1 }': "'step'",
    '"kondo.coupling_meV" = { from = 1, to = 2, points = 2, spacing = "wide" }': "'wide'",
    '"kondo.coupling_meV" = { from = 0, to = 2, points = 2, spacing = "log" }': "above 0",
    '"conduction_layer.filling" = { from = 1.0, to = 2.5, points = 4 }': r"filling = 2",
    '"conduction_layer.filling" = [0.9]\n"conduction_layer.charge_transfer_meV" = [10.0]': "overruled by another axis",
}


@pytest.mark.parametrize("line", BAD_AXES)
def test_a_wrong_axis_is_refused_with_file_and_reason(tmp_path, line):
    with pytest.raises(InputError, match=BAD_AXES[line]) as caught:
        axes_of(tmp_path, line)
    assert str(tmp_path / "sweep.toml") in str(caught.value)


BAD_FILES = {
    "material = 3": "material = 3",
    'material = "material.toml"': "no axis",
    'material = "material.toml"\nmaterail = 1': "'materail'",
    'material = "other.toml"\n[axes]\n"kondo.coupling_meV" = [1]': "other.toml",
    'material = "material.toml"\nphases = []\n[axes]\n"kondo.coupling_meV" = [1]': "at least one of any, decoupled",
    'material = "material.toml"\nphases = ["solid"]\n[axes]\n"kondo.coupling_meV" = [1]': "'solid'",
    'material = "material.toml"\nphases = ["any", "any"]\n[axes]\n"kondo.coupling_meV" = [1]': "twice",
    'material = "material.toml"\n[axes]\n"kondo.coupling_meV" = [1]\n[refine]\nboundaries = true': "does not refine",
    "material = ": "not valid TOML",
}


@pytest.mark.parametrize("text", BAD_FILES)
def test_a_wrong_sweep_file_is_refused_with_reason(tmp_path, text):
    with pytest.raises(InputError, match=BAD_FILES[text]):
        load_sweep(write_sweep(tmp_path, text))


def test_a_missing_sweep_file_is_named(tmp_path):
    with pytest.raises(InputError, match=r"no\.toml"):
        load_sweep(tmp_path / "no.toml")


def test_an_impossible_point_is_named_with_all_its_coordinates(tmp_path):
    lines = '"kondo.coupling_meV" = [1, 2]\n"conduction_layer.filling" = [1.0, 2.0]'
    with pytest.raises(InputError, match=r"kondo\.coupling_meV = 1, conduction_layer\.filling = 2") as caught:
        axes_of(tmp_path, lines)
    assert "strictly between 0 and 2" in str(caught.value)


@pytest.mark.parametrize("shape", [(1,), (4,), (1, 3), (2, 2, 3)])
def test_the_tree_spans_grids_of_any_dimension(plan, shape):
    keys = ["kondo.coupling_meV", "conduction_layer.filling", "spin_layer.gamma_meV"]
    axes = tuple(Axis(key, tuple(map(float, range(n)))) for key, n in zip(keys, shape, strict=False))
    plan = replace(plan, axes=axes, phases=("any",))
    reached, level = set(), [PointKey("any", (0,) * len(shape))]
    while level:
        reached.update(level)
        level = list(itertools.chain.from_iterable(map(plan.children, level)))
    assert reached == set(plan.points())
