"""The nearest-neighbour honeycomb band: density of states, filling, quadrature.

The bands are +-t g(k) with g(k) = |1 + exp(i k.a1) + exp(i k.a2)| between 0 (Dirac points) and 3 (zone centre).
Everything here is dimensionless unless a name carries a unit; energies are measured from the Dirac point.
"""

from functools import lru_cache

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy.optimize import brentq
from scipy.special import ellipkm1

from kondomf.errors import InputError

Array = NDArray[np.float64]

BAND_EDGE = 3.0
"""Largest g, at the zone centre."""
_POWER = 5
"""|g - 1| = v**_POWER turns the logarithm at g = 1 into v**4 ln v, which a Gauss rule resolves."""
_ORDER = 64
"""Nodes per side of g = 1 for the integrated density of states; doubling it changes nothing above 1e-14."""

_gauss = lru_cache(maxsize=8)(np.polynomial.legendre.leggauss)


def bloch_factor(k1: ArrayLike, k2: ArrayLike) -> NDArray[np.complex128]:
    """Nearest-neighbour Bloch factor 1 + exp(i k1) + exp(i k2); its modulus is g.

    k1, k2: k.a1 and k.a2 in radian, any shapes that broadcast. Returns the broadcast shape.
    """
    return np.asarray(1 + np.exp(1j * np.asarray(k1)) + np.exp(1j * np.asarray(k2)), dtype=np.complex128)


def density_of_states(g: ArrayLike) -> Array:
    """Distribution rho(g) of g over the zone; norm 1 on [0, 3], second moment 3, zero outside, infinite at g = 1.

        rho = (2 g / pi^2) K(m) / sqrt(Z0),   m = Z1 / Z0,   Q = (1 + g)^3 (3 - g) / 4,
        (Z0, Z1) = (Q, 4 g) for g < 1 and (4 g, Q) for g > 1.

    g: any shape, dimensionless energy. Returns the same shape. Per site and spin the states per energy are
    rho(|E|/t) / (2 t).

    Source: Rev. Mod. Phys. 81, 109 (2009), "The electronic properties of graphene", eq. (14), with the elliptic
    integral written through 1 - m, which keeps the full weight of the logarithm.
    """
    return _density(np.asarray(g, dtype=float) - 1)


def _density(distance: Array) -> Array:
    """rho at g = 1 + distance. The distance is the argument because 1 - m vanishes with its cube."""
    g = 1 + distance
    inside = (g >= 0) & (g <= BAND_EDGE)
    g, distance = np.where(inside, g, 0.0), np.where(inside, distance, -1.0)
    below = distance < 0
    z0 = np.where(below, (1 + g) ** 3 * (3 - g) / 4, 4 * g)
    complement = np.abs(distance) ** 3 * (3 + g) / (4 * z0)
    return np.asarray(2 * g / np.pi**2 * ellipkm1(complement) / np.sqrt(z0))


def energy_quadrature(order: int = _ORDER) -> tuple[Array, Array]:
    """Nodes and weights for integrals of rho(g) f(g) over [0, 3]:  sum(weight * f(g)).

    order: Gauss nodes on each side of g = 1. Returns (g, weight), each of shape (2 * order,), g ascending and
    dimensionless, weights positive with sum 1. The error is about 1e-13 from order 64 on when f is smooth on the
    scale 1; a narrow feature of f (a hybridization gap, a cold Fermi edge) needs panels of its own.
    """
    below, weight_below = _panel(np.array(-1.0), np.array(0.0), order)
    above, weight_above = _panel(np.array(0.0), np.array(BAND_EDGE - 1), order)
    return 1 + np.concatenate([below, above]), np.concatenate([weight_below, weight_above])


def _panel(start: Array, stop: Array, order: int) -> tuple[Array, Array]:
    """Gauss nodes d (d = g - 1) and weights including rho between start and stop, both on one side of d = 0.

    start, stop: shape S. Returns two arrays of shape S + (order,).
    """
    sign = np.where(start + stop < 0, -1.0, 1.0)
    v0, v1 = (np.sign(d) * np.abs(d) ** (1 / _POWER) for d in (start, stop))
    x, w = _gauss(order)
    half = (v1 - v0)[..., None] / 2
    v = np.maximum(np.abs((v1 + v0)[..., None] / 2 + half * x), 1e-20)  # rho is infinite in an empty panel at d = 0
    distance = sign[..., None] * v**_POWER
    return distance, half * w * _POWER * v ** (_POWER - 1) * _density(distance)


def integrated_density(g: ArrayLike) -> Array:
    """Integral of rho from 0 to g, between 0 and 1; exactly 1/4 at the van Hove energy g = 1. Error below 1e-13.

    g: any shape, dimensionless energy; values outside [0, 3] count as the nearer end.
    """
    distance = np.clip(np.asarray(g, dtype=float), 0, BAND_EDGE) - 1
    below = _panel(np.full_like(distance, -1.0), np.minimum(distance, 0.0), _ORDER)[1].sum(-1)
    above = _panel(np.zeros_like(distance), np.maximum(distance, 0.0), _ORDER)[1].sum(-1)
    return np.asarray(below + above)


def filling_of_dirac_energy(dirac_energy_meV: float, hopping_meV: float) -> float:
    """Electrons per site at T = 0 when the Dirac point lies E_D above the Fermi level: n = 1 - sign(E_D) N(|E_D|/t).

    dirac_energy_meV: E_D, positive for hole doping; hopping_meV: t > 0.
    Raises InputError if |E_D| >= 3 t, where the band is empty or full.
    """
    if not abs(dirac_energy_meV) < BAND_EDGE * hopping_meV:
        raise InputError(
            f"a Dirac point {dirac_energy_meV:g} meV above the Fermi level (charge_transfer_meV) leaves no Fermi line: "
            f"the band ends {BAND_EDGE * hopping_meV:g} meV from it, three times the hopping on the spin lattice; "
            "give a smaller absolute value"
        )
    return float(1 - np.sign(dirac_energy_meV) * integrated_density(abs(dirac_energy_meV) / hopping_meV))


def dirac_energy_of_filling(filling: float, hopping_meV: float) -> float:
    """E_D in meV of the filling n: the inverse of `filling_of_dirac_energy`.

    filling: electrons per site, strictly between 0 and 2 (InputError otherwise); hopping_meV: t > 0.
    """
    if not 0 < filling < 2:
        raise InputError(f"filling = {filling:g}: give electrons per site strictly between 0 and 2")
    target = min(abs(1 - filling), float(integrated_density(BAND_EDGE)))  # the norm is 1 to rounding only
    if target == 0:
        return 0.0
    g = brentq(lambda x: float(integrated_density(x)) - target, 0.0, BAND_EDGE, xtol=1e-15, rtol=1e-15)
    return float(np.sign(1 - filling) * g * hopping_meV)
