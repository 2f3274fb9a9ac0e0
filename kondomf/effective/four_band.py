"""The four-band model of a heavy Fermi liquid near the Dirac points of the conduction electrons.

Per spin and valley, with k measured from the Dirac point and energies from the Fermi level,

    H(k) = [[E_D + v k.sigma, b], [b, epsilon_f + u k.sigma]].

H commutes with the chirality k.sigma / |k| = s, so that the bands are those of two 2 x 2 blocks, s = +1 and -1:

    [[E_D + s v k, b], [b, epsilon_f + s u k]].

Units: energies meV, k in 1/angstrom, velocities as slopes hbar v in meV angstrom.
"""

from collections.abc import Callable
from dataclasses import asdict, dataclass
from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

from kondomf.effective.reduced import ReducedSolution
from kondomf.errors import InputError
from kondomf.material.honeycomb import bloch_factor, integrated_density
from kondomf.units import velocity_m_per_s

Array = NDArray[np.float64]
FullBands = Callable[[Array, Array], Array]


@dataclass(frozen=True, kw_only=True)
class FourBandModel:
    """Parameters of the four-band model; every attribute name carries its unit.

    b_meV: hybridization b >= 0; dirac_energy_meV: E_D, positive for hole doping; hbar_v_meV_angstrom: hbar v of the
    electrons, above zero; heavy_level_meV: epsilon_f; hbar_u_meV_angstrom: hbar u of the spinons, of either sign;
    degeneracy: number of equal Dirac cones, 2 spins x 2 valleys; cell_area_angstrom2: area of a unit cell (two sites
    of each layer); temperature_meV: k_B T at which the parameters were obtained, None if they are given by hand;
    source: where they come from; notes: what limits them.

    Raises InputError for a velocity, degeneracy or area that is not positive, or any number that is not finite.
    """

    b_meV: float
    dirac_energy_meV: float
    hbar_v_meV_angstrom: float
    heavy_level_meV: float
    cell_area_angstrom2: float
    hbar_u_meV_angstrom: float = 0.0
    degeneracy: int = 4
    temperature_meV: float | None = None
    source: str = "given by hand"
    notes: tuple[str, ...] = ()

    def __post_init__(self) -> None:
        for name in ("b_meV", "dirac_energy_meV", "heavy_level_meV", "hbar_u_meV_angstrom"):
            if not np.isfinite(getattr(self, name)):
                raise InputError(f"{name} = {getattr(self, name)}: give a finite number")
        for name in ("hbar_v_meV_angstrom", "cell_area_angstrom2", "degeneracy"):
            if not 0 < getattr(self, name) < np.inf:
                raise InputError(f"{name} = {getattr(self, name):g}: give a finite value above zero")

    @property
    def electron_velocity_m_per_s(self) -> float:
        return velocity_m_per_s(self.hbar_v_meV_angstrom)

    @property
    def spinon_velocity_m_per_s(self) -> float:
        return velocity_m_per_s(self.hbar_u_meV_angstrom)

    @property
    def velocity_ratio(self) -> float:
        """u / v, dimensionless."""
        return self.hbar_u_meV_angstrom / self.hbar_v_meV_angstrom

    def energies(self, kinetic_meV: ArrayLike) -> Array:
        """The two energies of the block with hbar v s k = y: (E_D + epsilon_f + (1 + u/v) y)/2 -+ sqrt(d^2 + b^2).

        kinetic_meV: y, any shape S, of either sign. Returns meV, shape S + (2,), ascending.
        """
        y = np.asarray(kinetic_meV, dtype=float)
        electron, spinon = self.dirac_energy_meV + y, self.heavy_level_meV + self.velocity_ratio * y
        radius = np.hypot((electron - spinon) / 2, self.b_meV)
        return np.stack([(electron + spinon) / 2 - radius, (electron + spinon) / 2 + radius], axis=-1)

    def bands(self, k_per_angstrom: ArrayLike) -> Array:
        """Bands at the distances k from the Dirac point, in 1/angstrom, shape (N,). Returns meV, (N, 4), ascending."""
        y = self.hbar_v_meV_angstrom * np.asarray(k_per_angstrom, dtype=float)
        return np.sort(np.concatenate([self.energies(y), self.energies(-y)], axis=-1), axis=-1)

    def to_dict(self) -> dict[str, Any]:
        """Parameters and derived velocities as numbers and words that JSON can hold."""
        return asdict(self) | {
            "electron_velocity_m_per_s": self.electron_velocity_m_per_s,
            "spinon_velocity_m_per_s": self.spinon_velocity_m_per_s,
        }


@dataclass(frozen=True)
class BandDeviation:
    """Bands of the four-band model minus full bands, over the states within window_meV of the Fermi level.

    max_meV, rms_meV: largest and root-mean-square deviation, None if no state near the Dirac points lies in the window
    (a heavy Fermi line can be elsewhere in the zone); states: number of (k, band) pairs compared;
    fermi_area_ratio: area enclosed by the light electrons' line at the Fermi level without hybridization, |E| = E_D,
    in the four-band model over the full one: the relative error of the oscillation frequency plus one. It is None for
    |E_D| >= t, where the line no longer surrounds the Dirac points.
    """

    window_meV: float
    max_meV: float | None
    rms_meV: float | None
    states: int
    fermi_area_ratio: float | None

    def to_dict(self) -> dict[str, Any]:
        return asdict(self)


def from_reduced(solution: ReducedSolution, lattice_constant_angstrom: float) -> FourBandModel:
    """Four-band parameters of a solution of the reduced equations: E_D = -mu, epsilon_f = lambda, b, and

        hbar v = (sqrt(3)/2) a t,    hbar u = -(sqrt(3)/2) a t_f.

    The sign of u: in the reduced theory the hybridization is (b, -b) on (A, B). Substituting f_B -> -f_B makes it the
    uniform b of the four-band model and turns the spinon's hopping element -t_f g into +t_f g, while the electron's
    stays -t g; both multiply the same k-dependent phase factor, whose expansion at the Dirac point is
    (sqrt(3)/2) a k.sigma in a suitable basis. Electron and spinon bands therefore disperse oppositely for t_f > 0.

    lattice_constant_angstrom: a of the lattice the solution lives on. Raises InputError unless it is above zero.
    """
    if not 0 < lattice_constant_angstrom < np.inf:
        raise InputError(f"lattice constant {lattice_constant_angstrom:g} angstrom: give a finite value above zero")
    slope = np.sqrt(3) / 2 * lattice_constant_angstrom
    notes = [f"reduced equations: {solution.status}, residual {solution.residual_meV:.1e} meV"]
    if abs(solution.mu) > 0.3 * solution.inputs.hopping_meV:
        notes.append("the Dirac energy exceeds 0.3 t: the conduction band is no longer a cone at the Fermi level")
    return FourBandModel(
        b_meV=solution.b,
        dirac_energy_meV=-solution.mu,
        hbar_v_meV_angstrom=float(slope * solution.inputs.hopping_meV),
        heavy_level_meV=solution.lam,
        hbar_u_meV_angstrom=float(-slope * solution.t_f),
        cell_area_angstrom2=float(slope * lattice_constant_angstrom),
        temperature_meV=solution.inputs.temperature_meV,
        source="reduced mean-field equations of the isotropic heavy Fermi liquid",
        notes=tuple(notes),
    )


def reduced_bands(solution: ReducedSolution, phase1: Array, phase2: Array) -> Array:
    """Full bands of the reduced theory in meV, shape (N, 4), ascending, at the phases k.a1 and k.a2, each (N,)."""
    g = np.abs(bloch_factor(phase1, phase2))[:, None]
    x = np.concatenate([g, -g], axis=1)
    electron, spinon = -solution.mu - solution.inputs.hopping_meV * x, solution.lam + solution.t_f * x
    radius = np.hypot((electron - spinon) / 2, solution.b)
    mean = (electron + spinon) / 2
    return np.sort(np.concatenate([mean - radius, mean + radius], axis=1), axis=1)


def band_deviation(
    model: FourBandModel, full_bands: FullBands, window_meV: float, radii: int = 400, angles: int = 24
) -> BandDeviation:
    """How far the four-band model is from the full bands within an energy window around the Fermi level.

    The two differ by the trigonal warping and curvature of the cone, that is by g(k) against (sqrt(3)/2) a |k|. States
    are sampled on rays from the Dirac point up to the distance of the nearest M point, 2 pi / (3 a), weighted by area;
    a state counts if its energy in either model is within the window.

    full_bands: (k.a1, k.a2), each (N,) -> energies (N, 4 m) in meV, ascending; m = 2 if they count both spins.
    window_meV: half width of the window, above zero (InputError otherwise).
    radii, angles: number of distances and of directions in a sector of 120 degrees.
    """
    if not 0 < window_meV < np.inf:
        raise InputError(f"energy window {window_meV:g} meV: give a finite value above zero")
    lattice_constant = np.sqrt(2 * model.cell_area_angstrom2 / np.sqrt(3))
    k = (np.arange(radii) + 0.5) / radii * 2 * np.pi / (3 * lattice_constant)
    angle = (np.arange(angles) + 0.5) / angles * 2 * np.pi / 3
    distance, direction = (array.ravel() for array in np.meshgrid(k, angle, indexing="ij"))
    kx, ky = distance * np.cos(direction), distance * np.sin(direction)
    # a1 = a (1, 0), a2 = a (1/2, sqrt(3)/2); the Dirac point has k.a1 = 4 pi / 3, k.a2 = 2 pi / 3.
    phase1 = 4 * np.pi / 3 + lattice_constant * kx
    phase2 = 2 * np.pi / 3 + lattice_constant * (kx / 2 + np.sqrt(3) / 2 * ky)
    full = full_bands(phase1, phase2)
    approximate = np.repeat(model.bands(distance), full.shape[1] // 4, axis=1)
    inside = np.minimum(np.abs(full), np.abs(approximate)) <= window_meV
    weight = np.broadcast_to(distance[:, None], full.shape)[inside]
    error = (approximate - full)[inside]
    return BandDeviation(
        window_meV=window_meV,
        max_meV=float(np.abs(error).max()) if error.size else None,
        rms_meV=float(np.sqrt((weight * error**2).sum() / weight.sum())) if error.size else None,
        states=int(inside.sum()),
        fermi_area_ratio=_fermi_area_ratio(model, 2 / np.sqrt(3) * model.hbar_v_meV_angstrom / lattice_constant),
    )


def _fermi_area_ratio(model: FourBandModel, hopping_meV: float) -> float | None:
    """Area of the cone's circle over that of the full contour g = |E_D|/t, half of whose zone share is one valley."""
    g = abs(model.dirac_energy_meV) / hopping_meV
    if not 0 < g < 1:
        return None
    full = (2 * np.pi) ** 2 / model.cell_area_angstrom2 * float(integrated_density(g)) / 2
    return float(np.pi * (model.dirac_energy_meV / model.hbar_v_meV_angstrom) ** 2 / full)
