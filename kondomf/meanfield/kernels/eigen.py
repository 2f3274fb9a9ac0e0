"""Eigenvalues and eigenvectors of eight Hermitian matrices at a time, one per lane.

The layout is that of `tridiagonal`. Source of the steps: "Matrix Computations", chapter 8, implicit symmetric
QR step with Wilkinson shift (textbook).
"""

from typing import Any

import numpy as np
from numba import njit

from kondomf.meanfield.kernels.entry import OPTIONS
from kondomf.meanfield.kernels.tridiagonal import aligned, tridiagonal
from kondomf.meanfield.kernels.vector import (
    LANES,
    absolute,
    any_lane,
    copysign,
    fma,
    gather,
    lane_max,
    lane_min,
    load,
    maximum,
    select,
    splat,
    sqrt,
    store,
)

ROUNDING = 1.1e-16
"""Off-diagonal elements below this fraction of the norm count as zero."""
SWEEPS = 40
"""Most sweeps per row; about 2 are needed."""
NEVER = 1e9
"""First row of a finished lane."""
MATRIX, LEVELS, STATES = 0, 2, 9
"""Places in a workspace of the matrix, its eigenvalues, and room for its eigenvectors."""


@njit(**OPTIONS)
def workspace(n: int) -> Any:
    """Buffers for matrices of size up to n: the matrix, z, d, e, c, s, p, w, the phases D, eigenvectors, order."""
    matrix, states = aligned(16 * n * n), aligned(16 * n * n)
    z = aligned(8 * n * (n + 3))  # rows are padded to a multiple of 4
    d, e, c, s = aligned(8 * n), aligned(8 * n), aligned(8 * n), aligned(8 * n)
    p, w, phase = aligned(16 * n), aligned(16 * n), aligned(16 * n)
    return matrix, z, d, e, c, s, p, w, phase, states, np.empty(8 * n, dtype=np.int64)


@njit(**OPTIONS)
def _rotate(n: int, rows: int, z: Any, c: Any, s: Any, low: int, high: int, sweep: int) -> None:
    """Apply the rotations high - 1, ..., low of a sweep to the columns of z; row i is zero beyond i + sweep."""
    for row in range(0, rows, 4):
        top = min(high, row + 4 + sweep)
        if top <= low:
            continue
        z0, z1, z2, z3 = 8 * row * n, 8 * (row + 1) * n, 8 * (row + 2) * n, 8 * (row + 3) * n
        at = 8 * top
        f0, f1, f2, f3 = load(z, z0 + at), load(z, z1 + at), load(z, z2 + at), load(z, z3 + at)
        for i in range(8 * (top - 1), 8 * low - 8, -8):
            ci, si = load(c, i), load(s, i)
            h0, h1, h2, h3 = load(z, z0 + i), load(z, z1 + i), load(z, z2 + i), load(z, z3 + i)
            store(z, z0 + i + 8, fma(si, h0, ci * f0))
            store(z, z1 + i + 8, fma(si, h1, ci * f1))
            store(z, z2 + i + 8, fma(si, h2, ci * f2))
            store(z, z3 + i + 8, fma(si, h3, ci * f3))
            f0, f1 = fma(ci, h0, -(si * f0)), fma(ci, h1, -(si * f1))
            f2, f3 = fma(ci, h2, -(si * f2)), fma(ci, h3, -(si * f3))
        at = 8 * low
        store(z, z0 + at, f0)
        store(z, z1 + at, f1)
        store(z, z2 + at, f2)
        store(z, z3 + at, f3)


@njit(**OPTIONS)
def _find_block(n: int, lane: int, d: Any, e: Any, lanes: Any) -> None:
    """Set l, m, d_l, d_(l+1), e_l, d_m of a lane to its first undivided block of T; l = NEVER if there is none."""
    low = 0
    while low < n - 1 and e[8 * low + lane] == 0.0:
        low += 1
    if low >= n - 1:
        lanes[lane], lanes[8 + lane] = NEVER, -NEVER
        lanes[16 + lane], lanes[24 + lane], lanes[32 + lane], lanes[40 + lane] = 0.0, 0.0, 1.0, 0.0
        return
    high = low + 1
    while e[8 * high + lane] != 0.0:
        high += 1
    lanes[lane], lanes[8 + lane] = low, high
    lanes[16 + lane], lanes[24 + lane] = d[8 * low + lane], d[8 * low + 8 + lane]
    lanes[32 + lane], lanes[40 + lane] = e[8 * low + lane], d[8 * high + lane]


@njit(**OPTIONS)
def _small(n: int, d: Any, e: Any) -> Any:
    """Size below which an off-diagonal element of T counts as zero; those that do are set to zero."""
    norm = splat(0.0)
    for i in range(8 * (n - 1), -8, -8):
        norm = maximum(norm, absolute(load(d, i)) + load(e, i))
    small = ROUNDING * norm
    for i in range(0, 8 * n, 8):
        store(e, i, select(load(e, i) <= small, splat(0.0), load(e, i)))
    return small


@njit(**OPTIONS)
def diagonalise(n: int, d: Any, e: Any, z: Any, c: Any, s: Any) -> bool:
    """Eigenvalues of T in d and eigenvectors in the columns of z (row i, column j at 8 (i n + j)), unordered.

    Implicit QL; every lane has its own range l..m and Wilkinson shift and takes no part (c = 1, s = 0) elsewhere.
    False if that does not converge. Destroys e.
    """
    rows = n + (-n) % 4
    z[: 8 * rows * n] = 0.0
    for i in range(n):
        store(z, 8 * (i * n + i), splat(1.0))
    small = _small(n, d, e)
    lanes = np.empty(6 * LANES)
    for lane in range(LANES):
        _find_block(n, lane, d, e, lanes)
    zero, one = splat(0.0), splat(1.0)
    l, m = load(lanes, 0), load(lanes, 8)
    dl, dnext, el, dm = load(lanes, 16), load(lanes, 24), load(lanes, 32), load(lanes, 40)
    for sweep in range(SWEEPS * n):
        low = int(lane_min(l))
        if low >= n:
            return True
        high = int(lane_max(m))
        g = (dnext - dl) / (2.0 * el)
        first = dm - dl + el / (g + copysign(sqrt(fma(g, g, one)), g))
        g, si, ci, p = first, one, one, zero
        dabove, eabove = load(d, 8 * high), load(e, 8 * high)
        d1, d2, e1 = zero, zero, zero
        mnew = m
        for i in range(high - 1, low - 1, -1):
            x = splat(float(i))
            start, end, inside = x == m - 1.0, x == l, (x >= l) & (x < m)
            g, p = select(start, first, g), select(start, zero, p)
            si, ci = select(start, one, si), select(start, one, ci)
            d0, e0 = load(d, 8 * i), load(e, 8 * i)
            f, b = si * e0, ci * e0
            # Where f^2 underflows the rotation is none; r keeps the sign of g.
            ff = f * f
            square = fma(g, g, ff)
            idle = ff == 0.0
            r = sqrt(square)
            inverse = r * (1.0 / square)
            r = select(idle, g, r)
            si, ci = select(idle, zero, f * inverse), select(idle, one, g * inverse)
            g = dabove - p
            t = fma(d0 - g, si, 2.0 * (ci * b))
            p = si * t
            dabove = select(inside, g + p, dabove)
            g = fma(ci, t, -b)
            eabove = select(inside & (x < m - 1.0), r, eabove)
            eabove = select(absolute(eabove) <= small, zero, eabove)
            store(d, 8 * i + 8, dabove)
            store(e, 8 * i + 8, eabove)
            store(c, 8 * i, select(inside, ci, one))
            store(s, 8 * i, select(inside, si, zero))
            split = inside & (eabove == zero)
            mnew, dm = select(split, splat(i + 1.0), mnew), select(split, dabove, dm)
            d2, d1, e1 = select(x == l + 1.0, dabove, d2), select(end, dabove, d1), select(end, eabove, e1)
            dl = select(end, d0 - p, dl)
            el = select(end, g, el)
            dabove, eabove = select(end, dl, d0), select(end, el, e0)
        store(d, 8 * low, dabove)
        store(e, 8 * low, select(absolute(eabove) <= small, zero, eabove))
        _rotate(n, rows, z, c, s, low, high, sweep)
        deflated = (absolute(el) <= small) & (l < NEVER)
        l, m = select(deflated, l + 1.0, l), mnew
        dl, dnext, el = select(deflated, d1, dl), select(deflated, d2, d1), select(deflated, e1, el)
        done = (l >= m) & (l < NEVER)
        if any_lane(done):
            store(lanes, 0, l)
            store(lanes, 8, m)
            store(lanes, 16, dl)
            store(lanes, 24, dnext)
            store(lanes, 32, el)
            store(lanes, 40, dm)
            for lane in range(LANES):
                if lanes[8 + lane] <= lanes[lane] < NEVER:
                    _find_block(n, lane, d, e, lanes)
            l, m = load(lanes, 0), load(lanes, 8)
            dl, dnext, el, dm = load(lanes, 16), load(lanes, 24), load(lanes, 32), load(lanes, 40)
    return False


@njit(**OPTIONS)
def sort_levels(n: int, d: Any, order: Any) -> None:
    """Sort d in every lane, ascending; order (n, 8) = 8 times the former place, plus the lane."""
    for lane in range(LANES):
        for j in range(n):
            value, place = d[8 * j + lane], 8 * j + lane
            i = 8 * j + lane
            while i >= 8 and d[i - 8] > value:
                d[i], order[i] = d[i - 8], order[i - 8]
                i -= 8
            d[i], order[i] = value, place


@njit(**OPTIONS)
def eigenvalues(n: int, work: Any) -> bool:
    """Eigenvalues of the matrix in `work`, ascending; what `eigenvectors` needs stays there. False: not converged."""
    a, z, d, e, c, s, p, w, phase, _, order = work
    tridiagonal(n, a, d, e, phase, p, w)
    if not diagonalise(n, d, e, z, c, s):
        return False
    sort_levels(n, d, order)
    return True


@njit(**OPTIONS)
def eigenvectors(n: int, first: int, last: int, work: Any, states: Any) -> None:
    """Eigenvectors first, ..., last - 1 after `eigenvalues`; component i of vector j at 16 ((j - first) n + i)."""
    a, z, phase, order = work[0], work[1], work[8], work[10]
    for j in range(first, last):
        for i in range(n):
            x = gather(z, 8 * i * n, order, 8 * j)
            at = 16 * ((j - first) * n + i)
            store(states, at, x * load(phase, 16 * i))
            store(states, at + 8, x * load(phase, 16 * i + 8))
    count = last - first
    for k in range(n - 3, -1, -1):
        v = 16 * k * n
        for j in range(0, count - 1, 2):
            _reflect_two(n, k, v, 16 * j * n, 16 * (j + 1) * n, a, states)
        if count % 2:
            _reflect(n, k, v, 16 * (count - 1) * n, a, states)


@njit(**OPTIONS)
def _reflect(n: int, k: int, v: int, x: int, a: Any, states: Any) -> None:
    """x -= v (v^H x)."""
    qr, qi = splat(0.0), splat(0.0)
    for i in range(16 * (k + 1), 16 * n, 16):
        vr, vi, xr, xi = load(a, v + i), load(a, v + i + 8), load(states, x + i), load(states, x + i + 8)
        qr, qi = fma(vr, xr, fma(vi, xi, qr)), fma(vr, xi, fma(-vi, xr, qi))
    for i in range(16 * (k + 1), 16 * n, 16):
        vr, vi, xr, xi = load(a, v + i), load(a, v + i + 8), load(states, x + i), load(states, x + i + 8)
        store(states, x + i, fma(-vr, qr, fma(vi, qi, xr)))
        store(states, x + i + 8, fma(-vr, qi, fma(-vi, qr, xi)))


@njit(**OPTIONS)
def _reflect_two(n: int, k: int, v: int, x: int, y: int, a: Any, states: Any) -> None:
    """The same for two vectors, which share the loads of v."""
    qr, qi, sr, si = splat(0.0), splat(0.0), splat(0.0), splat(0.0)
    for i in range(16 * (k + 1), 16 * n, 16):
        vr, vi, xr, xi = load(a, v + i), load(a, v + i + 8), load(states, x + i), load(states, x + i + 8)
        qr, qi = fma(vr, xr, fma(vi, xi, qr)), fma(vr, xi, fma(-vi, xr, qi))
        xr, xi = load(states, y + i), load(states, y + i + 8)
        sr, si = fma(vr, xr, fma(vi, xi, sr)), fma(vr, xi, fma(-vi, xr, si))
    for i in range(16 * (k + 1), 16 * n, 16):
        vr, vi, xr, xi = load(a, v + i), load(a, v + i + 8), load(states, x + i), load(states, x + i + 8)
        store(states, x + i, fma(-vr, qr, fma(vi, qi, xr)))
        store(states, x + i + 8, fma(-vr, qi, fma(-vi, qr, xi)))
        xr, xi = load(states, y + i), load(states, y + i + 8)
        store(states, y + i, fma(-vr, sr, fma(vi, si, xr)))
        store(states, y + i + 8, fma(-vr, si, fma(-vi, sr, xi)))
