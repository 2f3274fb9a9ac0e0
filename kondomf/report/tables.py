"""Short tables for people."""

from collections.abc import Sequence
from typing import Any

LIMITS = (
    "Mean-field theory of Majorana partons without gauge fluctuations: F is an upper bound in the unprojected parton "
    "space, couplings are mean-field couplings, and transition temperatures are crossovers in reality."
)
"""Stated wherever a result is shown."""
COARSE = 0.1
"""Relative change of a response on a doubled grid that is worth a word."""


def align(rows: Sequence[tuple[str, str]]) -> str:
    """Two columns, names padded to the same width."""
    width = max(len(name) for name, _ in rows)
    return "\n".join(f"{name:<{width}}  {text}" for name, text in rows)


def solution_table(summary: dict[str, Any]) -> str:
    """Phase, evidence, free energy and order parameters of one solution (a dict of `phases.summarize`)."""
    zero = summary["zero_modes"]
    rows = [("phase", summary["phase"])]
    rows += [("", f"- {text}") for text in summary["phase_evidence"][:3]]
    rows += [
        ("status", f"{summary['status']}: {summary['message']}"),
        ("free energy", f"{_fixed(summary['free_energy_meV_per_cell'], 6)} meV per cell"),
        ("entropy", f"{_fixed(summary['entropy_kB_per_cell'], 6)} k_B per cell"),
        ("filling", f"{summary['filling']:.8f} electrons per conduction site"),
        ("chemical potential", f"{_fixed(summary['chemical_potential_meV'], 6)} meV"),
        ("hybridization", "; ".join(_numbers(site) for site in summary["hybridization_singular_values"])),
        ("spin moments", "; ".join(_numbers(site) for site in summary["spin_moment"])),
        ("electron moments", "; ".join(_numbers(site) for site in summary["electron_moment"])),
        ("pairing", "singlet {singlet:.2g}, triplet {triplet:.2g} (normal {normal:.3g})".format(**summary["pairing"])),
        ("bond energies", ", ".join(f"{k} {_numbers(e)}" for k, e in summary["bond_energies_meV"].items()) + " meV"),
        ("gap", f"{summary['gap_meV']:.4g} meV"),
        ("residual", f"{summary['residual_meV']:.1e} meV (largest component)"),
        ("zone error", f"{summary['zone_error_meV']:.1e} meV per cell (grid doubled)"),
    ]
    if summary["curvature_min"] is not None:
        rows.append(("lowest curvature", _fixed(summary["curvature_min"], 6)))
    rows += _stability(summary)
    if zero is not None:
        text = f"{zero['count']}: {zero['broken_generators']} broken generators, {zero['gauge_directions']} gauge"
        rows.append(("zero modes", text + (f", {zero['unexplained']} unexplained" if zero["unexplained"] else "")))
    if "thermodynamics" in summary:
        rows += _responses(summary["thermodynamics"])
    rows += [
        ("starts", _search(summary)),
        ("shown", f'from start "{summary["start"]}"'),
        ("evaluations", f"{summary['evaluations']} matrices"),
    ]
    return align(rows)


def _stability(summary: dict[str, Any]) -> list[tuple[str, str]]:
    """What a chosen phase became, and whether and towards what the state is unstable in the space of all fields."""
    rows = [("collapsed", summary["collapsed"])] if summary["collapsed"] else []
    lowest, in_class = summary["curvature_full_space"], summary["phase_class"] != "any"
    if lowest is None:
        return rows
    text = f"unstable towards {summary['instability']}" if summary["instability"] else "stable"
    text += f" (lowest curvature {_fixed(lowest, 6)})"
    if in_class and summary["residual_full_space_meV"] > max(1e3 * summary["residual_meV"], 1e-6):
        text += f"; fields that the class leaves out are driven by up to {summary['residual_full_space_meV']:.2g} meV"
    if in_class:
        rows.append(("outside the class", text))
    elif summary["instability"]:
        rows.append(("instability", text))
    return rows


def _responses(thermodynamics: dict[str, Any]) -> list[tuple[str, str]]:
    """Specific heat, spin susceptibility and compressibility with what is to be said of them."""
    parts = (
        ("specific heat", "specific_heat_kB_per_cell", "k_B per cell"),
        ("spin susceptibility", "spin_susceptibility_muB_per_tesla_per_cell", "mu_B/T per cell, along x y z"),
        ("compressibility", "compressibility_per_meV", "per meV and conduction site"),
    )
    rows = []
    for name, key, unit in parts:
        value, remark = thermodynamics[key], thermodynamics["remarks"].get(key)
        error = thermodynamics["zone_errors"].get(key, 0.0)
        if isinstance(value, list):
            value = " ".join("inf" if row[i] is None else f"{row[i]:.4g}" for i, row in enumerate(value))
        text = "none" if value is None else f"{value if isinstance(value, str) else format(value, '.5g')} {unit}"
        text += f"; changes by {error:.0%} on a doubled grid" if error > COARSE else ""
        rows.append((name, text + (f"; {remark}" if remark else "")))
    return rows


def _search(summary: dict[str, Any]) -> str:
    """How many starts ended lowest, how many minima were met, and the chance that there are more."""
    minima, starts = summary["minima"], len(summary["trials"])
    if not minima:
        return f"none of {starts} ended at a minimum"
    others = ", ".join(
        f"{m['free_energy_meV_per_cell'] - minima[0]['free_energy_meV_per_cell']:+.4g}" for m in minima[1:]
    )
    which = f"the lowest of {len(minima)} minima" if len(minima) > 1 else "the only minimum met"
    text = f"{minima[0]['found']} of {starts} ended at {which}"
    text += f" (others at {others} meV)" if others else ""
    chance, bound = summary["chance_of_another_minimum"], summary["chance_not_excluded"]
    if chance:
        return f"{text}; chance that one more meets a new one about {chance:.0%}"
    return f"{text}; chance that one more meets a new one below {bound:.0%} (95% confidence)"


def _numbers(values: Sequence[float]) -> str:
    return " ".join(_fixed(value, 4) for value in values)


def _fixed(value: float, digits: int) -> str:
    """So many digits after the point; -0 and rounding dust become 0."""
    return f"{round(value, digits) + 0.0:.{digits}f}"
