"""Finds the lowest state of a material: many starts, distinct ends, evidence for the best."""

import time
from collections.abc import Callable, Iterable
from dataclasses import dataclass, replace

import numpy as np
from threadpoolctl import threadpool_limits

from kondomf.errors import InputError
from kondomf.material import Material
from kondomf.meanfield.classes import class_basis
from kondomf.meanfield.driver import Descent, Settings, certify, descend
from kondomf.meanfield.problem import Problem, point_at
from kondomf.meanfield.solution import Solution, Trial
from kondomf.meanfield.starts import Start, standard_starts, starts
from kondomf.meanfield.zero_modes import zero_modes
from kondomf.meanfield.zone import uniform
from kondomf.model import MeanFieldModel, build_model

COARSE_FROM = 16
"""Grids of at least this many points a direction are searched at half the points first."""
WINDOW = 5e-3
"""Distinct ends of a coarse search within this of the lowest, in units of the largest coupling, are refined."""
MOST_REFINED = 3


@dataclass(frozen=True)
class _End:
    start: Start
    descent: Descent

    @property
    def free_energy(self) -> float:
        return self.descent.point.free_energy


def solve(
    material: Material,
    *,
    extra_starts: Iterable[Start] = (),
    only_starts: Iterable[Start] | None = None,
    settings: Settings | None = None,
    progress: Callable[[str], None] | None = None,
) -> Solution:
    """Lowest state of `material` in its search.phase, from its seeded starts, `extra_starts` and their descents.

    `only_starts` replaces the standard starts. `progress` receives one line of text per finished start.
    Numerical failure is the status of the result.
    """
    began = time.perf_counter()
    settings = settings or Settings()
    model = build_model(material)
    zone = uniform(material.zone.points, material.zone.offset)
    basis = class_basis(model, material.search.phase)
    hybridized = material.search.phase == "heavy-fermi-liquid"
    seeded = starts(model, material.search.starts, material.search.seed, hybridized_only=hybridized)
    chosen = list(only_starts) if only_starts is not None else [*extra_starts, *seeded]
    fine = Problem(model, zone, basis)
    coarse = fine
    if material.zone.points >= COARSE_FROM:
        coarse = Problem(model, uniform(2 * (material.zone.points // 4), material.zone.offset), basis)
    with threadpool_limits(1, user_api="blas"):  # the matrices are small: more threads only wait for each other
        ends = _descend_all(coarse, chosen, settings, progress)
        trials = tuple(_trial(model, end) for end in ends)
        if coarse is not fine:
            chosen = [Start(end.start.name, end.descent.point.p) for end in _distinct(model, ends)]
            ends = _descend_all(fine, chosen, settings, None)
        best = min(ends, key=lambda end: (not _converged(end, settings), end.free_energy))
        solution = _with_evidence(fine, best, material, settings)
    evaluations = solution.evaluations + (coarse.matrices if coarse is not fine else 0)
    return replace(solution, trials=trials, evaluations=evaluations, wall_seconds=time.perf_counter() - began)


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
    ends = []
    for start in begin:
        fields = start.fields(problem.model)
        active = problem.model.active
        fields[active] = problem.model.h[active] + problem.project(fields[active] - problem.model.h[active])
        end = _End(start, descend(problem, fields, settings))
        ends.append(end)
        if progress:
            energy = end.free_energy / problem.model.cell.size
            progress(f"start {len(ends)} ({start.name}): {end.descent.status}, F = {energy:.6f} meV per cell")
    return ends


def _converged(end: _End, settings: Settings) -> bool:
    return end.descent.status == "minimum" or (settings.keep_saddle and end.descent.status == "saddle")


def _distinct(model: MeanFieldModel, ends: list[_End]) -> list[_End]:
    """Lowest ends that are not the same state, at most MOST_REFINED."""
    result: list[_End] = []
    for end in sorted(ends, key=lambda e: e.free_energy):
        if result and end.free_energy > result[0].free_energy + WINDOW * model.scale:
            break
        if not any(_trial(model, end).same_state(_trial(model, other)) for other in result):
            result.append(end)
    return result[:MOST_REFINED]


def _trial(model: MeanFieldModel, end: _End) -> Trial:
    w = end.descent.point.p[model.hybridization]
    size = float(np.sqrt(w @ w / (16 * model.cell.n_sites)))
    return Trial(end.start.name, end.descent.status, end.free_energy / model.cell.size, size)


def _with_evidence(problem: Problem, end: _End, material: Material, settings: Settings) -> Solution:
    model, descent = problem.model, end.descent
    point, status, full, zeros = descent.point, descent.status, descent.curvature, None
    lowest_full = descent.curvature_min
    if full is not None and problem.basis is not None:
        everything = replace(problem, basis=None)
        verdict, _ = certify(everything, point, settings)
        full, lowest_full = verdict.curvature, verdict.curvature_min
        status = "minimum-in-class" if status == "minimum" else status
    if full is not None:
        zeros = zero_modes(problem, point, full)
    doubled = Problem(model, uniform(2 * problem.zone.points, problem.zone.offset))
    zone_error = abs(point_at(doubled, point.phi).free_energy - point.free_energy) / model.cell.size
    return Solution(
        model=model,
        zone=problem.zone,
        phi=point.phi,
        p=point.p,
        correlators=point.state.correlators,
        multipliers=point.multipliers,
        free_energy_meV_per_cell=point.free_energy / model.cell.size,
        entropy_kB_per_cell=point.state.entropy / model.cell.size,
        status=status,
        message=descent.message,
        phase_class=material.search.phase,
        start=end.start.name,
        residual_meV=float(np.abs(point.residual).max(initial=0.0)),
        constraint_error=point.constraint_error,
        curvature_min=descent.curvature_min,
        curvature_full_space=lowest_full,
        curvatures=tuple(float(x) for x in full.eigenvalues[:12]) if full else (),
        zero_modes=zeros,
        zone_error_meV=zone_error,
        evaluations=problem.matrices + doubled.matrices,
        wall_seconds=0.0,
        history=descent.history,
        trials=(),
        inputs=material.to_dict(),
    )
