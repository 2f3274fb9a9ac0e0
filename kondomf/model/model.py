"""The mean-field problem as data: channels, one-body fields, quadratic form, constraints."""

from dataclasses import dataclass
from functools import cached_property

import numpy as np
from numpy.typing import NDArray

from kondomf.model.lattice import M_POINTS, MagneticCell
from kondomf.model.majorana import PER_SITE
from kondomf.model.terms import canonical

Array = NDArray[np.float64]


@dataclass(frozen=True)
class MeanFieldModel:
    """H = sum_p h_p O_p + quartic terms, with O_p = i gamma_a(0) gamma_b(R) and E_int = P.V.P/2 per magnetic cell.

    Attributes
    ----------
    cell : the magnetic cell.
    table : (N, 4) integers, the channels as a, b, R1, R2.
    h : (N,) one-body fields, meV.
    v : (N, N) symmetric quadratic form, meV.
    c : (M, N) constraints; C P = target.
    target : (M,) values of the constrained quantities, per magnetic cell.
    constraint_names : M names; the first is the density.
    temperature : k_B T, meV.
    """

    cell: MagneticCell
    table: NDArray[np.int64]
    h: Array
    v: Array
    c: Array
    target: Array
    constraint_names: tuple[str, ...]
    temperature: float

    @property
    def n_channels(self) -> int:
        return len(self.h)

    @property
    def n_majorana(self) -> int:
        return PER_SITE * self.cell.n_sites

    @cached_property
    def lattice_vectors(self) -> NDArray[np.int64]:
        """The distinct R of the channels, (NR, 2)."""
        return np.unique(self.table[:, 2:], axis=0)

    def phases(self, k: Array) -> NDArray[np.complex128]:
        """e^(ik.R) of `lattice_vectors` at wave vectors k (Nk, 2) in units of the reciprocal vectors, (Nk, NR)."""
        return np.asarray(np.exp(2j * np.pi * (k @ self.lattice_vectors.T)))

    @cached_property
    def position(self) -> tuple[NDArray, NDArray, NDArray]:
        """Per channel: index of its R in `lattice_vectors`, a, b. Index of the channel in an (NR, n, n) array."""
        index = {tuple(r): i for i, r in enumerate(self.lattice_vectors)}
        return np.array([index[tuple(r)] for r in self.table[:, 2:]]), self.table[:, 0], self.table[:, 1]

    @cached_property
    def active(self) -> NDArray[np.int64]:
        """Channels whose field can differ from h: those with interaction or in a constraint."""
        return np.flatnonzero(self.v.any(axis=1) | self.c.any(axis=0))

    @cached_property
    def constrained(self) -> NDArray[np.int64]:
        """Channels that enter a constraint."""
        return np.flatnonzero(self.c.any(axis=0))

    @cached_property
    def species(self) -> NDArray[np.int64]:
        """Species (0 spinon, 1 electron) of both Majoranas of every channel, (N, 2)."""
        return (self.table[:, :2] % PER_SITE) // 4

    @cached_property
    def hybridization(self) -> NDArray[np.bool_]:
        """True for channels that join a spinon and an electron Majorana, (N,)."""
        return self.species[:, 0] != self.species[:, 1]

    @cached_property
    def onsite(self) -> NDArray[np.bool_]:
        """True for channels that join two Majoranas of one site, (N,)."""
        same = self.table[:, 0] // PER_SITE == self.table[:, 1] // PER_SITE
        return np.asarray(same & (self.table[:, 2:] == 0).all(axis=1))

    @cached_property
    def scale(self) -> float:
        """Largest coupling, meV: the unit of relative tolerances."""
        return float(max(np.abs(self.h).max(initial=0.0), np.abs(self.v).max(initial=0.0), self.temperature))

    @cached_property
    def gauge_signs(self) -> Array:
        """Signs (4, N) that turn a decoupled state into its gauge copies: spinon momentum shifted by 0, M1, M2, M3.

        A spinon bilinear between primitive cells r and r' gets (-1)^(m.(r' - r)).
        """
        signs = np.ones((4, self.n_channels))
        spinons = np.flatnonzero((self.species == 0).all(axis=1))
        for p in spinons:
            a, b, r1, r2 = (int(x) for x in self.table[p])
            start = self.cell.primitive_cell(a // PER_SITE, np.zeros(2, int))
            shift = self.cell.primitive_cell(b // PER_SITE, np.array([r1, r2])) - start
            signs[:, p] = [1 - 2 * ((m1 * shift[0] + m2 * shift[1]) % 2) for m1, m2 in M_POINTS]
        return signs

    @cached_property
    def distinct_copies(self) -> tuple[int, ...]:
        """Rows of `gauge_signs` that no gauge transformation of this cell turns into each other, the first being 0.

        Where the signs (-1)^(m.r) of the sites repeat with the cell, they are such a transformation: a decoupled state
        and its copy then have the same curvatures, each seeing the hybridizations that the other sees, times the signs.
        """
        chosen: list[int] = []
        for copy, m in enumerate(M_POINTS):
            shifts = [(m[0] - M_POINTS[other][0], m[1] - M_POINTS[other][1]) for other in chosen]
            if not any(self.cell.holds(shift) for shift in shifts):
                chosen.append(copy)
        return tuple(chosen)

    def find(self, a: int, b: int, r: tuple[int, int]) -> tuple[int, int] | None:
        """Number and sign of the channel i gamma_a(0) gamma_b(R), or None if the model does not hold it."""
        key, sign = canonical((a, (0, 0)), (b, r))
        p = self._index.get(key)
        return None if p is None else (p, sign)

    @cached_property
    def _index(self) -> dict[tuple[int, ...], int]:
        return {tuple(int(x) for x in row): p for p, row in enumerate(self.table)}
