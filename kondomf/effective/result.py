"""Effective model of a material file or a solved state, with how well it does; and model files."""

import json
from dataclasses import dataclass, fields
from functools import partial
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

import kondomf
from kondomf.effective.extract import fermion_matrix, from_solution
from kondomf.effective.four_band import BandDeviation, FourBandModel, band_deviation, from_reduced, reduced_bands
from kondomf.effective.reduced import solve_reduced
from kondomf.errors import InputError
from kondomf.material import Material, load_material
from kondomf.meanfield import load_state

Array = NDArray[np.float64]

FORMAT = "kondomf effective model"
SCHEMA = 1


@dataclass(frozen=True)
class EffectiveResult:
    """A four-band model, its deviation from the bands it stands for, and the evidence of the solution behind it."""

    model: FourBandModel
    deviation: BandDeviation
    status: str
    evidence: dict[str, Any]

    @property
    def converged(self) -> bool:
        return self.status in ("minimum", "minimum-in-class") and self.model.b_meV > 0

    def rows(self) -> list[tuple[str, str]]:
        model, deviation = self.model, self.deviation
        rows = [
            ("source", model.source),
            ("status", self.status if self.converged else f"{self.status}; no hybridized solution"),
            ("hybridization b", f"{model.b_meV:.8g} meV"),
            ("Dirac point E_D", f"{model.dirac_energy_meV:.8g} meV from the Fermi level"),
            ("spinon level ε_f", f"{model.heavy_level_meV:.8g} meV"),
            ("electron velocity v", f"{model.electron_velocity_m_per_s:.6g} m/s"),
            ("spinon velocity u", f"{model.spinon_velocity_m_per_s:.6g} m/s (u/v = {model.velocity_ratio:.3g})"),
        ]
        if deviation.max_meV is None:
            rows.append(("bands", f"none near the Dirac points within {deviation.window_meV:g} meV of the Fermi level"))
        else:
            text = f"differ by up to {deviation.max_meV:.3g} meV, {deviation.rms_meV:.3g} meV rms, from the full ones"
            rows.append(("bands", f"{text} within {deviation.window_meV:g} meV of the Fermi level"))
        if deviation.fermi_area_ratio is not None:
            rows.append(("pocket area", f"{deviation.fermi_area_ratio:.5f} of the full lattice band"))
        return rows + [("note", note) for note in model.notes]

    def to_dict(self) -> dict[str, Any]:
        return {
            "format": FORMAT,
            "schema": SCHEMA,
            "version": kondomf.__version__,
            "model": self.model.to_dict(),
            "deviation": self.deviation.to_dict(),
            "status": self.status,
            "evidence": self.evidence,
        }


def effective_model(source: Path, window_meV: float) -> EffectiveResult:
    """Effective model of a state file (by its HDF5 content) or of a material file through the reduced equations.

    window_meV: energies from the Fermi level over which bands are compared.
    Raises InputError: a file that is neither, a state that pairs, a material outside the reduced equations.
    """
    import h5py

    if source.suffix in (".h5", ".hdf5") or (source.is_file() and h5py.is_hdf5(source)):
        return _of_state(source, window_meV)
    return _of_material(load_material(source), window_meV)


def read_model(path: Path) -> FourBandModel:
    """Model of a JSON file that `effective --json` wrote.

    Raises InputError: missing, not JSON, another kind or schema, parameters that make no model.
    """
    try:
        document = json.loads(path.read_text(encoding="utf-8"))
    except FileNotFoundError:
        raise InputError(f"no file {path}; write one with: kondomf effective SOURCE --json {path}") from None
    except (OSError, UnicodeDecodeError, json.JSONDecodeError) as error:
        raise InputError(f"{path} is no model file: {error}; write one with: kondomf effective SOURCE --json") from None
    if not isinstance(document, dict) or (document.get("format"), document.get("schema")) != (FORMAT, SCHEMA):
        raise InputError(f"{path} is no model file of schema {SCHEMA}; write one with: kondomf effective SOURCE --json")
    given = document.get("model")
    given = given if isinstance(given, dict) else {}
    names = [field.name for field in fields(FourBandModel)]
    missing = [name for name in names if name not in given]
    if missing:
        raise InputError(f"{path} lacks {', '.join(missing)} in its model; write it again with kondomf effective")
    values = {name: given[name] for name in names}
    for name in set(names) - {"source", "notes"}:
        unset = name == "temperature_meV" and values[name] is None
        if not (unset or isinstance(values[name], int | float)):
            raise InputError(f"{path}: {name} = {values[name]!r} is no number; write it again with kondomf effective")
    try:
        return FourBandModel(**{**values, "source": str(values["source"]), "notes": tuple(map(str, values["notes"]))})
    except (TypeError, InputError) as error:
        raise InputError(f"{path} holds no model: {error}; write it again with kondomf effective") from None


def _of_state(path: Path, window_meV: float) -> EffectiveResult:
    solution = load_state(path)
    found = from_solution(solution)

    def full(phase1: Array, phase2: Array) -> Array:
        k = np.stack([phase1, phase2], axis=1) / (2 * np.pi)
        return np.asarray(np.linalg.eigvalsh(fermion_matrix(solution, k)[0]), dtype=np.float64)

    evidence = {
        "free_energy_meV_per_cell": solution.free_energy_meV_per_cell,
        "residual_meV": solution.residual_meV,
        "curvature_min": solution.curvature_min,
        "curvature_full_space": solution.curvature_full_space,
        "zone_error_meV": solution.zone_error_meV,
        "pairing_meV": found.pairing_meV,
        "hybridization_spread_meV": found.hybridization_spread_meV,
        "level_spread_meV": found.level_spread_meV,
        "velocity_spread_meV": found.velocity_spread_meV,
        "inputs": solution.inputs,
    }
    return EffectiveResult(found.model, band_deviation(found.model, full, window_meV), solution.status, evidence)


def _of_material(material: Material, window_meV: float) -> EffectiveResult:
    _check_isotropic(material)
    solution = solve_reduced(
        material.model_hopping_meV,
        material.spin_layer.kitaev_meV[0],
        material.kondo.coupling_meV,
        material.model_filling,
        material.temperature_meV,
    )
    model = from_reduced(solution, material.spin_layer.lattice_constant_angstrom)
    deviation = band_deviation(model, partial(reduced_bands, solution), window_meV)
    return EffectiveResult(model, deviation, solution.status, {**solution.to_dict(), "inputs": material.to_dict()})


def _check_isotropic(material: Material) -> None:
    """Raise InputError where the reduced equations do not hold exactly, with all reasons."""
    spins, electrons, forms = material.spin_layer, material.conduction_layer, material.mean_field
    reasons = {
        'exchange_form and kondo_form must be "so4"': (forms.exchange_form, forms.kondo_form) != ("so4", "so4"),
        "kitaev_meV must be equal on the three bonds": len(set(spins.kitaev_meV)) > 1,
        "Heisenberg, Gamma and further exchange must vanish": any(
            (
                spins.heisenberg_meV,
                spins.gamma_meV,
                spins.gamma_prime_meV,
                spins.heisenberg_2_meV,
                spins.heisenberg_3_meV,
                spins.kitaev_2_meV,
            )
        ),
        "the conduction layer must have nearest-neighbour hopping alone": any(
            (electrons.next_hopping_meV, electrons.sublattice_offset_meV, electrons.kane_mele_meV, electrons.rashba_meV)
        ),
        "kondo.neighbour_coupling_meV must vanish": material.kondo.neighbour_coupling_meV != 0,
        "kondo.anisotropy must be [1, 1, 1]": set(material.kondo.anisotropy) != {1.0},
        "magnetic_field.tesla must vanish": any(material.magnetic_field.tesla),
    }
    broken = [reason for reason, holds in reasons.items() if holds]
    if broken:
        raise InputError(
            f"{material.name}: the reduced equations of the heavy Fermi liquid do not apply: {'; '.join(broken)}; "
            'change this, or solve with search.phase = "heavy-fermi-liquid" in the so4 form and give the state file'
        )
