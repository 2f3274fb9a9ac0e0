"""Curvature of the constrained free energy: what tells a minimum from a saddle."""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.linalg import eigh

from kondomf.meanfield.evaluate import response
from kondomf.meanfield.problem import Point, Problem, point_at

Array = NDArray[np.float64]

DRIVER = "evr"
"""LAPACK's divide and conquer, numpy's choice, has failed to converge on well-conditioned matrices met here."""
NULL = 1e-13
"""Directions whose response is below this fraction of the largest do not change the state: curvature 1."""

FROZEN = 1e-6
"""A constrained quantity that responds by less than this fraction (of a root of the response) needs no projection."""


@dataclass(frozen=True)
class Curvature:
    """Spectral form of H = 1 + R^T V R with R R^T the constrained response.

    eigenvalues : (d,) ascending, dimensionless (fixed-point directions count 1).
    root_vectors : (Na, d), R times the eigenvectors: change of the correlators P along each mode, unit of 1/sqrt(meV).
    v : (Na, Na) quadratic form among the active channels.
    """

    eigenvalues: Array
    root_vectors: Array
    v: Array

    @property
    def lowest(self) -> float:
        """Lowest curvature; 1 where no field changes the state."""
        return float(self.eigenvalues.min(initial=1.0))

    def coordinates(self, active_fields: Array) -> Array:
        """Components (d,) of a vector over the active channels along the modes, R^T x."""
        return self.root_vectors.T @ active_fields

    def fields(self, y: Array, rest: Array, nu: float) -> Array:
        """Change of the active fields (rest + V R y)/(1 + nu) of the regularised step."""
        return (rest + self.v @ (self.root_vectors @ y)) / (1 + nu)


def curvature_at(problem: Problem, point: Point, *, full_space: bool = False) -> Curvature:
    """Curvature at `point`, inside the problem's class or in the full space of fields.

    M = -Pi, projected on the constraints: M - M C^T (C M C^T)^-1 C M = R R^T; H = 1 + R^T V R.
    """
    model, active = problem.model, problem.model.active
    m = -response(model, problem.zone, point.state, active)
    v = model.v[np.ix_(active, active)]
    c = model.c[:, active]
    basis = None if full_space else problem.basis
    if basis is not None:
        m, c = basis.T @ m @ basis, c @ basis
    size, q = eigh((m + m.T) / 2, driver=DRIVER)
    largest = max(size.max(initial=0.0), 1e-300)
    keep = size > NULL * largest
    r = q[:, keep] * np.sqrt(size[keep])
    # (C M C^T)^-1 loses all digits where a constrained quantity is frozen (a gap at low T): the same projection on
    # orthonormal directions of r^T C^T leaves out those that are rounding noise.
    u, sizes, _ = np.linalg.svd(r.T @ c.T, full_matrices=False)
    u = u[:, sizes > FROZEN * np.sqrt(largest)]
    r = r - (r @ u) @ u.T
    if basis is not None:
        r = basis @ r
    eigenvalues, z = eigh(np.eye(r.shape[1]) + r.T @ v @ r, driver=DRIVER)
    return Curvature(eigenvalues, r @ z, v)


def gauge_copies(problem: Problem, point: Point) -> list[Point]:
    """The other three gauge copies of a decoupled point: the same state, which sees other uniform hybridizations.

    Their F agree only on a zone rule with shifts by half a reciprocal vector (even points), so each is evaluated anew.
    """
    return [point_at(problem, signs * point.phi) for signs in problem.model.gauge_signs[1:]]
