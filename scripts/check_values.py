"""Recompute the check values of the mean-field theory, from random starts, and print them beside the expected ones.

    .venv/bin/python scripts/check_values.py

t = 1000 meV, k_B T = 5 meV, 12 x 12 midpoints, exchange in the kitaev form, Kondo coupling in the so4 form; energies in
units of t. The expected values come from an independent implementation of the same equations. Each minimum is sought
from 20 seeded random starts and, for comparison, from the standard starts of a search. A line says MISS if no random
start found the value, if one of them ended below it, or if an end there is not a certified minimum; then the exit
code is 1. A few minutes.
"""

import sys
from collections import Counter

import numpy as np
from scipy.optimize import brentq

from kondomf.material import Material, material_from_dict
from kondomf.meanfield import Settings, Solution, Start, named_start, solve
from kondomf.meanfield.starts import noise, spin_liquid, standard_starts
from kondomf.model import build_model
from kondomf.model.majorana import ELECTRON, SPINON, majorana

T = 1000.0
RANDOM_STARTS = 20
CLOSE = 1e-6
"""Energies agree within this, in units of t."""
STATIONARY = Settings(keep_saddle=True)
ALL_FOUND = True


def material(
    kitaev: float,
    kondo: float,
    filling: float,
    magnetic: bool,
    gamma: float = 0.0,
    heisenberg: float = 0.0,
    offset: str = "midpoint",
) -> Material:
    """Layers with energies in units of t."""
    return material_from_dict(
        {
            "name": "check value",
            "spin_layer": {
                "lattice_constant_angstrom": 1.0,
                "kitaev_meV": kitaev * T,
                "gamma_meV": gamma * T,
                "heisenberg_meV": heisenberg * T,
            },
            "conduction_layer": {
                "lattice_constant_angstrom": 1.0,
                "hopping_meV": T,
                "match": "hopping",
                "filling": filling,
            },
            "kondo": {"coupling_meV": kondo * T},
            "mean_field": {"magnetic_channel": magnetic, "temperature_meV": 0.005 * T},
            "zone": {"points": 12, "offset": offset},
        }
    )


def energy(solution: Solution) -> float:
    return solution.free_energy_meV_per_cell / T


def report(good: bool, text: str) -> None:
    global ALL_FOUND
    ALL_FOUND &= good
    print(f"{'ok  ' if good else 'MISS'} {text}", flush=True)


def hybridization(solution: Solution) -> str:
    """Singular values of <i chi eta> on the A site, descending."""
    home = solution.correlators[np.flatnonzero(~solution.model.lattice_vectors.any(axis=1))[0]]
    return " ".join(f"{value:.4f}" for value in np.linalg.svd(home[:4, 4:8])[1])


def minima(title: str, layers: Material, *expected: float) -> None:
    """How many of the random starts end in each expected minimum, and where else; the same for the standard starts."""
    model = build_model(layers)
    chosen = {
        "random": [
            Start(f"random {seed}", noise(model, np.random.default_rng(seed), 0.5)) for seed in range(RANDOM_STARTS)
        ],
        "standard": list(standard_starts(model).values()),
    }
    ends = {kind: [solve(layers, only_starts=[start]) for start in starts] for kind, starts in chosen.items()}
    print(f"\n{title}")
    for value in expected:
        here = {kind: [x for x in found if abs(energy(x) - value) < CLOSE] for kind, found in ends.items()}
        certified = all(x.status == "minimum" for x in here["random"])
        lowest = min(map(energy, ends["random"])) > min(expected) - CLOSE
        line = f"F/t {value}: {len(here['random'])} of {RANDOM_STARTS} random starts"
        line += f", {len(here['standard'])} of {len(ends['standard'])} standard starts"
        if here["random"]:
            one = here["random"][0]
            line += f"; {one.status}, lowest curvature {one.curvature_min:.6f}, hybridization {hybridization(one)}"
        report(bool(here["random"]) and certified and lowest, line)
    for kind, found in ends.items():
        rest = Counter(
            f"{energy(x):.6f} ({x.status})" for x in found if all(abs(energy(x) - v) >= CLOSE for v in expected)
        )
        if rest:
            print(f"     other ends of the {kind} starts: " + ", ".join(f"{n} at {end}" for end, n in rest.items()))


def symmetric_start(layers: Material) -> Start:
    """Uniform spin liquid with a diagonal hybridization: in the basin of the symmetric saddle at n = 3/4."""
    model = build_model(layers)
    p = 0.27 * spin_liquid(model)
    for site, mu in np.ndindex(2, 4):
        channel, sign = model.find(majorana(site, SPINON, mu), majorana(site, ELECTRON, mu), (0, 0))  # type: ignore[misc]
        p[channel] = sign * (1 - 2 * site) * (0.64, 0.55, 0.82, 0.89)[mu]
    return Start("symmetric", p)


def saddle(title: str, layers: Material, start: Start, expected: float, lowest: float) -> None:
    """The stationary point next to a start is recognised as a saddle, and the solver leaves it downhill."""
    kept = solve(layers, only_starts=[start], settings=STATIONARY)
    left = solve(layers, only_starts=[Start(start.name, kept.p)])
    near = abs(energy(kept) - expected) < CLOSE and abs(kept.curvatures[0] - lowest) < 1e-4
    good = near and kept.status == "saddle" and left.status == "minimum" and energy(left) < energy(kept) - CLOSE
    report(
        good,
        f"{title}: F/t {energy(kept):.7f} (expected {expected}), {kept.status}, curvatures "
        f"{kept.curvatures[0]:.5f} {kept.curvatures[1]:.5f}; left for a {left.status} at {energy(left):.7f}",
    )


def crossing() -> float:
    """J_K/t at which the decoupled and the hybridized solution at K = -t, n = 1 have the same free energy."""

    def difference(kondo: float) -> float:
        layers = material(-1, kondo, 1, True)
        starts = (named_start(layers, name) for name in ("decoupled 0", "hybridized 0"))
        decoupled, hybridized = (solve(layers, only_starts=[start]) for start in starts)
        return energy(decoupled) - energy(hybridized)

    return float(brentq(difference, 3.15, 3.3, xtol=1e-6))


def main() -> None:
    layers = material(-1, 3.5, 0.75, False)
    minima("K = -1, J_K = 3.5, n = 3/4, magnetic off (two directions of the odd bond)", layers, -3.3489601, -3.3489209)
    saddle("the same, from the symmetric state", layers, symmetric_start(layers), -3.3484413, -0.0044)
    c3 = material(-1, 3.5, 0.75, False, offset="c3")
    minima("the same with offset (1/3, 2/3)", c3, -3.34892611)
    minima("K = -1, J_K = 3.2, n = 1, magnetic on: decoupled", material(-1, 3.2, 1, True), -3.5434009)
    minima("K = -1, J_K = 4.0, n = 1, magnetic on", material(-1, 4.0, 1, True), -3.9316563)
    print()
    layers = material(1, 3.2, 1, False)
    for copy in ("0", "M1", "M2", "M3"):
        start = named_start(layers, f"decoupled {copy}")
        kept = solve(layers, only_starts=[start], settings=STATIONARY)
        line = f"K = +1, J_K = 3.2, n = 1, decoupled {copy}: {kept.status}, F/t {energy(kept):.7f}"
        report(kept.status == "saddle" and abs(energy(kept) + 3.5434009) < CLOSE, line)
    found = crossing()
    report(abs(found - 3.22033) < 1e-4, f"transition at J_K*/t = {found:.5f} (expected 3.22033)")
    sys.exit(0 if ALL_FOUND else 1)


if __name__ == "__main__":
    main()
