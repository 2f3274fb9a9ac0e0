"""Towards which order a state is unstable, in physical terms, and what a chosen phase has collapsed to."""

from collections import defaultdict
from collections.abc import Iterator
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from kondomf.meanfield import Solution
from kondomf.meanfield.classical import pattern_name
from kondomf.meanfield.zero_modes import ZERO
from kondomf.model.majorana import CYCLIC, ELECTRON, SPINON
from kondomf.phases.labels import NO_BOND, NO_HYBRIDIZATION, NO_MOMENT, NO_NEMATICITY, NO_PAIRING
from kondomf.phases.order import Order

Array = NDArray[np.float64]

LEAST_SHARE = 0.02
"""Orders with a smaller share of a mode are left out."""
LARGE_SHARE = 0.2
"""Orders with at least this share are named beside the dominant one."""


@dataclass(frozen=True)
class Share:
    """An order and its share of a mode: sum of the squared changes of its correlators over that of all."""

    order: str
    share: float


def soft_orders(solution: Solution) -> tuple[Share, ...]:
    """The orders that the soft mode of `solution` brings along, largest share first; empty if there is no such mode.

    Every channel <i gamma gamma> counts once. The shares do not depend on the gauge: a gauge transformation rotates
    the four spinon Majoranas of a site among themselves, which keeps the sum of squares of each group of channels.
    """
    if solution.soft_mode is None:
        return ()
    change = Order(replace(solution, correlators=solution.soft_mode.change))
    weights: dict[str, float] = defaultdict(float)
    for name, weight in (*_onsite(change), *_bonds(change)):
        weights[name] += weight
    names = {
        "spins": f"spin moments ({_pattern(solution, change.spin_moment)})",
        "electron spins": f"electron moments ({_pattern(solution, change.electron_moment)})",
        "spinon bonds": ("nematic " if _breaks_threefold_symmetry(Order(solution), change) else "") + "spinon bonds",
    }
    total = sum(weights.values())
    shares = [Share(names.get(name, name), weight / total) for name, weight in weights.items()]
    return tuple(sorted((s for s in shares if s.share >= LEAST_SHARE), key=lambda s: -s.share))


def unstable_towards(solution: Solution) -> tuple[Share, ...] | None:
    """`soft_orders` if F falls along the mode, else None."""
    mode = solution.soft_mode
    return soft_orders(solution) if mode is not None and mode.curvature < -ZERO else None


def sentence(shares: tuple[Share, ...]) -> str:
    """The dominant order and every other of a large share, in words."""
    return " and ".join(s.order for s in shares if s is shares[0] or s.share >= LARGE_SHARE)


def collapsed(solution: Solution, order: Order) -> str | None:
    """What the chosen phase of `solution` has become where its own order vanished; None if it has not."""
    if solution.phase_class in ("paramagnetic", "heavy-fermi-liquid"):
        if order.largest_hybridization < NO_HYBRIDIZATION:
            return "the hybridization vanished: a decoupled state"
        if solution.phase_class == "paramagnetic" and max(order.pairing) < NO_PAIRING * order.normal_amplitude:
            return "there is no pairing: a state of the class heavy-fermi-liquid"
    if solution.phase_class in ("magnetic", "decoupled"):
        if np.linalg.norm(order.spin_moment, axis=1).max() > NO_MOMENT:
            return None
        if order.spinon_bonds.max() < NO_BOND:
            return "neither moments nor spinon bonds: free spins"
        if solution.phase_class == "magnetic":
            return "the moments vanished: a state of the class decoupled"
    return None


def _onsite(change: Order) -> Iterator[tuple[str, float]]:
    """Squared changes on the sites. A species has 6 bilinears: 3 of its spin and 3 of gauge or charge."""
    for i in change.sites:
        yield "hybridization", float((change.block((i, SPINON), (i, ELECTRON)) ** 2).sum())
        for species, spin, charge in ((SPINON, "spins", "constraint"), (ELECTRON, "electron spins", "singlet pairing")):
            g = change.block((i, species), (i, species))
            even, odd = (np.array([g[0, a] + s * g[b, c] for a, b, c in CYCLIC]) ** 2 / 2 for s in (1, -1))
            yield spin, float(odd.sum())
            yield charge, float(even[:2].sum())
            yield ("charge imbalance between sites" if species == ELECTRON else "constraint"), float(even[2])


def _bonds(change: Order) -> Iterator[tuple[str, float]]:
    """Squared changes between sites, each pair of sites that the model joins once."""
    for i, j, r in _pairs(change):
        for one, other in ((SPINON, ELECTRON), (ELECTRON, SPINON)):
            yield "hybridization", float((change.block((i, one), (j, other), r) ** 2).sum())
        yield "spinon bonds", float((change.block((i, SPINON), (j, SPINON), r) ** 2).sum())
        electrons = float((change.block((i, ELECTRON), (j, ELECTRON), r) ** 2).sum())
        psi, d = change.pair_amplitudes(i, j, r)
        # Of the 16 real numbers of a bond, <c c> = (psi + d.sigma) i sigma_y holds 8.
        singlet, triplet = 16 * abs(psi) ** 2, 16 * float(np.linalg.norm(d) ** 2)
        yield "singlet pairing", singlet
        yield "triplet pairing", triplet
        yield "bond order of the electrons", max(electrons - singlet - triplet, 0.0)


def _pairs(order: Order) -> list[tuple[int, int, tuple[int, int]]]:
    """Pairs (site i, site j, R) of different sites joined by a channel, each in one orientation."""
    table = order.solution.model.table
    pairs: set[tuple[int, int, int, int]] = set()
    for a, b, r1, r2 in table.tolist():
        i, j = a // 8, b // 8
        if (j, i, -r1, -r2) not in pairs and (i, r1, r2) != (j, 0, 0):
            pairs.add((i, j, r1, r2))
    return [(i, j, (r1, r2)) for i, j, r1, r2 in sorted(pairs)]


def _pattern(solution: Solution, moments: Array) -> str:
    """Pattern of the moments (sites, 3) of the soft mode, and their axis if no mode of this curvature turns it."""
    mode = solution.soft_mode
    name = pattern_name(solution.model.cell, moments).replace("Neel", "Néel")
    _, sizes, axes = np.linalg.svd(moments)
    if mode is None or mode.degeneracy > 1 or sizes[1] > 1e-2 * sizes[0]:
        return name
    axis = axes[0] * np.sign(axes[0, np.abs(axes[0]).argmax()])
    return f"{name} along {' '.join(f'{round(x, 2) + 0.0:g}' for x in axis)}"


def _breaks_threefold_symmetry(order: Order, change: Order) -> bool:
    """True if sums of |<i chi chi>|^2 over the bonds of each type are equal, but not to first order in `change`."""
    sizes, slopes = np.zeros(3), np.zeros(3)
    for i, j, r, kind in order.bonds:
        block = order.block((i, SPINON), (j, SPINON), r)
        sizes[kind] += (block**2).sum()
        slopes[kind] += 2 * (block * change.block((i, SPINON), (j, SPINON), r)).sum()
    return bool(np.ptp(sizes) < NO_NEMATICITY * sizes.sum() and np.ptp(slopes) > 0.1 * np.abs(slopes).sum() > 1e-9)
