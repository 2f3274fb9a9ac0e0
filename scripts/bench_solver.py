"""Robustness and speed of the solver beside plain mixing, from the same seeded random starts.

    .venv/bin/python scripts/bench_solver.py --results bench.jsonl [--sets 0,3] [--starts 6] [--processes 2]

Twelve parameter sets on 12 x 12 midpoints at k_B T = 0.005 t: both signs of K, three fillings, magnetic channel on and
off, Gamma and Heisenberg exchange. Energies in units of t. Finished starts are appended to the results file; the same
command goes on with it.

Every method starts from the same fields and solves the multipliers exactly in every step, with the package's code:

    solver    kondomf.meanfield.driver.descend, evaluations in plain numpy
    compiled  the same with the compiled kernels on one thread, loaded beforehand
    linear    phi <- phi + 0.3 r
    anderson  the same damping with the last five residuals (J. ACM 12, 547 (1965))

The mixing loops stop when residual and constraints are within the solver's tolerance, or after 2000 steps. Their ends
are certified by the solver's curvature: minimum, saddle, or stalled (the residual was not reached).

Times are CPU times of one process with one BLAS thread, until F is within 1e-6 t of a target and stays there.
A start that never gets there counts with its step limit, 2000 for mixing and 124 for the solver, times its mean time
per step (a loop that has converged elsewhere is not run on). Three targets, since a descent can only choose among the
minima downhill of its start:

    lowest    the lowest certified minimum of the set, found by any method from any start
    own       the minimum in which the same start of the solver ends: for mixing reaching that F
    any       for each method the certified minimum in which it ends itself
"""

import argparse
import json
import os
import time
from collections.abc import Callable, Iterator
from concurrent.futures import ProcessPoolExecutor, as_completed
from dataclasses import dataclass
from itertools import product
from pathlib import Path
from typing import Any

import numpy as np
from check_values import T, material
from threadpoolctl import threadpool_limits

from kondomf.meanfield.driver import Settings, certify, descend, is_stationary
from kondomf.meanfield.engine import Engine
from kondomf.meanfield.kernels import compile_now
from kondomf.meanfield.problem import Point, Problem, point_at
from kondomf.meanfield.starts import noise
from kondomf.meanfield.zone import uniform
from kondomf.model import build_model

SETS: tuple[dict[str, Any], ...] = (
    {"kitaev": -1.0, "kondo": 3.5, "filling": 0.75, "magnetic": False},
    {"kitaev": -1.0, "kondo": 2.0, "filling": 1.0, "magnetic": True},
    {"kitaev": -1.0, "kondo": 4.0, "filling": 1.0, "magnetic": True},
    {"kitaev": 1.0, "kondo": 3.0, "filling": 0.9, "magnetic": True},
    {"kitaev": 1.0, "kondo": 2.5, "filling": 1.0, "magnetic": False},
    {"kitaev": -0.3, "kondo": 2.0, "filling": 0.9, "magnetic": False},
    {"kitaev": 0.3, "kondo": 1.5, "filling": 0.75, "magnetic": True},
    {"kitaev": -0.3, "kondo": 3.0, "filling": 0.9, "magnetic": True, "gamma": 0.15},
    {"kitaev": -0.05, "kondo": 2.0, "filling": 0.9, "magnetic": True},
    {"kitaev": 0.05, "kondo": 1.5, "filling": 0.75, "magnetic": False},
    {"kitaev": -0.05, "kondo": 1.0, "filling": 1.0, "magnetic": True, "gamma": 0.02},
    {"kitaev": -1.0, "kondo": 1.5, "filling": 0.75, "magnetic": True, "gamma": 0.3, "heisenberg": 0.2},
)
METHODS = ("solver", "compiled", "linear", "anderson")
OURS = METHODS[:2]
SETTINGS = Settings()
DAMPING, DEPTH, LIMIT = 0.3, 5, 2000
LIMITS = dict.fromkeys(OURS, SETTINGS.mixing_steps + SETTINGS.newton_steps) | dict.fromkeys(METHODS[2:], LIMIT)
CLOSE = 1e-6
"""F counts as reached within this, in units of t."""


@dataclass
class Trace:
    """F (units of t) against CPU seconds since the start, kept where F changes by more than a fifth of CLOSE."""

    began: float
    points: list[tuple[float, float]]
    steps: int = -1

    def add(self, free_energy: float) -> None:
        self.steps += 1
        value = free_energy / T
        if not self.points or not abs(value - self.points[-1][1]) < CLOSE / 5:
            self.points.append((time.process_time() - self.began, value))


def mix(problem: Problem, fields: np.ndarray, depth: int, trace: Trace) -> Point:
    """Damped fixed-point iteration, with Anderson acceleration over `depth` earlier steps (0: linear mixing)."""
    point = point_at(problem, fields)
    trace.add(point.free_energy)
    history: list[tuple[np.ndarray, np.ndarray]] = []
    for _ in range(LIMIT):
        if not point.is_finite or is_stationary(point, problem.model.scale, SETTINGS):
            break
        x, r = point.phi, point.residual
        step = DAMPING * r
        if history:
            dx, dr = (np.array([now - old[i] for old in history]).T for i, now in enumerate((x, r)))
            step = step - (dx + DAMPING * dr) @ np.linalg.lstsq(dr, r, rcond=1e-10)[0]
        history = [*history, (x, r)][-depth:] if depth else []
        point = point_at(problem, x + step)
        trace.add(point.free_energy)
    return point


def run(number: int, start: int, method: str) -> dict[str, Any]:
    """One start of one set by one method, as a record of the results file."""
    model = build_model(material(**SETS[number]))
    problem = Problem(model, uniform(12, "midpoint"), engine=Engine(compiled=method == "compiled"))
    fields = problem.first_fields(noise(model, np.random.default_rng(start), 0.5))
    trace = Trace(time.process_time(), [])
    if method in OURS:
        descent = descend(problem, fields, progress=lambda _name, _matrices, f, _residual: trace.add(f))
        point, outcome, cause = descent.point, descent.status, descent.message
    else:
        point = mix(problem, fields, DEPTH if method == "anderson" else 0, trace)
        outcome, cause = "stalled", f"residual not reached in {trace.steps} steps"
    cpu, evaluations = time.process_time() - trace.began, problem.matrices // len(problem.zone.k)
    if method not in OURS and point.is_finite and is_stationary(point, model.scale, SETTINGS):
        outcome = certify(problem, point, SETTINGS)[0].status
    return {
        "parameters": SETS[number],
        "start": start,
        "method": method,
        "outcome": outcome if point.is_finite else "diverged",
        "cause": "" if outcome == "minimum" else cause,
        "free_energy": point.free_energy / T,
        "residual": float(np.abs(point.residual).max()) / T,
        "constraint_error": point.constraint_error,
        "steps": trace.steps,
        "evaluations": evaluations,
        "cpu": cpu,
        "trace": trace.points,
    }


def get_ready() -> None:
    """One BLAS thread, kernels loaded."""
    threadpool_limits(1, user_api="blas")
    compile_now()


def read(path: Path) -> list[dict[str, Any]]:
    """The records of a results file; an interrupted last line is ignored and cut off."""
    if not path.exists():
        return []
    lines = path.read_text().split("\n")
    if lines[-1]:
        path.write_text("".join(line + "\n" for line in lines[:-1]))
    return [json.loads(line) for line in lines[:-1]]


def key(record: dict[str, Any]) -> tuple[int, int, str]:
    return SETS.index(record["parameters"]), record["start"], record["method"]


def complete(path: Path, sets: list[int], starts: int, processes: int) -> dict[tuple[int, int, str], dict[str, Any]]:
    """Run what the results file does not hold yet; all records by set, start and method."""
    found = {key(record): record for record in read(path) if record["parameters"] in SETS}
    wanted = [(number, start, method) for start in range(starts) for number in sets for method in METHODS]
    missing = [job for job in wanted if job not in found]
    os.environ |= {"OMP_NUM_THREADS": "1", "OPENBLAS_NUM_THREADS": "1"}
    with ProcessPoolExecutor(processes, initializer=get_ready) as pool, path.open("a") as file:
        jobs = {pool.submit(run, *job): job for job in missing}
        for count, job in enumerate(as_completed(jobs), 1):
            found[jobs[job]] = job.result()
            file.write(json.dumps(job.result()) + "\n")
            file.flush()
            print(f"{count} of {len(missing)}: set {jobs[job][0]}, start {jobs[job][1]}, {jobs[job][2]}", flush=True)
    return {job: found[job] for job in wanted}


def seconds(record: dict[str, Any], target: float) -> tuple[float, bool]:
    """CPU time after which F stays within CLOSE of the target, and whether it does; else that of the step limit."""
    trace = record["trace"]
    outside = [i for i, (_, f) in enumerate(trace) if not abs(f - target) <= CLOSE]
    if not outside:
        return trace[0][0], True
    if outside[-1] + 1 < len(trace):
        return trace[outside[-1] + 1][0], True
    return record["cpu"] / max(record["steps"], 1) * LIMITS[record["method"]], False


def targets(records: list[dict[str, dict[str, Any]]]) -> Iterator[tuple[str, Callable[[int, str], float]]]:
    """The targets of the times, as functions of start and method; NaN where there is none."""
    minima = [r["free_energy"] for start in records for r in start.values() if r["outcome"] == "minimum"]
    lowest = min(minima, default=np.nan)

    def end(start: int, method: str) -> float:
        record = records[start][method]
        return record["free_energy"] if record["outcome"] == "minimum" else np.nan

    yield "lowest", lambda _start, _method: lowest
    yield "own", lambda start, _method: end(start, "solver")
    yield "any", end


Times = dict[tuple[str, str], list[tuple[float, float]]]
"""Per method of ours and target: seconds of the method and of linear mixing for every start."""


def show_set(number: int, records: list[dict[str, dict[str, Any]]]) -> Times:
    """Print the ends and times of one set."""
    print(f"\nset {number}: " + ", ".join(f"{name} {value}" for name, value in SETS[number].items()))
    for method in METHODS:
        mine = [start[method] for start in records]
        outcomes = [r["outcome"] for r in mine]
        counts = ", ".join(f"{outcomes.count(name)} {name}" for name in sorted(set(outcomes)))
        middle = {name: np.median([r[name] for r in mine]) for name in ("evaluations", "steps", "cpu")}
        print(
            f"  {method:9} {counts:34} median {middle['evaluations']:6.0f} evaluations, {middle['steps']:5.0f} steps, "
            f"{middle['cpu']:6.2f} s"
        )
    times: Times = {}
    for method, (name, target) in product(OURS, targets(records)):
        pairs = [[seconds(start[m], target(i, m)) for m in (method, "linear")] for i, start in enumerate(records)]
        times[method, name] = [(ours[0], theirs[0]) for ours, theirs in pairs]
        reached = [sum(pair[j][1] for pair in pairs) for j in (0, 1)]
        ours, theirs = np.median(times[method, name], axis=0)
        print(
            f"  to {name:6} {method:8} {ours:7.2f} s (reached {reached[0]}), linear {theirs:7.2f} s (reached "
            f"{reached[1]}); ratio {ratio(times[method, name]):.1f}"
        )
    return times


def ratio(times: list[tuple[float, float]]) -> float:
    """Median over starts of the time of linear mixing over that of the solver."""
    return float(np.median([theirs / ours for ours, theirs in times]))


def show(found: dict[tuple[int, int, str], dict[str, Any]], sets: list[int], starts: int) -> None:
    """All tables: every set, the failures of the solver with their causes, totals."""
    everything: Times = {}
    for number in sets:
        records = [{method: found[number, start, method] for method in METHODS} for start in range(starts)]
        for which, times in show_set(number, records).items():
            everything.setdefault(which, []).extend(times)
    print("\nstarts of the solver without a certified minimum:")
    failed = [(job, r) for job, r in found.items() if job[2] in OURS and r["outcome"] != "minimum"]
    for (number, start, method), r in failed:
        print(
            f"  set {number}, start {start}, {method}: {r['outcome']}, {r['cause']}; F {r['free_energy']:.9f}, "
            f"residual {r['residual']:.1e}, constraints {r['constraint_error']:.1e}"
        )
    print("  none" if not failed else "", f"\ntotal of {len(sets)} sets, {starts} starts each:", sep="")
    for method in METHODS:
        mine = [r for job, r in found.items() if job[2] == method]
        shares = {r["outcome"]: 0 for r in mine}
        for r in mine:
            shares[r["outcome"]] += 1
        text = ", ".join(f"{name} {100 * count / len(mine):.1f} %" for name, count in sorted(shares.items()))
        print(f"  {method:9} {text}; median {np.median([r['evaluations'] for r in mine]):.0f} evaluations")
    for (method, name), times in everything.items():
        ours, theirs = np.median(times, axis=0)
        print(
            f"  to {name:6} {method:8} median {ours:.3f} s, linear {theirs:.2f} s: ratio {theirs / ours:.1f}, "
            f"median of ratios {ratio(times):.1f}"
        )


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__.split("\n")[0])
    parser.add_argument("--results", type=Path, required=True, help="JSON lines; an existing file is continued")
    parser.add_argument("--sets", default=",".join(str(i) for i in range(len(SETS))), help="numbers, as 0,3")
    parser.add_argument("--starts", type=int, default=6, help="random starts of each set")
    parser.add_argument("--processes", type=int, default=2)
    options = parser.parse_args()
    sets = [int(number) for number in options.sets.split(",")]
    show(complete(options.results, sets, options.starts, options.processes), sets, options.starts)


if __name__ == "__main__":
    main()
