"""Exact Fock space of a few Majoranas: what representation, decoupling and Gaussian states are checked against."""

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
import scipy.sparse as sp
from numpy.typing import NDArray

PAULI = np.array([[[0, 1], [1, 0]], [[0, -1j], [1j, 0]], [[1, 0], [0, -1]]])
_X, _Y, _Z = (sp.csr_array(sigma.astype(complex)) for sigma in PAULI)


def majoranas(count: int) -> list[sp.csr_array]:
    """`count` (even) Majorana operators on 2^(count/2) states by the Jordan-Wigner transformation."""
    modes = count // 2
    result = []
    for mode in range(modes):
        for own in (_X, _Y):
            operator = sp.csr_array(np.ones((1, 1), complex))
            for factor in [_Z] * mode + [own] + [sp.eye_array(2, format="csr")] * (modes - mode - 1):
                operator = sp.kron(operator, factor, format="csr")
            result.append(operator)
    return result


def quadratic(gamma: Sequence[sp.csr_array], coefficients: NDArray) -> NDArray:
    """sum_ab coefficients[a, b] i gamma_a gamma_b as a dense matrix."""
    return sum(coefficients[a, b] * 1j * (gamma[a] @ gamma[b]) for a, b in np.argwhere(coefficients)).toarray()


@dataclass(frozen=True)
class Gibbs:
    """exp(-H/T)/Z of a dense Hermitian matrix H."""

    energies: NDArray
    states: NDArray
    temperature: float

    @classmethod
    def of(cls, hamiltonian: NDArray, temperature: float) -> "Gibbs":
        return cls(*np.linalg.eigh(hamiltonian), temperature)

    @property
    def free_energy(self) -> float:
        low = self.energies.min()
        return float(low - self.temperature * np.log(np.exp(-(self.energies - low) / self.temperature).sum()))

    @property
    def weights(self) -> NDArray:
        return np.exp((self.free_energy - self.energies) / self.temperature)

    @property
    def entropy(self) -> float:
        return float((self.weights @ self.energies - self.free_energy) / self.temperature)

    def mean(self, operator: NDArray | sp.csr_array) -> complex:
        return complex(np.sum(self.states.conj() * (operator @ self.states), axis=0) @ self.weights)
