"""Curvature of the constrained free energy: what tells a minimum from a saddle."""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.linalg import eigh

from kondomf.meanfield.evaluate import response
from kondomf.meanfield.problem import Point, Problem, point_at

Array = NDArray[np.float64]

NULL = 1e-13
"""Directions whose response is below this fraction of the largest do not change the state: curvature 1."""

SAME_FIELDS = 1e-12
"""Fields that differ by less, in units of the largest coupling, are the same."""
FROZEN = 1e-6
"""A constrained quantity that responds by less than this fraction (of a root of the response) needs no projection."""


@dataclass(frozen=True)
class Curvature:
    """Spectral form of H = 1 + R^T V R with R R^T the constrained response.

    eigenvalues : (d,) ascending, dimensionless (fixed-point directions count 1).
    root_vectors : (Na, d), R times the eigenvectors: change of the correlators P along each mode, unit of 1/sqrt(meV).
    v : (Na, Na) quadratic form among the active channels.
    feedback : (Na, Na) change C^T dlambda of the multipliers' fields that answers one of the active fields, first order.
    """

    eigenvalues: Array
    root_vectors: Array
    v: Array
    feedback: Array

    @property
    def lowest(self) -> float:
        """Lowest curvature; 1 where no field changes the state."""
        return float(self.eigenvalues.min(initial=1.0))

    def coordinates(self, active_fields: Array) -> Array:
        """Components (d,) of a vector over the active channels along the modes, R^T x."""
        return self.root_vectors.T @ active_fields

    def fields(self, y: Array, rest: Array, nu: float) -> Array:
        """Change of the active fields (rest + V R y)/(1 + nu) + C^T dlambda of the regularised step."""
        change = (rest + self.v @ (self.root_vectors @ y)) / (1 + nu)
        return change + self.feedback @ change


def curvature_at(problem: Problem, point: Point, *, full_space: bool = False) -> Curvature:
    """Curvature at `point`, inside the problem's class or in the full space of fields.

    M = -Pi, projected on the constraints: M - M C^T (C M C^T)^-1 C M = R R^T; H = 1 + R^T V R.
    """
    model, active = problem.model, problem.model.active
    m = -response(model, problem.zone, point.state, active)
    v = model.v[np.ix_(active, active)]
    c = model.c[:, active]
    basis = None if full_space else problem.basis
    if basis is None:
        return spectral_form(m, c, v)
    inside = spectral_form(basis.T @ m @ basis, c @ basis, basis.T @ v @ basis)
    return Curvature(inside.eigenvalues, basis @ inside.root_vectors, v, basis @ inside.feedback @ basis.T)


def _eigh(matrix: Array) -> tuple[Array, Array]:
    """Eigenvalues and eigenvectors. LAPACK's divide and conquer and, rarely, its MRRR fail on matrices met here; the
    slower QR does not."""
    try:
        return eigh(matrix, driver="evr")
    except np.linalg.LinAlgError:
        return eigh(matrix, driver="ev")


def spectral_form(m: Array, c: Array, v: Array) -> Curvature:
    """Spectral form of H = 1 + R^T V R with R R^T = M - M C^T (C M C^T)^-1 C M.

    m, v : (n, n) minus the response, in 1/meV, and the quadratic form, in meV; c : (k, n) constraints.
    """
    size, q = _eigh((m + m.T) / 2)
    largest = max(size.max(initial=0.0), 1e-300)
    keep = size > NULL * largest
    r = q[:, keep] * np.sqrt(size[keep])
    # (C M C^T)^-1 loses all digits where a constrained quantity is frozen (a gap at low T): the same projection on
    # orthonormal directions of r^T C^T leaves out those that are rounding noise.
    u, sizes, w = np.linalg.svd(r.T @ c.T, full_matrices=False)
    free = sizes > FROZEN * np.sqrt(largest)
    u = u[:, free]
    feedback = -c.T @ (w[free].T / sizes[free]) @ (r @ u).T
    r = r - (r @ u) @ u.T
    eigenvalues, z = _eigh(np.eye(r.shape[1]) + r.T @ v @ r)
    return Curvature(eigenvalues, r @ z, v, feedback)


def gauge_copies(problem: Problem, point: Point) -> list[Point]:
    """The other gauge copies of a decoupled point: the same state, which sees other uniform hybridizations.

    Left out are those of the same curvature: copies that are gauge transformations of the cell, and those of the same
    fields (a magnet without bonds). On a zone rule with shifts by half a reciprocal vector (even points) the copies
    agree in F; elsewhere they do not, so each is evaluated anew.
    """
    model = problem.model
    fields = [model.gauge_signs[copy] * point.phi for copy in model.distinct_copies[1:]]
    return [point_at(problem, phi) for phi in fields if np.abs(phi - point.phi).max() > SAME_FIELDS * model.scale]
