"""Accounts for the zero modes of a solution: gauge directions, broken physical generators, or unexplained."""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.linalg import expm

from kondomf.meanfield.curvature import Curvature
from kondomf.meanfield.problem import Point, Problem
from kondomf.model.symmetries import field_matrices, rotated, symmetry_generators


@dataclass(frozen=True)
class ZeroModes:
    """Number of zero curvatures, and how many of them gauge and physical generators explain."""

    count: int
    gauge: int
    broken_generators: int

    @property
    def unexplained(self) -> int:
        return self.count - self.gauge - self.broken_generators


def zero_modes(problem: Problem, point: Point, full: Curvature, tolerance: float = 1e-6) -> ZeroModes:
    """Count zeros of the full-space curvature and the independent field changes that symmetries make at `point`.

    A generator counts when it leaves the model invariant and, at this state, the constrained quantities too; a
    finite rotation decides, since at n != 1 a pair rotation changes the density only in second order.
    """
    model = problem.model
    correlators = point.state.correlators
    fields = field_matrices(model, point.phi)
    gauge: list[NDArray[np.float64]] = []
    physical: list[NDArray[np.float64]] = []
    for generator in symmetry_generators(model):
        turn = expm(0.7 * generator.x)
        moved = (turn @ correlators @ turn.T)[model.position] - point.p
        if np.abs(model.c @ moved).max(initial=0.0) < 1e-7:
            change = full.coordinates(rotated(model, fields, generator.x)[model.active])
            (gauge if generator.gauge else physical).append(change)
    scale = np.sqrt(model.scale) * 1e-5
    n_gauge, n_all = _rank(gauge, scale), _rank(gauge + physical, scale)
    return ZeroModes(int((np.abs(full.eigenvalues) < tolerance).sum()), n_gauge, n_all - n_gauge)


def _rank(vectors: list[NDArray[np.float64]], threshold: float) -> int:
    return int((np.linalg.svd(np.array(vectors), compute_uv=False) > threshold).sum()) if vectors else 0
