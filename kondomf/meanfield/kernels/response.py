"""Response of the correlators to the fields, eight wave vectors at a time. Its twin is `evaluate.response`.

Eigenvectors are computed anew, group by group: nothing that grows with the number of wave vectors is kept.
"""

from functools import lru_cache
from typing import Any

import numpy as np
from numba import njit, types
from numpy.typing import NDArray

from kondomf.meanfield.evaluate import HUGE
from kondomf.meanfield.kernels.blocks import blocks_of
from kondomf.meanfield.kernels.eigen import aligned, eigenvalues, eigenvectors, workspace
from kondomf.meanfield.kernels.entry import OPTIONS, entry
from kondomf.meanfield.kernels.evaluation import bloch_matrix, bloch_phases
from kondomf.meanfield.kernels.pairs import STRIDE, TILE, add_pairs, collect, components, level_factors, multiply
from kondomf.meanfield.kernels.threads import over_shares, parts_of
from kondomf.meanfield.kernels.vector import LANES, load, store
from kondomf.meanfield.zone import ZoneRule
from kondomf.model import MeanFieldModel

Array = NDArray[np.float64]
Integers = NDArray[np.int64]
Layout = tuple[Integers, Integers, Integers, Integers, Integers]

NEGLIGIBLE = 1e-14
"""Half the error of the response, in units of the inverse bandwidth, that leaving out pairs of levels may cause."""
SMALL = 1e-2
"""A response below this, in the same units, is computed again with all pairs."""
PARTS = 32
"""Most parts of a zone; fixed, so that the order of the sums is."""


@njit(**OPTIONS)
def _decompose(sizes: Any, terms: Any, fields: Any, phases: Any, work: Any, e: Any, states: Any) -> bool:
    """Levels and eigenvectors of h(k) of a group, block after block; False if an eigenvalue did not converge."""
    term, level, place = 0, 0, 0
    for block in range(len(sizes)):
        n, next_term = sizes[block, 0], sizes[block, 1]
        bloch_matrix(n, terms[term:next_term], fields[term:next_term], phases, work[0])
        if not eigenvalues(n, work):
            return False
        eigenvectors(n, 0, n, work, states[place:])
        for i in range(0, 8 * n, 8):
            store(e, level + i, load(work[2], i))
        term, level, place = next_term, level + 8 * n, place + 16 * n * n
    return True


_reals, _table = types.float64[::1], types.float64[:, ::1]
_integers, _rows = types.int64[::1], types.int64[:, ::1]


@entry(
    *(types.intp, types.intp, types.intp, _table, _reals, types.float64, types.float64, _rows, _table, _rows, _table),
    *(types.Tuple((_rows, _integers, _integers, _rows, _integers)), types.UniTuple(types.int64, 3)),
    types.float64[:, :, ::1],
)
def response_parts(
    first: int,
    last: int,
    groups: int,
    k: Any,
    weight: Any,
    t: float,
    least: float,
    sizes: Any,
    vectors: Any,
    terms: Any,
    fields: Any,
    layout: Any,
    lengths: Any,
    result: Any,
) -> bool:
    """Response of the parts first, ..., last - 1 of a zone, each of `groups` groups: result (parts, Nc, Nc).

    False if an eigenvalue did not converge.
    """
    parts, left, right, sectors, numbers = layout
    n = sizes[:, 0].sum()
    work = workspace(n)
    e, states, phases, w = aligned(8 * n), aligned(16 * n * n), aligned(16 * len(vectors)), aligned(LANES)
    factors, rows, sums = aligned(lengths[0]), aligned(lengths[1]), aligned(lengths[2])
    rows[:] = 0.0
    pairs = n * (n + 1) // 2
    scratch = aligned(24 * n), np.empty(2 * pairs, dtype=np.int64), aligned(8 * pairs)
    filled = np.zeros(len(sectors), dtype=np.int64)
    for part in range(first, last):
        sums[:] = 0.0
        for group in range(part * groups, min((part + 1) * groups, (len(k) + LANES - 1) // LANES)):
            bloch_phases(group, k, weight, vectors, phases, w)
            if not _decompose(sizes, terms, fields, phases, work, e, states):
                return False
            level_factors(n, e, t, scratch[0])
            components(parts, states, phases, factors)
            for s in range(len(sectors)):
                filled[s] = add_pairs(sectors[s], filled[s], e, w, t, least, factors, left, right, scratch, rows, sums)
        for s in range(len(sectors)):
            channel, stop, base, at = sectors[s, 4:]
            multiply(stop - channel, filled[s], rows, base, sums, at)
            filled[s] = 0
            collect(numbers[channel:stop], sums, at, result[part])
    return True


@lru_cache(maxsize=64)
def _layout(table: bytes, channels: bytes, vectors: bytes, label: bytes) -> tuple[Layout, tuple[int, int, int]]:
    """Where the kernel finds what, channels sorted into one sector per pair of blocks A <= B that they join.

    parts : (., 7) distinct factors l* and r: place in the eigenvectors, step between levels, number of the vector and
        whether it is R (1) or -R (-1), kind (0: r; 1: l of a channel from A to B; -1: from B to A), levels, place.
    left, right : (Nc,) places of l* and r among the factors.
    sectors : (., 8) first level and size of A and of B, first channel and end, places of the rows and of the sums.
    numbers : (Nc,) the channels' places in the result.
    Then the lengths of factors, rows and sums.
    """
    block = np.frombuffer(label, dtype=np.int64)
    channel = np.frombuffer(table, dtype=np.int64).reshape(-1, 4)[np.frombuffer(channels, dtype=np.int64)]
    numbers = np.lexsort(np.sort(block[channel[:, :2]], axis=1).T[::-1])
    a, b, r = channel[numbers, 0], channel[numbers, 1], channel[numbers, 2:]
    backward = block[a] > block[b]
    a, b = np.where(backward, b, a), np.where(backward, a, b)
    known = np.frombuffer(vectors).reshape(-1, 2)
    forward = (r[:, None] == known).all(axis=2)
    vector = (forward | (r[:, None] == -known).all(axis=2)).argmax(axis=1)
    l = np.stack([a, vector, np.where(forward.any(axis=1), 1, -1), np.where(backward, -1, 1)], axis=1)
    parts, left, right = _factors(l, b, block)
    sectors, rows, sums = _sectors(block[a], block[b], np.bincount(block))
    return (parts, left, right, sectors, numbers), (int(16 * parts[:, 5].sum()), rows, sums)


def _factors(l: Integers, b: Integers, block: Integers) -> tuple[Integers, Integers, Integers]:
    """`parts`, `left`, `right` of a layout from (Majorana, vector, sense, kind) of every l and the Majorana b of r."""
    r = np.stack([b, *np.zeros((3, len(b)), dtype=np.int64)], axis=1)
    distinct, which = np.unique(np.concatenate([l, r]), axis=0, return_inverse=True)
    majorana, vector, sense, kind = distinct.T
    count = np.bincount(block)
    start = np.cumsum(16 * count**2) - 16 * count**2
    component = np.array([(block[:m] == block[m]).sum() for m in majorana])
    size = count[block[majorana]]
    to = 16 * (np.cumsum(size) - size)
    source = start[block[majorana]] + 16 * component
    left, right = to[which.ravel()].reshape(2, -1)
    return np.stack([source, 16 * size, 16 * vector, sense, kind, size, to], axis=1), left, right


def _sectors(one: Integers, other: Integers, size: Integers) -> tuple[Integers, int, int]:
    """`sectors` of a layout from the sorted channels' blocks A and B, and the lengths of rows and sums."""
    joined, begin = np.unique(np.stack([one, other]), axis=1, return_index=True)
    stop = np.append(begin[1:], len(one))
    first = np.cumsum(size) - size
    levels = [axis[side] for side in joined for axis in (first, size)]
    height, width = TILE
    rows = STRIDE * (-(-(stop - begin) // 6) * 6)  # whole tiles, which need not end at the same channel
    tiles = [sum(-(-(p + height) // width) for p in range(0, count, height)) for count in stop - begin]
    sums = LANES * height * width * np.array(tiles)
    places = np.cumsum(rows) - rows, np.cumsum(sums) - sums
    return np.stack([*levels, begin, stop, *places], axis=1), int(rows.sum()), int(sums.sum())


def response(model: MeanFieldModel, zone: ZoneRule, phi: Array, channels: Integers, *, threads: int = 1) -> Array:
    """Pi_pq = dP_p/dphi_q among `channels` at the fields phi (N,), (Nc, Nc), 1/meV; negative semidefinite.

    Pi_pq = -(1/4) sum_k w_k sum_nm X_nm D^p_nm (D^q_nm)*, D^p = U+(2i|a><b|e^(ik.R) + h.c.)U. The result does not
    depend on the number of threads, to the last bit. Not a number throughout where the fields, the wave vectors or
    their weights are none or the levels exceed HUGE k_B T.
    """
    if len(channels) == 0:
        return np.zeros((0, 0))
    bandwidth = _bandwidth(model, phi)
    if not (bandwidth < HUGE * model.temperature and np.isfinite(zone.k).all() and np.isfinite(zone.weight).all()):
        return np.full((len(channels), len(channels)), np.nan)
    # The |D_nm|^2 of a channel add up to 8 at most: pairs with w X below `least` change Pi by less than 2 Nk least.
    unit = 1 / max(bandwidth, 2 * model.temperature)
    pi = _sum_of_pairs(model, zone, phi, channels, NEGLIGIBLE * unit / len(zone.k), threads)
    if np.abs(pi).max() < SMALL * unit:
        pi = _sum_of_pairs(model, zone, phi, channels, 0.0, threads)
    return pi


def _bandwidth(model: MeanFieldModel, phi: Array) -> float:
    """Bound on the eigenvalues by the sums over the rows of |h|, meV."""
    with np.errstate(over="ignore"):
        return float(np.bincount(np.concatenate(model.position[1:]), np.tile(2 * np.abs(phi), 2)).max())


def _sum_of_pairs(
    model: MeanFieldModel, zone: ZoneRule, phi: Array, channels: Integers, least: float, threads: int
) -> Array:
    """The response without the pairs of levels whose w X is at most `least` in all wave vectors of a group."""
    blocks = blocks_of(model, phi)
    layout, lengths = _layout(*(x.tobytes() for x in (model.table, channels, blocks.vectors, blocks.label)))
    fields = blocks.factors * phi[blocks.channels, None]
    parts, groups = parts_of(len(zone.k), PARTS)
    result = np.zeros((parts, len(channels), len(channels)))

    def work(first: int, last: int) -> bool:
        lists = blocks.sizes, blocks.vectors, blocks.terms, fields, layout, lengths
        return response_parts(first, last, groups, zone.k, zone.weight, model.temperature, least, *lists, result)

    solved = over_shares(work, len(result), threads)
    return result.sum(axis=0) if solved else np.full(result.shape[1:], np.nan)
