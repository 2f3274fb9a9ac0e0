"""The isotropic heavy Fermi liquid on the honeycomb lattice, solved through one integral over the band energy.

Per spin, in the basis (c_A, c_B, f_A, f_B), the mean-field Bloch matrix depends on k only through
g = |1 + exp(i k.a1) + exp(i k.a2)|:

    h(g) = [[-mu, -t g, b, 0], [-t g, -mu, 0, -b], [b, 0, lambda, -t_f g], [0, -b, -t_f g, lambda]]
    n = 2 <c+_A c_A>,  1 = 2 <f+_A f_A>,  b = (3/8) J_K w,  w = -2 <c+_A f_A>,  t_f = (K/8) q,  q = (2/3) <g f+_A f_B>

With f_B -> -f_B and the combinations A + B, A - B it splits into two 2 x 2 blocks. They are one block on the signed
band energy x = +-g, which is distributed with rho(|x|) on [-3, 3] and has the closed form used here:

    [[-mu - t x, b], [b, lambda + t_f x]],   E = xi +- R,   R = sqrt(d^2 + b^2),   xi, d = half sum, half difference.

K < 0 is ferromagnetic Kitaev exchange, J_K > 0 antiferromagnetic Kondo coupling. Electrons and spinons keep their own
U(1), there are no moments. Energies are in one unit, called meV; temperature means k_B T in it.

Sources: Phys. Rev. B 20, 1969 (1979), "Phase diagram of the Kondo lattice" (hybridization mean field); J. Phys.:
Condens. Matter 1, 4057 (1989), "Kondo-stabilised spin liquids and heavy fermion superconductivity" (spinon bond
field). The factors 3/8 and 1/8 follow from the full Wick sum of the Majorana spin operators instead of large N.
"""

from dataclasses import asdict, dataclass
from itertools import pairwise
from typing import Any, NamedTuple

import numpy as np
from numpy.typing import NDArray
from scipy.optimize import brentq
from scipy.special import expit

from kondomf.errors import InputError
from kondomf.material.honeycomb import BAND_EDGE, density_of_states, dirac_energy_of_filling

Array = NDArray[np.float64]

_CONVERGED = 1e-10
"""Largest residual of a converged solution, in units of t."""
_LOGARITHM = 1e-10
"""Size of the innermost panels at the logarithm of rho; what they miss is smaller than themselves."""

_COLDEST = 1e-9
"""Lowest k_B T / t; the panels are rounded to 1e-13."""


@dataclass(frozen=True)
class ReducedInputs:
    """What the reduced equations depend on: t, K, J_K in meV, n in electrons per site, k_B T in meV."""

    hopping_meV: float
    kitaev_meV: float
    kondo_meV: float
    filling: float
    temperature_meV: float


@dataclass(frozen=True)
class ReducedSolution:
    """The solution of lowest free energy.

    b, t_f, mu, lam: hybridization, spinon hopping, chemical potential and spinon level lambda in meV; w, q: their
    dimensionless correlators; free energy F = <H> - T S at fixed filling, without mu N; residual in meV: the larger of
    |(3/8) J_K w - b|, |(K/8) q - t_f| and t times the errors of the two fillings; quadrature_error: change of the
    correlators w, q, n, n_f on a finer rule; status: "minimum-in-class" or "not-converged"; branches: number of
    different solutions compared; evaluations: number of integrals taken.
    """

    b: float
    t_f: float
    mu: float
    lam: float
    w: float
    q: float
    free_energy_meV_per_cell: float
    entropy_kB_per_cell: float
    residual_meV: float
    quadrature_error: float
    status: str
    branches: int
    evaluations: int
    inputs: ReducedInputs

    def to_dict(self) -> dict[str, Any]:
        """Everything as numbers and words that JSON can hold; the inputs are a nested table."""
        return asdict(self)


class _State(NamedTuple):
    """Averages at given fields (b, t_f, mu, lambda)."""

    fields: Array  # (4,) meV
    pair: float  # w / b in 1/meV, finite for b -> 0
    correlators: Array  # (4,) w, q, n, n_f
    response: Array  # (4, 4) derivative of the correlators with respect to the fields, 1/meV
    omega: float  # -T sum ln(1 + exp(-E/T)) per cell, meV
    entropy: float  # k_B per cell


def _mesh(fields: Array, t: float, temperature: float, ratio: float) -> Array:
    """Panel edges on [-3, 3], shape (M,): every panel is at most about as long as its distance to a singularity.

    The integrand is singular at x = +-1 (logarithm of rho), at 0 (where rho(|x|) has a kink) and near the real axis
    where the Fermi function has its first poles: (i pi T + mu + t x)(i pi T - lambda - t_f x) = b^2. The poles further
    up lie on arcs that come close to the real axis once more, at the distance 2 b / (t + t_f), where the bands cross.
    """
    b, t_f, mu, lam = fields
    iw = 1j * np.pi * temperature
    quadratic = t * t_f
    linear = t * (lam - iw) + t_f * (mu + iw)
    constant = (mu + iw) * (lam - iw) + b * b
    root = np.sqrt(linear**2 - 4 * quadratic * constant + 0j)
    # Of the two signs the one without cancellation: it gives one root as a quotient that survives t_f = 0.
    half = -(linear + (root if (linear.conjugate() * root).real >= 0 else -root)) / 2
    singular = [(-1.0, _LOGARITHM), (1.0, _LOGARITHM)]
    poles = [constant / half] if half else []
    if quadratic:
        poles.append(half / quadratic)
    if t + t_f:
        poles.append(complex(-(mu + lam), 2 * abs(b)) / (t + t_f))
    singular += [(z.real, max(abs(z.imag), 1e-13)) for z in poles if abs(z.real) < 2 * BAND_EDGE]
    edges = [np.array([-BAND_EDGE, 0.0, BAND_EDGE])]
    for centre, width in singular:
        offsets = width * ratio ** np.arange(max(1, np.ceil(np.log(3 * BAND_EDGE / width) / np.log(ratio))))
        edges.append(np.concatenate([centre - offsets, [centre], centre + offsets]))
    mesh = np.unique(np.round(np.concatenate(edges), 13))
    return mesh[(mesh >= -BAND_EDGE) & (mesh <= BAND_EDGE)]


def _evaluate(fields: Array, t: float, temperature: float, order: int = 12, ratio: float = 3.0) -> _State:
    """Integrate all averages and their response at the fields (b, t_f, mu, lambda), shape (4,), by Gauss panels."""
    b, t_f, mu, lam = fields
    edges = _mesh(fields, t, temperature, ratio)
    node, gauss = np.polynomial.legendre.leggauss(order)
    half = np.diff(edges)[:, None] / 2
    x = (edges[:-1, None] + half * (1 + node)).ravel()
    weight = (half * gauss).ravel() * density_of_states(np.abs(x))
    electron, spinon = -mu - t * x, lam + t_f * x
    xi, d = (electron + spinon) / 2, (electron - spinon) / 2
    radius = np.maximum(np.hypot(d, b), 1e-300)
    upper, lower = (xi + radius) / temperature, (xi - radius) / temperature
    f_up, f_low = expit(-upper), expit(-lower)
    # beta = (f_up - f_low) / 2R without cancellation for R << T, where a hybridization is about to vanish.
    beta = f_low * expit(upper) * np.expm1(-2 * radius / temperature) / (2 * radius)
    n_c, n_f = (f_up + f_low) / 2 + beta * d, (f_up + f_low) / 2 - beta * d
    slopes = -f_up * expit(upper) / temperature, -f_low * expit(lower) / temperature
    averages = np.array([-beta, -x * n_f / 3, n_c, n_f]) @ weight
    free = np.logaddexp(0, -upper) + np.logaddexp(0, -lower)
    return _State(
        fields=fields,
        pair=float(averages[0]),
        correlators=averages * [b, 1, 1, 1],
        response=_response(x, d / radius, b / radius, beta, *slopes) @ weight,
        omega=float(-2 * temperature * free @ weight),
        entropy=float(2 * (free + upper * f_up + lower * f_low) @ weight),
    )


def _response(x: Array, ud: Array, ub: Array, beta: Array, slope_up: Array, slope_low: Array) -> Array:
    """Derivative of (w, q, n, n_f) with respect to (b, t_f, mu, lambda) at each x; (4, 4, N) from arrays (N,).

    f(h) = mean + R beta (ud sigma_z + ub sigma_x) with h = xi + R (ud sigma_z + ub sigma_x): a change of h along this
    axis shifts the levels (slopes of f), one across it rotates their states (beta). cc, ff, cf are the responses of
    the occupations to the levels, cm, fm, mm those that involve the off-diagonal element.
    """
    along, cross = (slope_up + slope_low) / 2, (slope_up - slope_low) / 2
    rotation, tilt = along * ud**2 + beta * ub**2, (along - beta) * ud * ub
    cc, ff = (along + rotation) / 2 + cross * ud, (along + rotation) / 2 - cross * ud
    cf = (along - rotation) / 2
    cm, fm, mm = cross * ub + tilt, cross * ub - tilt, along * ub**2 + beta * ud**2
    return np.array(
        [
            [-mm, -x * fm / 2, cm / 2, -fm / 2],
            [-x * fm / 3, -(x**2) * ff / 3, x * cf / 3, -x * ff / 3],
            [cm, x * cf, -cc, cf],
            [fm, x * ff, -cf, ff],
        ]
    )


class _Equations:
    """The four equations for given inputs; counts the integrals taken."""

    def __init__(self, inputs: ReducedInputs) -> None:
        self.inputs = inputs
        self.evaluations = 0
        self.couplings = np.array([0.375 * inputs.kondo_meV, inputs.kitaev_meV / 8])
        # At n = 1 the exchange of particles and holes pins mu = lambda = 0, even where a gap leaves them undetermined.
        self.inner = [1] if inputs.filling == 1 else [1, 2, 3]

    def evaluate(self, fields: Array, order: int = 12, ratio: float = 3.0) -> _State:
        self.evaluations += 1
        return _evaluate(fields, self.inputs.hopping_meV, self.inputs.temperature_meV, order, ratio)

    def residual(self, state: _State) -> Array:
        """Errors of b, t_f (meV) and of the fillings n, n_f times t, shape (4,)."""
        fillings = state.correlators[2:] - [self.inputs.filling, 1.0]
        mean_fields = self.couplings * state.correlators[:2] - state.fields[:2]
        return np.concatenate([mean_fields, self.inputs.hopping_meV * fillings])

    def jacobian(self, state: _State) -> Array:
        """Derivative of the residual with respect to the fields, shape (4, 4)."""
        scale = np.concatenate([self.couplings, [self.inputs.hopping_meV] * 2])
        return np.asarray(scale[:, None] * state.response - np.diag([1.0, 1.0, 0.0, 0.0]))

    def gap(self, state: _State) -> float:
        """(3/8) J_K w / b - 1, zero where b is self-consistent; falls through zero at a minimum of F along b."""
        return float(self.couplings[0] * state.pair - 1)

    def solved(self, state: _State, free: list[int]) -> bool:
        return bool(np.abs(self.residual(state)[free]).max() <= _CONVERGED * self.inputs.hopping_meV)

    def newton(self, start: Array, free: list[int], balanced: bool = False) -> _State:
        """Damped Newton iteration on the fields in `free`; ends where the residual no longer falls.

        balanced: after each step all levels are shifted so that the total filling is right. In a cold, weakly doped
        Kondo insulator a step that misses the band edge by more than T loses every trace of where it lies.
        """
        prepare = self.balance if balanced else np.asarray
        state = self.evaluate(prepare(start))
        error = np.linalg.norm(self.residual(state)[free])
        for _ in range(30):
            if error <= 1e-15 * self.inputs.hopping_meV:
                break
            # lstsq: in a gap at low temperature no filling depends on mu, and the shortest step leaves it alone.
            matrix = self.jacobian(state)[np.ix_(free, free)]
            step = np.linalg.lstsq(matrix, -self.residual(state)[free], rcond=1e-13)[0]
            for damping in (1.0, 0.5, 0.25, 0.1):
                fields = state.fields.copy()
                fields[free] += damping * step
                trial = self.evaluate(prepare(fields))
                trial_error = np.linalg.norm(self.residual(trial)[free])
                if trial_error < error:
                    break
            else:
                break
            state, error = trial, trial_error
        return state

    def balance(self, fields: Array) -> Array:
        """Fields with mu raised and lambda lowered by the same amount until n + n_f is what it should be."""

        def excess(shift: float) -> float:
            return float(self.residual(self.evaluate(fields + shift * direction))[2:].sum())

        direction = np.array([0.0, 0.0, 1.0, -1.0])
        width = 1e-3 * self.inputs.hopping_meV
        while excess(-width) > 0 or excess(width) < 0:
            width *= 8
        return np.asarray(fields + direction * brentq(excess, -width, width, xtol=1e-15 * width, rtol=1e-15))

    def solve(self, start: Array) -> _State:
        """Solve for t_f, mu, lambda at the b of `start`."""
        state = self.newton(start, self.inner)
        if self.solved(state, self.inner) or self.inner == [1]:
            return state
        return self.newton(start, self.inner, balanced=True)

    def follow(self, state: _State, b: float) -> _State | None:
        """Carry a solution for t_f, mu, lambda from its b to another, along the tangent; None where the branch ends."""
        inner = self.inner
        step = whole = b - state.fields[0]
        while state.fields[0] != b:
            jacobian = self.jacobian(state)
            slope = np.linalg.lstsq(jacobian[np.ix_(inner, inner)], -jacobian[inner, 0], rcond=1e-13)[0]
            start = state.fields.copy()
            start[0] = b if abs(step) >= abs(b - start[0]) else start[0] + step
            start[inner] += slope * (start[0] - state.fields[0])
            small = abs(step) < abs(whole) / 7
            moved = self.solve(start) if small else self.newton(start, inner)
            if self.solved(moved, inner):
                state = moved
            elif small:
                return None
            else:
                step /= 2
        return state

    def root_between(self, left: _State, right: _State) -> _State:
        """Solution of all four equations where the gap function changes sign: Newton steps, bisection in between."""
        for _ in range(60):
            share = self.gap(left) / (self.gap(left) - self.gap(right))
            found = self.newton(left.fields + share * (right.fields - left.fields), [0, *self.inner])
            low, high = sorted([left.fields[0], right.fields[0]])
            if self.solved(found, [0, 1, 2, 3]) and low <= found.fields[0] <= high:
                return found
            middle = self.follow(left, (low + high) / 2)
            if middle is None:
                break
            left, right = (middle, right) if self.gap(middle) * self.gap(left) > 0 else (left, middle)
        return found

    def chain(self, state: _State, values: Array) -> list[_State]:
        """States followed from `state` along the given b, shape (N,), as far as the branch goes."""
        states = [state]
        for b in values:
            moved = self.follow(states[-1], float(b))
            if moved is None:
                break
            states.append(moved)
        return states

    def free_energy(self, state: _State) -> float:
        """F per cell: Omega - fields . correlators + energy of the correlators, at the fillings of the inputs."""
        b, t_f, mu, lam = state.fields
        w, q, n, n_f = state.correlators
        paired = 4 * b * w - 2 * self.couplings[0] * w**2
        bonds = 6 * t_f * q - 3 * self.couplings[1] * q**2
        return float(state.omega + 2 * mu * n - 2 * lam * n_f + paired + bonds)


def _branches(equations: _Equations) -> tuple[list[_State], bool]:
    """The decoupled solutions and all roots of b = (3/8) J_K w(b), with t_f, mu, lambda solved at each b.

    Since |w| <= 1, b cannot exceed (3/8) J_K. Chains of rising b start from both signs of t_f at b = 0, and one returns
    from the largest b, so that the branches on both sides of a first-order transition are met. The second value tells
    whether the chains leave no interval of b unseen.
    """
    inputs = equations.inputs
    largest, bond = equations.couplings
    mu = 0.0 - dirac_energy_of_filling(inputs.filling, inputs.hopping_meV)
    signs = (1.0, -1.0) if bond > 0 else (0.0,)
    starts = [equations.solve(np.array([0.0, sign * 0.52 * bond, mu, 0.0])) for sign in signs]
    if largest <= 0:
        return starts, True
    smallest = min(inputs.temperature_meV / 3, largest / 4)
    grid = np.geomspace(smallest, largest, 2 + int(2 * np.log(largest / smallest)))
    chains = [equations.chain(start, grid) for start in starts]
    highest = max((chain[-1] for chain in chains), key=lambda state: state.fields[0])
    top = equations.solve(np.concatenate([[largest], highest.fields[1:]]))
    chains.append(equations.chain(top, grid[-2::-1]))
    roots = [
        equations.root_between(left, right)
        for chain in chains
        for left, right in pairwise(chain)
        if equations.gap(left) * equations.gap(right) < 0
    ]
    return starts + roots, bool(chains[-1][-1].fields[0] <= highest.fields[0])


def solve_reduced(
    hopping_meV: float, kitaev_meV: float, kondo_meV: float, filling: float, temperature_meV: float
) -> ReducedSolution:
    """Heavy Fermi liquid of lowest free energy for t, K, J_K (meV), n (electrons per site) and k_B T (meV).

    b = 0 means that the spinons are decoupled (above the crossover temperature, or J_K <= 0). Any unit may stand for
    meV as long as all four energies share it. A failure to converge is a status, not an exception.

    Raises InputError: t or k_B T not positive, k_B T below 1e-9 t, n outside (0, 2), or a number that is not finite.
    """
    inputs = ReducedInputs(*map(float, (hopping_meV, kitaev_meV, kondo_meV, filling, temperature_meV)))
    _check(inputs)
    equations = _Equations(inputs)
    found, complete = _branches(equations)
    solved = [state for state in found if equations.solved(state, [0, 1, 2, 3])]
    best = min(solved or found, key=equations.free_energy)
    # A decoupled state that would gain energy by hybridizing is no minimum: its other branch has been missed.
    converged = bool(solved) and complete and not (best.fields[0] == 0 and equations.gap(best) > 0)
    finer = equations.evaluate(best.fields, order=16, ratio=2.0)
    b, t_f, mu, lam = (float(value) for value in best.fields)
    w, q = (float(value) for value in best.correlators[:2])
    distinct = {tuple(np.round(np.abs(state.fields[:2]) / hopping_meV, 8)) for state in solved}
    return ReducedSolution(
        b=b,
        t_f=t_f,
        mu=mu,
        lam=lam,
        w=w,
        q=q,
        free_energy_meV_per_cell=equations.free_energy(best),
        entropy_kB_per_cell=best.entropy,
        residual_meV=float(np.abs(equations.residual(best)).max()),
        quadrature_error=float(np.abs(finer.correlators - best.correlators).max()),
        status="minimum-in-class" if converged else "not-converged",
        branches=len(distinct),
        evaluations=equations.evaluations,
        inputs=inputs,
    )


def _check(inputs: ReducedInputs) -> None:
    for name, value in asdict(inputs).items():
        if not np.isfinite(value):
            raise InputError(f"{name} = {value}: give a finite number")
    for name in ("hopping_meV", "temperature_meV"):
        if getattr(inputs, name) <= 0:
            raise InputError(f"{name} = {getattr(inputs, name):g}: give a value above zero")
    if inputs.temperature_meV < _COLDEST * inputs.hopping_meV:
        raise InputError(
            f"temperature_meV = {inputs.temperature_meV:g}: give at least {_COLDEST:g} of hopping_meV, "
            "below which the Fermi edge is not resolved"
        )
    if not 0 < inputs.filling < 2:
        raise InputError(f"filling = {inputs.filling:g}: give electrons per site strictly between 0 and 2")
