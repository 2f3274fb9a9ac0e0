"""Finds the lowest state of a material and the other minima: many starts, distinct ends, evidence for each."""

import time
from collections.abc import Callable, Iterable
from dataclasses import dataclass, replace

import numpy as np
from threadpoolctl import threadpool_limits

from kondomf.errors import InputError
from kondomf.material import Material
from kondomf.meanfield.classes import CLASSES, class_basis
from kondomf.meanfield.curvature import Curvature, curvature_at
from kondomf.meanfield.driver import Descent, Settings, certify, descend
from kondomf.meanfield.engine import Engine, engine_for, search_work
from kondomf.meanfield.problem import Point, Problem, point_at
from kondomf.meanfield.solution import SAME_ENERGY, Solution, Trial, grouped, trial
from kondomf.meanfield.starts import Start, standard_starts, starts
from kondomf.meanfield.zero_modes import SoftMode, ZeroModes, soft_mode, zero_modes
from kondomf.meanfield.zone import uniform
from kondomf.model import build_model

COARSE_FROM = 16
"""Grids of at least this many points a direction are searched at half the points first."""
MOST_KEPT = 6
"""Distinct ends of a search that are refined and certified, the lowest first."""
FEASIBLE = 1e-6
"""Largest constraint error of a point whose F bounds that of the lowest state."""


@dataclass(frozen=True)
class _End:
    """Where a start, the `number`-th, ended; `found` counts the starts that ended in the same minimum."""

    trial: Trial
    descent: Descent
    number: int
    found: int = 1

    @property
    def free_energy(self) -> float:
        """F in meV per magnetic cell; infinite where it is no number."""
        value = self.descent.point.free_energy
        return value if np.isfinite(value) else np.inf

    @property
    def settled(self) -> bool:
        """True for a minimum, or a saddle that was to be kept."""
        return self.descent.status != "not-converged"


def solve(
    material: Material,
    *,
    extra_starts: Iterable[Start] = (),
    only_starts: Iterable[Start] | None = None,
    settings: Settings | None = None,
    most_kept: int = MOST_KEPT,
    engine: Engine | None = None,
    progress: Callable[[str], None] | None = None,
) -> Solution:
    """Lowest state of `material` in its search.phase, from its seeded starts, `extra_starts` and their descents.

    `only_starts` replaces the standard starts. The other distinct minima come along as `others`; `most_kept` ends are
    refined on the full grid and certified. `engine` computes; without it the one that is
    done soonest. `progress` receives one line of text per finished start.
    Numerical failure is the status of the result.
    """
    began = time.perf_counter()
    settings = settings or Settings()
    model, phase = build_model(material), material.search.phase
    seeded = starts(model, material.search.starts, material.search.seed, hybridized_only=CLASSES[phase].hybridized)
    chosen = list(only_starts) if only_starts is not None else [*extra_starts, *seeded]
    points, offset, basis = material.zone.points, material.zone.offset, class_basis(model, phase)
    zone = uniform(points, offset)
    engine = engine or engine_for(search_work(model, zone, len(chosen)))
    fine = Problem(model, zone, basis, engine)
    coarse = Problem(model, uniform(2 * (points // 4), offset), basis, engine) if points >= COARSE_FROM else None
    with threadpool_limits(1, user_api="blas"):  # the matrices are small: more threads only wait for each other
        ends = _descend_all(coarse or fine, chosen, settings, progress)
        first, *rest = _distinct(ends)
        kept = [first, *sorted(rest, key=lambda end: end.free_energy)[: most_kept - 1]]
        if coarse:
            again = [Start(end.trial.start, end.descent.point.p) for end in kept]
            refined = zip(_descend_all(fine, again, settings, None), kept, strict=True)
            kept = [replace(end, found=old.found) for end, old in refined]
        best, *others = _distinct(kept)
        states = [_certified(fine, end, material, settings) for end in (best, *others) if end is best or end.settled]
    lower = _ended_lower(best, others)
    return replace(
        states[0],
        message=states[0].message + ("" if lower is None else _lower_text(states[0], lower)),
        trials=tuple(end.trial for end in ends),
        others=tuple(states[1:]),
        ended_lower=lower,
        evaluations=sum(state.evaluations for state in states) + fine.matrices + (coarse.matrices if coarse else 0),
        wall_seconds=time.perf_counter() - began,
    )


def named_start(material: Material, name: str) -> Start:
    """The standard start called `name`, without the small noise that a search adds.

    Raises InputError for an unknown name.
    """
    known = standard_starts(build_model(material))
    if name not in known:
        raise InputError(f'there is no start "{name}"; the starts are {", ".join(known)}')
    return known[name]


def _descend_all(
    problem: Problem, begin: Iterable[Start], settings: Settings, progress: Callable[[str], None] | None
) -> list[_End]:
    ends: list[_End] = []
    for start in begin:
        descent = descend(problem, problem.first_fields(start.p), settings)
        end = trial(problem.model, start.name, descent.status, descent.point)
        ends.append(_End(end, descent, len(ends)))
        if progress:
            energy = end.free_energy_meV_per_cell
            progress(f"start {len(ends)} ({start.name}): {end.status}, F = {energy:.6f} meV per cell")
    return ends


def _distinct(ends: list[_End]) -> list[_End]:
    """One end per state, the settled ones first, each lowest first; an unsettled end near a settled one is dropped."""
    ordered = sorted(ends, key=lambda end: (not end.settled, end.free_energy))
    result: list[_End] = []
    for group in grouped([end.trial for end in ordered]):
        settled = [ordered[i] for i in group if ordered[i].settled]
        if settled:  # the first start speaks for the state: F of the others differs by rounding
            first = min(settled, key=lambda end: end.number)
            result.append(replace(first, found=sum(end.found for end in settled)))
        else:
            result.append(ordered[group[0]])
    return result


def _ended_lower(best: _End, others: list[_End]) -> Trial | None:
    """The lowest end that did not settle but lies below the best that did, with its constraints fulfilled."""
    bound = best.free_energy - SAME_ENERGY * abs(best.free_energy)
    lower = [e for e in others if e.free_energy < bound and e.descent.point.constraint_error < FEASIBLE]
    return min(lower, key=lambda end: end.free_energy).trial if best.settled and lower else None


def _lower_text(solution: Solution, lower: Trial) -> str:
    gap = solution.free_energy_meV_per_cell - lower.free_energy_meV_per_cell
    return (
        f'; not the lowest state: start "{lower.start}" came {gap:.3g} meV lower without converging; '
        "solve again with more starts or another seed"
    )


def _stability(
    problem: Problem, point: Point, descent: Descent, settings: Settings
) -> tuple[Curvature | None, float | None, ZeroModes | None, SoftMode | None]:
    """Curvature at `point` in the space of all fields, its lowest value over gauge copies, zero modes and soft mode.

    None throughout where they are not known.
    """
    full, lowest, softest = descent.curvature, descent.curvature_min, point
    try:
        if full is not None and (problem.basis is not None or descent.status == "saddle"):
            verdict, softest = certify(replace(problem, basis=None), point, settings)
            full, lowest = verdict.curvature, verdict.curvature_min
        if full is not None:
            here = full if softest is point else curvature_at(problem, softest, full_space=True)
            return full, lowest, zero_modes(problem, point, full), soft_mode(problem, softest, here)
    except np.linalg.LinAlgError:
        pass  # what the descent found stands; nothing is known beyond it
    return None, None, None, None


def _certified(problem: Problem, end: _End, material: Material, settings: Settings) -> Solution:
    """The solution of one end with its evidence, in its class and in the space of all fields."""
    model, descent = problem.model, end.descent
    cells = model.cell.size
    everything = replace(problem, basis=None)
    doubled = replace(everything, zone=uniform(2 * problem.zone.points, problem.zone.offset))
    point = descent.point if problem.basis is None else point_at(everything, descent.point.phi)
    full, lowest, zeros, soft = _stability(problem, point, descent, settings)
    zone_error = abs(point_at(doubled, point.phi).free_energy - point.free_energy) / cells
    in_class = descent.status == "minimum" and problem.basis is not None
    return Solution(
        model=model,
        zone=problem.zone,
        phi=point.phi,
        p=point.p,
        correlators=point.state.correlators,
        multipliers=point.multipliers,
        free_energy_meV_per_cell=descent.point.free_energy / cells,
        entropy_kB_per_cell=point.state.entropy / cells,
        status="minimum-in-class" if in_class else descent.status,
        message=descent.message,
        phase_class=material.search.phase,
        start=end.trial.start,
        residual_meV=float(np.abs(descent.point.residual).max(initial=0.0)),
        residual_full_space_meV=float(np.abs(point.residual).max(initial=0.0)),
        constraint_error=point.constraint_error,
        curvature_min=descent.curvature_min,
        curvature_full_space=lowest,
        curvatures=tuple(float(x) for x in full.eigenvalues[:12]) if full else (),
        zero_modes=zeros,
        soft_mode=soft,
        zone_error_meV=zone_error,
        evaluations=everything.matrices + doubled.matrices,
        wall_seconds=0.0,
        history=descent.history,
        trials=(),
        found=end.found,
        others=(),
        ended_lower=None,
        inputs=material.to_dict(),
    )
