"""Modes of the curvature: zero modes accounted for by symmetries, and what a mode does to the state."""

from collections.abc import Iterator
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray
from scipy.linalg import expm

from kondomf.meanfield.curvature import Curvature
from kondomf.meanfield.evaluate import bloch_matrix, decompositions, lattice_sum, thermal_weight
from kondomf.meanfield.problem import Point, Problem
from kondomf.model import MeanFieldModel
from kondomf.model.symmetries import Generator, field_matrices, rotated, symmetry_generators

Array = NDArray[np.float64]

ZERO = 1e-6
"""Curvatures of smaller size are zero modes."""
CONSERVED = 1e-7
"""A constrained quantity that a rotation changes by less is conserved."""


@dataclass(frozen=True)
class ZeroModes:
    """Number of zero curvatures, and how many of them gauge and physical generators explain."""

    count: int
    gauge: int
    broken_generators: int

    @property
    def unexplained(self) -> int:
        return self.count - self.gauge - self.broken_generators


def conserving_generators(model: MeanFieldModel, correlators: Array) -> Iterator[Generator]:
    """Generators of symmetries of the model that leave the constrained quantities of a state (NR, n, n) alone too.

    A finite rotation decides, since at n != 1 a pair rotation changes the density only in second order.
    """
    for generator in symmetry_generators(model):
        turn = expm(0.7 * generator.x)
        moved = (turn @ correlators @ turn.T - correlators)[model.position]
        if np.abs(model.c @ moved).max(initial=0.0) < CONSERVED:
            yield generator


def zero_modes(problem: Problem, point: Point, full: Curvature) -> ZeroModes:
    """Count zeros of the full-space curvature and the independent field changes that symmetries make at `point`.

    A generator counts when it leaves the model invariant and, at this state, the constrained quantities too.
    """
    model = problem.model
    fields = field_matrices(model, point.phi)
    gauge: list[Array] = []
    physical: list[Array] = []
    for generator in conserving_generators(model, point.state.correlators):
        change = full.coordinates(rotated(model, fields, generator.x)[model.active])
        (gauge if generator.gauge else physical).append(change)
    scale = np.sqrt(model.scale) * 1e-5
    n_gauge, n_all = _rank(gauge, scale), _rank(gauge + physical, scale)
    return ZeroModes(int((np.abs(full.eigenvalues) < ZERO).sum()), n_gauge, n_all - n_gauge)


def _rank(vectors: list[Array], threshold: float) -> int:
    return int((np.linalg.svd(np.array(vectors), compute_uv=False) > threshold).sum()) if vectors else 0


@dataclass(frozen=True)
class SoftMode:
    """The mode of lowest curvature that is no zero mode, in the space of all fields.

    degeneracy : modes of this curvature. change : (NR, n, n) change of the correlators <i gamma_a(0) gamma_b(R)> along
    the mode, R over model.lattice_vectors, of norm 1.
    """

    curvature: float
    degeneracy: int
    change: Array = field(repr=False)


def soft_mode(problem: Problem, point: Point, full: Curvature) -> SoftMode | None:
    """The lowest mode at `point` that is no zero mode, from its full-space curvature; None if no field has any."""
    moving = np.flatnonzero(np.abs(full.eigenvalues) > ZERO)
    if not len(moving) or full.eigenvalues[moving[0]] == 1:
        return None
    lowest = full.eigenvalues[moving[0]]
    degeneracy = int((np.abs(full.eigenvalues - lowest) < ZERO).sum())
    return SoftMode(float(lowest), degeneracy, correlator_change(problem, point, full, int(moving[0])))


def correlator_change(problem: Problem, point: Point, curvature: Curvature, mode: int) -> Array:
    """Change (NR, n, n) of all correlators along a mode z of the full-space curvature e != 1, of norm 1.

    The fields V R z, with multipliers that hold the constrained quantities, change the correlators of the active
    channels by (1 - e) R z; what they do to every other correlator belongs to the mode too.
    """
    model = problem.model
    along = np.eye(len(curvature.eigenvalues))[mode]
    fields = np.zeros(model.n_channels)
    fields[model.active] = curvature.fields(along, np.zeros(len(model.active)), 0.0)
    change = _responding(problem, point, fields / (1 - curvature.eigenvalues[mode]))
    return np.asarray(change / np.linalg.norm(change))


def _responding(problem: Problem, point: Point, fields: Array) -> Array:
    """Response (NR, n, n) of all correlators to a small change of the fields (N,).

    d tanh(h/2T) = U (X o U+ dh U) U+ with the X of the response matrix.
    """
    model = problem.model
    total = np.zeros_like(point.state.correlators)
    for part, phases, e, u in decompositions(model, problem.zone, point.phi):
        adjoint = u.conj().swapaxes(1, 2)
        inner = thermal_weight(e, model.temperature) * (adjoint @ bloch_matrix(model, fields, phases) @ u)
        total += lattice_sum(phases, problem.zone.weight[part], u @ inner @ adjoint)
    return total
