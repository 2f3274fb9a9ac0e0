"""Zone rules: lists of (k, weight). Wave vectors are in units of the reciprocal vectors of the magnetic cell."""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

OFFSETS = {"c3": (1 / 3, 2 / 3), "midpoint": (1 / 2, 1 / 2)}


@dataclass(frozen=True)
class ZoneRule:
    """Points k (Nk, 2) with k.R = 2 pi (k1 R1 + k2 R2), and weights (Nk,) of sum 1.

    Correlators take the real part of each term, which averages k and -k: a rule need only hold one of the two.
    `points` and `offset` say how a uniform rule was made.
    """

    k: NDArray[np.float64]
    weight: NDArray[np.float64]
    points: int
    offset: str


def uniform(points: int, offset: str) -> ZoneRule:
    """Uniform rule of points x points wave vectors ((i + o1)/L, (j + o2)/L).

    "midpoint" maps onto itself under k -> -k, so half of it is kept; "c3" keeps the three-fold rotation and
    together with its image under k -> -k stands for 2 L^2 wave vectors.
    """
    o1, o2 = OFFSETS[offset]
    i, j = (axis.ravel() for axis in np.meshgrid(np.arange(points), np.arange(points), indexing="ij"))
    k = np.stack([(i + o1) / points, (j + o2) / points], axis=1)
    weight = np.ones(len(k))
    if offset == "midpoint":
        mirror = points * (points - 1 - i) + (points - 1 - j)
        own = points * i + j
        k, weight = k[own <= mirror], np.where(own == mirror, 1.0, 2.0)[own <= mirror]
    return ZoneRule(k, weight / weight.sum(), points, offset)
