"""Four-band parameters of a solution of the full two-dimensional mean-field problem.

The fields are rewritten in complex fermions. In a state with electron U(1) no anomalous element is left, and the
hybridization of each site is a unitary matrix in spin space times b. That unitary is a choice of gauge of the spinon;
once it is taken into the spinon operators (polar decomposition), both species see the same Dirac Hamiltonian and the
four parameters can be read off at the Dirac point.
"""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from kondomf.effective.four_band import FourBandModel
from kondomf.errors import InputError
from kondomf.material import material_from_dict
from kondomf.meanfield import Solution
from kondomf.meanfield.evaluate import bloch_matrix
from kondomf.model.majorana import spinor

Complex = NDArray[np.complex128]

DIRAC_POINT = np.array([2 / 3, 1 / 3])
"""Dirac point in units of the reciprocal vectors; a1.k = 4 pi / 3, a2.k = 2 pi / 3."""
LARGEST_PAIRING = 1e-8
"""Anomalous matrix elements above this, in units of the largest coupling, are no rounding errors."""
NO_HYBRIDIZATION = 1e-9
"""Correlators between spinons and electrons below this are rounding errors."""


@dataclass(frozen=True)
class Extraction:
    """The model and what it leaves out, all in meV.

    pairing: largest anomalous element; hybridization_spread: largest difference of the singular values of the
    hybridization; level_spread: largest difference of the on-site levels from E_D and epsilon_f, between sublattices,
    spins and off-diagonal; velocity_spread: part of the spinon hopping at the Dirac point that is no common u.
    """

    model: FourBandModel
    pairing_meV: float
    hybridization_spread_meV: float
    level_spread_meV: float
    velocity_spread_meV: float


def fermion_matrix(solution: Solution, k: NDArray[np.float64]) -> tuple[Complex, Complex]:
    """Normal and anomalous part of the Bloch matrix in complex fermions, each (Nk, m, m), meV; k (Nk, 2).

    Order of the m fermions: site, species (spinon, electron), spin.
    """
    model = solution.model
    phases = model.phases(k)
    h = bloch_matrix(model, solution.phi, phases)
    count = model.n_majorana
    rows = np.zeros((count // 2, count), dtype=complex)
    for index in range(count // 4):
        rows[2 * index : 2 * index + 2, 4 * index : 4 * index + 4] = spinor(index // 2 % 2)
    rows *= np.sqrt(2)
    return rows @ h @ rows.conj().T, rows @ h @ rows.T


def from_solution(solution: Solution) -> Extraction:
    """Read b, E_D, v, epsilon_f and u off a heavy Fermi liquid in the 1x1 cell.

    Raises InputError: another magnetic cell, no hybridization, or electrons that pair (kitaev form, superconductor).
    """
    material = material_from_dict(solution.inputs)
    if solution.model.cell.size != 1:
        raise InputError(
            'the four-band model needs a solution in the 1x1 cell; set mean_field.cell = "1x1" and solve again'
        )
    if np.abs(solution.p[solution.model.hybridization]).max(initial=0.0) < NO_HYBRIDIZATION:
        raise InputError(
            "the solution has no hybridization: its spinons are decoupled, there is nothing to extract; raise "
            'kondo.coupling_meV, or set search.phase = "heavy-fermi-liquid" in the so4 form, and solve again'
        )
    a = material.spin_layer.lattice_constant_angstrom
    step = 1e-4
    k = DIRAC_POINT + np.array([[0.0, 0.0], [step, 0.0]])
    normal, anomalous = fermion_matrix(solution, k)
    pairing = float(np.abs(anomalous).max())
    if pairing > LARGEST_PAIRING * solution.model.scale:
        raise InputError(
            f"the electrons pair (largest anomalous element {pairing:.2g} meV): no four-band model of a heavy Fermi "
            'liquid; set exchange_form = kondo_form = "so4" and search.phase = "heavy-fermi-liquid" and solve again'
        )
    at, beside = (_aligned(matrix) for matrix in normal)
    identity = np.eye(2)
    electron, spinon = (_mean([at[s, i, s, i] for s in (0, 1)]) for i in (1, 0))
    b = _mean([at[s, 1, s, 0] for s in (0, 1)])
    conduction, heavy = beside[0, 1, 1, 1], beside[0, 0, 1, 0]
    ratio = float((np.vdot(conduction, heavy) / np.vdot(conduction, conduction)).real)
    reciprocal = 2 * np.pi * np.linalg.inv(np.array([[1.0, 0.0], [0.5, np.sqrt(3) / 2]])).T / a
    distance = step * float(np.linalg.norm(reciprocal[0]))
    hbar_v = float(np.linalg.norm(conduction) / np.sqrt(2) / distance)
    model = FourBandModel(
        b_meV=b,
        dirac_energy_meV=electron,
        hbar_v_meV_angstrom=hbar_v,
        heavy_level_meV=spinon,
        hbar_u_meV_angstrom=ratio * hbar_v,
        cell_area_angstrom2=float(np.sqrt(3) / 2 * a**2),
        temperature_meV=solution.model.temperature,
        source="two-dimensional mean-field solution",
        notes=(f"solution: {solution.status}, residual {solution.residual_meV:.1e} meV",),
    )
    levels = [
        np.abs(at[s, i, s, i] - value * identity).max() for s in (0, 1) for i, value in ((1, electron), (0, spinon))
    ]
    return Extraction(
        model,
        pairing_meV=pairing,
        hybridization_spread_meV=float(max(np.abs(at[s, 1, s, 0] - b * identity).max() for s in (0, 1))),
        level_spread_meV=float(max(levels)),
        velocity_spread_meV=float(np.abs(heavy - ratio * conduction).max()),
    )


def _aligned(matrix: Complex) -> Complex:
    """Blocks (sublattice, species, sublattice', species', 2, 2) with the hybridization made positive on every site."""
    blocks = matrix.reshape(2, 2, 2, 2, 2, 2).transpose(0, 1, 3, 4, 2, 5).copy()
    for site in (0, 1):
        left, _, right = np.linalg.svd(blocks[site, 1, site, 0])
        turn = left @ right
        # c+ (left s right) f = c+ s' (turn f): the spinon is redefined as turn f.
        blocks[:, :, site, 0] = blocks[:, :, site, 0] @ turn.conj().T
        blocks[site, 0] = turn @ blocks[site, 0]
    return blocks


def _mean(blocks: list[Complex]) -> float:
    """Common diagonal element of 2 x 2 blocks."""
    return float(np.mean([np.trace(block).real / 2 for block in blocks]))
