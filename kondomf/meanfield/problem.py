"""A constrained mean-field problem and its points: fields whose multipliers have been solved."""

from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from kondomf.meanfield.engine import NUMPY, Engine
from kondomf.meanfield.evaluate import Evaluation, keep_freed_memory
from kondomf.meanfield.zone import ZoneRule
from kondomf.model import MeanFieldModel

Array = NDArray[np.float64]

CONSTRAINT_TOLERANCE = 1e-12
"""Largest allowed error of a constrained quantity in a solution. Times a multiplier it must vanish in the rounding of
F: near a polarised state F would otherwise fall by leaving the constraint, and stop at no stationary point."""
MAX_MULTIPLIER_EVALUATIONS = 250
ROUNDING = 1e-11
"""Rounding error of F in units of the largest coupling; a rise within it is none."""


@dataclass
class Problem:
    """A model on a zone rule, and if a phase was chosen the basis (Na, d) of its class in the active channels.

    `matrices` counts the Bloch matrices diagonalised so far.
    """

    model: MeanFieldModel
    zone: ZoneRule
    basis: Array | None = None
    engine: Engine = NUMPY
    matrices: int = field(default=0, init=False, compare=False)

    def __post_init__(self) -> None:
        keep_freed_memory()

    def evaluate(self, phi: Array) -> Evaluation:
        """Evaluation at the fields phi (N,), counted."""
        self.matrices += len(self.zone.k)
        return self.engine.evaluate(self.model, self.zone, phi)

    def response(self, state: Evaluation, channels: NDArray[np.int64]) -> Array:
        """Response (Nc, Nc), 1/meV, among `channels` at a state of `evaluate`."""
        return self.engine.response(self.model, self.zone, state, channels)

    def first_fields(self, p: Array) -> Array:
        """Fields h + V P (N,) of correlators p (N,), brought into the class."""
        model = self.model
        fields = model.h + model.v @ p
        fields[model.active] = model.h[model.active] + self.project((model.v @ p)[model.active])
        return fields

    def project(self, active_fields: Array) -> Array:
        """Part of a vector over the active channels that lies in the class, (Na,)."""
        return active_fields if self.basis is None else self.basis @ (self.basis.T @ active_fields)


@dataclass(frozen=True)
class Point:
    """Fields that satisfy the constraints, with what follows from them; per magnetic cell, meV.

    phi, residual : (N,); multipliers : (M,), -mu first; constraint_error : largest |C P - target|.
    """

    phi: Array
    state: Evaluation
    free_energy: float
    residual: Array
    multipliers: Array
    constraint_error: float

    @property
    def p(self) -> Array:
        return self.state.p

    @property
    def is_finite(self) -> bool:
        return bool(np.isfinite(self.free_energy) and np.isfinite(self.residual).all())


def point_at(problem: Problem, guess: Array, tolerance: float = CONSTRAINT_TOLERANCE) -> Point:
    """Solve the multipliers starting from the fields `guess` (N,) and evaluate free energy and residual.

    F = omega - phi.P + h.P + P.V.P/2 (Gibbs-Bogoliubov). The residual is h + V P + C^T lambda - phi with
    the multipliers lambda that make it smallest; a remaining constraint error, up to `tolerance`, is removed from F
    to first order.
    """
    model = problem.model
    phi, state = _solve_multipliers(problem, guess, tolerance)
    bare = model.h + model.v @ state.p - phi
    multipliers = np.asarray(np.linalg.lstsq(model.c.T, -bare, rcond=None)[0], dtype=np.float64)
    error = model.c @ state.p - model.target
    free_energy = state.omega + (model.h - phi) @ state.p + state.p @ model.v @ state.p / 2 + multipliers @ error
    residual = np.zeros_like(phi)
    residual[model.active] = problem.project((bare + model.c.T @ multipliers)[model.active])
    return Point(phi, state, float(free_energy), residual, multipliers, float(np.abs(error).max()))


def _solve_multipliers(problem: Problem, phi: Array, tolerance: float) -> tuple[Array, Evaluation]:
    """Maximise the concave omega(phi + C^T lambda) - lambda.target by Newton steps with a bracketed line search.

    The response of a constrained quantity vanishes at Dirac points, in gaps and on coarse grids at low T. There a
    Newton step is cut to the largest coupling and the root of the directional derivative, which falls along
    the line, is bracketed.
    """
    model = problem.model
    state = problem.evaluate(phi)
    budget = problem.matrices + MAX_MULTIPLIER_EVALUATIONS * len(problem.zone.k)
    while problem.matrices < budget:
        gradient = model.c @ state.p - model.target
        if np.abs(gradient).max() <= tolerance or not np.isfinite(gradient).all():
            break
        m, q = stiffness(problem, state)
        g = q.T @ gradient
        wrong = np.abs(g) > 0.1 * tolerance  # the others are rounding, which a frozen response would blow up
        step = q @ np.where(wrong, g / np.maximum(m, np.abs(g) / model.scale + 1e-300), 0.0)
        phi, state = _line_search(problem, phi, model.c.T @ step, step, float(gradient @ step), budget)
    return phi, state


def stiffness(problem: Problem, state: Evaluation) -> tuple[Array, Array]:
    """Eigenvalues (M,), 1/meV, and eigenvectors (M, M) of C M C^T, the response of the constrained quantities."""
    channels = problem.model.constrained
    c = problem.model.c[:, channels]
    m, q = np.linalg.eigh(-c @ problem.response(state, channels) @ c.T)
    return m, q


def _line_search(
    problem: Problem, phi: Array, direction: Array, step: Array, slope: float, budget: int
) -> tuple[Array, Evaluation]:
    """Point along `direction` where the falling directional derivative has at most half its initial size."""
    model = problem.model
    low, slope_low, high, slope_high, s = 0.0, slope, np.inf, -slope, 1.0
    while True:
        trial = phi + s * direction
        state = problem.evaluate(trial)
        here = float((model.c @ state.p - model.target) @ step)
        exhausted = problem.matrices >= budget or high - low < 1e-15 * s
        if abs(here) <= 0.5 * slope or exhausted or not np.isfinite(here):
            return trial, state
        if here > 0:
            low, slope_low = s, here
        else:
            high, slope_high = s, here
        if np.isinf(high):
            s *= 2
        else:
            # The secant through the bracket, kept away from its ends: a step-like derivative defeats it alone.
            fraction = slope_low / (slope_low - slope_high)
            s = low + (high - low) * float(np.clip(fraction, 0.1, 0.9))
