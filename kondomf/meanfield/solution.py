"""A solution with the evidence for what it is."""

from collections.abc import Sequence
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
    """How one start ended; hybridization is the root mean square of <i chi^mu eta^nu> over mu, nu and sites."""

    start: str
    status: str
    free_energy_meV_per_cell: float
    hybridization: float

    def same_state(self, other: "Trial") -> bool:
        """True if both agree in F and hybridization, which gauge and symmetry transformations leave alone."""
        near = abs(self.free_energy_meV_per_cell - other.free_energy_meV_per_cell) < 1e-7 * abs(
            other.free_energy_meV_per_cell
        )
        return near and abs(self.hybridization - other.hybridization) < 1e-4


@dataclass(frozen=True)
class Minimum:
    """A distinct minimum that a search met, and how many of its starts ended there."""

    free_energy_meV_per_cell: float
    hybridization: float
    found: int


def distinct_minima(trials: Sequence[Trial]) -> tuple[Minimum, ...]:
    """The distinct minima among `trials`, lowest first; equal up to gauge and symmetry counts as one."""
    ends = sorted((t for t in trials if t.status == "minimum"), key=lambda t: t.free_energy_meV_per_cell)
    groups: list[list[Trial]] = []
    for trial in ends:
        home = next((group for group in groups if trial.same_state(group[0])), None)
        if home is None:
            groups.append([trial])
        else:
            home.append(trial)
    return tuple(Minimum(g[0].free_energy_meV_per_cell, g[0].hybridization, len(g)) for g in groups)


def chance_of_another(minima: Sequence[Minimum]) -> float | None:
    """Good-Turing estimate of the chance that one more start ends in a minimum not met yet; None without any minimum.

    The share of starts whose minimum was met once. The chance that it lies lower is at most this.
    Source: Biometrika 40, 237 (1953), "The population frequencies of species and the estimation of population
    parameters" (from memory).
    """
    starts = sum(minimum.found for minimum in minima)
    return sum(minimum.found == 1 for minimum in minima) / starts if starts else None


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
    trials : how the starts ended, on the grid that was searched (the coarser one where there are two).
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
    def minima(self) -> tuple[Minimum, ...]:
        """The distinct minima that the search met, lowest first."""
        return distinct_minima(self.trials)

    @property
    def converged(self) -> bool:
        return self.status in ("minimum", "minimum-in-class")
