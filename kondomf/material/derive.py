"""What follows from a material before anything is solved, and where mapping or method leave their range."""

import json
from collections.abc import Iterator
from dataclasses import asdict, dataclass
from typing import Any

import numpy as np

from kondomf.material import honeycomb
from kondomf.material.commensurate import MAX_LENGTH_ANGSTROM, CommensurateCell, nearest_cell, valley_shift
from kondomf.material.schema import Material
from kondomf.units import BOHR_MAGNETON, BOLTZMANN, FREQUENCY_PER_AREA, velocity_m_per_s

LOW_ENERGY_LIMIT = 0.3
"""|E_D| / t_eff above which the Dirac cone, and with it the mapping on the spin lattice, is no longer a good guide."""
THERMAL_RESOLUTION = 0.25
"""k_B T in units of the level spacing s below which a zone sum is too coarse: its error goes like exp(-2 pi^2 T/s)."""


@dataclass(frozen=True)
class Derived:
    """Derived quantities; the unit is in the name. Positive densities are electrons, positive E_D is hole doping."""

    dirac_velocity_m_per_s: float
    model_dirac_velocity_m_per_s: float
    model_hopping_meV: float
    model_filling: float
    lattice_mismatch_percent: float
    carrier_density_per_cm2: float
    fermi_wave_vector_per_angstrom: float
    oscillation_frequency_T: float
    dirac_energy_cone_meV: float
    dirac_energy_band_meV: float
    level_spacing_meV: float
    valley_shift_per_angstrom: float
    commensurate_cell: CommensurateCell | None
    energy_scales_meV: dict[str, float]
    energy_scales_K: dict[str, float]
    warnings: tuple[str, ...]

    def to_dict(self) -> dict[str, Any]:
        """All quantities as plain numbers, strings, lists and dicts, ready for JSON."""
        return dict(json.loads(json.dumps(asdict(self))))


def derive(material: Material) -> Derived:
    """Derived quantities of a material.

    Dirac velocity v = (sqrt(3)/2) a_c t / hbar; mismatch (a_c - a_s)/a_s; carriers per area n_2D = 2 (n - 1)/A of the
    spin-lattice cell A; k_F = sqrt(pi |n_2D|) for a cone of degeneracy 4 (two valleys, two spins); the frequency of
    the unhybridised pocket is Onsager's hbar A_F/(2 pi e). E_D from the cone is hbar v k_F on the spin lattice, E_D
    from the band inverts the filling of the nearest-neighbour honeycomb band at T = 0. Level spacing 3 t_eff/points.

    Sources: Rev. Mod. Phys. 81, 109 (2009), "The electronic properties of graphene" (velocity, k_F, density of
    states); D. Shoenberg, "Magnetic Oscillations in Metals", Cambridge University Press (1984) (Onsager's relation).
    """
    conduction = material.conduction_layer
    a_s, a_c = material.spin_layer.lattice_constant_angstrom, conduction.lattice_constant_angstrom
    hopping, filling = material.model_hopping_meV, material.model_filling
    slope = np.sqrt(3) / 2 * a_s * hopping
    density = 2 * (filling - 1) / material.spin_cell_area_cm2
    fermi_wave_vector = np.sqrt(np.pi * abs(density) * 1e-16)
    scales = _energy_scales(material)
    quantities = {
        "dirac_velocity_m_per_s": velocity_m_per_s(np.sqrt(3) / 2 * a_c * conduction.hopping_meV),
        "model_dirac_velocity_m_per_s": velocity_m_per_s(slope),
        "model_hopping_meV": hopping,
        "model_filling": filling,
        "lattice_mismatch_percent": 100 * (a_c - a_s) / a_s,
        "carrier_density_per_cm2": density,
        "fermi_wave_vector_per_angstrom": fermi_wave_vector,
        "oscillation_frequency_T": FREQUENCY_PER_AREA * pocket_area(filling, a_s),
        "dirac_energy_cone_meV": -np.sign(density) * slope * fermi_wave_vector,
        "dirac_energy_band_meV": honeycomb.dirac_energy_of_filling(filling, hopping),
        "level_spacing_meV": _level_spacing(material),
        "valley_shift_per_angstrom": valley_shift(a_s, a_c, conduction.twist_degree),
    }
    return Derived(
        **{name: float(value) for name, value in quantities.items()},
        commensurate_cell=nearest_cell(a_s, a_c, conduction.twist_degree),
        energy_scales_meV=scales,
        energy_scales_K={name: energy / BOLTZMANN for name, energy in scales.items()},
        warnings=tuple(_warnings(material)),
    )


def table(derived: Derived) -> list[tuple[str, str]]:
    """Label and value with unit of each derived quantity, one row each, for people to read; warnings excluded."""
    rows = [
        ("Dirac velocity", f"{derived.dirac_velocity_m_per_s:.4g} m/s"),
        ("Dirac velocity on the spin lattice", f"{derived.model_dirac_velocity_m_per_s:.4g} m/s"),
        ("lattice mismatch (a_c - a_s)/a_s", f"{derived.lattice_mismatch_percent:+.2f} %"),
        ("filling on the spin lattice", f"{derived.model_filling:.6g} electrons per site"),
        ("carrier density (electrons positive)", f"{derived.carrier_density_per_cm2:.4g} /cm^2"),
        ("Fermi wave vector (cone)", f"{derived.fermi_wave_vector_per_angstrom:.4g} /angstrom"),
        ("oscillation frequency, not hybridised", f"{derived.oscillation_frequency_T:.4g} T"),
        ("Dirac point above Fermi level, cone", f"{derived.dirac_energy_cone_meV:.4g} meV"),
        ("Dirac point above Fermi level, full band", f"{derived.dirac_energy_band_meV:.4g} meV"),
        ("level spacing of the zone grid", f"{derived.level_spacing_meV:.4g} meV"),
    ]
    for name, energy in derived.energy_scales_meV.items():
        text = f"{energy:.4g} meV = {derived.energy_scales_K[name]:.4g} K"
        rows.append((f"energy scale: {name.replace('_', ' ')}", text))
    rows.append(("distance of the K points of both layers", f"{derived.valley_shift_per_angstrom:.4g} /angstrom"))
    cell = derived.commensurate_cell
    if cell is None:
        return [*rows, ("nearest common cell", f"none up to {MAX_LENGTH_ANGSTROM:g} angstrom")]
    return [
        *rows,
        (
            "nearest common cell, spin layer",
            f"{[list(row) for row in cell.spin_cell]}, K folds onto {cell.spin_valley}",
        ),
        (
            "nearest common cell, conduction layer",
            f"{[list(row) for row in cell.conduction_cell]}, K folds onto {cell.conduction_valley}",
        ),
        (
            "its area; strain and turn of the conduction layer",
            f"{cell.area_angstrom2:.4g} angstrom^2; {cell.strain_percent:+.2f} %, {cell.rotation_degree:+.2f} degree",
        ),
    ]


def pocket_area(filling: float, lattice_constant: float) -> float:
    """k-space area in 1/angstrom^2 of one unhybridised Fermi pocket, by counting states.

    Up to the van Hove fillings 3/4 and 5/4 two Dirac pockets share |n - 1| of a band, beyond them one pocket around
    the zone centre holds the rest. filling: n electrons per site; lattice_constant in angstrom.
    """
    zone = 8 * np.pi**2 / (np.sqrt(3) * lattice_constant**2)
    carriers = abs(filling - 1)
    return float(zone * (carriers / 2 if carriers <= 0.25 else 1 - carriers))


def _energy_scales(material: Material) -> dict[str, float]:
    """The energies that compete, in meV; of three Kitaev couplings the largest in absolute value."""
    spin = material.spin_layer
    return {
        "hopping": material.model_hopping_meV,
        "kitaev": max(spin.kitaev_meV, key=abs),
        "heisenberg": spin.heisenberg_meV,
        "kondo": material.kondo.coupling_meV,
        "neighbour_kondo": material.kondo.neighbour_coupling_meV,
        "temperature": material.temperature_meV,
        "spin_zeeman": _zeeman(spin.g_tensor, material),
        "electron_zeeman": _zeeman(material.conduction_layer.g_tensor, material),
    }


def _zeeman(g_tensor: np.ndarray, material: Material) -> float:
    """Splitting mu_B |g B| of a spin one half in meV."""
    return float(BOHR_MAGNETON * np.linalg.norm(g_tensor @ material.magnetic_field.tesla))


def _level_spacing(material: Material) -> float:
    """Mean distance in meV of the levels that a line of grid points samples in a band 3 t_eff wide."""
    return honeycomb.BAND_EDGE * material.model_hopping_meV / material.zone.points


def _warnings(material: Material) -> Iterator[str]:
    yield from _mapping_warnings(material)
    yield from _form_warnings(material)
    spacing, temperature = _level_spacing(material), material.temperature_meV
    if temperature < THERMAL_RESOLUTION * spacing:
        needed = 2 * int(np.ceil(material.zone.points * THERMAL_RESOLUTION * spacing / temperature / 2))
        yield (
            f"temperature {temperature:.3g} meV is small against the level spacing {spacing:.3g} meV of the zone grid: "
            f"fine Fermi-surface features are not resolved; raise the temperature or zone.points (to about {needed})"
        )
    kondo = material.kondo
    if not any((kondo.coupling_meV, kondo.neighbour_coupling_meV)) or not any(kondo.anisotropy):
        yield "the Kondo coupling is zero: the layers do not see each other"


def _mapping_warnings(material: Material) -> Iterator[str]:
    layer, hopping = material.conduction_layer, material.model_hopping_meV
    energy = honeycomb.dirac_energy_of_filling(material.model_filling, hopping)
    if abs(energy) > LOW_ENERGY_LIMIT * hopping:
        yield (
            f"the Dirac point lies {abs(energy):.4g} meV = {abs(energy) / hopping:.2f} t_eff from the Fermi level: "
            f"above {LOW_ENERGY_LIMIT} t_eff the mapping on the spin lattice and numbers from the cone are rough guides"
        )
    if any((layer.next_hopping_meV, layer.sublattice_offset_meV, layer.kane_mele_meV, layer.rashba_meV)):
        yield (
            "Dirac energy, frequency and a filling from charge_transfer_meV come from the nearest-neighbour band: "
            "next_hopping_meV, sublattice_offset_meV, kane_mele_meV and rashba_meV are left out there"
        )
    if layer.twist_degree:
        yield "the twist does not enter the model: it only shifts the K points and changes the common cell shown here"


def _form_warnings(material: Material) -> Iterator[str]:
    forms = (material.mean_field.exchange_form, material.mean_field.kondo_form)
    if "kitaev" in forms and material.search.phase not in ("decoupled", "magnetic"):
        yield (
            "the kitaev form makes hybridised electrons pair explicitly: it is meant for phase maps; effective models "
            'and oscillations need exchange_form = kondo_form = "so4"'
        )
    if forms[0] == "so4":
        yield (
            "in the so4 form the pure spin liquid has a quarter of its energy: the decoupled side of a phase map is "
            "not trustworthy, and free energies of different forms must not be compared"
        )
