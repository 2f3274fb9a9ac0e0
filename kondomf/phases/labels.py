"""From order parameters to a name, by explicit rules, with the evidence for it."""

from dataclasses import dataclass

import numpy as np

from kondomf.material import Material, material_from_dict
from kondomf.meanfield import Solution
from kondomf.meanfield.classical import pattern_name
from kondomf.phases.order import Order
from kondomf.phases.spectrum import Gap

NO_HYBRIDIZATION = 1e-4
"""Singular values of the hybridization below this count as none."""
NO_BOND = 1e-3
"""Bond correlators of the spinons below this count as none: the spins are thermally disordered."""
NO_MOMENT = 1e-3
"""Moments below this, in units of hbar, count as none."""
NO_PAIRING = 1e-6
"""Pairing over normal amplitude below this counts as none in the so4 form."""
EXPLICIT_PAIRING = 0.12
"""The kitaev form pairs the electrons explicitly, by up to this times |K|/t_eff: no evidence of superconductivity."""
STRONG_PAIRING = 1e-2
"""Pairing over normal amplitude that, with a gap above k_BT where bands cannot be filled, makes a superconductor."""
EXPLICIT_MOMENT = 0.1
"""The same for moments of a hybridized state in the kitaev form, in units of hbar at |K| = t_eff and at least a tenth
of it."""
NO_NEMATICITY = 1e-3

FRACTIONALIZED = "Kitaev spin liquid with metal (FL*)"
VALENCE_BONDS = "valence-bond crystal with metal"
MELTED = "disordered local moments with metal"
HEAVY = "heavy Fermi liquid"
INSULATOR = "Kondo insulator"
UNDETERMINED = "undetermined"


@dataclass(frozen=True)
class Label:
    """Name of a phase and its evidence, strongest first."""

    name: str
    evidence: tuple[str, ...]


@dataclass(frozen=True)
class Thresholds:
    """Pairing over normal amplitude, and moment in units of hbar, that the spin forms in use explain by themselves."""

    pairing: float
    moment: float


def thresholds(material: Material) -> Thresholds:
    """The so4 forms break no symmetry; the kitaev form pairs electrons and polarises spins once they hybridize."""
    if (material.mean_field.exchange_form, material.mean_field.kondo_form) == ("so4", "so4"):
        return Thresholds(NO_PAIRING, NO_MOMENT)
    strength = min(1.0, max(map(abs, material.spin_layer.kitaev_meV)) / material.model_hopping_meV)
    return Thresholds(EXPLICIT_PAIRING * strength, EXPLICIT_MOMENT * max(strength, 0.1))


def label(solution: Solution, order: Order, gap: Gap) -> Label:
    """Name the phase of a solution. Unconverged solutions are "undetermined"."""
    if solution.status == "not-converged":
        return Label(UNDETERMINED, (f"not converged: largest residual {solution.residual_meV:.2g} meV",))
    if order.largest_hybridization < NO_HYBRIDIZATION:
        return _decoupled(solution, order, gap)
    return _hybridized(solution, order, gap)


def _decoupled(solution: Solution, order: Order, gap: Gap) -> Label:
    moment = float(np.linalg.norm(order.spin_moment, axis=1).max())
    evidence = (
        f"no hybridization (largest {order.largest_hybridization:.1g})",
        f"moments: spins {moment:.3g}, electrons {np.linalg.norm(order.electron_moment, axis=1).max():.3g}",
        f"bond correlators of the spinons {order.spinon_bonds.min():.3g} to {order.spinon_bond:.3g}",
        f"smallest excitation of the spinons {gap.spinons:.3g} meV, of the electrons {gap.electrons:.3g} meV",
    )
    if moment > NO_MOMENT:
        metal = gap.electrons < solution.model.temperature
        return Label(f"{_magnet(order)} with {'metal' if metal else 'insulator'}", evidence)
    return Label(_without_moments(solution, order), evidence)


def _without_moments(solution: Solution, order: Order) -> str:
    """Spinons that hop are a liquid; where like bonds end up unlike, it is nematic, or cut into pieces altogether."""
    material = material_from_dict(solution.inputs)
    if order.spinon_bond < NO_BOND:
        return MELTED
    if order.spinon_bonds.min() < NO_BOND and _alike(material):
        return VALENCE_BONDS
    nematic = order.nematicity > NO_NEMATICITY and _isotropic(solution, material)
    return f"nematic {FRACTIONALIZED}" if nematic else FRACTIONALIZED


def _hybridized(solution: Solution, order: Order, gap: Gap) -> Label:
    material = material_from_dict(solution.inputs)
    allowed = thresholds(material)
    ratio = max(order.pairing) / order.normal_amplitude
    moment = float(np.linalg.norm(order.spin_moment, axis=1).max())
    gapped = gap.total > material.temperature_meV
    # With the two spinons a cell holds 2n + 2 fermions: only at n = 1 can bands be filled without pairing.
    insulator_possible = abs(solution.filling - 1) < 1e-6
    paired = ratio > allowed.pairing or (gapped and not insulator_possible and ratio > STRONG_PAIRING)
    name = INSULATOR if gapped and insulator_possible else HEAVY
    if paired:
        name = ("triplet" if order.pairing[1] > order.pairing[0] else "singlet") + " superconductor"
    evidence = [
        f"largest hybridization {order.largest_hybridization:.3g}",
        f"pairing over normal amplitude {ratio:.2g}, of which the spin forms explain up to {allowed.pairing:.2g}",
        f"smallest excitation {gap.total:.3g} meV, {gap.total / material.temperature_meV:.2g} k_BT",
        f"spin moment {moment:.2g}, of which the spin forms explain up to {allowed.moment:.2g}",
    ]
    if moment > allowed.moment and material.mean_field.magnetic_channel:
        name = f"{_magnet(order)} and {name}"
    elif order.nematicity > NO_NEMATICITY and _isotropic(solution, material):
        name = f"nematic {name}"
        evidence.append(f"bond energies differ by {order.nematicity:.2g} of their sum")
    return Label(name, tuple(evidence))


def _magnet(order: Order) -> str:
    """Name of the magnetic order, as that of a start, but with the accent of Néel."""
    return pattern_name(order.solution.model.cell, order.spin_moment).replace("Neel", "Néel")


def _alike(material: Material) -> bool:
    """True when the couplings do not tell the bonds apart."""
    same = len(set(material.spin_layer.kitaev_meV)) == len(set(material.kondo.anisotropy)) == 1
    return same and not any(material.magnetic_field.tesla)


def _isotropic(solution: Solution, material: Material) -> bool:
    """True when neither the couplings nor the cell and its grid tell the bonds apart."""
    return _alike(material) and material.zone.offset == "c3" and solution.model.cell.is_threefold
