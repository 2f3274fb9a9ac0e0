"""One evaluation, eight wave vectors at a time: fields phi -> free energy, correlators.

The plain twin is `evaluate.evaluate`. Nothing that grows with the number of wave vectors is kept.
"""

from typing import Any

import numpy as np
from numba import njit, types
from numpy.typing import NDArray

from kondomf.meanfield.evaluate import HUGE, Evaluation, undefined
from kondomf.meanfield.kernels.blocks import blocks_of
from kondomf.meanfield.kernels.eigen import LEVELS, MATRIX, STATES, eigenvalues, eigenvectors, workspace
from kondomf.meanfield.kernels.entry import OPTIONS, entry
from kondomf.meanfield.kernels.threads import over_shares, parts_of
from kondomf.meanfield.kernels.tridiagonal import aligned
from kondomf.meanfield.kernels.vector import (
    LANES,
    absolute,
    any_lane,
    cos,
    exp,
    fma,
    lane_sum,
    load,
    minimum,
    select,
    sin,
    splat,
    sqrt,
    store,
)
from kondomf.meanfield.zone import ZoneRule
from kondomf.model import MeanFieldModel

Array = NDArray[np.float64]

TWO_PI = 2 * np.pi
NEGLIGIBLE = 1e-16
"""Part 1 -+ tanh(e/2T) of a level that no correlator shows any more."""
LARGE = 700.0
"""e^-x of a larger x is tiny anyway, and slow to find."""
PARTS = 64
"""Most parts of a zone; fixed, so that the order of the sums is."""


@njit(**OPTIONS)
def bloch_phases(group: int, k: Any, weight: Any, vectors: Any, phases: Any, w: Any) -> None:
    """cos and sin of k.R for the vectors (Nv, 2), and the weights, of a group of the wave vectors k (Nk, 2).

    Lanes beyond the last wave vector repeat it with weight 0.
    """
    k1, k2 = np.empty(LANES), np.empty(LANES)
    for lane in range(LANES):
        i = LANES * group + lane
        w[lane] = weight[i] if i < len(k) else 0.0
        i = min(i, len(k) - 1)
        k1[lane], k2[lane] = TWO_PI * k[i, 0], TWO_PI * k[i, 1]
    for v in range(len(vectors)):
        angle = fma(load(k1, 0), splat(vectors[v, 0]), load(k2, 0) * vectors[v, 1])
        store(phases, 16 * v, cos(angle))
        store(phases, 16 * v + 8, sin(angle))


@njit(**OPTIONS)
def bloch_matrix(n: int, terms: Any, fields: Any, phases: Any, a: Any) -> None:
    """Lower triangle of h(k) of a group: every term adds x sin k.R + i y cos k.R, (x, y) its `fields`."""
    for i in range(0, 16 * n * n, 8):
        store(a, i, splat(0.0))
    for i in range(len(terms)):
        to, at = terms[i, 0], 16 * terms[i, 1]
        store(a, to, fma(load(phases, at + 8), splat(fields[i, 0]), load(a, to)))
        store(a, to + 8, fma(load(phases, at), splat(fields[i, 1]), load(a, to + 8)))


@njit(**OPTIONS)
def _levels(n: int, t: float, d: Any, below: Any, above: Any) -> Any:
    """Sums over the levels of |e|/2T + ln(1 + y) and ln(1 + y) + |e|/T y/(1 + y), y = exp(-|e|/T).

    below, above (n) become 1 + tanh(e/2T) and 1 - tanh(e/2T).
    """
    energy, entropy = splat(0.0), splat(0.0)
    for i in range(0, 8 * n, 8):
        e = load(d, i)
        x = absolute(e) * (1.0 / t)
        y = exp(-minimum(x, splat(LARGE)))
        z = y / (y + 2.0)  # ln(1 + y) = 2 artanh z, z <= 1/3
        zz = z * z
        series = splat(1.0 / 35.0)
        for odd in range(33, 0, -2):
            series = fma(series, zz, splat(1.0 / odd))
        logarithm = 2.0 * (z * series)
        large = 2.0 / (1.0 + y)
        small = y * large
        energy = energy + fma(x, splat(0.5), logarithm)
        entropy = entropy + fma(x, 0.5 * small, logarithm)
        store(below, i, select(e < 0.0, small, large))
        store(above, i, select(e < 0.0, large, small))
    return energy, entropy


@njit(**OPTIONS)
def _few_states(n: int, below: Any, above: Any) -> tuple[int, int, float]:
    """Levels first, ..., last - 1 that count in tanh = s (1 - sum_j x_j u_j u_j^H), and s.

    With s = -1 those are the levels that are not wholly filled, with s = 1 those not wholly empty: whichever are fewer.
    """
    first, last = 0, n
    while first < n and not any_lane(load(below, 8 * first) > NEGLIGIBLE):
        first += 1
    while last > 0 and not any_lane(load(above, 8 * (last - 1)) > NEGLIGIBLE):
        last -= 1
    if n - first <= last:
        return first, n, -1.0
    return 0, last, 1.0


@njit(**OPTIONS)
def _scaled_rows(n: int, first: int, count: int, part: Any, states: Any, rows: Any) -> None:
    """Component i of sqrt(x_j) u_j at 16 (i count + j); a component n of zeros fills the last tile of an odd n."""
    rows[16 * n * count : 16 * (n + 1) * count] = 0.0
    for j in range(count):
        root = sqrt(load(part, 8 * (first + j)))
        for i in range(n):
            at, to = 16 * (j * n + i), 16 * (i * count + j)
            store(rows, to, root * load(states, at))
            store(rows, to + 8, root * load(states, at + 8))


@njit(**OPTIONS)
def _tile(count: int, a: int, b: int, sign: float, rows: Any, tile: Any) -> None:
    """The elements (a, b), (a, b + 1), (a + 1, b), (a + 1, b + 1) of s (1 - sum_j x_j u_j u_j^H)."""
    zero = splat(0.0)
    r00, i00, r01, i01, r10, i10, r11, i11 = zero, zero, zero, zero, zero, zero, zero, zero
    a0, b0 = 16 * a * count, 16 * b * count
    a1, b1 = a0 + 16 * count, b0 + 16 * count
    for j in range(0, 16 * count, 16):
        xr, xi, yr, yi = load(rows, a0 + j), load(rows, a0 + j + 8), load(rows, a1 + j), load(rows, a1 + j + 8)
        ur, ui = load(rows, b0 + j), load(rows, b0 + j + 8)
        r00, i00 = fma(xr, ur, fma(xi, ui, r00)), fma(xi, ur, fma(-xr, ui, i00))
        r10, i10 = fma(yr, ur, fma(yi, ui, r10)), fma(yi, ur, fma(-yr, ui, i10))
        ur, ui = load(rows, b1 + j), load(rows, b1 + j + 8)
        r01, i01 = fma(xr, ur, fma(xi, ui, r01)), fma(xi, ur, fma(-xr, ui, i01))
        r11, i11 = fma(yr, ur, fma(yi, ui, r11)), fma(yi, ur, fma(-yr, ui, i11))
    one = splat(1.0 if a == b else 0.0)
    s = splat(sign)
    store(tile, 0, s * (one - r00))
    store(tile, 8, -(s * i00))
    store(tile, 16, -(s * r01))
    store(tile, 24, -(s * i01))
    store(tile, 32, -(s * r10))
    store(tile, 40, -(s * i10))
    store(tile, 48, s * (one - r11))
    store(tile, 56, -(s * i11))


@njit(**OPTIONS)
def _add_correlators(
    count: int, sign: float, tiles: Any, target: int, targets: Any, rows: Any, phases: Any, tile: Any, sums: Any
) -> int:
    """sums += Re t w sin k.R -+ Im t w cos k.R for the targets of the tiles; the phases are those products with w.

    Takes and returns the number of the next target.
    """
    for number in range(len(tiles)):
        _tile(count, tiles[number, 0], tiles[number, 1], sign, rows, tile)
        while target < tiles[number, 2]:
            element, phase, to = 16 * targets[target, 0], 16 * targets[target, 1], 8 * target
            x = fma(load(tile, element), load(phases, phase), load(sums, to))
            store(sums, to, fma(load(tile, element + 8), load(phases, phase + 8), x))
            target += 1
    return target


@njit(**OPTIONS)
def _weighted(count: int, w: Any, phases: Any, weighted: Any) -> None:
    """w sin k.R and -+ w cos k.R."""
    for v in range(count):
        c, s = w * load(phases, 16 * v), w * load(phases, 16 * v + 8)
        store(weighted, 32 * v, s)
        store(weighted, 32 * v + 8, -c)
        store(weighted, 32 * v + 16, s)
        store(weighted, 32 * v + 24, c)


_reals, _table, _integers = types.float64[::1], types.float64[:, ::1], types.int64[:, ::1]


@entry(
    *(types.intp, types.intp, types.intp, _table, _reals, types.float64, _integers),
    *(_table, _integers, _table, _integers, _integers, _table),
)
def evaluate_parts(
    first: int,
    last: int,
    groups: int,
    k: Any,
    weight: Any,
    t: float,
    sizes: Any,
    vectors: Any,
    terms: Any,
    fields: Any,
    tiles: Any,
    targets: Any,
    result: Any,
) -> bool:
    """Parts first, ..., last - 1 of a zone, each of `groups` groups: a row of `result` for each.

    A row holds the sums over k of w times those of `_levels`, then the targets. False if QL did not converge.
    """
    most = sizes[:, 0].max()
    work = workspace(most)
    rows, below, above = aligned(16 * most * (most + 1)), aligned(8 * most), aligned(8 * most)
    phases, weighted, lanes = aligned(16 * len(vectors)), aligned(32 * len(vectors)), aligned(LANES)
    sums, tile = aligned(8 * len(targets)), aligned(64)
    for part in range(first, last):
        sums[:] = 0.0
        energy, entropy = splat(0.0), splat(0.0)
        for group in range(part * groups, min((part + 1) * groups, (len(k) + LANES - 1) // LANES)):
            bloch_phases(group, k, weight, vectors, phases, lanes)
            w = load(lanes, 0)
            _weighted(len(vectors), w, phases, weighted)
            term, first_tile, target = 0, 0, 0
            for block in range(len(sizes)):
                n, next_term, next_tile = sizes[block, 0], sizes[block, 1], sizes[block, 2]
                bloch_matrix(n, terms[term:next_term], fields[term:next_term], phases, work[MATRIX])
                if not eigenvalues(n, work):
                    return False
                one, other = _levels(n, t, work[LEVELS], below, above)
                energy, entropy = fma(one, w, energy), fma(other, w, entropy)
                start, stop, sign = _few_states(n, below, above)
                eigenvectors(n, start, stop, work, work[STATES])
                _scaled_rows(n, start, stop - start, below if sign < 0 else above, work[STATES], rows)
                target = _add_correlators(
                    stop - start, sign, tiles[first_tile:next_tile], target, targets, rows, weighted, tile, sums
                )
                term, first_tile = next_term, next_tile
        result[part, 0], result[part, 1] = lane_sum(energy), lane_sum(entropy)
        for i in range(len(targets)):
            result[part, 2 + i] = lane_sum(load(sums, 8 * i))
    return True


def evaluate(model: MeanFieldModel, zone: ZoneRule, phi: Array, *, threads: int = 1) -> Evaluation:
    """Correlators and grand potential of H_MF = sum_p phi_p O_p at the model's temperature.

    omega = -(T/2) sum_k w_k sum_n ln 2cosh(e_n/2T), P_p = Re[i sum_k w_k tanh(h/2T)_ab e^(-ik.R)]. The result does not
    depend on the number of threads, to the last bit. Not a number throughout where the fields are none or the levels
    exceed HUGE k_B T.
    """
    t, n = model.temperature, model.n_majorana
    small = 4 * np.abs(phi).max() < HUGE * t / len(phi)  # bounds the levels; also catches NaN
    if not (small and np.isfinite(zone.k).all() and np.isfinite(zone.weight).all()):
        return undefined(model, phi)
    blocks = blocks_of(model, phi)
    fields = blocks.factors * phi[blocks.channels, None]
    parts, groups = parts_of(len(zone.k), PARTS)
    sums = np.empty((parts, 2 + len(blocks.targets)))

    def work(first: int, last: int) -> bool:
        lists = blocks.sizes, blocks.vectors, blocks.terms, fields, blocks.tiles, blocks.targets
        return evaluate_parts(first, last, groups, zone.k, zone.weight, t, *lists, sums)

    if not over_shares(work, len(sums), threads):
        return undefined(model, phi)
    energy, entropy, *_ = total = sums.sum(axis=0)
    correlators = np.zeros((len(model.lattice_vectors), n, n))
    correlators.reshape(-1)[blocks.places] = blocks.signs * total[2:][blocks.sources]
    return Evaluation(phi, -t / 2 * float(energy), float(entropy) / 2, correlators[model.position], correlators, ())
