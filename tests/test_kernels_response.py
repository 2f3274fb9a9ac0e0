"""The response kernel: agreement with its plain twin, limits known in closed form, and what it promises besides."""

from functools import cache

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from materials import T, dimensionless

from kondomf.meanfield import evaluate as plain
from kondomf.meanfield.kernels.blocks import blocks_of
from kondomf.meanfield.kernels.response import response
from kondomf.meanfield.zone import ZoneRule
from kondomf.model import build_model

CELLS = {1: "1x1", 2: "1x2", 3: [[3, 0], [0, 1]]}
"""Magnetic cells by their number of primitive cells."""


@cache
def model_of(size=1, temperature=0.05, form="kitaev"):
    return build_model(dimensionless(kondo=2.0, cell=CELLS[size], temperature=temperature, form=form))


def zone_of(count, seed=0):
    """Wave vectors and weights without any symmetry."""
    rng = np.random.default_rng(seed)
    weight = rng.random(count) + 0.1
    return ZoneRule(rng.random((count, 2)), weight / weight.sum(), 0, "")


def fields_of(model, kind, seed=0):
    """Fields of a kind: all random, most of them absent, or the highly degenerate ones of the uncoupled layers."""
    rng = np.random.default_rng(seed)
    random = T * rng.standard_normal(model.n_channels) / 2
    return {
        "random": random,
        "decoupled": np.where(model.hybridization, 0.0, random),
        "sparse": np.where(rng.random(len(random)) < 0.93, 0.0, random),
        "one field": np.where(np.arange(len(random)) == 3, random, 0.0),
        "bare": model.h,
        "none": 0 * random,
    }[kind]


def twin(model, zone, phi, channels):
    return plain.response(model, zone, plain.evaluate(model, zone, phi, keep=True), channels)


def assert_agrees(model, zone, phi, channels):
    expected = twin(model, zone, phi, channels)
    assert response(model, zone, phi, channels) == pytest.approx(expected, abs=1e-11 * np.abs(expected).max(), rel=0)


# ---- agreement with the twin -------------------------------------------------------------------------------------


@pytest.mark.parametrize("kind", ["random", "decoupled", "sparse", "one field", "bare", "none"])
@pytest.mark.parametrize("temperature", [1e-3, 0.05, 30.0])
def test_the_kernel_agrees_with_the_twin_at_every_temperature_and_for_blocks_zero_modes_and_degenerate_levels(
    kind, temperature
):
    model = model_of(temperature=temperature)
    assert_agrees(model, zone_of(11), fields_of(model, kind), np.arange(model.n_channels))


@pytest.mark.parametrize("seed", range(6))
def test_the_kernel_agrees_with_the_twin_where_many_blocks_interlace(seed):
    """Channels then run from either to the other of two blocks."""
    model = model_of(form="so4")
    phi = fields_of(model, "sparse", seed)
    label = blocks_of(model, phi).label
    _, a, b = model.position
    assert len(set(np.sign(label[a] - label[b]))) == 3
    assert_agrees(model, zone_of(5), phi, np.arange(model.n_channels))


@pytest.mark.parametrize("kind", ["random", "decoupled", "bare"])
@pytest.mark.parametrize("size", [2, 3])
def test_the_kernel_agrees_with_the_twin_in_larger_cells(size, kind):
    model = model_of(size, form="so4")
    assert_agrees(model, zone_of(3), fields_of(model, kind), model.active)


@pytest.mark.parametrize("kind", ["random", "decoupled", "sparse"])
def test_the_kernel_agrees_with_the_twin_for_channels_from_a_majorana_to_its_own_images(kind):
    keys = {"spin_layer__heisenberg_2_meV": 0.2, "spin_layer__kitaev_2_meV": 0.1, "spin_layer__heisenberg_3_meV": 0.3}
    model = build_model(dimensionless(kondo=2.0, conduction_layer__next_hopping_meV=0.1, temperature=0.05, **keys))
    own = np.flatnonzero(model.table[:, 0] == model.table[:, 1])
    assert len(own) > 0
    assert_agrees(model, zone_of(9), fields_of(model, kind), np.arange(model.n_channels))


@pytest.mark.parametrize("count", [1, 7, 8, 9, 40])
def test_the_kernel_agrees_with_the_twin_for_any_number_of_wave_vectors(count):
    model = model_of(form="so4")
    assert_agrees(model, zone_of(count), fields_of(model, "random"), model.active)


def test_the_kernel_takes_points_where_levels_are_degenerate_by_symmetry():
    model = model_of()
    zone = ZoneRule(np.array([[0, 0], [0.5, 0], [0.5, 0.5], [1 / 3, 2 / 3]]), np.full(4, 0.25), 0, "")
    for kind in ("random", "decoupled", "bare"):
        assert_agrees(model, zone, fields_of(model, kind), np.arange(model.n_channels))


@settings(max_examples=30, deadline=None, derandomize=True)
@given(
    st.integers(0, 2**32 - 1),
    st.floats(-2, 1.5),
    st.sampled_from([0.0, 0.5, 0.9, 0.95]),
    st.integers(1, 10),
    st.lists(st.integers(0, 115), min_size=1, max_size=20, unique=True),
)
def test_the_kernel_agrees_with_the_twin_for_any_fields_and_channels(seed, exponent, absent, count, channels):
    model = model_of(temperature=10.0 ** round(exponent, 1), form="so4")
    rng = np.random.default_rng(seed)
    phi = np.where(rng.random(model.n_channels) < absent, 0.0, T * rng.standard_normal(model.n_channels))
    assert_agrees(model, zone_of(count, seed), phi, np.array(channels))


# ---- limits in closed form ---------------------------------------------------------------------------------------


def test_far_below_the_gap_the_response_is_that_of_zero_temperature():
    """X_nm = 2/(|e_n| + |e_m|) between a filled and an empty level, else 0."""
    model, zone = model_of(temperature=1e-9), zone_of(5)
    phi, channels = fields_of(model, "random"), np.arange(0, model.n_channels, 3)
    expected = np.zeros((len(channels), len(channels)))
    for k, weight in zip(zone.k, zone.weight, strict=True):
        phases = np.exp(2j * np.pi * (model.lattice_vectors @ k))
        e, u = np.linalg.eigh(plain.bloch_matrix(model, phi, phases[None])[0])
        vector, a, b = (axis[channels] for axis in model.position)
        half = 2j * phases[vector, None, None] * u[a].conj()[:, :, None] * u[b][:, None, :]
        d = half + half.conj().swapaxes(1, 2)
        x = np.where(e[:, None] * e < 0, 2 / (np.abs(e[:, None]) + np.abs(e)), 0.0)
        expected -= weight / 4 * np.einsum("nm,pnm,qnm->pq", x, d, d.conj()).real
    assert np.abs(response(model, zone, phi, channels) - expected).max() < 1e-11 * np.abs(expected).max()


@pytest.mark.parametrize("ratio", [1e-8, 0.3, 5.0, 20.0])
def test_two_majoranas_respond_like_a_two_level_system_also_where_hardly_any_response_is_left(ratio):
    """H = phi i gamma_a gamma_b has the levels +-phi: P = -tanh(phi/T), dP/dphi = -1/(T cosh^2(phi/T))."""
    model = model_of()
    t, p = model.temperature, int(model.active[0])
    phi = np.zeros(model.n_channels)
    phi[p] = ratio * t
    assert model.table[p, 0] != model.table[p, 1]
    pi = response(model, zone_of(3), phi, np.array([p]))
    assert pi[0, 0] == pytest.approx(-1 / np.cosh(ratio) ** 2 / t, rel=1e-12, abs=0)


# ---- laws --------------------------------------------------------------------------------------------------------


def test_the_response_is_the_derivative_of_the_correlators():
    model, zone = model_of(temperature=0.3), zone_of(9)
    phi, channels = fields_of(model, "random"), model.active
    pi = response(model, zone, phi, channels)
    step = 1e-3 * T
    for direction in np.random.default_rng(3).standard_normal((2, len(channels))):
        far, near = (
            sum(s * plain.evaluate(model, zone, moved(phi, channels, s * h * direction)).p for s in (1, -1)) / (2 * h)
            for h in (2 * step, step)
        )
        derivative = ((4 * near - far) / 3)[channels]
        assert derivative == pytest.approx(pi @ direction, abs=1e-8 * np.abs(pi @ direction).max())


def moved(phi, channels, change):
    result = phi.copy()
    result[channels] += change
    return result


def test_the_response_is_symmetric_and_negative_semidefinite():
    model = model_of(form="so4")
    for kind in ("random", "decoupled"):
        pi = response(model, zone_of(1), fields_of(model, kind), np.arange(model.n_channels))
        assert np.array_equal(pi, pi.T)
        assert np.linalg.eigvalsh(pi).max() < 1e-14 * np.abs(pi).max()


def test_the_order_of_the_channels_is_that_of_the_rows():
    model, zone = model_of(), zone_of(6)
    phi = fields_of(model, "sparse")
    order = np.random.default_rng(5).permutation(model.n_channels)
    whole = response(model, zone, phi, np.arange(model.n_channels))
    tolerance = 1e-14 * np.abs(whole).max()
    for few in (order, order[:7], order[:1]):
        assert response(model, zone, phi, few) == pytest.approx(whole[np.ix_(few, few)], abs=tolerance, rel=0)
    assert response(model, zone, phi, order[:0]).shape == (0, 0)


@pytest.mark.parametrize("kind", ["random", "decoupled"])
def test_the_number_of_threads_does_not_change_a_bit(kind):
    model, zone = model_of(), zone_of(300)
    phi = fields_of(model, kind)
    one, *others = (response(model, zone, phi, model.active, threads=threads) for threads in (1, 2, 3))
    assert all(np.array_equal(one, other) for other in others)


@pytest.mark.parametrize("value", [np.nan, np.inf, -np.inf, 1e300])
def test_input_that_is_no_number_or_beyond_all_levels_gives_nothing_but_nan(value):
    model = model_of()
    good, channels = fields_of(model, "random"), model.active
    bad = good.copy()
    bad[channels[2]] = value
    assert np.isnan(response(model, zone_of(3), bad, channels)).all()
    with np.errstate(all="ignore"):
        assert np.isnan(plain.evaluate(model, zone_of(3), bad).p).all()
    zone = zone_of(3)
    zone.k[1, 0] = np.inf if value == 1e300 else value
    assert np.isnan(response(model, zone, good, channels)).all()
