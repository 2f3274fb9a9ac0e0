"""Bands along Γ-K-M-Γ and density of states of a solution, as numbers for a figure, a table and files."""

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from kondomf.meanfield import Solution
from kondomf.phases.spectrum import Bands, bands, density_of_states, gap, path

Array = NDArray[np.float64]

ENERGIES = 401
"""Energies at which the density of states is given."""


@dataclass(frozen=True)
class BandStructure:
    """distance (Nk,) along the path in 1/a, corners (4,) of Γ, K, M, Γ; dos_* (Ne,) per meV and cell at energy_meV."""

    name: str
    distance: Array
    corners: tuple[float, ...]
    bands: Bands
    energy_meV: Array
    dos_electrons: Array
    dos_spinons: Array
    window_meV: float
    width_meV: float
    gap_meV: float

    def columns(self) -> dict[str, Any]:
        """One row per wave vector and band."""
        count = self.bands.energy.shape[1]
        return {
            "distance_per_a": np.repeat(self.distance, count),
            "energy_meV": self.bands.energy.ravel(),
            "conduction_weight": self.bands.conduction.ravel(),
            "particle_weight": self.bands.particle.ravel(),
        }

    def rows(self) -> list[tuple[str, str]]:
        at_zero = len(self.energy_meV) // 2
        return [
            ("state", self.name),
            ("gap", f"{self.gap_meV:.4g} meV"),
            ("band width", f"{self.bands.energy.max() - self.bands.energy.min():.6g} meV"),
            (
                "states at the Fermi level",
                f"electrons {self.dos_electrons[at_zero]:.4g}, "
                f"spinons {self.dos_spinons[at_zero]:.4g} per meV and cell (resolution {self.width_meV:.3g} meV)",
            ),
        ]

    def to_dict(self) -> dict[str, Any]:
        return {
            "name": self.name,
            "gap_meV": self.gap_meV,
            "path": ["Γ", "K", "M", "Γ"],
            "corners_per_a": list(self.corners),
            "distance_per_a": self.distance.tolist(),
            "energy_meV": self.bands.energy.tolist(),
            "conduction_weight": self.bands.conduction.tolist(),
            "dos_energy_meV": self.energy_meV.tolist(),
            "dos_electrons_per_meV_per_cell": self.dos_electrons.tolist(),
            "dos_spinons_per_meV_per_cell": self.dos_spinons.tolist(),
            "dos_width_meV": self.width_meV,
        }


def band_structure(solution: Solution, points: int, grid: int, window_meV: float | None = None) -> BandStructure:
    """Bands on `points` wave vectors of the path and the density of states from a grid of `grid` x `grid`.

    Energies run from -window_meV to window_meV, the whole spectrum if None; the Gaussian width of the density of states
    is a hundredth of the window, at least the level spacing of the grid.
    """
    k, distance, corners = path(solution, points)
    found = bands(solution, k)
    largest = float(np.abs(found.energy).max())
    window = window_meV or 1.02 * largest
    width = max(window / 100, largest / grid / 2)
    energy = np.linspace(-window, window, ENERGIES)
    electrons, spinons = density_of_states(solution, energy, grid, width)
    return BandStructure(
        name=str(solution.inputs["name"]),
        distance=distance,
        corners=tuple(corners),
        bands=found,
        energy_meV=energy,
        dos_electrons=electrons,
        dos_spinons=spinons,
        window_meV=window,
        width_meV=width,
        gap_meV=gap(solution).total,
    )
