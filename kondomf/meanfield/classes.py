"""Chosen phases: the subspace of fields that each class of states leaves free."""

from collections.abc import Callable
from dataclasses import dataclass
from functools import partial

import numpy as np
from numpy.typing import NDArray
from scipy.linalg import block_diag

from kondomf.model import MeanFieldModel
from kondomf.model.symmetries import rotate_channels

Array = NDArray[np.float64]


def class_basis(model: MeanFieldModel, phase: str) -> Array | None:
    """Orthonormal basis (Na, d) of the fields, among the active channels, that `phase` leaves free; None: all."""
    basis = CLASSES[phase].basis
    return None if basis is None else basis(model)


def _without_hybridization(model: MeanFieldModel, moments: bool) -> Array:
    active = model.active
    bonds = ~model.hybridization[active]
    if moments:
        return np.eye(len(active))[:, bonds]
    basis = np.hstack([np.eye(len(active))[:, bonds & ~model.onsite[active]], model.c[:, active].T])
    return np.linalg.qr(basis)[0]


def _with_time_reversal(model: MeanFieldModel) -> Array:
    return _invariant(_reversal(model))


def _with_time_reversal_and_charge(model: MeanFieldModel) -> Array:
    angles = 2 * np.pi * np.arange(8) / 8
    charge = sum(rotate_channels(model, phase_rotation(model, angle), False) for angle in angles) / 8
    return _invariant((charge + _reversal(model)) / 2)


def _reversal(model: MeanFieldModel) -> Array:
    return (np.eye(len(model.active)) + rotate_channels(model, time_reversal(model), True)) / 2


def _invariant(mean: Array) -> Array:
    """Directions that a mean of orthogonal projectors leaves alone."""
    eigenvalues, vectors = np.linalg.eigh((mean + mean.T) / 2)
    return vectors[:, eigenvalues > 1 - 1e-9]


def phase_rotation(model: MeanFieldModel, angle: float) -> Array:
    """c -> e^(i angle) c and f -> e^(i angle) f as a rotation of the Majoranas (0, 3) and (1, 2), (n, n)."""
    c, s = np.cos(angle), np.sin(angle)
    one = np.array([[c, 0, 0, -s], [0, c, -s, 0], [0, s, c, 0], [s, 0, 0, c]])
    return block_diag(*[one] * (model.n_majorana // 4))


def time_reversal(model: MeanFieldModel) -> Array:
    """Rotation (n, n) of the Majoranas that, with i -> -i, is time reversal c -> i sigma_y c on both species.

    The phase c -> i c of sublattice B turns its sign. On the electrons O^2 = -1, also with a rotation of the electron
    number. On the spinons O flips S in the so4 form if it is any element of a site's gauge SU(2). An even
    hybridization, W = -O_chi W O_eta^T, needs O_chi^2 = -1 where it is not zero, and all such elements are this one up
    to the choice of gauge. In the kitaev form only O_chi = +-1 leaves the exchange alone, so that no hybridization is
    even. (At n = 1 T may be combined with an exchange of particles and holes, which allows one; no class here.)
    """
    one = np.array([[0, 0, 1, 0], [0, 0, 0, -1], [-1, 0, 0, 0], [0, 1, 0, 0]], dtype=float)
    return block_diag(*[one if i % 4 < 2 else -one for i in range(model.n_majorana // 4)])


@dataclass(frozen=True)
class PhaseClass:
    """What a value of search.phase leaves free, in words and as a function that gives the basis (None: every field).

    hybridized : the search starts from hybridized states only.
    """

    free: str
    basis: Callable[[MeanFieldModel], Array] | None
    hybridized: bool = False


CLASSES = {
    "any": PhaseClass("every field", None),
    "decoupled": PhaseClass(
        "bonds of the spinons; no hybridization, no moments", partial(_without_hybridization, moments=False)
    ),
    "magnetic": PhaseClass(
        "bonds of the spinons and moments; no hybridization", partial(_without_hybridization, moments=True)
    ),
    "paramagnetic": PhaseClass(
        "fields with time reversal: hybridization and pairing; no moments (so4 forms)", _with_time_reversal, True
    ),
    "heavy-fermi-liquid": PhaseClass(
        "fields with time reversal and the common U(1) of electrons and spinons: hybridization; no pairing, no moments "
        "(so4 forms)",
        _with_time_reversal_and_charge,
        True,
    ),
}
"""The values of search.phase."""
