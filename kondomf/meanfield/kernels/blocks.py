"""Independent blocks of the Bloch matrix, and where the kernel finds what in them."""

from dataclasses import dataclass
from functools import lru_cache

import numpy as np
from numpy.typing import NDArray

from kondomf.model import MeanFieldModel

Array = NDArray[np.float64]
Integers = NDArray[np.int64]

SMALLEST_FIELD = 1e-16
"""Fields below this fraction of the largest are less than the rounding errors of the eigenvalues."""


@dataclass(frozen=True)
class Blocks:
    """Sets of Majoranas that the fields do not mix, as numbered lists for the kernel.

    label : (n,) number of every Majorana's block.
    sizes : (Nb, 3) number of Majoranas of every block, end of its terms, end of its tiles.
    vectors : (Nv, 2) lattice vectors, one of each pair R, -R.
    channels : (Nf,) the model's channels inside blocks, in the order of the terms.
    terms : (Nf, 2) place in the block's matrix, and number of the vector.
    factors : (Nf, 2) a field phi adds phi (x sin k.R + i y cos k.R).
    tiles : (Nt, 3) 2 x 2 tiles of tanh(h/2T), by first row and column inside the block, and the end of their targets.
    targets : (Nc, 2) element of the tile (0..3), number of the phase: correlators
        sum w (Re t sin k.R -+ Im t cos k.R), - with phase 2 v, + with 2 v + 1.
    places, sources, signs : elements of the (NR, n, n) correlators, flat, the target they are, and its sign.
    """

    label: Integers
    sizes: Integers
    vectors: Array
    channels: Integers
    terms: Integers
    factors: Array
    tiles: Integers
    targets: Integers
    places: Integers
    sources: Integers
    signs: Array


def blocks_of(model: MeanFieldModel, phi: Array) -> Blocks:
    """Sets of Majoranas that the fields phi (N,) do not mix; their correlators with others vanish."""
    used = np.abs(phi) > SMALLEST_FIELD * np.abs(phi).max(initial=0.0)
    return _joined(model.table.tobytes(), model.n_majorana, used.tobytes())


@lru_cache(maxsize=256)
def _joined(table: bytes, n: int, used: bytes) -> Blocks:
    """Blocks of the graph of n Majoranas whose edges are the used channels."""
    a, b = _channels(table)[np.frombuffer(used, dtype=np.bool_), :2].T
    joined = np.eye(n, dtype=bool)
    joined[a, b] = joined[b, a] = True
    for _ in range(n.bit_length()):  # paths of up to 2, 4, 8, ... edges
        joined = joined @ joined
    _, label = np.unique(joined.argmax(axis=1), return_inverse=True)
    return _labelled(table, n, label.astype(np.int64).tobytes())


def _channels(table: bytes) -> Integers:
    return np.frombuffer(table, dtype=np.int64).reshape(-1, 4)


@lru_cache(maxsize=32)
def _labelled(table: bytes, n: int, labels: bytes) -> Blocks:
    """The lists for Majoranas with these numbers of their blocks."""
    channels, label = _channels(table), np.frombuffer(labels, dtype=np.int64)
    size = np.bincount(label)
    place = np.empty(n, dtype=np.int64)
    place[np.argsort(label, kind="stable")] = np.arange(n)
    place -= (np.cumsum(size) - size)[label]

    lattice, at = np.unique(channels[:, 2:], axis=0, return_inverse=True)
    negative = (lattice[:, 0] < 0) | ((lattice[:, 0] == 0) & (lattice[:, 1] < 0))
    vectors, number = np.unique(np.where(negative[:, None], -lattice, lattice), axis=0, return_inverse=True)
    at, number = at.ravel(), number.ravel()

    own, home, terms, factors = _terms(channels, label, place, size, number[at], negative[at])
    tiles, targets, correlators = _targets(lattice, label, place, number, negative)
    ends = [np.searchsorted(blocks, np.arange(len(size)), side="right") for blocks in (home, tiles[:, 0])]
    sizes = np.stack([size, *ends], axis=1)
    return Blocks(label, sizes, vectors.astype(float), own, terms, factors, tiles[:, 1:].copy(), targets, *correlators)


def _terms(
    channels: Integers,
    label: Integers,
    place: Integers,
    size: Integers,
    vector: Integers,
    negative: NDArray[np.bool_],
) -> tuple[Integers, Integers, Integers, Array]:
    """Channels inside blocks, sorted by block, their blocks, and the `terms` and `factors` of `Blocks`."""
    blocks = label[channels[:, :2]]
    own = np.flatnonzero(blocks[:, 0] == blocks[:, 1])
    own = own[np.argsort(blocks[own, 0], kind="stable")]
    a, b = place[channels[own, :2]].T
    home = blocks[own, 0]
    terms = np.stack([16 * (np.minimum(a, b) * size[home] + np.maximum(a, b)), vector[own]], axis=1)
    sine = np.where(negative[own], 2, -2) * np.where(a == b, 2, 1)
    return own, home, terms, np.stack([sine, 2 * np.sign(a - b)], axis=1).astype(float)


def _targets(
    lattice: Integers, label: Integers, place: Integers, number: Integers, negative: NDArray[np.bool_]
) -> tuple[Integers, Integers, tuple[Integers, Integers, Array]]:
    """Block, first row and column, and end of the targets of every tile; targets; places, sources and signs.

    The correlators of (a, b, R) and (b, a, -R) are opposite, and for a > b t_ab = t_ba*.
    """
    n = len(label)
    same = np.flatnonzero((label[:, None] == label).ravel())
    r, pair = (axis.ravel() for axis in np.meshgrid(np.arange(len(lattice)), same, indexing="ij"))
    home, a, b = label[pair // n], place[pair // n], place[pair % n]
    swap = a // 2 > b // 2
    a, b = np.where(swap, b, a), np.where(swap, a, b)
    plus, sign = swap != negative[r], np.where(negative[r], -1.0, 1.0)
    here = ~lattice[r].any(axis=1)  # sin k.R = 0: the phases 2 v and 2 v + 1 are opposite
    sign = np.where(here & plus, -sign, sign)
    phase = 2 * number[r] + (plus & ~here)
    keys = np.stack([home, a // 2, b // 2, 2 * (a % 2) + b % 2, phase], axis=1)
    targets, source = np.unique(keys, axis=0, return_inverse=True)
    tiles, begin = np.unique(targets[:, :3], axis=0, return_index=True)
    tiles = np.column_stack([tiles * [1, 2, 2], np.append(begin[1:], len(targets))])
    return tiles, targets[:, 3:].copy(), (r * n * n + pair, source.ravel(), sign)
