"""How two honeycomb lattices fit: shift of their K points, nearest common hexagonal cell, where K folds."""

from dataclasses import dataclass
from typing import Literal

import numpy as np

Cell = tuple[tuple[int, int], tuple[int, int]]
Valley = Literal["Gamma", "K", "K'"]

MAX_LENGTH_ANGSTROM = 60.0
"""Longest common cell vector that is searched."""
GOOD_FIT = 0.01
"""Relative misfit of the cell vectors that counts as commensurate: relaxed interfaces take up about 1 %."""


@dataclass(frozen=True)
class CommensurateCell:
    """A hexagonal cell common to both layers.

    spin_cell, conduction_cell: rows are its vectors in units of (a1, a2) of each lattice;
    strain_percent: by how much the conduction layer must stretch (negative: shrink) to fit the spin layer;
    rotation_degree: by how much it must turn in addition to the given twist;
    spin_valley, conduction_valley: point of the small zone onto which the K point of each layer folds.
    """

    spin_cell: Cell
    conduction_cell: Cell
    strain_percent: float
    rotation_degree: float
    area_angstrom2: float
    spin_valley: Valley
    conduction_valley: Valley


def valley_shift(spin_constant: float, conduction_constant: float, twist_degree: float) -> float:
    """Smallest |K_c - K_s| in 1/angstrom between K points (|K| = 4 pi / 3a) of the first zones of both layers.

    Lattice constants in angstrom; the twist counts modulo 60 degree because the six K points are equivalent in angle.
    """
    spin, conduction = (4 * np.pi / (3 * a) for a in (spin_constant, conduction_constant))
    angle = np.radians((twist_degree + 30) % 60 - 30)
    return float(abs(spin - conduction * np.exp(1j * angle)))


def nearest_cell(spin_constant: float, conduction_constant: float, twist_degree: float) -> CommensurateCell | None:
    """Smallest hexagonal cell of both lattices with a misfit below 1 %, or else the one with the smallest misfit.

    Cell vectors m a1 + n a2 of the spin layer and p a1 + q a2 of the conduction layer (turned by the twist) are
    compared as complex numbers; misfit = |L_s - L_c| / |L_c|. Lattice constants in angstrom.
    Returns None if a primitive cell is longer than 60 angstrom.
    """
    m, n, spin = _vectors(spin_constant)
    p, q, conduction = _vectors(conduction_constant)
    if not (spin.size and conduction.size):
        return None
    conduction = conduction * np.exp(1j * np.radians(twist_degree))
    # A common cell is unchanged by turns of 60 degree, so one sector of spin-layer vectors meets all conduction ones.
    sector = (m > 0) & (n >= 0)
    m, n, spin = m[sector], n[sector], spin[sector]
    ratio = spin[:, None] / conduction
    misfit = np.abs(ratio - 1)
    fits = np.nonzero(misfit < GOOD_FIT)
    if fits[0].size:
        # Among equally small cells the better fit wins; rounding makes mirror images equal, whose first one is taken.
        best = np.lexsort((np.round(misfit[fits], 9), np.round(np.abs(spin[fits[0]]), 6)))[0]
        i, j = fits[0][best], fits[1][best]
    else:
        i, j = np.unravel_index(np.argmin(misfit), misfit.shape)
    return CommensurateCell(
        spin_cell=_hexagonal(m[i], n[i]),
        conduction_cell=_hexagonal(p[j], q[j]),
        strain_percent=float(100 * (abs(ratio[i, j]) - 1)),
        rotation_degree=float(np.degrees(np.angle(ratio[i, j]))),
        area_angstrom2=float(np.sqrt(3) / 2 * abs(spin[i]) ** 2),
        spin_valley=_folded(m[i], n[i]),
        conduction_valley=_folded(p[j], q[j]),
    )


def _vectors(constant: float) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """All lattice vectors m a1 + n a2 up to the longest length: m, n and the vector as a complex number."""
    reach = int(2 * MAX_LENGTH_ANGSTROM / (np.sqrt(3) * constant))
    m, n = (grid.ravel() for grid in np.mgrid[-reach : reach + 1, -reach : reach + 1])
    vector = constant * (m + n * np.exp(1j * np.pi / 3))
    keep = (np.abs(vector) <= MAX_LENGTH_ANGSTROM) & (np.abs(vector) > 0)
    return m[keep], n[keep], vector[keep]


def _hexagonal(m: int, n: int) -> Cell:
    """Cell spanned by m a1 + n a2 and the same vector turned by 60 degree (a1 -> a2, a2 -> a2 - a1)."""
    return (int(m), int(n)), (int(-n), int(m + n))


def _folded(m: int, n: int) -> Valley:
    """K has (k.a1, k.a2) = 2 pi (2/3, 1/3); in the cell of m a1 + n a2 it has 2 pi (2m + n, m - n)/3 modulo 2 pi."""
    valleys: tuple[Valley, ...] = ("Gamma", "K", "K'")
    return valleys[int(m - n) % 3]
