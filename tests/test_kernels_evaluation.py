"""The compiled evaluation agrees with its plain twin, whatever the matrices; how its code is kept on disk."""

import importlib.util
import sys
from dataclasses import replace
from types import SimpleNamespace

import numba
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from materials import T, dimensionless
from numba import njit

from kondomf.meanfield import evaluate as twin
from kondomf.meanfield import kernels
from kondomf.meanfield.kernels import vector
from kondomf.meanfield.kernels.blocks import blocks_of
from kondomf.meanfield.kernels.entry import OPTIONS
from kondomf.meanfield.kernels.evaluation import evaluate
from kondomf.meanfield.kernels.threads import over_shares
from kondomf.meanfield.starts import standard_starts
from kondomf.meanfield.zone import ZoneRule, uniform
from kondomf.model import MeanFieldModel, build_model

SEEDS = st.integers(0, 2**32 - 1)
FAR = {
    "spin_layer__heisenberg_3_meV": 0.3,
    "spin_layer__kitaev_2_meV": 0.1,
    "conduction_layer__next_hopping_meV": 0.1,
    "kondo__neighbour_coupling_meV": 0.5,
}
"""Couplings that bring lattice vectors together with their opposites, and channels of one Majorana with itself."""
QUARTER = ZoneRule(np.array([[0.25, 0.0]]), np.ones(1), 1, "quarter")
"""The one wave vector at which e^(ik.R) = i for R = (1, 0)."""


def assert_agree(model, zone, phi, tolerance=1e-12):
    """P and F of kernel and twin; energies in units of the largest |omega| or field."""
    one, other = evaluate(model, zone, phi), twin.evaluate(model, zone, phi)
    unit = max(abs(other.omega), np.abs(phi).max(), model.temperature)
    assert one.correlators == pytest.approx(other.correlators, rel=0, abs=tolerance)
    assert one.p == pytest.approx(other.p, rel=0, abs=tolerance)
    assert one.omega == pytest.approx(other.omega, rel=0, abs=tolerance * unit)
    return one


def random_fields(model, seed, size=T):
    phi = model.h.copy()
    phi[model.active] += size * np.random.default_rng(seed).standard_normal(len(model.active))
    return phi


def all_pairs(n, temperature):
    """A model whose channels are all pairs of n Majoranas at R = 0 and (1, 0), without interactions."""
    a, b = np.triu_indices(n, 1)
    i, j = np.triu_indices(n)
    here, there = np.zeros_like(a), np.ones_like(i)
    table = np.concatenate([np.stack([a, b, here, here], 1), np.stack([i, j, there, 0 * there], 1)])
    count = len(table)
    cell = SimpleNamespace(n_sites=n // 8)
    none = np.zeros((1, count))
    return MeanFieldModel(
        cell, table, np.zeros(count), np.zeros((count, count)), none, np.zeros(1), ("density",), temperature
    )


def fields_of(h):
    """Fields of `all_pairs` with the Bloch matrix h at QUARTER."""
    n = len(h)
    symmetric = -h.real[np.triu_indices(n)] / np.where(np.eye(n)[np.triu_indices(n)], 4, 2)
    return np.concatenate([h.imag[np.triu_indices(n, 1)] / 2, symmetric])


def hermitian(levels, seed):
    """A matrix with these eigenvalues and random eigenvectors."""
    rng = np.random.default_rng(seed)
    x = rng.standard_normal((2, len(levels), len(levels)))
    u = np.linalg.qr(x[0] + 1j * x[1])[0]
    return (u * levels) @ u.conj().T


# ---- agreement with the plain twin -------------------------------------------------------------------------------


@pytest.mark.parametrize(("cell", "form"), [("1x1", "so4"), ("1x1", "kitaev"), ("1x2", "kitaev"), ("sqrt3", "so4")])
@pytest.mark.parametrize("couplings", [{}, FAR])
def test_any_fields_of_any_cell_give_the_free_energy_and_correlators_of_the_twin(cell, form, couplings):
    model = build_model(dimensionless(kondo=2.0, cell=cell, form=form, temperature=0.01, **couplings))
    for points, offset in ((1, "c3"), (3, "c3"), (5, "midpoint")):  # 1, 9 and 13 wave vectors
        assert_agree(model, uniform(points, offset), random_fields(model, points))


@settings(max_examples=30, deadline=None)
@given(n=st.sampled_from([8, 16, 24]), seed=SEEDS, exponent=st.floats(-2, 3), count=st.integers(1, 20))
def test_random_matrices_at_random_wave_vectors(n, seed, exponent, count):
    rng = np.random.default_rng(seed)
    model = all_pairs(n, 10.0**exponent)
    weight = rng.random(count)
    zone = ZoneRule(rng.standard_normal((count, 2)), weight / weight.sum(), 0, "random")
    assert_agree(model, zone, rng.standard_normal(model.n_channels))


@settings(max_examples=30, deadline=None)
@given(levels=st.lists(st.integers(-2, 2), min_size=16, max_size=16), seed=SEEDS)
def test_degenerate_levels_and_zero_modes(levels, seed):
    model = all_pairs(16, 0.1)
    h = hermitian(np.array(levels, dtype=float), seed)
    h[np.abs(h) < 1e-15] = 0
    result = assert_agree(model, QUARTER, fields_of(h))
    expected = -model.temperature / 2 * np.logaddexp(*(np.outer([1, -1], levels) / (2 * model.temperature))).sum()
    assert result.omega == pytest.approx(expected, abs=1e-12)


@pytest.mark.parametrize("levels", [np.zeros(8), np.full(8, 3.0), np.arange(8.0) - 3, 10.0 ** np.arange(-12, 4, 2)])
def test_diagonal_matrices(levels):
    assert_agree(all_pairs(8, 0.2), QUARTER, fields_of(np.diag(levels).astype(complex)))


@settings(max_examples=30, deadline=None)
@given(label=st.lists(st.integers(0, 4), min_size=16, max_size=16), seed=SEEDS)
def test_blocks_are_found_and_correlators_between_them_vanish(label, seed):
    model = all_pairs(16, 0.1)
    label = np.array(label)
    same = label[:, None] == label
    phi = np.random.default_rng(seed).standard_normal(model.n_channels)
    phi[~same[model.table[:, 0], model.table[:, 1]]] = 0
    assert sorted(blocks_of(model, phi).sizes[:, 0]) == sorted(np.unique(label, return_counts=True)[1])
    result = assert_agree(model, QUARTER, phi)
    assert not result.correlators[:, ~same].any()


def test_a_decoupled_liquid_splits_into_its_bonds_and_its_spinons():
    """Bond Majoranas pair up, chi0 hop freely; here so do the electrons.
    Ann. Phys. 321, 2 (2006), "Anyons in an exactly solved model and beyond"."""
    model = build_model(dimensionless(kitaev=-1.0, kondo=1.0))
    phi = standard_starts(model)["decoupled 0"].fields(model)
    assert sorted(blocks_of(model, phi).sizes[:, 0]) == [2] * 8
    assert_agree(model, uniform(4, "c3"), phi)


def test_fields_below_the_rounding_errors_of_the_largest_join_no_blocks():
    model = all_pairs(8, 0.1)
    phi = np.full(model.n_channels, 1e-18)
    phi[0] = 1.0
    assert sorted(blocks_of(model, phi).sizes[:, 0]) == [1] * 6 + [2]


@pytest.mark.parametrize("temperature", [1e-9, 1e-3, 1e3])
def test_cold_and_hot_states_with_a_gap(temperature):
    model = all_pairs(16, temperature)
    levels = np.concatenate([np.linspace(-3, -0.2, 7), np.linspace(0.1, 2, 9)])
    result = assert_agree(model, QUARTER, fields_of(hermitian(levels, 5)))
    filled = np.log1p(np.exp(-np.abs(levels) / temperature))
    assert 0 <= result.entropy <= 8 * np.log(2) + 1e-12
    assert result.omega == pytest.approx(-(np.abs(levels) / 4 + temperature / 2 * filled).sum(), rel=1e-13)


@settings(max_examples=20, deadline=None)
@given(seed=SEEDS, exponent=st.floats(-100, 40))
def test_fields_and_temperature_scale_together(seed, exponent):
    model, scale = all_pairs(8, 0.1), 10.0**exponent
    phi = np.random.default_rng(seed).standard_normal(model.n_channels)
    one = evaluate(model, QUARTER, phi)
    other = evaluate(replace(model, temperature=0.1 * scale), QUARTER, scale * phi)
    assert other.p == pytest.approx(one.p, abs=1e-12)
    assert other.omega == pytest.approx(scale * one.omega, rel=1e-12)


@pytest.mark.parametrize("bad", [np.nan, np.inf, -np.inf, 1e300])
def test_fields_that_are_no_numbers_or_far_too_large_are_reported_as_the_twin_does(bad):
    model = all_pairs(8, 0.1)
    phi = np.ones(model.n_channels)
    phi[3] = bad
    with np.errstate(invalid="ignore"):  # the twin multiplies before it looks
        expected = twin.evaluate(model, QUARTER, phi)
    for result in (evaluate(model, QUARTER, phi), expected):
        assert np.isnan([result.omega, result.entropy]).all()
        assert np.isnan(result.correlators).all()
        assert np.isnan(result.p).all()


def test_wave_vectors_and_weights_that_are_no_numbers_are_reported():
    model = all_pairs(8, 0.1)
    for zone in (replace(QUARTER, k=np.array([[np.nan, 0.0]])), replace(QUARTER, weight=np.array([np.inf]))):
        assert np.isnan(evaluate(model, zone, np.ones(model.n_channels)).correlators).all()


# ---- threads -----------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("points", [1, 5, 40])
def test_threads_do_not_change_a_bit(points):
    model = build_model(dimensionless(kondo=2.0, temperature=0.01))
    zone, phi = uniform(points, "c3"), random_fields(model, 1)
    one, *others = (evaluate(model, zone, phi, threads=threads) for threads in (1, 2, 3))
    for other in others:
        assert (one.omega, one.entropy) == (other.omega, other.entropy)
        assert (one.correlators == other.correlators).all()


@given(count=st.integers(0, 100), threads=st.integers(1, 4))
def test_shares_cover_a_range_once(count, threads):
    taken = []
    assert over_shares(lambda first, last: not taken.extend(range(first, last)), count, threads)
    assert sorted(taken) == list(range(count))


def test_one_failed_share_fails_all():
    assert not over_shares(lambda first, last: not first <= 7 < last, 16, 2)


# ---- vectors -----------------------------------------------------------------------------------------------------


@njit(**OPTIONS)
def _operations(x, y, places, out):
    a, b = vector.load(x, 0), vector.load(y, 0)
    condition = (a < b) | ((a >= 1.0) & (b > 0.5))
    vector.store(out, 0, vector.select(condition, a + 2.0 * b, -a / b))
    vector.store(out, 8, vector.fma(a, b, vector.copysign(vector.splat(0.3), a)) - vector.sqrt(vector.absolute(b)))
    vector.store(out, 16, vector.maximum(a, b) * vector.minimum(a, vector.exp(b)))
    vector.store(out, 24, vector.sin(a) / vector.cos(b))
    vector.store(out, 32, vector.gather(x, 1, places, 0))
    return vector.lane_sum(a), vector.lane_max(a), vector.lane_min(a), vector.any_lane(a > 9.0), vector.any_lane(a == a)


def test_vectors_compute_lane_by_lane():
    rng = np.random.default_rng(0)
    x, y, out = rng.standard_normal(9), rng.standard_normal(8), np.empty(40)
    places = rng.permutation(8)
    a, sums = x[:8], _operations(x, y, places, out)
    expected = [
        np.where((a < y) | ((a >= 1) & (y > 0.5)), a + 2 * y, -a / y),
        a * y + np.copysign(0.3, a) - np.sqrt(np.abs(y)),
        np.maximum(a, y) * np.minimum(a, np.exp(y)),
        np.sin(a) / np.cos(y),
        x[1 + places],
    ]
    assert out.reshape(5, 8) == pytest.approx(np.array(expected), rel=1e-14)
    assert sums == pytest.approx((a.sum(), a.max(), a.min(), False, True))


# ---- compiled code on disk ---------------------------------------------------------------------------------------

TINY = """
from numba import types
from kondomf.meanfield.kernels.entry import entry

@entry(types.float64)
def double(x):
    return 2 * x
"""


def tiny(path, name="tiny"):
    """A fresh process's view of a module with one entry."""
    spec = importlib.util.spec_from_file_location(name, path)
    module = importlib.util.module_from_spec(spec)
    sys.modules[name] = module
    spec.loader.exec_module(module)
    return module.double


@pytest.fixture
def source(tmp_path, monkeypatch):
    monkeypatch.setattr(numba.config, "CACHE_DIR", "")
    monkeypatch.setitem(sys.modules, "tiny", None)
    path = tmp_path / "tiny.py"
    path.write_text(TINY)
    return path


def test_compiled_code_is_found_again_and_asking_does_not_compile(source):
    entry = tiny(source)
    assert not entry.ready()
    assert not entry.ready()
    assert entry(2.0) == 4
    again = tiny(source)
    assert again.ready()
    assert not again.compiled
    assert again(3.0) == 6
    assert sum(again._dispatcher.stats.cache_hits.values()) == 1


def test_code_of_other_sources_or_for_another_cpu_is_not_found(source, monkeypatch):
    tiny(source).compile()
    monkeypatch.setattr("kondomf.meanfield.kernels.entry._sources", lambda: b"another version")
    assert not tiny(source).ready()


@pytest.mark.parametrize("kind", ["nbi", "nbc"])
def test_damaged_files_are_compiled_anew(source, kind):
    tiny(source).compile()
    (path,) = (source.parent / "__pycache__").glob(f"*.{kind}")
    path.write_bytes(b"\x80")
    assert tiny(source)(1.0) == 2
    assert tiny(source).ready()


def test_without_any_directory_to_write_the_code_lives_in_memory(source, monkeypatch):
    (source.parent / "__pycache__").write_text("not a directory")
    monkeypatch.setattr(numba.config, "CACHE_DIR", str(source / "nowhere"))
    for name in ("XDG_CACHE_HOME", "HOME", "LOCALAPPDATA"):
        monkeypatch.setenv(name, str(source))
    entry = tiny(source)
    assert not entry.ready()
    assert entry(2.0) == 4
    assert entry.ready()


def test_a_directory_that_turns_read_only_is_no_error(source, monkeypatch):
    entry = tiny(source)
    assert not entry.ready()

    def full(*args):
        raise OSError("no space left on device")

    monkeypatch.setattr(type(entry._store._cache_file), "save", full)
    assert entry(2.0) == 4


def test_kernels_pay_for_little_work_never_and_for_much_always(monkeypatch):
    monkeypatch.setattr(kernels, "ready", lambda: False)
    assert [kernels.worthwhile(work) for work in (0, 1e7, 1e9)] == [False, False, True]
    monkeypatch.setattr(kernels, "ready", lambda: True)
    assert [kernels.worthwhile(work) for work in (0, 1e7, 1e9)] == [False, True, True]
