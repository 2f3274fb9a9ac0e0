"""Continuous symmetries of a mean-field model, and Majorana rotations of its fields."""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from kondomf.model.majorana import CYCLIC, ELECTRON, SPINON, majorana
from kondomf.model.model import MeanFieldModel

Array = NDArray[np.float64]


@dataclass(frozen=True)
class Generator:
    """A one-parameter group of Majorana rotations gamma -> exp(x s) gamma, x antisymmetric (n, n)."""

    name: str
    gauge: bool
    x: Array


def candidate_generators(model: MeanFieldModel) -> list[Generator]:
    """Local SU(2) gauge rotations (from C^alpha), spin rotations, and the charge SU(2) of the electrons."""
    n, sites = model.n_majorana, range(model.cell.n_sites)

    def generator(name: str, gauge: bool, places: list[tuple[int, int]], sign: int, axis: int) -> Generator:
        x = np.zeros((n, n))
        a, b, c = CYCLIC[axis]
        for site, species in places:
            for mu, nu, value in ((0, a, 0.5), (b, c, 0.5 * sign)):
                i, j = majorana(site, species, mu), majorana(site, species, nu)
                x[i, j], x[j, i] = value, -value
        return Generator(name, gauge, x)

    result = []
    for axis, letter in enumerate("xyz"):
        result += [generator(f"gauge {letter} site {site}", True, [(site, SPINON)], 1, axis) for site in sites]
        both = [(site, species) for site in sites for species in (SPINON, ELECTRON)]
        result.append(generator(f"spin {letter}", False, both, -1, axis))
        name = "electron number" if letter == "z" else f"pair rotation {letter}"
        result.append(generator(name, False, [(site, ELECTRON) for site in sites], 1, axis))
    return result


def symmetry_generators(model: MeanFieldModel) -> list[Generator]:
    """The candidates that leave h.P + P.V.P/2 unchanged, decided on seeded random correlators."""
    rng = np.random.default_rng(0)
    g = rng.standard_normal((len(model.lattice_vectors), model.n_majorana, model.n_majorana))
    for i, r in enumerate(model.lattice_vectors):
        opposite = np.flatnonzero((model.lattice_vectors == -r).all(axis=1))
        if len(opposite):
            g[opposite[0]] = -g[i].T
    zero = np.flatnonzero(~model.lattice_vectors.any(axis=1))
    g[zero] = g[zero] - g[zero].swapaxes(1, 2)
    p = g[model.position]
    slope = model.h + model.v @ p
    size = np.abs(slope).sum()
    return [x for x in candidate_generators(model) if abs(slope @ rotated(model, g, x.x)) < 1e-10 * size]


def rotated(model: MeanFieldModel, matrices: Array, x: Array) -> Array:
    """Change (N,) of the channels of antisymmetric bilinears (NR, n, n) under the infinitesimal rotation x."""
    return (x @ matrices + matrices @ x.T)[model.position]


def field_matrices(model: MeanFieldModel, phi: Array) -> Array:
    """Fields (N,) as coefficients of i gamma_a(0) gamma_b(R), (NR, n, n), antisymmetric at R = 0 and under R -> -R.

    A bilinear and its reverse i gamma_b(0) gamma_a(-R) each carry the field, so a rotation acts on both.
    """
    result = np.zeros((len(model.lattice_vectors), model.n_majorana, model.n_majorana))
    r, a, b = model.position
    result[r, a, b] = phi
    reverse = {tuple(v): i for i, v in enumerate(model.lattice_vectors)}
    for p in range(model.n_channels):
        back = reverse.get(tuple(-model.table[p, 2:]))
        if back is not None:
            result[back, b[p], a[p]] = -phi[p]
    return result


def rotate_channels(model: MeanFieldModel, rotation: Array, antiunitary: bool) -> Array:
    """Matrix (Na, Na) that maps the active fields under gamma -> O gamma, with i -> -i if `antiunitary`.

    `rotation` O (n, n) acts inside sites. Channels that the model does not hold are dropped.
    """
    active = model.active
    number = {int(p): i for i, p in enumerate(active)}
    action = np.zeros((len(active), len(active)))
    for column, p in enumerate(active):
        a, b, r1, r2 = (int(v) for v in model.table[p])
        for a2 in np.flatnonzero(rotation[:, a]):
            for b2 in np.flatnonzero(rotation[:, b]):
                found = None if (a2 == b2 and r1 == r2 == 0) else model.find(int(a2), int(b2), (r1, r2))
                if found is not None and found[0] in number:
                    value = rotation[a2, a] * rotation[b2, b] * found[1]
                    action[number[found[0]], column] += -value if antiunitary else value
    return action
