"""Effective model of a material file or a solved state, with how well it does; and model files."""

import json
from dataclasses import dataclass, fields
from pathlib import Path
from typing import Any

import kondomf
from kondomf.effective.extract import from_solution
from kondomf.effective.four_band import BandDeviation, FourBandModel, from_reduced
from kondomf.effective.reduced import solve_reduced
from kondomf.errors import InputError
from kondomf.material import Material, load_material
from kondomf.meanfield import load_state

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

    if source.is_file() and (source.suffix in (".h5", ".hdf5") or h5py.is_hdf5(source)):
        return _of_state(source, window_meV)
    return _of_material(load_material(source), window_meV)
