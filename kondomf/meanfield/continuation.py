"""Follows a branch of minima in one parameter, to where it ends.

Points are sought by Newton steps in the fields and the parameter together, on a plane across the tangent, so that a
branch can be followed round the turning point at which it ceases to exist.
Source of the method: "Numerical solution of bifurcation and nonlinear eigenvalue problems", in Applications of
Bifurcation Theory (Academic Press, 1977), pages 359-384 (from memory).
"""

from dataclasses import dataclass, field
from typing import Any, NamedTuple

import numpy as np
from numpy.typing import NDArray
from scipy.optimize import brentq

from kondomf.material import Material, with_value
from kondomf.meanfield.classes import class_basis
from kondomf.meanfield.curvature import Curvature, curvature_at, gauge_copies
from kondomf.meanfield.driver import Settings, descend, is_decoupled, is_stationary
from kondomf.meanfield.engine import NUMPY, Engine
from kondomf.meanfield.problem import Point, Problem, point_at
from kondomf.meanfield.starts import Start
from kondomf.meanfield.zero_modes import ZERO
from kondomf.meanfield.zone import uniform
from kondomf.model import MeanFieldModel, build_model

Array = NDArray[np.float64]

FIRST_STEP, LONGEST_STEP, SHORTEST_STEP = 0.03, 0.1, 1e-6
"""Steps along a branch: length in (P, u), u the parameter in units of its range."""
NEWTON_STEPS = 8
DIFFERENCE = 1e-5
"""Step in u of the derivatives with respect to the parameter."""
STRAIGHT = 0.8
"""Cosine between a step and the one before, below which it may have jumped to another branch."""
AROUND = 10
"""Distance at which the state beyond the end of a branch is looked at, in units of the precision."""
NO_JUMP = 0.01
"""Order parameters just beyond the end of a branch that differ by less from those at the end do not jump."""

LIMIT, SPINODAL, CONTINUOUS, LOST = "end of the range", "spinodal", "continuous transition", "not followed further"


@dataclass(frozen=True)
class Family:
    """Materials that differ in the number `key` (dotted), between `low` and `high`, in the unit of the key."""

    material: Material
    key: str
    low: float
    high: float
    engine: Engine = NUMPY

    @property
    def span(self) -> float:
        return self.high - self.low

    def material_at(self, x: float) -> Material:
        return with_value(self.material, self.key, x)

    def at(self, x: float) -> Problem:
        """The problem at x. A coupling of exactly zero has no channels: next to nothing stands for it."""
        material = self.material_at(x or 1e-12 * self.span)
        model = build_model(material)
        zone = uniform(material.zone.points, material.zone.offset)
        return Problem(model, zone, class_basis(model, material.search.phase), self.engine)

    def move(self, point: Point, x: float, change: Array | float = 0.0) -> tuple[Problem, Point]:
        """Problem and point at x with the active fields of `point` plus `change` (Na,)."""
        problem = self.at(x)
        active = problem.model.active
        phi = problem.model.h.copy()
        phi[active] = point.phi[active] + change
        return problem, point_at(problem, phi)


@dataclass(frozen=True)
class BranchPoint:
    """A stationary state of `material` at x.

    modes : its curvature. soft : the lowest that is no zero mode, over the gauge copies if they count.
    """

    material: Material
    x: float
    problem: Problem
    point: Point
    modes: Curvature
    soft: float

    @property
    def model(self) -> MeanFieldModel:
        return self.problem.model

    @property
    def correlators(self) -> Array:
        """<i gamma_a(0) gamma_b(R)> of all Majoranas, (NR, n, n)."""
        return self.point.state.correlators

    @property
    def inputs(self) -> dict[str, Any]:
        return self.material.to_dict()

    @property
    def free_energy(self) -> float:
        """F in meV per primitive cell."""
        return self.point.free_energy / self.model.cell.size


@dataclass(frozen=True)
class End:
    """Where and how a branch ends.

    state : at the end, where it was reached. beyond : x just past it and the minimum that a descent finds there.
    """

    x: float
    kind: str
    state: BranchPoint | None = None
    beyond: tuple[float, Start] | None = None


@dataclass(frozen=True)
class _Plane:
    """n.(P - P0) + m (u - u0) = s, for the correlators P of the active channels and u = x/span."""

    p: Array
    u: float
    n: Array
    m: float
    s: float

    def miss(self, u: float, p: Array) -> float:
        return self.s - float(self.n @ (p - self.p)) - self.m * (u - self.u)


class _Linear(NamedTuple):
    """Linear response of the state to the parameter u.

    modes : curvature. drift (Na,), pull (Na,) : derivatives of correlators and residual at fixed active fields.
    f (d,) : drive of the modes, R^T pull. moving (d,) : False for zero modes, which nothing drives.
    """

    modes: Curvature
    drift: Array
    pull: Array
    f: Array
    moving: NDArray[np.bool_]


class _Found(NamedTuple):
    """A stationary state on a plane, and the Newton steps it took."""

    problem: Problem
    point: Point
    x: float
    steps: int


@dataclass(frozen=True)
class Follower:
    """Follows branches of a family of materials.

    precision : of the end of a branch, in the unit of the parameter. copies : a decoupled state is judged by the
    lowest curvature over its gauge copies, as its stability demands; False: by its own.
    """

    family: Family
    precision: float
    copies: bool = True
    settings: Settings = field(default_factory=Settings)

    def branch_point(self, x: float, problem: Problem, point: Point) -> BranchPoint:
        """The point with its lowest curvature."""
        modes = curvature_at(problem, point)
        copies = gauge_copies(problem, point) if self.copies and is_decoupled(problem, point, self.settings) else []
        all_modes = [modes, *(curvature_at(problem, copy) for copy in copies)]
        eigenvalues = np.concatenate([each.eigenvalues for each in all_modes])
        soft = float(eigenvalues[np.abs(eigenvalues) > ZERO].min(initial=1.0))
        return BranchPoint(self.family.material_at(x), x, problem, point, modes, soft)

    def at(self, here: BranchPoint, x: float) -> BranchPoint | None:
        """The state of the branch through `here` at x nearby; None where Newton steps do not lead there."""
        n = np.zeros(len(here.problem.model.active))
        u = here.x / self.family.span
        found = self._correct(here, _Plane(n, u, n, 1.0, x / self.family.span - u))
        return None if found is None else self.branch_point(x, found.problem, found.point)

    def follow(self, start: BranchPoint, to: float) -> tuple[list[BranchPoint], End]:
        """Points from `start` (included) towards x = `to`, until the branch ends or x is reached."""
        if start.x == to:
            return [start], End(to, LIMIT)
        direction = float(np.sign(to - start.x))
        points, s, tangent = [start], FIRST_STEP, direction * self._slope(start)
        while s > SHORTEST_STEP:
            here = points[-1]
            found = self._correct(here, self._plane(here, tangent, s))
            past = found is not None and (found.x - to) * direction >= 0
            there = None if found is None else self.at(here, to) if past else self._judge(found)
            step = None if there is None else self._step(here, there)
            if found is None or there is None or step is None or step @ tangent < STRAIGHT * np.linalg.norm(step):
                s /= 2
                continue
            if there.soft < -ZERO or step[-1] * direction < 0:
                back = float(np.linalg.norm(self._step(here, points[-2]))) if len(points) > 1 else 0.0
                return points, self._end(here, tangent, (-back, s), there.soft < -ZERO, direction)
            points.append(there)
            if past:
                return points, End(to, LIMIT)
            tangent = step / np.linalg.norm(step)
            s = min(LONGEST_STEP, s * (1.5 if found.steps <= 3 else 0.8))
        return points, End(points[-1].x, LOST)

    def _plane(self, here: BranchPoint, tangent: Array, s: float) -> _Plane:
        return _Plane(_correlators(here.problem, here.point), here.x / self.family.span, tangent[:-1], tangent[-1], s)

    def _slope(self, here: BranchPoint) -> Array:
        """Unit vector along (dP, du) of the branch in the direction of growing u, by linear response."""
        linear = self._linearized(here.x, here.problem, here.point, here.modes)
        y = np.zeros(len(linear.f))
        y[linear.moving] = -linear.f[linear.moving] / linear.modes.eigenvalues[linear.moving]
        step = np.append(linear.drift + linear.modes.root_vectors @ y, 1.0)
        return step / np.linalg.norm(step)

    def _step(self, here: BranchPoint, there: BranchPoint) -> Array:
        """Change (dP, du) from one point of a branch to another."""
        p = _correlators(there.problem, there.point) - _correlators(here.problem, here.point)
        return np.append(p, (there.x - here.x) / self.family.span)

    def _correct(self, here: BranchPoint, plane: _Plane) -> _Found | None:
        """Stationary state on the plane by Newton steps from `here`; None if they fail.

        With y the change of the correlators along the modes, P' = P + B du + R y and diag(H) y + f du = -R^T r, where
        B and f (per unit of u) are the derivatives at fixed active fields, the multipliers solved.
        """
        try:
            return self._newton(here, plane)
        except np.linalg.LinAlgError:
            return None

    def _newton(self, here: BranchPoint, plane: _Plane) -> _Found | None:
        family, x, problem, point = self.family, here.x, here.problem, here.point
        for steps in range(NEWTON_STEPS):
            p, u = _correlators(problem, point), x / family.span
            close = abs(plane.miss(u, p)) <= 1e-3 * abs(plane.s)
            if steps and close and is_stationary(point, problem.model.scale, self.settings):
                return _Found(problem, point, x, steps)
            at = self._linearized(x, problem, point, curvature_at(problem, point) if steps else here.modes)
            r = point.residual[problem.model.active]
            along = plane.n @ at.modes.root_vectors
            moving = at.moving | (np.abs(along) > 1e-3 * np.abs(along).max(initial=1e-300))
            matrix = np.block(
                [
                    [np.diag(at.modes.eigenvalues[moving]), at.f[moving, None]],
                    [along[moving], plane.n @ at.drift + plane.m],
                ]
            )
            right = np.append(-at.modes.coordinates(r)[moving], plane.miss(u, p))
            y = np.zeros(len(moving))
            *y[moving], du = np.linalg.lstsq(matrix, right, rcond=1e-12)[0]
            x += float(du) * family.span
            if not family.low - family.span < x < family.high + family.span:
                return None
            problem, point = family.move(point, x, at.modes.fields(y, r + at.pull * du, 0.0))
            if not point.is_finite:
                return None
        return None

    def _linearized(self, x: float, problem: Problem, point: Point, modes: Curvature) -> _Linear:
        """Derivatives with respect to u, towards the middle of the range, by a small difference."""
        family, active = self.family, problem.model.active
        du = DIFFERENCE * (1.0 if 2 * x < family.low + family.high else -1.0)
        _, ahead = family.move(point, x + du * family.span)
        pull = (ahead.residual - point.residual)[active] / du
        f = modes.coordinates(pull)
        # A symmetry keeps the drive off its zero modes; a soft mode that is driven is part of the branch.
        moving = (np.abs(modes.eigenvalues) > ZERO) | (np.abs(f) > 1e-4 * np.abs(f).max(initial=0.0))
        return _Linear(modes, (ahead.p - point.p)[active] / du, pull, f, moving)

    def _end(
        self, here: BranchPoint, tangent: Array, within: tuple[float, float], unstable: bool, direction: float
    ) -> End:
        """Locates the end within steps from `here`: where the curvature vanishes, or else where x turns back.

        At a continuous transition x turns where the order parameter changes sign, perhaps one step before `here`.
        """

        def at(t: float) -> BranchPoint:
            found = self._correct(here, self._plane(here, tangent, t))
            if found is None:
                raise _Lost
            return self._judge(found)

        try:
            if unstable:
                tolerance = 0.1 * self.precision / self.family.span
                last = at(float(brentq(lambda t: at(t).soft if t else here.soft, 0.0, within[1], xtol=tolerance)))
                return self._beyond(here, last, last.x, direction)
            t, reach = float(np.mean(within)), (within[1] - within[0]) / 2
            for _ in range(3):
                # Not at the turning point itself: a state without the order parameter is stationary there at every x.
                states = [at(t + reach * part) for part in (-1.0, 0.5, 1.0)]
                parabola = np.polynomial.Polynomial.fit([-1.0, 0.5, 1.0], [state.x for state in states], 2).convert()
                vertex = -parabola.coef[1] / (2 * parabola.coef[2])
                t, reach, x = t + reach * float(np.clip(vertex, -1, 1)), reach / 5, float(parabola(vertex))
            return self._beyond(here, states[1], x, direction)
        except (_Lost, ValueError):  # no state, or no change of sign, where there was one a moment ago
            return End(here.x, LOST)

    def _beyond(self, here: BranchPoint, last: BranchPoint, end: float, direction: float) -> End:
        """What a descent from the last state finds just past the end.

        It is a spinodal if the order parameters jump there: by more than they changed over the same distance before,
        and no less when it is halved twice.
        """
        family, distance = self.family, direction * AROUND * self.precision

        def change(p: Array) -> float:
            return float(np.abs(sizes(last.model, p) - sizes(last.model, last.point.p)).max())

        jumps, beyond = [], None
        for x in np.clip([end + distance, end + distance / 4], family.low, family.high):
            problem, point = family.move(last.point, float(x))
            down = descend(problem, point.phi, self.settings)
            if down.status != "minimum":
                return End(end, SPINODAL, last)
            beyond = beyond or (float(x), Start("beyond", down.point.p))
            jumps.append(change(down.point.p))
        before = self.at(here, end - distance)
        past = 0.0 if before is None else change(before.point.p)
        smooth = jumps[0] < max(NO_JUMP, past) or jumps[1] < 0.7 * jumps[0]
        return End(end, CONTINUOUS if smooth else SPINODAL, last, beyond)

    def _judge(self, found: _Found) -> BranchPoint:
        return self.branch_point(found.x, found.problem, found.point)


class _Lost(Exception):
    """Newton steps fail inside a step that had succeeded."""


def _correlators(problem: Problem, point: Point) -> Array:
    return point.p[problem.model.active]


def sizes(model: MeanFieldModel, p: Array) -> Array:
    """Root mean square per site of hybridizations, on-site spinon and electron bilinears, and spinon bonds, (4,)."""
    spinons, onsite = (model.species == 0).all(axis=1), model.onsite
    groups = (model.hybridization, spinons & onsite, ~spinons & ~model.hybridization & onsite, spinons & ~onsite)
    return np.sqrt([p[group] @ p[group] / model.cell.n_sites for group in groups])
