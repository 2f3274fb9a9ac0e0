"""One evaluation: fields phi -> free energy, correlators, and the response to the fields (plain numpy)."""

from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from kondomf.meanfield.zone import ZoneRule
from kondomf.model import MeanFieldModel

Array = NDArray[np.float64]
Complex = NDArray[np.complex128]

HUGE = 1e100
"""Levels above this many k_B T belong to no solution, and their squares would overflow."""
CHUNK = 4096
"""Wave vectors worked on at a time; bounds the memory."""
BLOCK = 2**17
"""Numbers in one packed block of the response; fits the processor's cache."""
KEPT = 2**21
"""Freed arrays of up to this many numbers (16 MB) are to stay with the process."""


@dataclass(frozen=True)
class Evaluation:
    """Gaussian state of the fields phi.

    phi : (N,) the fields, meV.
    omega : grand potential of H_MF per magnetic cell, meV.
    entropy : entropy per magnetic cell, in k_B.
    p : (N,) correlators P_p = <i gamma_a(0) gamma_b(R)> of the channels.
    correlators : (NR, n, n) the same for every pair of Majoranas, R running over the model's lattice vectors.
    chunks : eigenvalues (Nk, n) and eigenvectors (Nk, n, n) of h(k) with their slice of the zone; empty unless kept.
    """

    phi: Array
    omega: float
    entropy: float
    p: Array
    correlators: Array
    chunks: tuple[tuple[slice, Array, Complex], ...]


def keep_freed_memory() -> None:
    """Make glibc keep freed arrays, which doubles the speed of `response`; elsewhere it does nothing.

    It gives large freed arrays back to the system, so that each new one costs page faults, until it has seen a
    larger one freed: mallopt(3), "dynamic adjustment of the mmap threshold".
    """
    np.empty(KEPT)


def bloch_matrix(model: MeanFieldModel, phi: Array, phases: Complex) -> Complex:
    """h(k)[a, b] += 2i phi_p e^(ik.R) and its Hermitian conjugate; phases (Nk, NR) -> (Nk, n, n), meV."""
    n = model.n_majorana
    real_space = np.zeros((len(model.lattice_vectors), n, n))
    np.add.at(real_space, model.position, 2 * phi)
    half = 1j * (phases @ real_space.reshape(len(real_space), n * n)).reshape(-1, n, n)
    return half + half.conj().swapaxes(1, 2)


def decompositions(
    model: MeanFieldModel, zone: ZoneRule, phi: Array
) -> Iterator[tuple[slice, Complex, Array, Complex]]:
    """Part of the zone, phases e^(ik.R) (Nk, NR), eigenvalues (Nk, n) and eigenvectors (Nk, n, n) of h(k), in turn."""
    for start in range(0, len(zone.k), CHUNK):
        part = slice(start, start + CHUNK)
        phases = model.phases(zone.k[part])
        yield part, phases, *np.linalg.eigh(bloch_matrix(model, phi, phases))


def lattice_sum(phases: Complex, weight: Array, matrix: Complex) -> Array:
    """Re[i sum_k w_k matrix_ab e^(-ik.R)] of matrices (Nk, n, n), for phases e^(ik.R) (Nk, NR): (NR, n, n)."""
    return -((phases.conj() * weight[:, None]).T @ matrix.reshape(len(matrix), -1)).imag.reshape(-1, *matrix.shape[1:])


def evaluate(model: MeanFieldModel, zone: ZoneRule, phi: Array, *, keep: bool = False) -> Evaluation:
    """Correlators and grand potential of H_MF = sum_p phi_p O_p at the model's temperature.

    omega = -(T/2) sum_k w_k sum_n ln 2cosh(e_n/2T), P_p = Re[i sum_k w_k tanh(h/2T)_ab e^(-ik.R)].
    `keep` retains the eigen-decompositions for `response`. Source: Gibbs-Bogoliubov variation of free Majoranas.
    """
    t = model.temperature
    n = model.n_majorana
    omega = entropy = 0.0
    correlators = np.zeros((len(model.lattice_vectors), n, n))
    kept = []
    bound = 4 * np.abs(phi).max() * len(phi)
    if not bound < HUGE * t:  # also catches NaN, on which eigh would raise
        return undefined(model, phi)
    for part, phases, e, u in decompositions(model, zone, phi):
        x = np.abs(e) / t
        y = np.exp(-x)
        tanh = np.tanh(e / (2 * t))
        w = zone.weight[part]
        omega -= t / 2 * float(w @ (x / 2 + np.log1p(y)).sum(axis=1))
        entropy += float(w @ (np.log1p(y) + x * y / (1 + y)).sum(axis=1)) / 2
        correlators += lattice_sum(phases, w, (u * tanh[:, None, :]) @ u.conj().swapaxes(1, 2))
        if keep:
            kept.append((part, e, u))
    return Evaluation(phi, omega, entropy, correlators[model.position], correlators, tuple(kept))


def undefined(model: MeanFieldModel, phi: Array) -> Evaluation:
    """What fields without a usable Bloch matrix give: not a number throughout."""
    n = model.n_majorana
    correlators = np.full((len(model.lattice_vectors), n, n), np.nan)
    return Evaluation(phi, np.nan, np.nan, correlators[model.position], correlators, ())


def thermal_weight(e: Array, t: float) -> Array:
    """X_nm = (tanh(e_n/2T) - tanh(e_m/2T))/(e_n - e_m), its limit (1 - tanh^2)/2T at equal energies; (..., n, n).

    With the Fermi function f = (1 + tanh)/2 and g = 1 - f this is 2 (f_n g_m - g_n f_m)/(e_n - e_m), and near
    degeneracy 2 sqrt(f_n g_n f_m g_m)/T sinh(d)/d with d = (e_n - e_m)/2T: no digits are lost at any temperature.
    """
    root = np.exp(-np.abs(e) / (2 * t))
    large = 1 / (1 + root * root)
    small = root * root * large
    f, g = np.where(e > 0, large, small), np.where(e > 0, small, large)
    difference = e[..., :, None] - e[..., None, :]
    d = difference / (2 * t)
    near = np.abs(d) < 1 / 4
    d2 = np.where(near, d * d, 0.0)
    series = 1 + d2 / 6 * (1 + d2 / 20 * (1 + d2 / 42 * (1 + d2 / 72 * (1 + d2 / 110))))
    close = 2 / t * (root * large)[..., :, None] * (root * large)[..., None, :] * series
    far = 2 * (f[..., :, None] * g[..., None, :] - g[..., :, None] * f[..., None, :])
    return np.where(near, close, far / np.where(near, 1.0, difference))


def response(model: MeanFieldModel, zone: ZoneRule, state: Evaluation, channels: NDArray[np.int64]) -> Array:
    """Pi_pq = dP_p/dphi_q among `channels`, (Nc, Nc), 1/meV; negative semidefinite. `state` must be kept.

    Pi_pq = -(1/4) sum_k w_k sum_nm X_nm D^p_nm (D^q_nm)*, D^p = U+(2i|a><b|e^(ik.R) + h.c.)U.
    D is Hermitian and X symmetric, so Re D + Im D carries the whole sum in real numbers; with l_n = 2i e^(ik.R) U*_an
    and r_m = U_bm it is the product of an (n, 4) and a (4, n) real matrix.
    """
    n, count = model.n_majorana, len(channels)
    vector, a, b = (axis[channels] for axis in model.position)
    pi = np.zeros((count, count))
    step = max(1, BLOCK // (count * n * n))
    for part, e, u in state.chunks:
        phases = 2j * model.phases(zone.k[part])
        root = np.sqrt(zone.weight[part, None, None] * thermal_weight(e, model.temperature))
        for start in range(0, len(e), step):
            block = slice(start, start + step)
            left = (phases[block][:, vector, None] * u[block][:, a].conj()).swapaxes(0, 1)
            right = u[block][:, b].swapaxes(0, 1)
            plus, minus = right.real + right.imag, right.real - right.imag
            columns = np.stack([left.real, left.imag, minus, -plus], axis=-1)
            rows = np.stack([plus, minus, left.real, left.imag], axis=-2)
            packed = ((columns @ rows) * root[block]).reshape(count, -1)
            pi -= packed @ packed.T
    return pi / 4
