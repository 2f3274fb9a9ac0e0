"""Sums over pairs of levels: what `response` does with the eigenvectors of eight wave vectors.

For every pair i < j of levels and every channel there are two rows of eight numbers, sqrt(2 w X_ij) times the real and
the imaginary part of D_ij, and for every level one of sqrt(w X_ii) D_ii; the response is the sum of their products.
"""

from typing import Any

import numpy as np
from numba import njit

from kondomf.meanfield.kernels.entry import OPTIONS
from kondomf.meanfield.kernels.vector import absolute, any_lane, exp, fma, lane_sum, load, select, splat, sqrt, store

ROWS = 48
"""Rows collected before they are multiplied: few enough for the level-2 cache, many enough to amortise the sums."""
STRIDE = 8 * (ROWS + 1)
"""From channel to channel; not a power of two, since those compete for the same cache lines."""
TILE = 3, 2
"""Channels times channels whose sums are kept in registers: with five operands as many as the sixteen registers of a
CPU without 512-bit vectors hold."""


@njit(**OPTIONS)
def level_factors(n: int, e: Any, t: float, levels: Any) -> None:
    """Fermi function f, g = 1 - f and sqrt(f g) of every level, each to full relative accuracy."""
    for i in range(n):
        x = load(e, 8 * i)
        root = exp(absolute(x) * (-0.5 / t))
        small = root * root
        large = 1.0 / (1.0 + small)
        positive = x >= 0.0
        store(levels, 24 * i, select(positive, large, small * large))
        store(levels, 24 * i + 8, select(positive, small * large, large))
        store(levels, 24 * i + 16, root * large)


@njit(**OPTIONS)
def thermal_weight(i: int, j: int, e: Any, t: float, levels: Any) -> Any:
    """X_ij = 2 (f_i g_j - g_i f_j)/(e_i - e_j), near degeneracy 2 sqrt(f_i g_i f_j g_j)/T sinh(d)/d by its series.

    d = (e_i - e_j)/2T; neither form loses digits where it is used, nor where X is exponentially small.
    """
    difference = load(e, 8 * i) - load(e, 8 * j)
    d2 = difference * (0.5 / t)
    d2 = d2 * d2
    near = d2 < 1 / 16
    one = splat(1.0)
    series = fma(d2, 1 / 110, one)
    series = fma(d2 * (1 / 72), series, one)
    series = fma(d2 * (1 / 42), series, one)
    series = fma(d2 * (1 / 20), series, one)
    series = fma(d2 * (1 / 6), series, one)
    close = (2 / t) * load(levels, 24 * i + 16) * load(levels, 24 * j + 16)
    far = 2.0 * fma(load(levels, 24 * i), load(levels, 24 * j + 8), -(load(levels, 24 * i + 8) * load(levels, 24 * j)))
    return select(near, close * series, far / select(near, one, difference))


@njit(**OPTIONS)
def select_pairs(
    sector: Any, e: Any, weight: Any, t: float, least: float, levels: Any, pairs: Any, roots: Any
) -> tuple[int, int]:
    """List the pairs of levels with w X above `least` in some lane, the diagonal first, and the roots of w X, 2 w X.

    Returns the number of diagonal pairs and of all. Pairs hold 16 times the numbers of the levels inside their blocks.
    """
    first, size, other, other_size = sector[0], sector[1], sector[2], sector[3]
    same = first == other
    w = load(weight, 0)
    count = 0
    if same:
        for i in range(size):
            x = w * thermal_weight(first + i, first + i, e, t, levels)
            if any_lane(x > least):
                pairs[2 * count], pairs[2 * count + 1] = 16 * i, 16 * i
                store(roots, 8 * count, sqrt(x))
                count += 1
    diagonal = count
    w = w + w
    for i in range(size):
        for j in range(i + 1 if same else 0, other_size):
            x = w * thermal_weight(first + i, other + j, e, t, levels)
            if any_lane(x > least):
                pairs[2 * count], pairs[2 * count + 1] = 16 * i, 16 * j
                store(roots, 8 * count, sqrt(x))
                count += 1
    return diagonal, count


@njit(**OPTIONS)
def components(parts: Any, states: Any, phases: Any, factors: Any) -> None:
    """Per level of a block one component of its eigenvector, times 1 or the conjugate of z = 2i e^(ik.R) or of z*."""
    for row in range(len(parts)):
        source, step, phase, sense, kind, size, to = parts[row]
        zr, zi = splat(1.0), splat(0.0)
        if kind != 0:
            zr, zi = (-2.0 * sense) * load(phases, phase + 8), (-2.0 * kind) * load(phases, phase)
        for i in range(size):
            ur, ui = load(states, source + step * i), load(states, source + step * i + 8)
            store(factors, to + 16 * i, fma(zr, ur, -(zi * ui)))
            store(factors, to + 16 * i + 8, fma(zr, ui, zi * ur))


@njit(**OPTIONS)
def diagonal_rows(
    start: int, stop: int, pairs: Any, roots: Any, factors: Any, left: Any, right: Any, rows: Any, at: int
) -> None:
    """Rows root D_ii of the channels, D_ii = 2 Re l_i r_i; `left` and `right` are the places of l* and r in factors."""
    for p in range(len(left)):
        a, b = left[p], right[p]
        out = at + STRIDE * p
        for k in range(start, stop):
            i = pairs[2 * k]
            d = fma(load(factors, a + i), load(factors, b + i), load(factors, a + i + 8) * load(factors, b + i + 8))
            store(rows, out, (d + d) * load(roots, 8 * k))
            out += 8


@njit(**OPTIONS)
def pair_rows(
    start: int, stop: int, same: bool, pairs: Any, roots: Any, factors: Any, left: Any, right: Any, rows: Any, at: int
) -> None:
    """Rows root Re D_ij and root Im D_ij of the channels, D_ij = l_i r_j + (l_j r_i)*.

    The second term vanishes where i and j belong to different blocks.
    """
    for p in range(len(left)):
        a, b = left[p], right[p]
        out = at + STRIDE * p
        for k in range(start, stop):
            i, j = pairs[2 * k], pairs[2 * k + 1]
            lr, li = load(factors, a + i), load(factors, a + i + 8)
            rr, ri = load(factors, b + j), load(factors, b + j + 8)
            re, im = fma(lr, rr, li * ri), fma(lr, ri, -(li * rr))
            if same:
                lr, li = load(factors, a + j), load(factors, a + j + 8)
                rr, ri = load(factors, b + i), load(factors, b + i + 8)
                re, im = fma(lr, rr, fma(li, ri, re)), fma(li, rr, fma(-lr, ri, im))
            root = load(roots, 8 * k)
            store(rows, out, root * re)
            store(rows, out + 8, root * im)
            out += 16


@njit(**OPTIONS)
def multiply(channels: int, count: int, rows: Any, base: int, sums: Any, at: int) -> None:
    """sums_pq += sum_c rows_pc rows_qc lane by lane, in tiles on and below the diagonal."""
    for p in range(0, channels, 3):
        p0 = base + p * STRIDE
        p1, p2 = p0 + STRIDE, p0 + 2 * STRIDE
        for q in range(0, p + 3, 2):
            q0 = base + q * STRIDE
            q1 = q0 + STRIDE
            s00, s10, s20 = load(sums, at), load(sums, at + 8), load(sums, at + 16)
            s01, s11, s21 = load(sums, at + 24), load(sums, at + 32), load(sums, at + 40)
            for c in range(0, 8 * count, 8):
                x0, x1, x2 = load(rows, p0 + c), load(rows, p1 + c), load(rows, p2 + c)
                y = load(rows, q0 + c)
                s00, s10, s20 = fma(x0, y, s00), fma(x1, y, s10), fma(x2, y, s20)
                y = load(rows, q1 + c)
                s01, s11, s21 = fma(x0, y, s01), fma(x1, y, s11), fma(x2, y, s21)
            store(sums, at, s00)
            store(sums, at + 8, s10)
            store(sums, at + 16, s20)
            store(sums, at + 24, s01)
            store(sums, at + 32, s11)
            store(sums, at + 40, s21)
            at += 48


@njit(**OPTIONS)
def collect(numbers: Any, sums: Any, at: int, pi: Any) -> None:
    """Pi_pq = -1/4 of the sum over lanes, written to the places `numbers` of the channels."""
    channels = len(numbers)
    for p in range(0, channels, 3):
        for q in range(0, p + 3, 2):
            for tile in range(6):
                i, j = p + tile % 3, q + tile // 3
                if j <= i < channels:
                    value = -0.25 * lane_sum(load(sums, at + 8 * tile))
                    pi[numbers[i], numbers[j]] = value
                    pi[numbers[j], numbers[i]] = value
            at += 48


@njit(**OPTIONS)
def add_pairs(
    sector: Any,
    filled: int,
    e: Any,
    weight: Any,
    t: float,
    least: float,
    factors: Any,
    left: Any,
    right: Any,
    scratch: Any,
    rows: Any,
    sums: Any,
) -> int:
    """Rows of the channels of a sector; full blocks are multiplied. `filled`, and returned: rows that are not, yet."""
    levels, pairs, roots = scratch
    channel, stop, base, at = sector[4], sector[5], sector[6], sector[7]
    a, b = left[channel:stop], right[channel:stop]
    diagonal, count = select_pairs(sector, e, weight, t, least, levels, pairs, roots)
    done = np.int64(0)  # a literal would be compiled for separately
    while done < count:
        out = base + 8 * filled
        if done < diagonal:
            more = min(diagonal - done, ROWS - filled)
            diagonal_rows(done, done + more, pairs, roots, factors, a, b, rows, out)
            filled += more
        else:
            more = min(count - done, (ROWS - filled) // 2)
            pair_rows(done, done + more, sector[0] == sector[2], pairs, roots, factors, a, b, rows, out)
            filled += 2 * more
        done += more
        if filled > ROWS - 2:
            multiply(stop - channel, filled, rows, base, sums, at)
            filled = 0
    return filled
