"""Starting correlators that span the known states, then seeded random ones."""

from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from kondomf.model import MeanFieldModel
from kondomf.model.lattice import FIRST
from kondomf.model.majorana import CYCLIC, ELECTRON, SPINON, majorana

Array = NDArray[np.float64]

BOND = 0.5249
"""|<i chi0 chi0>| on a bond of the isotropic Kitaev model (Phys. Rev. Lett. 98, 247201 (2007)); 1 for <i chig chig>."""
COPIES = ("0", "M1", "M2", "M3")


@dataclass(frozen=True)
class Start:
    """A named set of correlators (N,); the first fields are h + V P."""

    name: str
    p: Array

    def fields(self, model: MeanFieldModel) -> Array:
        return model.h + model.v @ self.p


def carried_over(model: MeanFieldModel, name: str, table: NDArray[np.int64], p: Array) -> Start:
    """Start from the correlators p (N',) of another model of the same cell, given its channel table (N', 4).

    Channels that only one of the models holds (a coupling that vanishes in the other) are dropped or start at zero.
    """
    start = np.zeros(model.n_channels)
    for (a, b, r1, r2), value in zip(table.tolist(), p, strict=True):
        _set(model, start, a, b, (r1, r2), value)
    return Start(name, start)


def spin_liquid(model: MeanFieldModel, copy: int = 0) -> Array:
    """Correlators of the decoupled spin liquid in one of its four gauge copies, and of hopping electrons."""
    p = np.zeros(model.n_channels)
    for i, j, r, kind in model.cell.bonds(FIRST):
        for mu, value in ((0, -BOND), (kind + 1, 1.0)):
            _set(model, p, majorana(i, SPINON, mu), majorana(j, SPINON, mu), r, value)
        bond = _product_sign(model, i, j, r, kind)
        _set(model, p, majorana(i, SPINON, kind + 1), majorana(j, SPINON, kind + 1), r, bond)
    return model.gauge_signs[copy] * p


def _product_sign(model: MeanFieldModel, i: int, j: int, r: tuple[int, int], kind: int) -> float:
    """Sign of <i chig chig> that lowers the energy for <i chi0 chi0> < 0."""
    one = model.find(majorana(i, SPINON, 0), majorana(j, SPINON, 0), r)
    two = model.find(majorana(i, SPINON, kind + 1), majorana(j, SPINON, kind + 1), r)
    if one is None or two is None:
        return 0.0
    return float(np.sign(model.v[one[0], two[0]] * one[1] * two[1])) or 1.0


def hybridization(model: MeanFieldModel, amplitude: float) -> Array:
    """Uniform <i chi^mu eta^mu> on every site, of opposite sign on the two sublattices."""
    p = np.zeros(model.n_channels)
    for site in range(model.cell.n_sites):
        for mu in range(4):
            value = amplitude if site % 2 == 0 else -amplitude
            _set(model, p, majorana(site, SPINON, mu), majorana(site, ELECTRON, mu), (0, 0), value)
    return p


def magnet(model: MeanFieldModel, direction: Array, staggered: bool) -> Array:
    """Spins polarised along `direction` (3,), uniform or alternating, the electrons weakly against them."""
    p = np.zeros(model.n_channels)
    for site in range(model.cell.n_sites):
        sign = -1.0 if staggered and site % 2 else 1.0
        for species, size in ((SPINON, 1.0), (ELECTRON, -0.2)):
            for (a, b, c), s in zip(CYCLIC, direction, strict=True):
                _set(model, p, majorana(site, species, 0), majorana(site, species, a), (0, 0), size * sign * s)
                _set(model, p, majorana(site, species, b), majorana(site, species, c), (0, 0), -size * sign * s)
    return p


def noise(model: MeanFieldModel, rng: np.random.Generator, size: float) -> Array:
    """Random correlators on the interacting channels."""
    p = np.zeros(model.n_channels)
    p[model.active] = size * rng.standard_normal(len(model.active))
    return p


def standard_starts(model: MeanFieldModel) -> dict[str, Start]:
    """The starts by name: hybridized and decoupled spin liquids of every gauge copy, and magnets."""
    diagonal, z = np.ones(3) / np.sqrt(3), np.array([0.0, 0.0, 1.0])
    states = {}
    for copy, shift in enumerate(COPIES):
        states[f"decoupled {shift}"] = spin_liquid(model, copy)
        states[f"hybridized {shift}"] = spin_liquid(model, copy) + hybridization(model, 0.7)
        if copy == 0:
            states["antiferromagnet 111"] = magnet(model, diagonal, staggered=True)
            states["ferromagnet z"] = magnet(model, z, staggered=False)
    return {name: Start(name, p) for name, p in states.items()}


def starts(model: MeanFieldModel, count: int, seed: int, *, hybridized_only: bool = False) -> Iterator[Start]:
    """The first `count` starts of a search: the standard ones in turn, then random ones.

    A decoupled state is started once, since its certificate covers all its gauge copies. The other standard starts
    carry a small seeded noise, so that none sits on a symmetric saddle.
    """
    rng = np.random.default_rng(seed)
    known = [
        start
        for name, start in standard_starts(model).items()
        if name.startswith("hybridized") or (not hybridized_only and name not in [f"decoupled {m}" for m in COPIES[1:]])
    ]
    for index in range(count):
        if index < len(known):
            name, p = known[index].name, known[index].p
            yield Start(name, p if name.startswith("decoupled") else p + noise(model, rng, 0.02))
        else:
            yield Start(f"random {index - len(known) + 1}", noise(model, rng, 0.5))


def _set(model: MeanFieldModel, p: Array, a: int, b: int, r: tuple[int, int], value: float) -> None:
    """Set <i gamma_a(0) gamma_b(R)> where the model has that channel."""
    found = model.find(a, b, r) if max(a, b) < model.n_majorana else None
    if found is not None:
        p[found[0]] = found[1] * value
