"""Starting correlators that span the known states, then seeded random ones."""

from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from kondomf.meanfield.classical import classical_magnets, moment_channels
from kondomf.model import MeanFieldModel
from kondomf.model.lattice import FIRST
from kondomf.model.majorana import ELECTRON, SPINON, majorana

Array = NDArray[np.float64]

BOND = 0.5249
"""|<i chi0 chi0>| on a bond of the isotropic Kitaev model (Phys. Rev. Lett. 98, 247201 (2007)); 1 for <i chig chig>."""
ELECTRON_POLARISATION = 0.2
"""Largest correlator of the electrons of a magnet to start from."""
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


def magnet(model: MeanFieldModel, spins: Array) -> Array:
    """Product state of spins (sites, 3) in units of hbar; electrons weakly polarised by the field that these exert."""
    p = np.tensordot(moment_channels(model), spins, axes=2)
    field = np.where((model.species == ELECTRON).all(axis=1), model.v @ p, 0.0)
    largest = np.abs(field).max(initial=0.0)
    return np.asarray(p - ELECTRON_POLARISATION * field / largest if largest else p)


def noise(model: MeanFieldModel, rng: np.random.Generator, size: float) -> Array:
    """Random correlators on the interacting channels."""
    p = np.zeros(model.n_channels)
    p[model.active] = size * rng.standard_normal(len(model.active))
    return p


def standard_starts(model: MeanFieldModel) -> dict[str, Start]:
    """The starts by name: hybridized and decoupled spin liquids of every gauge copy, and the magnets of the cell.

    The order is that of a search, which may stop early: each kind once, the other copies, the other magnets. Magnets
    are named by their pattern (`classical.pattern_name`), lowest classical energy first.
    """
    magnets = [(name, magnet(model, spins)) for name, spins in classical_magnets(model).items()]
    liquids = [spin_liquid(model, copy) for copy in range(len(COPIES))]
    hybridized = hybridization(model, 0.7)
    copies = [(f"hybridized {shift}", liquid + hybridized) for shift, liquid in zip(COPIES, liquids, strict=True)]
    decoupled = [(f"decoupled {shift}", liquid) for shift, liquid in zip(COPIES, liquids, strict=True)]
    order = [decoupled[0], copies[0], *magnets[:1], *copies[1:], *magnets[1:], *decoupled[1:]]
    return {name: Start(name, p) for name, p in order}


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
