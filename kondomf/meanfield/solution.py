"""A solution with the evidence for what it is."""

from dataclasses import dataclass, field
from typing import Any

import numpy as np
from numpy.typing import NDArray

from kondomf.meanfield.zero_modes import ZeroModes
from kondomf.meanfield.zone import ZoneRule
from kondomf.model import MeanFieldModel

Array = NDArray[np.float64]


@dataclass(frozen=True)
class Trial:
    """How one start of a search ended; F in meV per cell."""

    start: str
    status: str
    free_energy_meV_per_cell: float
    largest_hybridization: float


@dataclass(frozen=True)
class Solution:
    """A stationary Gaussian state (or the best reached) of a model on a zone rule.

    Attributes
    ----------
    phi, p : (N,) fields in meV and correlators of the channels.
    correlators : (NR, n, n) <i gamma_a(0) gamma_b(R)> for all Majoranas, R over model.lattice_vectors.
    multipliers : (M,) meV, named by model.constraint_names; the first is -mu.
    free_energy_meV_per_cell : F = <H> - T S at fixed filling, without mu N, per primitive cell.
    status : "minimum", "minimum-in-class", "saddle" or "not-converged"; `message` says why.
    curvature_min : lowest curvature in the searched class, for a decoupled state over its gauge copies.
    curvatures : the lowest dozen, ascending; curvature_full_space : lowest in the space of all fields.
    zone_error_meV : change of F when the grid is doubled at frozen mean fields.
    evaluations : Bloch matrices diagonalised, all starts and error estimates included.
    history : per step (name, matrices, F in meV per magnetic cell, largest residual in meV).
    """

    model: MeanFieldModel
    zone: ZoneRule
    phi: Array
    p: Array
    correlators: Array
    multipliers: Array
    free_energy_meV_per_cell: float
    entropy_kB_per_cell: float
    status: str
    message: str
    phase_class: str
    start: str
    residual_meV: float
    constraint_error: float
    curvature_min: float | None
    curvature_full_space: float | None
    curvatures: tuple[float, ...]
    zero_modes: ZeroModes | None
    zone_error_meV: float | None
    evaluations: int
    wall_seconds: float
    history: tuple[tuple[str, int, float, float], ...]
    trials: tuple[Trial, ...]
    inputs: dict[str, Any] = field(repr=False)

    @property
    def chemical_potential_meV(self) -> float:
        return -float(self.multipliers[0])

    @property
    def filling(self) -> float:
        """Electrons per conduction site of the state itself."""
        return 1 + float(self.model.c[0] @ self.p) / self.model.cell.n_sites

    @property
    def converged(self) -> bool:
        return self.status in ("minimum", "minimum-in-class")
