"""Majorana representation of a site: four spinon Majoranas chi^0..chi^3 and four electron Majoranas eta^0..eta^3.

All obey {gamma, gamma'} = 2 delta. Majorana number inside a magnetic cell: 8*site + 4*species + mu.
On sublattice B the electron phase is chosen c -> i c, which turns nearest-neighbour hopping into
-(t/2) sum_mu i eta^mu_A eta^mu_B and leaves the spin unchanged.
"""

import numpy as np
from numpy.typing import NDArray

SPINON, ELECTRON = 0, 1
PER_SITE = 8

Bilinear = list[tuple[float, int, int]]
"""A sum of coefficient * i gamma^mu gamma^nu inside one species of one site: (coefficient, mu, nu)."""

CYCLIC = ((1, 2, 3), (2, 3, 1), (3, 1, 2))


def majorana(site: int, species: int, mu: int) -> int:
    """Number of a Majorana inside the magnetic cell."""
    return PER_SITE * site + 4 * species + mu


def spin(form: str) -> list[Bilinear]:
    """S^x, S^y, S^z as bilinears. "so4": (i g0 ga - i gb gc)/4; "kitaev": i g0 ga / 2 (spinons only).

    The two differ by C^a/2, which vanishes on the physical space. The electron spin is always the so4 form.
    Source: Ann. Phys. 321, 2 (2006), "Anyons in an exactly solved model and beyond".
    """
    if form == "kitaev":
        return [[(0.5, 0, a)] for a, _, _ in CYCLIC]
    return [[(0.25, 0, a), (-0.25, b, c)] for a, b, c in CYCLIC]


CONSTRAINT: list[Bilinear] = [[(0.5, 0, a), (0.5, b, c)] for a, b, c in CYCLIC]
"""C^x, C^y, C^z = (i chi0 chia + i chib chic)/2, zero on the physical space."""
DENSITY: Bilinear = [(0.5, 0, 3), (0.5, 1, 2)]
"""n - 1 of the electrons of a site."""

_SPINOR = 0.5 * np.array([[1, 0, 0, 1j], [0, 1j, -1, 0]])


def spinor(sublattice: int) -> NDArray:
    """Rows c_up, c_down of a site as combinations of its four Majoranas, shape (2, 4)."""
    return _SPINOR * (1j if sublattice else 1.0)


def hopping_coefficients(matrix: NDArray, start: int, end: int) -> NDArray[np.float64]:
    """Coefficients of i gamma^mu_i gamma^nu_j, shape (4, 4), in sum c+_i matrix c_j + h.c. (i, j different sites).

    `matrix` is the (2, 2) spin matrix, `start` and `end` the sublattices of i and j. For i = j and a Hermitian
    matrix the upper triangle (mu < nu) holds the coefficients of sum c+_i matrix c_i, up to a constant.
    """
    return 2 * (spinor(start).conj().T @ matrix @ spinor(end)).imag
