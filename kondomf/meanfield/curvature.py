"""Curvature of the constrained free energy: what tells a minimum from a saddle."""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.linalg import eigh

from kondomf.meanfield.problem import CONSTRAINT_TOLERANCE, ROUNDING, Point, Problem, point_at, stiffness

Array = NDArray[np.float64]

NULL = 1e-13
"""Directions whose response is below this fraction of the largest do not change the state: curvature 1."""

SAME_FIELDS = 1e-12
"""Fields that differ by less, in units of the largest coupling, are the same."""
FROZEN = 1e-6
"""A constrained quantity that responds by less than this fraction (of a root of the response) needs no projection."""
FIRM = 1e-2
"""The multiplier of a constrained quantity that responds by less than this fraction is not predicted in first order."""
ZERO = 1e-9
"""Curvatures down to minus this are not negative."""
FREE = 1e-6
"""Constrained quantities that respond by less than this, per largest coupling, leave their multiplier free."""
MOST_SUPPORTS, DISPLACED, OVERSHOT, FARTHEST = 3, 1e-3, 1.5, 0.2
"""Search for free multipliers: steps, displacement (per largest coupling), factor on a step, longest step (same)."""


@dataclass(frozen=True)
class Curvature:
    """Spectral form of H = 1 + R^T V R with R R^T the constrained response.

    eigenvalues : (d,) ascending, dimensionless (fixed-point directions count 1).
    root_vectors : (Na, d), R times the eigenvectors: change of the correlators P along each mode, unit of 1/sqrt(meV).
    v : (Na, Na) quadratic form among the active channels.
    feedback : (Na, Na) fields C^T dlambda by which the multipliers answer a change of the fields, in first order.
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
    m = -problem.response(point.state, active)
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
    firm = sizes > FIRM * np.sqrt(largest)
    feedback = -c.T @ (w[firm].T / sizes[firm]) @ (r @ u[:, firm]).T
    r = r - (r @ u[:, free]) @ u[:, free].T
    eigenvalues, z = _eigh(np.eye(r.shape[1]) + r.T @ v @ r)
    return Curvature(eigenvalues, r @ z, v, feedback)


def supported(problem: Problem, point: Point, here: Curvature) -> tuple[Point, Curvature]:
    """The same state with those free multipliers for which its lowest curvature is highest or positive.

    A gap answers a constraint only by exp(-gap/T). At low T a whole range of multipliers then satisfies it, all with
    the same state but not the same curvature. If one choice makes the Lagrangian F + lambda.(C P - target) a minimum,
    F is one under the constraints. The lowest curvature of the Lagrangian is concave in lambda, and the constraint
    error g that its eigenvector makes in second order is a supergradient, along which Polyak's steps lead there.
    Source: USSR Comput. Math. Math. Phys. 9, 14 (1969), "Minimization of unsmooth functionals" (from memory).
    """
    if here.lowest >= -ZERO:
        return point, here
    model = problem.model
    m, q = stiffness(problem, point.state)
    free = q[:, m * model.scale < FREE]
    best, highest, limit = point, here, point.free_energy + ROUNDING * model.scale
    for _ in range(MOST_SUPPORTS if free.size else 0):
        if highest.lowest >= -ZERO:
            break
        error, length = _second_order_error(problem, point, here)
        g = free @ (free.T @ error)
        step = -OVERSHOT * here.lowest * length / 2 * g / (g @ g + 1e-300)
        step *= FARTHEST * model.scale / max(np.abs(step).max(), FARTHEST * model.scale)
        point = point_at(problem, point.phi + model.c.T @ step)
        if not (point.free_energy <= limit and point.constraint_error <= 10 * CONSTRAINT_TOLERANCE):
            break
        here = curvature_at(problem, point)
        if here.lowest > highest.lowest:
            best, highest = point, here
    return best, highest


def _second_order_error(problem: Problem, point: Point, here: Curvature) -> tuple[Array, float]:
    """Constraint error (M,) that a displacement y along the softest mode makes in second order, and y.y."""
    model = problem.model
    mode = here.v @ here.root_vectors[:, 0]
    mode *= DISPLACED * model.scale / np.abs(mode).max()
    fields = np.zeros(model.n_channels)
    fields[model.active] = mode
    both = (problem.evaluate(point.phi + sign * fields).p for sign in (1, -1))
    return model.c @ sum(both) / 2 - model.target, float((here.coordinates(mode) ** 2).sum())


def gauge_copies(problem: Problem, point: Point) -> list[Point]:
    """The other gauge copies of a decoupled point: the same state, which sees other uniform hybridizations.

    Left out are those of the same curvature: copies that are gauge transformations of the cell, and those of the same
    fields (a magnet without bonds). On a zone rule with shifts by half a reciprocal vector (even points) the copies
    agree in F; elsewhere they do not, so each is evaluated anew.
    """
    model = problem.model
    fields = [model.gauge_signs[copy] * point.phi for copy in model.distinct_copies[1:]]
    return [point_at(problem, phi) for phi in fields if np.abs(phi - point.phi).max() > SAME_FIELDS * model.scale]
