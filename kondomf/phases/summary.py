"""Everything that is known of a solution, as plain numbers and words."""

from dataclasses import asdict
from typing import Any

import numpy as np

import kondomf
from kondomf.meanfield import Solution, chance_not_excluded, chance_of_another, distinct_minima
from kondomf.phases.instability import collapsed, sentence, soft_orders, unstable_towards
from kondomf.phases.labels import label
from kondomf.phases.order import Order
from kondomf.phases.spectrum import gap


def summarize(solution: Solution) -> dict[str, Any]:
    """The machine-readable description of a solution, ready for JSON; keys carry their unit."""
    order, spectrum = Order(solution), gap(solution)
    name = label(solution, order, spectrum)
    zero, mode, unstable = solution.zero_modes, solution.soft_mode, unstable_towards(solution)
    met = [count for _, count in distinct_minima(solution.trials)]
    singlet, triplet = order.pairing
    return {
        "phase": name.name,
        "phase_evidence": list(name.evidence),
        "status": solution.status,
        "message": solution.message,
        "free_energy_meV_per_cell": solution.free_energy_meV_per_cell,
        "entropy_kB_per_cell": solution.entropy_kB_per_cell,
        "filling": solution.filling,
        "chemical_potential_meV": solution.chemical_potential_meV,
        "multipliers_meV": dict(zip(solution.model.constraint_names, solution.multipliers.tolist(), strict=True)),
        "residual_meV": solution.residual_meV,
        "residual_full_space_meV": solution.residual_full_space_meV,
        "constraint_error": solution.constraint_error,
        "curvature_min": solution.curvature_min,
        "curvature_full_space": solution.curvature_full_space,
        "curvatures": list(solution.curvatures),
        "zero_modes": None
        if zero is None
        else {
            "count": zero.count,
            "broken_generators": zero.broken_generators,
            "gauge_directions": zero.gauge,
            "unexplained": zero.unexplained,
        },
        "soft_mode": None
        if mode is None
        else {
            "curvature": mode.curvature,
            "degeneracy": mode.degeneracy,
            "orders": [asdict(share) for share in soft_orders(solution)],
        },
        "unstable_towards": None if unstable is None else [asdict(share) for share in unstable],
        "instability": None if unstable is None else sentence(unstable),
        "collapsed": collapsed(solution, order),
        "hybridization_singular_values": order.hybridization.tolist(),
        "spin_moment": order.spin_moment.tolist(),
        "electron_moment": order.electron_moment.tolist(),
        "density": order.density.tolist(),
        "bond_energies_meV": order.bond_energies,
        "nematicity": order.nematicity,
        "pairing": {"singlet": singlet, "triplet": triplet, "normal": order.normal_amplitude},
        "gap_meV": spectrum.total,
        "gap_electrons_meV": spectrum.electrons,
        "gap_spinons_meV": spectrum.spinons,
        "chern_number": None,
        "chern_number_reason": "not evaluated by this version",
        "zone_error_meV": solution.zone_error_meV,
        "phase_class": solution.phase_class,
        "start": solution.start,
        "trials": [asdict(trial) for trial in solution.trials],
        "found": solution.found,
        "minima": [_minimum(state) for state in solution.minima],
        "minima_met": len(met),
        "ended_lower": asdict(solution.ended_lower) if solution.ended_lower else None,
        "chance_of_another_minimum": chance_of_another(met),
        "chance_not_excluded": chance_not_excluded(sum(met)) if met else None,
        "evaluations": solution.evaluations,
        "wall_seconds": solution.wall_seconds,
        "inputs": solution.inputs,
        "versions": {"kondomf": kondomf.__version__, "numpy": np.__version__},
    }


def _minimum(state: Solution) -> dict[str, Any]:
    """One of the minima that a search kept, in short."""
    order = Order(state)
    return {
        "phase": label(state, order, gap(state)).name,
        "free_energy_meV_per_cell": state.free_energy_meV_per_cell,
        "hybridization": order.largest_hybridization,
        "found": state.found,
        "start": state.start,
        "status": state.status,
        "curvature_min": state.curvature_min,
    }
