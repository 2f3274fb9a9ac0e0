"""All branches of minima of a material along one parameter, their ends and their crossings."""

from collections import deque
from collections.abc import Callable, Iterator
from dataclasses import dataclass, replace
from itertools import combinations, pairwise

import numpy as np
from scipy.optimize import brentq
from threadpoolctl import threadpool_limits

from kondomf.errors import InputError
from kondomf.material import Material
from kondomf.meanfield.continuation import AROUND, CONTINUOUS, LIMIT, ZERO, BranchPoint, End, Family, Follower
from kondomf.meanfield.driver import descend
from kondomf.meanfield.engine import engine_for, search_work
from kondomf.meanfield.search import solve
from kondomf.meanfield.solution import trial
from kondomf.meanfield.starts import Start, carried_over

DISCRETE = ("zone", "search")
"""Sections of a material whose numbers are no parameters of the physics."""
MOST_BRANCHES = 12
STARTS = 30
"""Starts of a search that take about as long as following all branches."""
PRECISION = 1e-4
"""Default precision of ends and crossings in units of the range."""
SAME_F = 1e-7
"""Branches whose F is relatively closer than this are not told apart at a transition."""


@dataclass(frozen=True)
class Branch:
    """Minima in the order of x, and the ends on the side of low and of high x."""

    points: tuple[BranchPoint, ...]
    ends: tuple[End, End]

    @property
    def range(self) -> tuple[float, float]:
        return self.ends[0].x, self.ends[1].x

    @property
    def curve(self) -> tuple[BranchPoint, ...]:
        """The points and the states at the ends."""
        low, high = (() if end.state is None else (end.state,) for end in self.ends)
        return (*low, *self.points, *high)

    def nearest(self, x: float) -> BranchPoint:
        return min(self.points, key=lambda point: abs(point.x - x))


@dataclass(frozen=True)
class Transition:
    """Where branches (by index) meet: "first order" where F of two is equal, "continuous" where one ends in another.

    lowest : no other branch is lower there; otherwise it joins metastable states.
    """

    x: float
    kind: str
    free_energy: float
    branches: tuple[int, ...]
    lowest: bool


@dataclass(frozen=True)
class Diagram:
    """Branches of `family` and their transitions, in the order of x.

    precision : in the unit of the parameter. complete : False where the number of branches was cut at MOST_BRANCHES.
    """

    family: Family
    precision: float
    branches: tuple[Branch, ...]
    transitions: tuple[Transition, ...]
    complete: bool


def follow_branches(
    material: Material,
    key: str,
    low: float,
    high: float,
    *,
    precision: float | None = None,
    progress: Callable[[str], None] | None = None,
) -> Diagram:
    """Branches of minima met from searches at low, middle and high x, followed to their ends.

    What a descent meets beyond an end is followed too where no branch is lower: soft magnets have a swarm of
    metastable orientations, each with a short branch of its own.

    `key` is a dotted numeric key of the material. Raises InputError for a key that does not vary continuously, an
    empty range, or a range in which the material is refused.
    """
    if key.split(".")[0] in DISCRETE:
        raise InputError(f"{key} is no coupling, filling or temperature; a branch cannot be followed along it")
    if not low < high:
        raise InputError(f"range {low:g}:{high:g} of {key}: give FROM below TO")
    family = Family(material, key, low, high)
    for x in (low, high):
        family.material_at(x)
    problem = family.at(high)
    family = replace(family, engine=engine_for(search_work(problem.model, problem.zone, STARTS)))
    precision = PRECISION * (high - low) if precision is None else precision
    if not 0 < precision < high - low:
        raise InputError(f"precision {precision:g} of {key}: give a number above 0 and below the range")
    follower = Follower(family, precision)
    say = progress or (lambda text: None)
    found: list[Branch] = []
    with threadpool_limits(1, user_api="blas"):
        seeds = deque((x, start, False) for x, start in _searched(family, say))
        while seeds and len(found) < MOST_BRANCHES:
            branch = _branch(follower, found, *seeds.popleft())
            if branch is not None:
                found.append(branch)
                say(f"a branch of {_text(branch)}")
                seeds.extend((*end.beyond, True) for end in branch.ends if end.beyond)
        found.sort(key=lambda branch: branch.range)
        transitions = sorted((*_crossings(follower, found), *_continuous(follower, found)), key=lambda t: t.x)
    return Diagram(family, precision, tuple(found), tuple(transitions), complete=not seeds)


def _searched(family: Family, say: Callable[[str], None]) -> Iterator[tuple[float, Start]]:
    """The distinct minima of searches at the ends and in the middle of the range."""
    for x in (family.low, (family.low + family.high) / 2, family.high):
        say(f"search at {family.key} = {x:g}")
        solution = solve(family.material_at(x))
        model = family.at(x).model
        for one in solution.minima:
            yield x, carried_over(model, one.start, one.model.table, one.p)


def _branch(follower: Follower, known: list[Branch], x: float, start: Start, lowest: bool) -> Branch | None:
    """The branch of the minimum that `start` leads to at x, followed both ways.

    None if it is known or no minimum, or not the lowest there although it must be.
    """
    family, problem = follower.family, follower.family.at(x)
    down = descend(problem, problem.first_fields(start.p))
    if down.status != "minimum":
        return None
    here = follower.branch_point(x, problem, down.point)
    others = [state for branch in known if (state := state_at(follower, branch, x)) is not None]
    bound = here.free_energy - SAME_F * abs(here.free_energy)
    undercut = lowest and any(state.free_energy < bound for state in others)
    if here.soft < -ZERO or undercut or any(_same(here, state) for state in others):
        return None
    below, low = follower.follow(here, family.low)
    above, high = follower.follow(here, family.high)
    return Branch((*reversed(below[1:]), *above), (low, high))


def _same(here: BranchPoint, there: BranchPoint) -> bool:
    """True if two states of one x are the same up to gauge and symmetry."""
    one, other = (trial(state.model, "", "minimum", state.point) for state in (here, there))
    return one.same_state(other)


def state_at(follower: Follower, branch: Branch, x: float) -> BranchPoint | None:
    """The state of `branch` at x, solved there; None outside its range."""
    if not branch.range[0] <= x <= branch.range[1]:
        return None
    points, end = follower.follow(branch.nearest(x), x)
    return points[-1] if end.kind == LIMIT else None


def _crossings(follower: Follower, branches: list[Branch]) -> Iterator[Transition]:
    """Where F of two branches is equal: brackets between points of the branches, then solved to the precision."""
    for i, j in combinations(range(len(branches)), 2):
        one, other = branches[i], branches[j]

        def difference(x: float, one: Branch = one, other: Branch = other) -> float:
            return _energy(follower, one, x) - _energy(follower, other, x)

        inside = max(one.range[0], other.range[0]), min(one.range[1], other.range[1])
        grid = sorted({p.x for b in (one, other) for p in b.points if inside[0] <= p.x <= inside[1]})
        values = [(x, d) for x in grid if SAME_F * abs(one.points[0].free_energy) < abs(d := difference(x)) < np.inf]
        for (left, d_left), (right, d_right) in pairwise(values):
            if d_left * d_right > 0:
                continue
            x = float(brentq(difference, left, right, xtol=follower.precision))
            energies = [_energy(follower, branch, x) for branch in branches]
            own = min(energies[i], energies[j])
            if not np.isfinite(own):  # neither branch was found again there
                continue
            yield Transition(x, "first order", own, (i, j), own <= min(energies) + SAME_F * abs(own))


def _continuous(follower: Follower, branches: list[Branch]) -> Iterator[Transition]:
    """Continuous ends of branches; where two branches end in each other, one of them."""
    told: list[float] = []
    for i, branch in enumerate(branches):
        for end in branch.ends:
            if end.kind != CONTINUOUS or end.state is None:
                continue
            own = end.state.free_energy
            energies = [_energy(follower, other, end.x) for other in branches]
            others = tuple(j for j, f in enumerate(energies) if j != i and abs(f - own) < SAME_F * abs(own))
            if any(abs(end.x - x) < AROUND * follower.precision for x in told):
                continue
            told.append(end.x)
            yield Transition(
                end.x, "continuous", own, (i, *others), own <= min(energies, default=own) + SAME_F * abs(own)
            )


def _energy(follower: Follower, branch: Branch, x: float) -> float:
    """F of the branch at x in meV per cell, infinite outside its range."""
    state = state_at(follower, branch, x)
    return np.inf if state is None else state.free_energy


def _text(branch: Branch) -> str:
    low, high = branch.ends
    return f"{len(branch.points)} states from {low.x:g} ({low.kind}) to {high.x:g} ({high.kind})"
