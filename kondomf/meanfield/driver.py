"""The one loop that takes fields downhill to a stationary point and certifies what it is."""

from collections.abc import Callable
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from kondomf.meanfield.curvature import Curvature, curvature_at, gauge_copies, supported
from kondomf.meanfield.problem import CONSTRAINT_TOLERANCE, ROUNDING, Point, Problem, point_at
from kondomf.meanfield.steps import Mixing, StationaryNewton, Step, TrustRegion

Array = NDArray[np.float64]

MOST_CORRECTIONS = 1
"""Corrections of a trial step; each costs as much as the trial itself."""


@dataclass(frozen=True)
class Settings:
    """When to stop and what to accept.

    residual : largest residual component of a solution, in units of the largest coupling.
    curvature : a lower curvature than minus this makes a saddle.
    decoupled : correlators between spinons and electrons below this count as none.
    mixing_steps, newton_steps : step limits of the two phases.
    keep_saddle : go to the nearest stationary point, even a saddle, instead of always downhill.
    """

    residual: float = 1e-9
    curvature: float = 1e-6
    decoupled: float = 1e-6
    mixing_steps: int = 4
    newton_steps: int = 120
    keep_saddle: bool = False


@dataclass(frozen=True)
class Descent:
    """Where a start ended: point, status, why, and the history of (step, matrices, F, residual).

    curvature : at the point; curvature_min : its lowest, over all gauge copies when the point is decoupled.
    """

    point: Point
    status: str
    message: str
    curvature: Curvature | None
    curvature_min: float | None
    history: tuple[tuple[str, int, float, float], ...]


def is_stationary(point: Point, scale: float, settings: Settings) -> bool:
    """True when residual and constraints are within tolerance."""
    small = np.abs(point.residual).max(initial=0.0) <= settings.residual * scale
    return bool(small and point.constraint_error <= 10 * CONSTRAINT_TOLERANCE)


def is_decoupled(problem: Problem, point: Point, settings: Settings) -> bool:
    """True when no correlator joins spinons and electrons (all hybridizations vanish)."""
    return bool(np.abs(point.p[problem.model.hybridization]).max(initial=0.0) < settings.decoupled)


def descend(
    problem: Problem,
    fields: Array,
    settings: Settings | None = None,
    progress: Callable[[str, int, float, float], None] | None = None,
) -> Descent:
    """Lower F from the fields (N,) until a certified stationary point or a step limit; F never rises.

    Never raises on numerical trouble: the status says "minimum", "saddle" or "not-converged".
    `progress` is called after every step with (step name, matrices so far, F, largest residual), as in the history.
    """
    settings = settings or Settings()
    history: list[tuple[str, int, float, float]] = []

    def record(name: str, at: Point) -> None:
        history.append((name, problem.matrices, at.free_energy, float(np.abs(at.residual).max(initial=0.0))))
        if progress:
            progress(*history[-1])

    point = point_at(problem, fields)
    record("start", point)
    if not point.is_finite:
        return Descent(point, "not-converged", "the start has no finite free energy", None, None, tuple(history))
    newton: Step = StationaryNewton() if settings.keep_saddle else TrustRegion()
    phases: tuple[tuple[Step, int], ...] = ((Mixing(), settings.mixing_steps), (newton, settings.newton_steps))
    try:
        for step, limit in phases:
            point, verdict = _go_down(problem, point, step, limit, settings, record)
            if verdict is not None:
                return replace(verdict, history=tuple(history))
    except np.linalg.LinAlgError as error:
        return Descent(point, "not-converged", f"linear algebra failed: {error}", None, None, tuple(history))
    message = f"not stationary after {len(history) - 1} steps; try another start, seed or temperature"
    return Descent(point, "not-converged", message, None, None, tuple(history))


def _go_down(
    problem: Problem, point: Point, step: Step, limit: int, settings: Settings, record: Callable[[str, Point], None]
) -> tuple[Point, Descent | None]:
    """At most `limit` steps of one kind; the verdict if they end at a minimum (or a saddle that is to be kept)."""
    scale = problem.model.scale
    memory, left_saddle = step.init(), None
    for _ in range(limit):
        if point is not left_saddle and is_stationary(point, scale, settings):
            verdict, point = certify(problem, point, settings)
            if verdict.status == "minimum" or settings.keep_saddle:
                return point, verdict
            if not step.leaves_saddles:
                break
            left_saddle, memory = point, step.init()
        change, memory = step.propose(problem, point, memory)
        trial = _trial(problem, point, step, change, memory)
        # A state that violates its constraints has no energy to compare.
        solved = trial.constraint_error <= max(10 * CONSTRAINT_TOLERANCE, point.constraint_error)
        accepted = trial.is_finite and solved and step.improves(point, trial, ROUNDING * scale)
        memory = step.judge(memory, accepted, trial.free_energy - point.free_energy)
        if accepted:
            point = trial
        record(step.name, point)
    return point, None


def certify(problem: Problem, point: Point, settings: Settings) -> tuple[Descent, Point]:
    """Verdict on a stationary point, and the point to go on from: for a decoupled state the softest gauge copy.

    The gauge copies of a decoupled state are the same physical state but see different uniform hybridizations, so
    its lowest curvature is the lowest over all of them.
    """
    point, here = _with_curvature(problem, point, settings)
    softest, lowest = point, here.lowest
    if is_decoupled(problem, point, settings):
        for copy in gauge_copies(problem, point):
            copy, curvature = _with_curvature(problem, copy, settings)
            if curvature.lowest < lowest:
                softest, lowest = copy, curvature.lowest
    if lowest >= -settings.curvature:
        return Descent(point, "minimum", "stationary; F falls in no direction", here, lowest, ()), point
    return Descent(point, "saddle", "stationary; there are directions in which F falls", here, lowest, ()), softest


def _with_curvature(problem: Problem, point: Point, settings: Settings) -> tuple[Point, Curvature]:
    """A stationary point, with other free multipliers if its own leave the curvature negative, and its curvature."""
    here = curvature_at(problem, point)
    other, curvature = supported(problem, point, here)
    return (other, curvature) if is_stationary(other, problem.model.scale, settings) else (point, here)


def _trial(problem: Problem, point: Point, step: Step, change: Array, memory: Any) -> Point:
    """Point at the proposed change, with the step's corrections while they lower F."""
    # A change leaves constraint errors of second order; solving them much better than that is waste on the way, since
    # F is right to first order in them.
    size = float(np.abs(change).max(initial=0.0)) / problem.model.scale
    tolerance = float(np.clip(size**2, CONSTRAINT_TOLERANCE, 1e-6))
    trial = _moved(problem, point, change, tolerance)
    for _ in range(MOST_CORRECTIONS):
        correction = step.correct(problem, point, trial, memory) if trial.is_finite else None
        if correction is None:
            break
        corrected = _moved(problem, trial, correction, tolerance)
        if not corrected.free_energy < trial.free_energy:
            break
        trial = corrected
    # Where the constrained quantities hardly respond, the second order is not small: F is compared without it.
    solved = trial.constraint_error <= CONSTRAINT_TOLERANCE or not trial.is_finite
    return trial if solved else point_at(problem, trial.phi)


def _moved(problem: Problem, point: Point, change: Array, tolerance: float) -> Point:
    fields = point.phi.copy()
    fields[problem.model.active] += problem.project(change)
    return point_at(problem, fields, tolerance)
