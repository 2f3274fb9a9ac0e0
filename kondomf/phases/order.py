"""Order parameters that do not depend on the gauge, from the correlators of a solution."""

from dataclasses import dataclass
from functools import cached_property
from typing import Any, Protocol

import numpy as np
from numpy.typing import NDArray

from kondomf.material import material_from_dict
from kondomf.meanfield.solution import moments
from kondomf.model import MeanFieldModel
from kondomf.model.build import exchange_matrix
from kondomf.model.lattice import FIRST
from kondomf.model.majorana import ELECTRON, SPINON, majorana, spin, spinor

Array = NDArray[np.float64]
HERE = (0, 0)
SINGLET = np.array([[0, 1], [-1, 0]])
"""i sigma_y."""
TRIPLET = np.array([[[-1, 0], [0, 1]], [[1j, 0], [0, 1j]], [[0, 1], [1, 0]]])
"""sigma_a i sigma_y for a = x, y, z."""


class State(Protocol):
    """What order parameters are read from: a solution, or a state on a branch."""

    @property
    def model(self) -> MeanFieldModel: ...
    @property
    def correlators(self) -> Array: ...
    @property
    def inputs(self) -> dict[str, Any]: ...


@dataclass(frozen=True)
class Order:
    """Order parameters of one state; every property is computed when asked for."""

    solution: State

    def block(self, one: tuple[int, int], other: tuple[int, int], r: tuple[int, int] = HERE) -> Array:
        """<i gamma^mu gamma^nu> between (site, species) at 0 and (site, species) at R, shape (4, 4)."""
        vectors = self.solution.model.lattice_vectors
        at, back = (np.flatnonzero((vectors == sign * np.array(r)).all(axis=1)) for sign in (1, -1))
        a, b = (slice(first, first + 4) for first in (majorana(*one, 0), majorana(*other, 0)))
        if len(at):
            return self.solution.correlators[at[0], a, b]
        return -self.solution.correlators[back[0], b, a].T  # the model may hold a bond from its other end only

    @property
    def sites(self) -> range:
        return range(self.solution.model.cell.n_sites)

    @cached_property
    def hybridization(self) -> Array:
        """Singular values of W = <i chi^mu eta^nu> of every site, descending, shape (sites, 4), between 0 and 1."""
        return np.array([np.linalg.svd(self.block((i, SPINON), (i, ELECTRON)), compute_uv=False) for i in self.sites])

    @cached_property
    def bond_hybridization(self) -> float:
        """Largest singular value of <i chi^mu eta^nu> between a spin and the electrons of a first neighbour."""
        ends = [
            end
            for i, j, r, _ in self.bonds
            for end in (((i, SPINON), (j, ELECTRON), r), ((i, ELECTRON), (j, SPINON), r))
        ]
        return float(max(np.linalg.norm(self.block(*end), 2) for end in ends))

    @property
    def largest_hybridization(self) -> float:
        """Largest singular value of the hybridization on sites and first-neighbour bonds: zero means decoupled."""
        return max(float(self.hybridization.max()), self.bond_hybridization)

    @cached_property
    def spin_moment(self) -> Array:
        """<S> of every site along the spin axes, (sites, 3), in units of hbar."""
        return moments(self.solution.model, self.solution.correlators, SPINON)

    @cached_property
    def electron_moment(self) -> Array:
        """<s> of the conduction electrons of every site, (sites, 3), in units of hbar."""
        return moments(self.solution.model, self.solution.correlators, ELECTRON)

    @cached_property
    def density(self) -> Array:
        """Conduction electrons of every site, (sites,)."""
        blocks = [self.block((i, ELECTRON), (i, ELECTRON)) for i in self.sites]
        return np.array([1 + (g[0, 3] + g[1, 2]) / 2 for g in blocks])

    @cached_property
    def bonds(self) -> list[tuple[int, int, tuple[int, int], int]]:
        """First-neighbour bonds (site i, site j, R, type)."""
        return self.solution.model.cell.bonds(FIRST)

    @cached_property
    def bond_energies(self) -> dict[str, list[float]]:
        """Exchange energy <S_i M S_j> of every first-neighbour bond in meV, by bond type."""
        material = material_from_dict(self.solution.inputs)
        layer, form = material.spin_layer, spin(material.mean_field.exchange_form)
        result: dict[str, list[float]] = {"x": [], "y": [], "z": []}
        for i, j, r, kind in self.bonds:
            m = exchange_matrix(
                kind, layer.heisenberg_meV, layer.kitaev_meV[kind], layer.gamma_meV, layer.gamma_prime_meV
            )
            result["xyz"[kind]].append(self._spin_product(m, form, i, j, r, material.mean_field.magnetic_channel))
        return result

    def _spin_product(self, m: Array, form: list, i: int, j: int, r: tuple[int, int], magnetic: bool) -> float:
        """Wick sum of S_i M S_j, without its first product when the magnetic channel is off."""
        here, there = self.block((i, SPINON), (i, SPINON)), self.block((j, SPINON), (j, SPINON))
        across = self.block((i, SPINON), (j, SPINON), r)
        total = 0.0
        for alpha, beta in np.argwhere(m):
            for x, a, b in form[alpha]:
                for y, c, d in form[beta]:
                    wick = across[a, d] * across[b, c] - across[a, c] * across[b, d]
                    total += m[alpha, beta] * x * y * (wick + magnetic * here[a, b] * there[c, d])
        return float(total)

    @cached_property
    def spinon_bonds(self) -> Array:
        """Largest |<i chi^mu chi^nu>| of every first-neighbour bond, (bonds,)."""
        return np.array([np.abs(self.block((i, SPINON), (j, SPINON), r)).max() for i, j, r, _ in self.bonds])

    @property
    def spinon_bond(self) -> float:
        """The largest of `spinon_bonds`."""
        return float(self.spinon_bonds.max())

    @cached_property
    def pairing(self) -> tuple[float, float]:
        """Largest |psi| and |d| of <c c> = (psi + d.sigma) i sigma_y over sites and first-neighbour bonds."""
        pairs = [(i, i, HERE) for i in self.sites] + [(i, j, r) for i, j, r, _ in self.bonds]
        singlet = triplet = 0.0
        for i, j, r in pairs:
            psi, d = self.pair_amplitudes(i, j, r)
            singlet, triplet = max(singlet, abs(psi)), max(triplet, float(np.linalg.norm(d)))
        return singlet, triplet

    def pair_amplitudes(self, i: int, j: int, r: tuple[int, int]) -> tuple[complex, NDArray]:
        """psi and d (3,) of <c_i c_j> = (psi + d.sigma) i sigma_y between two sites."""
        amplitude = self._electron_pairs(i, j, r)
        return complex(np.sum(SINGLET * amplitude) / 2), np.array([np.sum(t.conj() * amplitude) / 2 for t in TRIPLET])

    def _electron_pairs(self, i: int, j: int, r: tuple[int, int]) -> NDArray:
        """<c_i sigma c_j sigma'>, (2, 2); <eta eta> = delta - i <i eta eta>, and the delta drops out of <c c>."""
        return spinor(i % 2) @ (-1j * self.block((i, ELECTRON), (j, ELECTRON), r)) @ spinor(j % 2).T

    @cached_property
    def normal_amplitude(self) -> float:
        """Largest |<c+ c>| on a first-neighbour bond, the measure for pairing."""
        sizes = []
        for i, j, r, _ in self.bonds:
            block = -1j * self.block((i, ELECTRON), (j, ELECTRON), r)
            sizes.append(np.abs(spinor(i % 2).conj() @ block @ spinor(j % 2).T).max())
        return float(max(sizes))

    @cached_property
    def nematicity(self) -> float:
        """Spread of the bond energies between the bond types over their sum, 0 when C3 is kept by isotropic bonds."""
        means = np.array([np.mean(energies) for energies in self.bond_energies.values()])
        return float(np.ptp(means) / max(np.abs(means).sum(), 1e-12))
