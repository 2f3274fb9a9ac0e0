"""The honeycomb lattice, its neighbour bonds, and magnetic cells built from it.

Cell vectors a1, a2 at 60 degrees; sites A and B in every primitive cell. From the A site of cell 0 the bonded
B site lies in cell 0 (z bond), -a1 (x bond), -a2 (y bond).
"""

from dataclasses import dataclass
from functools import cached_property

import numpy as np
from numpy.typing import NDArray

X, Y, Z = 0, 1, 2
A, B = 0, 1


@dataclass(frozen=True)
class Bond:
    """A bond from sublattice `start` in cell 0 to sublattice `end` in the primitive cell `cell`, of type x, y or z."""

    start: int
    end: int
    cell: tuple[int, int]
    type: int


FIRST = (Bond(A, B, (-1, 0), X), Bond(A, B, (0, -1), Y), Bond(A, B, (0, 0), Z))
# A second-neighbour bond joins two first-neighbour bonds of unlike type and carries the remaining type.
SECOND = tuple(Bond(s, s, cell, kind) for s in (A, B) for cell, kind in (((0, 1), X), ((1, 0), Y), ((-1, 1), Z)))
# Across the hexagon, opposite to the first-neighbour bond of the same type.
THIRD = (Bond(A, B, (1, -1), X), Bond(A, B, (-1, 1), Y), Bond(A, B, (-1, -1), Z))

M_POINTS = ((0, 0), (1, 0), (0, 1), (1, 1))
"""0, M1, M2, M3 in units of half reciprocal vectors: such a wave has the sign (-1)^(m.r) in the primitive cell r."""

NORMAL = np.ones(3) / np.sqrt(3.0)
"""Normal of the layer in spin axes (the cubic axes of the edge-shared octahedra)."""
BOND_DIRECTION = np.array([[0.0, 1.0, -1.0], [-1.0, 0.0, 1.0], [1.0, -1.0, 0.0]]) / np.sqrt(2.0)
"""Unit vectors A to B of the x, y, z bonds in spin axes; turned by 120 degrees about the normal as on the lattice."""

CELL_VECTORS = np.array([[1.0, 0.0], [0.5, np.sqrt(3.0) / 2]])
"""a1 and a2 (rows) in units of the lattice constant, in the plane."""
B_SITE = CELL_VECTORS.sum(axis=0) / 3
"""Position of the B site relative to the A site of its cell, in units of the lattice constant."""


@dataclass(frozen=True)
class MagneticCell:
    """A cell whose vectors are the rows of the integer matrix `matrix` times (a1, a2).

    Sites are numbered 2*i + sublattice with i the primitive cell inside the magnetic cell.

    Raises ValueError if the matrix is singular.
    """

    matrix: tuple[tuple[int, int], tuple[int, int]]

    @cached_property
    def size(self) -> int:
        """Number of primitive cells inside."""
        (a, b), (c, d) = self.matrix
        if a * d == b * c:
            raise ValueError(f"singular cell {self.matrix}")
        return abs(a * d - b * c)

    @property
    def n_sites(self) -> int:
        return 2 * self.size

    @cached_property
    def offsets(self) -> tuple[tuple[int, int], ...]:
        """Primitive cells inside the magnetic cell, in units of (a1, a2), ordered lexicographically."""
        reach = range(-2 * self.size - 2, 2 * self.size + 3)
        found = {self._reduce((i, j))[0] for i in reach for j in reach}
        return tuple(sorted(found))

    def _reduce(self, cell: tuple[int, int]) -> tuple[tuple[int, int], tuple[int, int]]:
        """Split a primitive cell into its representative and a magnetic lattice vector, in exact integers."""
        (a, b), (c, d) = self.matrix
        determinant = a * d - b * c
        i, j = cell
        n1 = (i * d - j * c) // determinant
        n2 = (j * a - i * b) // determinant
        return (i - n1 * a - n2 * c, j - n1 * b - n2 * d), (n1, n2)

    @property
    def is_threefold(self) -> bool:
        """True if a rotation by 120 degrees, a1 -> a2 - a1, a2 -> -a1, maps the magnetic lattice on itself."""
        turned = np.asarray(self.matrix) @ [[-1, 1], [-1, 0]]
        return all(self._reduce((int(i), int(j)))[0] == (0, 0) for i, j in turned)

    def holds(self, m: tuple[int, int]) -> bool:
        """True if the signs (-1)^(m.r) repeat with this cell."""
        return not (np.asarray(self.matrix) @ m % 2).any()

    def signs(self, m: tuple[int, int]) -> NDArray[np.float64]:
        """Sign (-1)^(m.r) of the primitive cell r of every site, (sites,)."""
        return np.repeat((-1.0) ** (np.asarray(self.offsets) @ m), 2)

    def locate(self, cell: tuple[int, int], sublattice: int) -> tuple[int, tuple[int, int]]:
        """Site number and magnetic lattice vector R of a site given by its primitive cell."""
        representative, vector = self._reduce(cell)
        return 2 * self.offsets.index(representative) + sublattice, vector

    def bonds(self, kinds: tuple[Bond, ...]) -> list[tuple[int, int, tuple[int, int], int]]:
        """All bonds of the given kinds that start in the cell: (site i, site j, R of j, type)."""
        result = []
        for index, (o1, o2) in enumerate(self.offsets):
            for bond in kinds:
                j, vector = self.locate((o1 + bond.cell[0], o2 + bond.cell[1]), bond.end)
                result.append((2 * index + bond.start, j, vector, bond.type))
        return result

    def primitive_cell(self, site: int, vector: NDArray[np.int_]) -> NDArray[np.int_]:
        """Primitive cell of `site` in the magnetic cell at lattice vector(s) `vector` (..., 2)."""
        return np.asarray(self.offsets[site // 2]) + np.asarray(vector) @ np.asarray(self.matrix)
