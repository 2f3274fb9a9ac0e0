"""Householder reduction of eight Hermitian matrices at a time to real tridiagonal form, one per lane.

All arrays are flat float64 with eight lanes innermost. A complex number takes 16 elements: 8 real parts, then 8
imaginary parts. The Hermitian matrix is given by its lower triangle, column after column: element (i, j), i >= j,
starts at 16 (j n + i). Source of the steps: "Matrix Computations", chapter 8
("Householder tridiagonalization").
"""

from typing import Any

import numpy as np
from numba import njit

from kondomf.meanfield.kernels.entry import OPTIONS
from kondomf.meanfield.kernels.vector import fma, load, select, splat, sqrt, store

TINY_COLUMN = 1e-200
TINY_ELEMENT = 1e-280
"""Squares below these are zero; that of an element may be so in a column that is not."""


@njit(**OPTIONS)
def aligned(count: int) -> Any:
    """Uninitialised array (count,) that starts on a cache line."""
    raw = np.empty(count + 8)
    skip = (-(raw.ctypes.data // 8)) % 8
    return raw[skip : skip + count]


@njit(**OPTIONS)
def _reflector(n: int, k: int, a: Any, e: Any, phase: Any) -> None:
    """Replace column k below the diagonal, x, by v with (1 - v v^H) x = e_k z e_1, |z| = 1, and D_(k+1) = z D_k.

    |v|^2 = 2, or v = 0 where x = 0 or has one element.
    """
    column = 16 * (k * n + k + 1)
    xr, xi = load(a, column), load(a, column + 8)
    square = fma(xr, xr, xi * xi)
    total = square
    for i in range(k + 2, n):
        yr, yi = load(a, 16 * (k * n + i)), load(a, 16 * (k * n + i) + 8)
        total = fma(yr, yr, fma(yi, yi, total))
    zero, one = splat(0.0), splat(1.0)
    empty, real = total <= TINY_COLUMN, square <= TINY_ELEMENT
    norm = select(empty, zero, sqrt(total))
    size = sqrt(select(real, one, square))
    cr, ci = select(real, one, xr / size), select(real, zero, xi / size)
    scale = select(empty, zero, 1.0 / sqrt(fma(norm, norm, norm * select(real, zero, size))))
    if k == n - 2:  # no reflector, only the phase of the last element
        scale, norm, cr, ci = zero, select(real, zero, size), -cr, -ci
    store(a, column, scale * fma(cr, norm, xr))
    store(a, column + 8, scale * fma(ci, norm, xi))
    for i in range(k + 2, n):
        at = 16 * (k * n + i)
        store(a, at, scale * load(a, at))
        store(a, at + 8, scale * load(a, at + 8))
    store(e, 8 * k, norm)
    pr, pi = load(phase, 16 * k), load(phase, 16 * k + 8)
    store(phase, 16 * (k + 1), ci * pi - cr * pr)
    store(phase, 16 * (k + 1) + 8, -(cr * pi + ci * pr))


@njit(**OPTIONS)
def _first_product(n: int, a: Any, p: Any) -> None:
    """p = A v of the first reflector v, A without its first row and column."""
    for i in range(n):
        store(p, 16 * i, splat(0.0))
        store(p, 16 * i + 8, splat(0.0))
    for j in range(1, n):
        ur, ui = load(a, 16 * j), load(a, 16 * j + 8)
        diagonal = load(a, 16 * (j * n + j))
        qr, qi = fma(diagonal, ur, load(p, 16 * j)), fma(diagonal, ui, load(p, 16 * j + 8))
        for i in range(j + 1, n):
            ar, ai = load(a, 16 * (j * n + i)), load(a, 16 * (j * n + i) + 8)
            xr, xi = load(a, 16 * i), load(a, 16 * i + 8)
            store(p, 16 * i, fma(ar, ur, fma(-ai, ui, load(p, 16 * i))))
            store(p, 16 * i + 8, fma(ar, ui, fma(ai, ur, load(p, 16 * i + 8))))
            qr = fma(ar, xr, fma(ai, xi, qr))
            qi = fma(ar, xi, fma(-ai, xr, qi))
        store(p, 16 * j, qr)
        store(p, 16 * j + 8, qi)


@njit(**OPTIONS)
def _update_and_product(n: int, k: int, a: Any, w: Any, p: Any) -> None:
    """A -= v w^H + w v^H with v in column k - 1, and p = A u with u in column k, A from row and column k + 1 on."""
    v, u = 16 * (k - 1) * n, 16 * k * n
    for i in range(k + 1, n):
        store(p, 16 * i, splat(0.0))
        store(p, 16 * i + 8, splat(0.0))
    for j in range(k + 1, n):
        vr, vi, wr, wi = load(a, v + 16 * j), load(a, v + 16 * j + 8), load(w, 16 * j), load(w, 16 * j + 8)
        ur, ui = load(a, u + 16 * j), load(a, u + 16 * j + 8)
        at = 16 * (j * n + j)
        diagonal = load(a, at) - 2.0 * fma(vr, wr, vi * wi)
        store(a, at, diagonal)
        qr, qi = fma(diagonal, ur, load(p, 16 * j)), fma(diagonal, ui, load(p, 16 * j + 8))
        for i in range(j + 1, n):
            at = 16 * (j * n + i)
            ar, ai = load(a, at), load(a, at + 8)
            xr, xi = load(a, v + 16 * i), load(a, v + 16 * i + 8)
            ar = fma(-xr, wr, fma(-xi, wi, ar))
            ai = fma(-xi, wr, fma(xr, wi, ai))
            xr, xi = load(w, 16 * i), load(w, 16 * i + 8)
            ar = fma(-xr, vr, fma(-xi, vi, ar))
            ai = fma(-xi, vr, fma(xr, vi, ai))
            store(a, at, ar)
            store(a, at + 8, ai)
            store(p, 16 * i, fma(ar, ur, fma(-ai, ui, load(p, 16 * i))))
            store(p, 16 * i + 8, fma(ar, ui, fma(ai, ur, load(p, 16 * i + 8))))
            xr, xi = load(a, u + 16 * i), load(a, u + 16 * i + 8)
            qr = fma(ar, xr, fma(ai, xi, qr))
            qi = fma(ar, xi, fma(-ai, xr, qi))
        store(p, 16 * j, qr)
        store(p, 16 * j + 8, qi)


@njit(**OPTIONS)
def _next_column(n: int, k: int, a: Any, p: Any, w: Any) -> None:
    """w = p - (v.p/2) v of column k, and the update A -= v w^H + w v^H of column k + 1."""
    v = 16 * k * n
    half = splat(0.0)
    for i in range(k + 1, n):
        half = fma(load(a, v + 16 * i), load(p, 16 * i), fma(load(a, v + 16 * i + 8), load(p, 16 * i + 8), half))
    half = -0.5 * half
    for i in range(16 * (k + 1), 16 * n, 8):
        store(w, i, fma(half, load(a, v + i), load(p, i)))
    j = k + 1
    vr, vi, wr, wi = load(a, v + 16 * j), load(a, v + 16 * j + 8), load(w, 16 * j), load(w, 16 * j + 8)
    for i in range(j, n):
        at = 16 * (j * n + i)
        xr, xi, yr, yi = load(a, v + 16 * i), load(a, v + 16 * i + 8), load(w, 16 * i), load(w, 16 * i + 8)
        store(a, at, load(a, at) - fma(xr, wr, fma(xi, wi, fma(yr, vr, yi * vi))))
        store(a, at + 8, load(a, at + 8) - fma(xi, wr, fma(-xr, wi, fma(yi, vr, -(yr * vi)))))


@njit(**OPTIONS)
def tridiagonal(n: int, a: Any, d: Any, e: Any, phase: Any, p: Any, w: Any) -> None:
    """Reduce A to H_0 H_1 ... D T D^H ... H_1 H_0 with real T: diagonal d (n), off-diagonal e (n, the last 0) >= 0.

    The reflectors H = 1 - v v^H replace the columns of A below the diagonal; D (n) are the phases. The update of one
    step and the matrix-vector product of the next go through A together.
    """
    store(phase, 0, splat(1.0))
    store(phase, 8, splat(0.0))
    for k in range(n - 1):
        _reflector(n, k, a, e, phase)
        if k == 0:
            _first_product(n, a, p)
        else:
            _update_and_product(n, k, a, w, p)
        _next_column(n, k, a, p, w)
    for k in range(n):
        store(d, 8 * k, load(a, 16 * (k * n + k)))
    store(e, 8 * (n - 1), splat(0.0))
