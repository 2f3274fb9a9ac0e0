"""Recompute the check values of the mean-field theory and print them beside the expected ones.

    .venv/bin/python scripts/check_values.py

t = 1000 meV, k_B T = 5 meV, 12 x 12 midpoints, exchange in the kitaev form, Kondo coupling in the so4 form; energies in
units of t. The expected values come from an independent implementation of the same equations.
"""

import numpy as np
from scipy.optimize import brentq

from kondomf.material import Material, material_from_dict
from kondomf.meanfield import Settings, Solution, Start, named_start, solve
from kondomf.meanfield.starts import noise, starts
from kondomf.model import build_model

T = 1000.0
STATIONARY = Settings(keep_saddle=True, mixing_steps=3)


def material(kitaev: float, kondo: float, filling: float, magnetic: bool) -> Material:
    return material_from_dict(
        {
            "name": "check value",
            "spin_layer": {"lattice_constant_angstrom": 1.0, "kitaev_meV": kitaev * T},
            "conduction_layer": {
                "lattice_constant_angstrom": 1.0,
                "hopping_meV": T,
                "match": "hopping",
                "filling": filling,
            },
            "kondo": {"coupling_meV": kondo * T},
            "mean_field": {"magnetic_channel": magnetic, "temperature_meV": 0.005 * T},
            "zone": {"points": 12, "offset": "midpoint"},
        }
    )


def show(text: str, solution: Solution, expected: float, status: str) -> None:
    free_energy = solution.free_energy_meV_per_cell / T
    good = abs(free_energy - expected) < 1e-6 and solution.status == status
    lowest = "-" if solution.curvature_min is None else f"{solution.curvature_min:.6f}"
    print(
        f"{'ok  ' if good else 'MISS'} {text:55} F/t {free_energy:.8f} (expected {expected:.7f}), {solution.status}, "
        f"lowest curvature {lowest}, zero modes {solution.zero_modes}"
    )


def symmetric_saddle(layers: Material) -> Solution:
    """The saddle amid the minima of different directions: Newton steps to a stationary point, whatever its curvature,
    from seeded displacements of a minimum. Most lead back to the minimum or to other saddles."""
    start = list(starts(build_model(layers), 2, seed=1))[1]
    minimum = solve(layers, only_starts=[start])
    for seed in range(24):
        rng = np.random.default_rng(seed)
        displaced = Start(f"displaced {seed}", minimum.p + noise(minimum.model, rng, 0.03 + 0.03 * (seed % 4)))
        found = solve(layers, only_starts=[displaced], settings=STATIONARY)
        if found.status == "saddle" and found.curvatures[1] < -1e-3:
            break
    return found


def crossing() -> float:
    """J_K/t at which the decoupled and the hybridized solution at K = -t, n = 1 have the same free energy."""

    def difference(kondo: float) -> float:
        layers = material(-1, kondo, 1, True)
        energies = [
            solve(layers, only_starts=[named_start(layers, name)]).free_energy_meV_per_cell
            for name in ("decoupled 0", "hybridized 0")
        ]
        return energies[0] - energies[1]

    return float(brentq(difference, 3.15, 3.3, xtol=1e-6))


def main() -> None:
    layers = material(-1, 3.5, 0.75, False)
    show("K = -1, J_K = 3.5, n = 3/4", solve(layers), -3.3489601, "minimum")
    other = solve(layers, only_starts=[named_start(layers, "hybridized M1")])
    show("the same, odd bond in another direction", other, -3.3489209, "minimum")
    show("the same, symmetric saddle", symmetric_saddle(layers), -3.3484413, "saddle")
    show("K = -1, J_K = 3.2, n = 1, magnetic", solve(material(-1, 3.2, 1, True)), -3.5434009, "minimum")
    show("K = -1, J_K = 4.0, n = 1, magnetic", solve(material(-1, 4.0, 1, True)), -3.9316563, "minimum")
    layers = material(1, 3.2, 1, False)
    for copy in ("0", "M1", "M2", "M3"):
        start = named_start(layers, f"decoupled {copy}")
        found = solve(layers, only_starts=[start], settings=STATIONARY)
        show(f"K = +1, J_K = 3.2, n = 1, decoupled, copy {copy}", found, -3.5434009, "saddle")
    print(f"     transition at J_K*/t = {crossing():.5f} (expected 3.22033)")


if __name__ == "__main__":
    main()
