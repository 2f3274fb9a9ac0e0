"""How a solution responds to temperature, field and chemical potential, its mean fields following.

Temperature, the three components of a magnetic field and the chemical potential are forcings f_i of the mean-field
Hamiltonian. The correlators depend on phi/T alone, so that dT acts like the field change -phi/T in every channel:
one set of second derivatives serves all of them.
"""

from collections.abc import Iterator
from dataclasses import asdict, dataclass
from itertools import product
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy.constants import N_A
from scipy.linalg import block_diag

from kondomf.material import Material, material_from_dict
from kondomf.meanfield.curvature import spectral_form
from kondomf.meanfield.engine import Engine, engine_for
from kondomf.meanfield.evaluate import Complex, Evaluation, bloch_matrix, decompositions, lattice_sum, thermal_weight
from kondomf.meanfield.solution import Solution
from kondomf.meanfield.zero_modes import ZERO, conserving_generators
from kondomf.meanfield.zone import ZoneRule, uniform
from kondomf.model import MeanFieldModel
from kondomf.model.majorana import ELECTRON, SPINON, majorana, spin
from kondomf.model.symmetries import field_matrices, rotated
from kondomf.units import BOHR_MAGNETON, MEV

Array = NDArray[np.float64]

TEMPERATURE, FIELD, POTENTIAL = 0, slice(1, 4), 4
"""The forcings: k_B T, the field along the spin axes x, y, z, the chemical potential."""
COUPLED = 1e-5
"""A forcing with a smaller share (of its bare response, as a root) in a mode does not act on it."""
STATIONARY = 1e-7
"""Largest residual, in units of the largest coupling, of a state that is stationary in the space of all fields."""
ROUNDING = 1e-20
"""A field or potential whose bare response is below this fraction of the usual commutes with the Hamiltonian."""
FULL = 10
"""A response takes about as long as this many evaluations."""
NUMBERS = 2**18
"""Numbers in one block of matrices of a forcing; bounds the memory."""
EMU_PER_MOL = N_A * BOHR_MAGNETON * MEV * 1e-1
"""Molar susceptibility in emu/mol of one Bohr magneton per tesla: N_A mu_B, 1 J/T = 1e3 emu and 1 T = 1e4 Oe."""

HEAT, SPIN = "specific_heat_kB_per_cell", "spin_susceptibility_muB_per_tesla_per_cell"
CHARGE, SLOPE = "compressibility_per_meV", "chemical_potential_slope_kB"


@dataclass(frozen=True)
class Thermodynamics:
    """Second derivatives of the free energy at a solution, per primitive cell (two spins, two conduction sites).

    Attributes
    ----------
    entropy_kB_per_cell : S = -dF/dT.
    specific_heat_kB_per_cell : C = T dS/dT at fixed filling and field.
    spin_susceptibility_muB_per_tesla_per_cell : (3, 3) chi_ab = -d2F/dB_a dB_b at fixed filling, spin axes; infinite
        where the field turns moments at no cost. Spin magnetism of spins and electrons, no orbital magnetism. A limit
        of the method: spins that nothing couples have half of Curie's law, as half of their parton states hold no spin.
    compressibility_per_meV : dn/dmu of the electrons per conduction site at fixed temperature and field.
    chemical_potential_slope_kB : dmu/dT at fixed filling and field.
    zone_errors : by name, relative change (0 to 1) of specific heat, susceptibility and compressibility at frozen mean
        fields when the grid is doubled; large at temperatures below the level spacing of the grid.
    remarks : by name of the quantity, why it is None or infinite, or what it leaves out.
    """

    entropy_kB_per_cell: float
    specific_heat_kB_per_cell: float | None
    spin_susceptibility_muB_per_tesla_per_cell: Array | None
    compressibility_per_meV: float | None
    chemical_potential_slope_kB: float | None
    zone_errors: dict[str, float]
    remarks: dict[str, str]

    @property
    def spin_susceptibility_emu_per_mol(self) -> Array | None:
        """The spin susceptibility (3, 3) in cgs units per mole of primitive cells."""
        chi = self.spin_susceptibility_muB_per_tesla_per_cell
        return None if chi is None else EMU_PER_MOL * chi

    def to_dict(self) -> dict[str, Any]:
        """Plain numbers and lists for JSON, which knows no infinity: None, with the remark that says so."""
        result = asdict(self)
        chi = self.spin_susceptibility_muB_per_tesla_per_cell
        if chi is not None:
            result[SPIN] = [[x if np.isfinite(x) else None for x in row] for row in chi.tolist()]
        if self.compressibility_per_meV is not None and not np.isfinite(self.compressibility_per_meV):
            result[CHARGE] = None
        return result


def thermodynamics(solution: Solution) -> Thermodynamics:
    """Specific heat, spin susceptibility and compressibility of a minimum, with the feedback of the mean fields.

    With M = R R^T the constrained response as in the curvature, its rows R_p of the channels and R_i of the forcings:
    -d2F/dx_i dx_j = R_i (1 + R_p^T V R_p)^-1 R_j^T. Specific heat and susceptibility constrain the density, the
    compressibility does not. A state that is no minimum has None throughout, with the reason in `remarks`; numerical
    failure raises nothing.
    Source: implicit differentiation of the stationary Gibbs-Bogoliubov free energy (random-phase approximation).
    """
    model, reason = solution.model, _no_equilibrium(solution)
    if reason:
        return _refused(solution, reason)
    matrices = _forcing_matrices(model, material_from_dict(solution.inputs))
    engine = engine_for(FULL * len(solution.zone.k) * model.n_majorana**2)
    state = engine.evaluate(model, solution.zone, solution.phi)
    try:
        bare = _bare_response(model, solution.zone, state, matrices, engine)
        closed, open_ = (_second_derivatives(model, bare, fixed_filling=fixed) for fixed in (True, False))
    except np.linalg.LinAlgError as error:
        return _refused(solution, f"linear algebra failed: {error}")
    heat = closed.values[TEMPERATURE, TEMPERATURE]
    charge, drift = open_.values[POTENTIAL, [POTENTIAL, TEMPERATURE]]
    steady = np.isfinite(heat) and not closed.unstable[TEMPERATURE]
    return Thermodynamics(
        entropy_kB_per_cell=solution.entropy_kB_per_cell,
        specific_heat_kB_per_cell=float(model.temperature * heat / model.cell.size) if steady else None,
        spin_susceptibility_muB_per_tesla_per_cell=None
        if closed.unstable[FIELD].any()
        else closed.values[FIELD, FIELD] / (BOHR_MAGNETON * model.cell.size),
        compressibility_per_meV=float(charge / model.cell.n_sites),
        chemical_potential_slope_kB=float(-drift / charge) if charge and np.isfinite([charge, drift]).all() else None,
        zone_errors=_zone_errors(solution, matrices, bare),
        remarks=_remarks(solution, closed, open_, _told_apart(solution, state, matrices)),
    )


@dataclass(frozen=True)
class _Derivatives:
    """Minus the second derivatives of F (5, 5) by the forcings, infinite along zero modes; which forcings (5,) act on
    a mode of negative curvature."""

    values: Array
    unstable: NDArray[np.bool_]


def _refused(solution: Solution, reason: str) -> Thermodynamics:
    remarks = dict.fromkeys((HEAT, SPIN, CHARGE, SLOPE), reason)
    return Thermodynamics(solution.entropy_kB_per_cell, None, None, None, None, {}, remarks)


def _no_equilibrium(solution: Solution) -> str:
    """Why the state has no thermodynamic derivatives; empty if it has."""
    if not solution.converged:
        return f"the state is no minimum ({solution.status}): {solution.message}"
    if not solution.residual_full_space_meV <= STATIONARY * solution.model.scale:
        return (
            f'the state is stationary only within its class ("{solution.phase_class}"), so that its F is no free '
            'energy of equilibrium; solve with search.phase = "any"'
        )
    return ""


def _forcing_matrices(model: MeanFieldModel, material: Material) -> Complex:
    """Change of h(k), equal at all k: per tesla along x, y, z and per meV of the chemical potential, (4, n, n)."""
    n = model.n_majorana
    matrices = np.zeros((4, n, n), dtype=complex)
    layers = (
        (SPINON, material.spin_layer.g_tensor, spin(material.mean_field.exchange_form)),
        (ELECTRON, material.conduction_layer.g_tensor, spin("so4")),
    )
    for species, g, operators in layers:
        for site, (b, operator) in product(range(model.cell.n_sites), enumerate(operators)):
            for x, mu, nu in operator:
                i, j = majorana(site, species, mu), majorana(site, species, nu)
                matrices[:3, i, j] += 2j * x * BOHR_MAGNETON * g[:, b]
                matrices[:3, j, i] -= 2j * x * BOHR_MAGNETON * g[:, b]
    onsite = np.ones((1, len(model.lattice_vectors)), dtype=complex)
    matrices[3] = bloch_matrix(model, -model.c[0], onsite)[0]
    return matrices


Block = tuple[slice, Complex, Array, Array, Complex]
"""Part of the zone, eigenvectors U (Nk, n, n), weights (Nk,), X (Nk, n, n), forcings U+ D U (5, Nk, n, n)."""


def _blocks(model: MeanFieldModel, zone: ZoneRule, phi: Array, matrices: Complex) -> Iterator[Block]:
    """The forcings in the eigenbasis of h(k); temperature, with its field change -phi/T, is the diagonal -e/T."""
    n = model.n_majorana
    step = max(1, NUMBERS // n**2)
    for part, _, energies, vectors in decompositions(model, zone, phi):
        for start in range(0, len(energies), step):
            e, u = energies[start : start + step], vectors[start : start + step]
            here = slice(part.start + start, part.start + start + len(e))
            adjoint = u.conj().swapaxes(1, 2)
            d = np.stack([-e[:, :, None] / model.temperature * np.eye(n), *(adjoint @ f @ u for f in matrices)])
            yield here, u, zone.weight[here], thermal_weight(e, model.temperature), d


def _among_forcings(model: MeanFieldModel, zone: ZoneRule, phi: Array, matrices: Complex) -> Array:
    """Minus the response of the forcings to each other at frozen mean fields, (5, 5): the sum of X D D* / 4."""
    among = np.zeros((1 + len(matrices),) * 2)
    for _, _, w, x, d in _blocks(model, zone, phi, matrices):
        among += np.tensordot(w[:, None, None] * x * d, d.conj(), axes=([1, 2, 3], [1, 2, 3])).real / 4
    usual = np.abs(matrices).max(axis=(1, 2)) ** 2 / model.scale
    nothing = among.diagonal() <= np.concatenate([[0.0], ROUNDING * usual])
    among[nothing], among[:, nothing] = 0.0, 0.0
    return among


def _bare_response(
    model: MeanFieldModel, zone: ZoneRule, state: Evaluation, matrices: Complex, engine: Engine
) -> Array:
    """Minus the response at frozen mean fields of the active channels, then the forcings, (Na + 5, Na + 5).

    A forcing changes tanh(h/2T) by U (X o U+ D U) U+, and with it the correlators.
    """
    change = np.zeros((1 + len(matrices), *state.correlators.shape))
    for here, u, w, x, d in _blocks(model, zone, state.phi, matrices):
        phases = model.phases(zone.k[here])
        for total, forcing in zip(change, d, strict=True):
            total += lattice_sum(phases, w, u @ (x * forcing) @ u.conj().swapaxes(1, 2))
    r, a, b = (axis[model.active] for axis in model.position)
    onto = -change[:, r, a, b]
    among = _among_forcings(model, zone, state.phi, matrices)
    onto[among.diagonal() == 0] = 0.0
    return np.block([[-engine.response(model, zone, state, model.active), onto.T], [onto, among]])


def _second_derivatives(model: MeanFieldModel, bare: Array, *, fixed_filling: bool) -> _Derivatives:
    """The forcings as further channels of the spectral form, scaled to its size so that no weak one drowns in it."""
    active = model.active
    n, count = len(active), len(bare) - len(active)
    unit = float(bare.diagonal()[:n].max(initial=0.0)) or 1.0
    size = np.sqrt(bare.diagonal()[n:] / unit)
    scale = np.concatenate([np.ones(n), np.divide(1, size, out=np.zeros(count), where=size > 0)])
    v = block_diag(model.v[np.ix_(active, active)], np.zeros((count, count)))
    c = np.zeros((len(model.c), n + count))
    c[1:, :n] = model.c[1:, active]
    c[0, n + POTENTIAL] = fixed_filling
    form = spectral_form(bare * np.outer(scale, scale), c, v)
    e, rows = form.eigenvalues, form.root_vectors[n:]
    zero = np.abs(e) < ZERO
    values = rows[:, ~zero] / e[~zero] @ rows[:, ~zero].T * np.outer(size, size)
    free = rows[:, zero] @ rows[:, zero].T / unit
    shares = np.sqrt(free.diagonal())
    acts = shares > COUPLED
    diverges = np.outer(acts, acts) & (np.abs(free) > COUPLED * np.outer(shares, shares))
    values = np.where(diverges, np.copysign(np.inf, free), values)
    unstable = (np.abs(rows[:, e < -ZERO]) > COUPLED * np.sqrt(unit)).any(axis=1)
    return _Derivatives(values, unstable)


def _told_apart(solution: Solution, state: Evaluation, matrices: Complex) -> NDArray[np.bool_]:
    """Which forcings of (4, n, n) tell states of equal F apart that the broken generators turn into each other, (4,).

    Their linear response is that of the orientation found; a finite forcing may turn the state to another.
    """
    model, modes = solution.model, solution.zero_modes
    if modes is None or modes.count == modes.gauge:
        return np.zeros(len(matrices), dtype=bool)
    if modes.unexplained:
        return np.ones(len(matrices), dtype=bool)
    told = np.zeros(len(matrices), dtype=bool)
    fields = field_matrices(model, solution.phi)
    for generator in conserving_generators(model, state.correlators):
        broken = np.abs(rotated(model, fields, generator.x)).max() > STATIONARY * model.scale
        if broken and not generator.gauge:
            turned = np.abs(matrices @ generator.x - generator.x @ matrices).max(axis=(1, 2))
            told |= turned > 1e-9 * np.abs(matrices).max(axis=(1, 2))
    return told


def _remarks(solution: Solution, closed: _Derivatives, open_: _Derivatives, told: NDArray[np.bool_]) -> dict[str, str]:
    """Why a quantity is None or infinite, or what its value leaves out."""
    saddle = "the state is a saddle in the directions in which this forcing acts"
    diverges = f"diverges: the forcing acts along a mode of no curvature (below {ZERO:g}), as of a broken symmetry"
    found = "of the orientation found: others have the same F, and a finite forcing may prefer one of them"
    remarks: dict[str, list[str]] = {name: [] for name in (HEAT, SPIN, CHARGE, SLOPE)}
    for name, part in ((HEAT, TEMPERATURE), (SPIN, FIELD)):
        if np.any(closed.unstable[part]):
            remarks[name].append(saddle)
        elif not np.isfinite(closed.values[part, part]).all():
            remarks[name].append(diverges)
    charge = open_.values[POTENTIAL, POTENTIAL]
    if np.isinf(charge):
        remarks[CHARGE].append(diverges)
    elif charge < 0:
        remarks[CHARGE].append("negative: in contact with a reservoir the state separates into unlike fillings")
    if not charge or np.isinf(charge):
        remarks[SLOPE].append("not defined: the filling does not answer to the chemical potential, or without limit")
    if told[:3].any():
        remarks[SPIN].append(found)
    if told[3]:
        remarks[CHARGE].append(found)
    if not solution.inputs["mean_field"].get("magnetic_channel", True):
        remarks[SPIN].append("magnetic channel off: of the mean fields only bonds and hybridizations respond")
    return {name: "; ".join(texts) for name, texts in remarks.items() if texts}


def _zone_errors(solution: Solution, matrices: Complex, bare: Array) -> dict[str, float]:
    model = solution.model
    doubled = uniform(2 * solution.zone.points, solution.zone.offset)
    one, two = bare.diagonal()[len(model.active) :], _among_forcings(model, doubled, solution.phi, matrices).diagonal()
    change = np.abs(two - one) / np.maximum(np.maximum(one, two), 1e-300)
    parts = ((HEAT, TEMPERATURE), (SPIN, FIELD), (CHARGE, POTENTIAL))
    return {name: float(change[part].max()) for name, part in parts}
