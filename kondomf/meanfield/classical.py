"""Classical magnets: product states of the spins of a cell, their energy, its minima and the names of the patterns.

A product state has <S_i^a S_j^b> = <S_i^a><S_j^b> between sites, and no bond correlators of the spinons. Its energy is
read off the quadratic form of the mean-field model, so it holds whatever exchange the model holds.
"""

from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from kondomf.model import MagneticCell, MeanFieldModel
from kondomf.model.lattice import FIRST, M_POINTS, SECOND
from kondomf.model.majorana import CYCLIC, SPINON, majorana

Array = NDArray[np.float64]

SPIN = 0.5
"""Length of a spin, in units of hbar."""
SEEDS = 24
"""Random configurations from which the minima of the classical energy are sought."""
MOST_SWEEPS = 1000
STATIONARY = 1e-6
"""Change of a spin in one sweep below which a relaxation is done."""
SAME_PRODUCTS = 1e-2
"""Scalar products of two spins that differ by less count as equal: relaxations along flat valleys end early."""
DEGENERATE = 1e-6
"""Classical energies that differ by less, in units of the largest coupling, count as equal."""
ALIGNED = 0.8
"""Mean cosine between neighbours from which a bond type counts as parallel, and below minus which as antiparallel."""
SPREAD = 0.1
"""Largest deviation of the mean cosine of a second-neighbour bond type from -1/2 in a 120-degree pattern."""
UNIFORM = 0.1
"""Share of the moments that must survive in their sum for a canted pattern."""

FERROMAGNET = "ferromagnet"
NEEL = "Neel antiferromagnet"
ZIGZAG = "zigzag antiferromagnet"
STRIPY = "stripy antiferromagnet"
TRIANGULAR = "120-degree antiferromagnet"
NONCOLLINEAR = "noncollinear magnet"


def moment_channels(model: MeanFieldModel) -> Array:
    """Correlators P = A s of spins s: A (N, sites, 3) with <i chi^0 chi^a> = 2 s^a = -<i chi^b chi^c> on every site.

    This holds in either spin form, obeys the constraint, and for |s| = 1/2 is a pure state.
    """
    result = np.zeros((model.n_channels, model.cell.n_sites, 3))
    for site in range(model.cell.n_sites):
        for axis, (a, b, c) in enumerate(CYCLIC):
            for mu, nu, value in ((0, a, 2.0), (b, c, -2.0)):
                found = model.find(majorana(site, SPINON, mu), majorana(site, SPINON, nu), (0, 0))
                if found is not None:
                    result[found[0], site, axis] = found[1] * value
    return result


@dataclass(frozen=True)
class ClassicalEnergy:
    """E(s) = b.s + s.q.s/2 per magnetic cell of spins s (sites, 3) in units of hbar; b (sites, 3), q twice that, meV.

    With the magnetic channel switched off q vanishes, as the first product of the Wick sum does.
    """

    b: Array
    q: Array

    @classmethod
    def of(cls, model: MeanFieldModel) -> "ClassicalEnergy":
        a = moment_channels(model)
        flat = a.reshape(len(a), -1)
        return cls((flat.T @ model.h).reshape(a.shape[1:]), (flat.T @ model.v @ flat).reshape(2 * a.shape[1:]))

    @property
    def scale(self) -> float:
        """Largest coupling, meV."""
        return float(max(np.abs(self.q).max(), np.abs(self.b).max()))

    def __call__(self, spins: Array) -> Array:
        """Energies (...) in meV per magnetic cell of configurations (..., sites, 3)."""
        quadratic = np.tensordot(spins, self.q, axes=2) / 2
        return np.asarray(((self.b + quadratic) * spins).sum(axis=(-2, -1)))

    def relaxed(self, spins: Array) -> Array:
        """Configurations (n, sites, 3) after turning spin by spin against its local field until none moves.

        E never rises: a spin that couples to its own images in neighbouring cells is turned along the field of its
        energy less the largest eigenvalue of that coupling, which is concave and on |s| = 1/2 differs by a constant.
        """
        spins = spins.copy()
        own = [np.linalg.eigvalsh(self.q[i, :, i]).max() for i in range(len(self.b))]
        for _ in range(MOST_SWEEPS):
            before = spins.copy()
            for i, shift in enumerate(own):
                field = self.b[i] + np.tensordot(spins, self.q[i], axes=((1, 2), (1, 2))) - shift * spins[:, i]
                size = np.linalg.norm(field, axis=1, keepdims=True)
                free = size <= 1e-12 * self.scale
                spins[:, i] = np.where(free, spins[:, i], -SPIN * field / np.where(free, 1.0, size))
            if np.abs(spins - before).max() < STATIONARY:
                break
        return spins

    def lowest(self, seed: int = 0) -> list[Array]:
        """Distinct minima (sites, 3), lowest first, from seeded random configurations.

        Two of equal energy are the same when their scalar products are, in whatever order: this leaves out lattice
        symmetries and rotations or reversal of all spins.
        """
        found = self.relaxed(random_spins(np.random.default_rng(seed), SEEDS, len(self.b)))
        energies = self(found)
        result: list[tuple[float, Array, Array]] = []
        for k in np.argsort(energies, kind="stable"):
            products = np.sort((found[k] @ found[k].T).ravel())
            near = [p for e, p, _ in result if abs(e - energies[k]) <= DEGENERATE * self.scale]
            if not any(np.abs(products - p).max() < SAME_PRODUCTS for p in near):
                result.append((float(energies[k]), products, found[k]))
        return [spins for _, _, spins in result]

    def along_best_axis(self, signs: Array) -> Array:
        """The collinear configuration s_i = signs_i n/2 (sites, 3) with the axis n of lowest energy, z where it may."""
        b = signs @ self.b
        q = np.einsum("i,iajb,j->ab", signs, self.q, signs)
        axes = np.concatenate([[[[0.0, 0.0, SPIN]]], random_spins(np.random.default_rng(0), 4, 1)])
        common = ClassicalEnergy(b[None], q[None, :, None])
        axes = common.relaxed(axes)
        energies = common(axes)
        best = int(np.flatnonzero(energies <= energies.min() + DEGENERATE * self.scale)[0])
        return np.asarray(signs[:, None] * axes[best])


def random_spins(rng: np.random.Generator, count: int, sites: int) -> Array:
    """Spins of length 1/2 in random directions, (count, sites, 3)."""
    vectors = rng.standard_normal((count, sites, 3))
    return np.asarray(SPIN * vectors / np.linalg.norm(vectors, axis=-1, keepdims=True))


def collinear_patterns(cell: MagneticCell) -> Iterator[tuple[str, Array]]:
    """Name and signs (sites,) of the collinear patterns that repeat with the cell.

    Zigzag and stripy order have one of the wave vectors M1, M2, M3, that is one odd bond type, each.
    """
    sublattice = (-1.0) ** np.arange(cell.n_sites)
    for m in M_POINTS:
        if cell.holds(m):
            for signs in (cell.signs(m), cell.signs(m) * sublattice):
                yield pattern_name(cell, signs[:, None] * [0.0, 0.0, 1.0]), signs


def classical_magnets(model: MeanFieldModel) -> dict[str, Array]:
    """Spins (sites, 3) of the magnets that the cell can hold by name, lowest classical energy first.

    Every collinear pattern is there with its best odd bond and axis, whatever its energy: the electrons mediate an
    exchange that the classical energy does not know. Others are there where they lie lower than all of these. Empty
    when the magnetic channel is off.
    """
    if not (model.v @ moment_channels(model).reshape(model.n_channels, -1)).any():
        return {}
    energy = ClassicalEnergy.of(model)
    states = [(name, energy.along_best_axis(signs)) for name, signs in collinear_patterns(model.cell)]
    bound = min(float(energy(spins)) for _, spins in states) - DEGENERATE * energy.scale
    states += [(pattern_name(model.cell, s), s) for s in energy.lowest() if energy(s) < bound]
    result: dict[str, Array] = {}
    for name, spins in sorted(states, key=lambda state: float(energy(state[1]))):
        result.setdefault(name, spins)
    return result


def pattern_name(cell: MagneticCell, moments: Array) -> str:
    """Name of the pattern of moments (sites, 3), of any sizes, from the mean cosines on the bonds of each type.

    First neighbours: all parallel, a ferromagnet; none, Neel; two bond types of three, zigzag; one, stripy. Second
    neighbours at -1/2: 120-degree order. A pattern that appears once the uniform part is taken out is canted.
    Source of the collinear names: Phys. Rev. Lett. 110, 097204 (2013), "Zigzag magnetic order in the iridium oxide
    Na2IrO3".
    """
    name = _plain_name(cell, moments)
    mean = moments.mean(axis=0)
    if name == NONCOLLINEAR and np.linalg.norm(mean) > UNIFORM * np.linalg.norm(moments, axis=1).mean():
        rest = _plain_name(cell, moments - mean)
        return "canted magnet" if rest == NONCOLLINEAR else f"canted {rest}"
    return name


def _plain_name(cell: MagneticCell, moments: Array) -> str:
    first = _cosines(cell, moments, FIRST)
    if (np.abs(first) > ALIGNED).all():
        return (NEEL, STRIPY, ZIGZAG, FERROMAGNET)[int((first > 0).sum())]
    second = _cosines(cell, moments, SECOND)
    return TRIANGULAR if (np.abs(second + 0.5) < SPREAD).all() else NONCOLLINEAR


def _cosines(cell: MagneticCell, moments: Array, kinds: tuple) -> Array:
    """Mean cosine (3,) between the moments of the bonds of each type, weighted by their sizes."""
    products, sizes = np.zeros(3), np.zeros(3)
    length = np.linalg.norm(moments, axis=1)
    for i, j, _, kind in cell.bonds(kinds):
        products[kind] += moments[i] @ moments[j]
        sizes[kind] += length[i] * length[j]
    return products / np.maximum(sizes, 1e-300)
