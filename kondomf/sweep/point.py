"""One point of a phase map: solve the material, name the phase, keep the evidence."""

from typing import Any

import numpy as np
from numpy.typing import NDArray

from kondomf.material import material_from_dict
from kondomf.meanfield import carried_over, solve
from kondomf.meanfield.engine import engine_of_point, search_work
from kondomf.meanfield.zone import uniform
from kondomf.model import build_model
from kondomf.phases import summarize
from kondomf.sweep.record import PointResult

NUMBERS = (
    "free_energy_meV_per_cell",
    "entropy_kB_per_cell",
    "filling",
    "chemical_potential_meV",
    "residual_meV",
    "constraint_error",
    "curvature_min",
    "curvature_full_space",
    "gap_meV",
    "nematicity",
    "zone_error_meV",
    "evaluations",
    "start",
    "phase",
    "minima_met",
    "instability",
    "collapsed",
)
"""Entries of the summary that are kept as they are."""
MOST_KEPT = 3
"""Minima of a point that are refined; a map shows the lowest."""


def solve_point(material: dict[str, Any], seed: int, parent: dict[str, NDArray[Any]] | None) -> PointResult:
    """Best solution of `material` from its own seeded starts and from the correlators of the parent point.

    The parent's solution goes first; where the phase does not change, it is found again in a few steps.
    """
    search = {**material.get("search", {}), "seed": seed}
    point = material_from_dict({**material, "search": search}, where="sweep point")
    model, zone = build_model(point), uniform(point.zone.points, point.zone.offset)
    neighbour = []
    if parent is not None:
        neighbour = [carried_over(model, "neighbour", parent["channels"], parent["p"])]
    engine = engine_of_point(search_work(model, zone, point.search.starts))
    solution = solve(point, extra_starts=neighbour, most_kept=MOST_KEPT, engine=engine)
    summary = summarize(solution)
    hybridization = np.array(summary["hybridization_singular_values"])
    spins, electrons = np.array(summary["spin_moment"]), np.array(summary["electron_moment"])
    scalars = {name: summary[name] for name in NUMBERS}
    scalars |= {
        "hybridization": float(hybridization.max()),
        "spin_moment": float(np.linalg.norm(spins, axis=1).max()),
        "electron_moment": float(np.linalg.norm(electrons, axis=1).max()),
        "pairing": max(summary["pairing"]["singlet"], summary["pairing"]["triplet"]),
        "zero_modes": (summary["zero_modes"] or {}).get("count"),
        "unexplained_zero_modes": (summary["zero_modes"] or {}).get("unexplained"),
        "starts_at_lowest": summary["minima"][0]["found"] if summary["minima"] else 0,
        "chance_of_another_minimum": summary["chance_of_another_minimum"],
        "phase_evidence": "; ".join(summary["phase_evidence"]),
    }
    arrays = {
        "channels": solution.model.table,
        "p": solution.p,
        "phi_meV": solution.phi,
        "hybridization_singular_values": hybridization,
        "spin_moments": spins,
        "electron_moments": electrons,
    }
    return PointResult(solution.status, scalars, arrays)
