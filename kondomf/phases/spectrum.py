"""Quasiparticle bands, gap and density of states of a solution.

H_MF = (1/4) sum_k gamma+ h(k) gamma has the quasiparticle energies e_n(k); they come in pairs e(k), -e(-k).
"""

from dataclasses import dataclass
from itertools import pairwise

import numpy as np
from numpy.typing import NDArray
from scipy.optimize import minimize

from kondomf.meanfield import Solution
from kondomf.meanfield.evaluate import bloch_matrix
from kondomf.model.majorana import PER_SITE, spinor

Array = NDArray[np.float64]


@dataclass(frozen=True)
class Bands:
    """Energies in meV and weights along a list of wave vectors.

    energy : (Nk, n) quasiparticle energies, ascending, both signs.
    conduction : (Nk, n) part of the state on the conduction layer, 0 to 1.
    particle : (Nk, n) weight |<c|n>|^2 summed over sites and spins: what an electron removed or added sees.
    """

    energy: Array
    conduction: Array
    particle: Array


def bands(solution: Solution, k: Array) -> Bands:
    """Bands at wave vectors k (Nk, 2) in units of the reciprocal vectors of the magnetic cell."""
    model = solution.model
    phases = model.phases(np.asarray(k))
    energy, u = np.linalg.eigh(bloch_matrix(model, solution.phi, phases))
    electrons = np.arange(model.n_majorana) % PER_SITE >= 4
    conduction = (np.abs(u[:, electrons]) ** 2).sum(axis=1)
    particle = np.zeros_like(energy)
    for site in range(model.cell.n_sites):
        rows = np.sqrt(2) * spinor(site % 2) @ u[:, 8 * site + 4 : 8 * site + 8]
        particle += (np.abs(rows) ** 2).sum(axis=1)
    return Bands(energy, conduction, particle)


CORNERS = {"Γ": (0.0, 0.0), "K": (1 / 3, 2 / 3), "M": (1 / 2, 1 / 2)}
"""High-symmetry points of the primitive cell in units of b1, b2; b1 and b2 enclose 120 degrees."""


def path(solution: Solution, points: int) -> tuple[Array, Array, list[float]]:
    """Path Γ-K-M-Γ of the primitive zone: wave vectors (Nk, 2) of the magnetic cell, distances and corners in 1/a.

    `points` is the number along the whole path; segments share it by length.
    """
    reciprocal = 2 * np.pi * np.linalg.inv(np.array([[1.0, 0.0], [0.5, np.sqrt(3) / 2]])).T
    corners = [np.array(CORNERS[name]) for name in ("Γ", "K", "M", "Γ")]
    lengths = [float(np.linalg.norm((b - a) @ reciprocal)) for a, b in pairwise(corners)]
    k, distance, start = [], [], 0.0
    for (a, b), length in zip(pairwise(corners), lengths, strict=True):
        s = np.linspace(0, 1, max(2, round(points * length / sum(lengths))), endpoint=False)
        k.append(a + s[:, None] * (b - a))
        distance.append(start + s * length)
        start += length
    primitive = np.vstack([*k, corners[-1]])
    magnetic = primitive @ np.array(solution.model.cell.matrix).T
    return magnetic, np.append(np.concatenate(distance), start), [0.0, *np.cumsum(lengths)]


@dataclass(frozen=True)
class Gap:
    """Smallest |e| in meV over the zone; of each layer too where no hybridization joins them (else the same)."""

    total: float
    electrons: float
    spinons: float


def gap(solution: Solution, points: int = 36) -> Gap:
    """Gap on a grid that holds Γ, M and K, then by a simplex search from its lowest places.

    The spinons' counts every spinon excitation: in the Kitaev limit the itinerant ones and those of the bonds.
    """
    model = solution.model
    if np.abs(solution.p[model.hybridization]).max(initial=0.0) > 1e-6:
        total = _smallest(solution, np.arange(model.n_majorana), points)
        return Gap(total, total, total)
    electron = np.arange(model.n_majorana) % PER_SITE >= 4
    layers = [_smallest(solution, np.flatnonzero(rows), points) for rows in (electron, ~electron)]
    return Gap(min(layers), *layers)


def _smallest(solution: Solution, rows: NDArray[np.int64], points: int) -> float:
    """Smallest |e| in meV of the block of h(k) that belongs to the Majoranas `rows`."""
    model = solution.model

    def lowest(k: Array) -> Array:
        phases = model.phases(np.atleast_2d(k))
        block = bloch_matrix(model, solution.phi, phases)[:, rows[:, None], rows]
        return np.abs(np.linalg.eigvalsh(block)).min(axis=1)

    axis = np.arange(points) / points
    k = np.stack(np.meshgrid(axis, axis, indexing="ij"), axis=-1).reshape(-1, 2)
    size = lowest(k)
    best = float(size.min())
    for index in np.argsort(size)[:4]:
        if best > 1e-9 * model.scale:
            simplex = k[index] + np.array([[0, 0], [1, 0], [0, 1]]) / (2 * points)
            result = minimize(
                lambda q: lowest(q)[0], k[index], method="Nelder-Mead", options={"initial_simplex": simplex}
            )
            best = min(best, float(result.fun))
    return best


def density_of_states(solution: Solution, energy: Array, points: int, width: float) -> tuple[Array, Array]:
    """Density of states per cell and meV at `energy` (Ne,) in meV: (electrons, spinons), Gaussian of `width` meV.

    The electrons' is the tunnelling density: states weighted with |<c|n>|^2, both spins. The spinons' counts Majorana
    states, half of them per energy sign. `points` is the number of wave vectors per direction.
    """
    axis = (np.arange(points) + 0.5) / points
    electrons, spinons = np.zeros_like(energy), np.zeros_like(energy)
    for k1 in axis:
        found = bands(solution, np.stack([np.full(points, k1), axis], axis=1))
        x = (energy[:, None] - found.energy.ravel()) / width
        kernel = np.exp(-(x**2) / 2) / (width * np.sqrt(2 * np.pi))
        electrons += kernel @ found.particle.ravel()
        spinons += kernel @ (1 - found.conduction).ravel()
    cells = solution.model.cell.size * points**2
    return electrons / cells, spinons / cells / 2
