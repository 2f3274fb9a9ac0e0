"""Chosen phases: the subspace of fields that each class of states leaves free."""

import numpy as np
from numpy.typing import NDArray
from scipy.linalg import block_diag

from kondomf.model import MeanFieldModel
from kondomf.model.symmetries import rotate_channels

Array = NDArray[np.float64]

FREE = {
    "any": "every field",
    "decoupled": "bonds of the spinons; no hybridization, no moments",
    "magnetic": "bonds of the spinons and moments; no hybridization",
    "heavy-fermi-liquid": "fields with electron and spinon U(1) and time reversal: hybridization without pairing",
}
"""What each value of search.phase leaves free."""


def class_basis(model: MeanFieldModel, phase: str) -> Array | None:
    """Orthonormal basis (Na, d) of the fields, among the active channels, that `phase` leaves free; None: all."""
    if phase == "any":
        return None
    if phase == "heavy-fermi-liquid":
        return _invariant_fields(model)
    return _decoupled_fields(model, moments=phase == "magnetic")


def _decoupled_fields(model: MeanFieldModel, moments: bool) -> Array:
    active = model.active
    bonds = ~model.hybridization[active]
    onsite = (model.table[active, 2:] == 0).all(axis=1) & (model.table[active, 0] // 8 == model.table[active, 1] // 8)
    if moments:
        return np.eye(len(active))[:, bonds]
    basis = np.hstack([np.eye(len(active))[:, bonds & ~onsite], model.c[:, active].T])
    return np.linalg.qr(basis)[0]


def _invariant_fields(model: MeanFieldModel) -> Array:
    """Fields invariant under the common U(1) of electrons and spinons and under time reversal."""
    angles = 2 * np.pi * np.arange(8) / 8
    charge = sum(rotate_channels(model, _phase_rotation(model, angle), False) for angle in angles) / 8
    reversal = (np.eye(len(model.active)) + rotate_channels(model, _time_reversal(model), True)) / 2
    projector = (charge + reversal) / 2
    eigenvalues, vectors = np.linalg.eigh((projector + projector.T) / 2)
    return vectors[:, eigenvalues > 1 - 1e-9]


def _phase_rotation(model: MeanFieldModel, angle: float) -> Array:
    """c -> e^(i angle) c and f -> e^(i angle) f as a rotation of the Majoranas (0, 3) and (1, 2)."""
    c, s = np.cos(angle), np.sin(angle)
    one = np.array([[c, 0, 0, -s], [0, c, -s, 0], [0, s, c, 0], [s, 0, 0, c]])
    return block_diag(*[one] * (model.n_majorana // 4))


def _time_reversal(model: MeanFieldModel) -> Array:
    """c -> i sigma_y c on both species; the phase c -> i c of sublattice B turns its sign."""
    one = np.array([[0, 0, 1, 0], [0, 0, 0, -1], [-1, 0, 0, 0], [0, 1, 0, 0]], dtype=float)
    return block_diag(*[one if i % 4 < 2 else -one for i in range(model.n_majorana // 4)])
