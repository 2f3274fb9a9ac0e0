"""A solution with the evidence for what it is."""

from collections.abc import Sequence
from dataclasses import dataclass, field
from typing import Any

import numpy as np
from numpy.typing import NDArray

from kondomf.meanfield.problem import Point
from kondomf.meanfield.starts import Start, carried_over
from kondomf.meanfield.zero_modes import SoftMode, ZeroModes
from kondomf.meanfield.zone import ZoneRule
from kondomf.model import MeanFieldModel
from kondomf.model.majorana import ELECTRON, SPINON, majorana, spin

Array = NDArray[np.float64]


SAME_ENERGY, SAME_SIZE = 1e-9, 1e-3
"""Ends of closer F (relative to its size) and closer order parameters are one state: see `Trial.same_state`."""


@dataclass(frozen=True)
class Trial:
    """How one start ended, by quantities that gauge transformations, symmetries and domains leave alone.

    hybridization : root mean square of <i chi^mu eta^nu> over mu, nu and sites (those between sites included in the
    sum). spin_moment, electron_moment : root mean square over sites of the size of <S> and <s>. net_moment : size of
    the mean <S>; it tells a ferromagnet from the antiferromagnets that a Kitaev magnet may hold at the same F.
    Moments in units of hbar.
    """

    start: str
    status: str
    free_energy_meV_per_cell: float
    hybridization: float
    spin_moment: float
    electron_moment: float
    net_moment: float

    def same_state(self, other: "Trial") -> bool:
        """True if both agree in F and in every order parameter.

        F of converged ends is good to 1e-11 of the largest coupling and tells most states apart by itself: the
        tolerance leaves room for soft modes. Copies of a state in other gauges, domains and rotated copies agree
        exactly, as far as the zone rule has the symmetry that relates them ("midpoint" breaks the threefold one).
        """
        one, two = self.free_energy_meV_per_cell, other.free_energy_meV_per_cell
        return abs(one - two) <= SAME_ENERGY * abs(two) and all(
            abs(getattr(self, name) - getattr(other, name)) < SAME_SIZE for name in ORDER_PARAMETERS
        )


ORDER_PARAMETERS = ("hybridization", "spin_moment", "electron_moment", "net_moment")


def moments(model: MeanFieldModel, correlators: Array, species: int) -> Array:
    """<S> (or <s>) of every site along the spin axes, (sites, 3), in units of hbar, from all correlators (NR, n, n)."""
    home = correlators[np.flatnonzero(~model.lattice_vectors.any(axis=1))[0]]
    blocks = [home[a : a + 4, a : a + 4] for a in (majorana(i, species, 0) for i in range(model.cell.n_sites))]
    return np.array([[sum(x * block[mu, nu] for x, mu, nu in s) for s in spin("so4")] for block in blocks])


def trial(model: MeanFieldModel, start: str, status: str, point: Point) -> Trial:
    """How a start ended at `point`."""
    sites = model.cell.n_sites
    w = point.p[model.hybridization]
    spins, electrons = (moments(model, point.state.correlators, species) for species in (SPINON, ELECTRON))
    return Trial(
        start,
        status,
        point.free_energy / model.cell.size,
        float(np.sqrt(w @ w / (16 * sites))),
        float(np.sqrt((spins**2).sum() / sites)),
        float(np.sqrt((electrons**2).sum() / sites)),
        float(np.linalg.norm(spins.mean(axis=0))),
    )


def grouped(trials: Sequence[Trial]) -> list[list[int]]:
    """Numbers of the trials that ended in each state, states and trials in the order given."""
    result: list[list[int]] = []
    for i, one in enumerate(trials):
        home = next((group for group in result if one.same_state(trials[group[0]])), None)
        if home is None:
            result.append([i])
        else:
            home.append(i)
    return result


def distinct_minima(trials: Sequence[Trial]) -> tuple[tuple[Trial, int], ...]:
    """The distinct minima among `trials`, lowest first, and how many trials ended in each."""
    ends = sorted((t for t in trials if t.status == "minimum"), key=lambda t: t.free_energy_meV_per_cell)
    return tuple((ends[group[0]], len(group)) for group in grouped(ends))


def chance_of_another(found: Sequence[int]) -> float | None:
    """Good-Turing estimate of the chance that one more start ends in a minimum not met yet; None without any minimum.

    `found` holds how many starts ended in each minimum. The estimate is the share of starts whose minimum no other
    start met, and the chance that a missed one lies lower is at most this. It takes the starts for independent draws
    from one distribution. Standard starts are chosen to differ, so that among them a minimum met once is no surprise:
    the estimate errs on the high side for a further random start, and it knows nothing of minima that no random start
    can reach. Source: Biometrika 40, 237 (1953), "The population frequencies of species and the estimation of
    population parameters" (from memory).
    """
    return sum(count == 1 for count in found) / sum(found) if found else None


def chance_not_excluded(starts: int, confidence: float = 0.95) -> float:
    """Chance q of a new minimum that `starts` starts without one leave open: (1 - q)^starts = 1 - confidence.

    What a Good-Turing estimate of zero means for a finite number of starts.
    """
    return float(1 - (1 - confidence) ** (1 / starts))


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
    residual_meV : largest residual component, in a class that of the fields it leaves free; residual_full_space_meV :
        of all fields. A class that is no symmetry of the model (no moments in a magnetic field) leaves one.
    curvature_min : lowest curvature in the searched class, for a decoupled state over its gauge copies.
    curvatures : the lowest dozen, ascending; curvature_full_space : lowest in the space of all fields.
    soft_mode : lowest mode in that space that is no zero mode, for an unstable decoupled state of its softest copy.
    zone_error_meV : change of F when the grid is doubled at frozen mean fields.
    evaluations : Bloch matrices diagonalised, all starts and error estimates included.
    trials : how the starts ended, on the grid that was searched (the coarser one where there are two).
    found : starts of the search that ended in this state.
    others : the other distinct minima that the search met (saddles too where they are kept), with their own
        certificates, lowest first; at most `search.MOST_KEPT` states are kept in all.
    ended_lower : the lowest start that ended below this state without reaching a minimum, if any.
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
    residual_full_space_meV: float
    constraint_error: float
    curvature_min: float | None
    curvature_full_space: float | None
    curvatures: tuple[float, ...]
    zero_modes: ZeroModes | None
    soft_mode: SoftMode | None
    zone_error_meV: float | None
    evaluations: int
    wall_seconds: float
    history: tuple[tuple[str, int, float, float], ...]
    trials: tuple[Trial, ...]
    found: int
    others: tuple["Solution", ...] = field(repr=False)
    ended_lower: Trial | None
    inputs: dict[str, Any] = field(repr=False)

    @property
    def chemical_potential_meV(self) -> float:
        return -float(self.multipliers[0])

    @property
    def filling(self) -> float:
        """Electrons per conduction site of the state itself."""
        return 1 + float(self.model.c[0] @ self.p) / self.model.cell.n_sites

    @property
    def minima(self) -> tuple["Solution", ...]:
        """This state and the others that the search kept, those that are minima, lowest first."""
        return tuple(state for state in (self, *self.others) if state.converged)

    @property
    def converged(self) -> bool:
        return self.status in ("minimum", "minimum-in-class")

    def starts(self, model: MeanFieldModel) -> list[Start]:
        """This state and the others as starts in `model`, which may hold other channels: "kept 1" is this one."""
        states = (self, *self.others)
        return [carried_over(model, f"kept {i}", state.model.table, state.p) for i, state in enumerate(states, 1)]
