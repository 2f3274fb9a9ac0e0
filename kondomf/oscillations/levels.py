"""Exact Landau levels of the four-band model.

In a field k.sigma has the eigenvalues 0 (once) and +-sqrt(2 e B l / hbar), l = 1, 2, ... Electrons and spinons share
them, because the hybridization ties the spinons to the electrons' charge; the levels are those of the 2 x 2 blocks at
hbar v s k = +-sqrt(2 e hbar v^2 B l), and of one block at 0. They are exact for every b and u.

Source: Rev. Mod. Phys. 81, 109 (2009), "The electronic properties of graphene".
"""

import numpy as np
from numpy.typing import ArrayLike, NDArray

from kondomf.effective import FourBandModel
from kondomf.errors import InputError
from kondomf.units import FLUX_DENSITY

Array = NDArray[np.float64]


def positive(name: str, value: ArrayLike) -> Array:
    """The value as a one-dimensional array; InputError unless all its numbers are finite and above zero."""
    array = np.atleast_1d(np.asarray(value, dtype=float))
    if array.ndim != 1 or not array.size:
        raise InputError(f"{name}: give one number or a list of numbers, not an array of shape {array.shape}")
    bad = array[~((array > 0) & np.isfinite(array))]
    if bad.size:
        raise InputError(f"{name} = {bad[0]:g}: give finite values above zero")
    return array


def dirac_scale_meV2(model: FourBandModel, field_T: ArrayLike) -> Array:
    """2 e hbar v^2 B in meV^2: the square of the first Landau level of the bare electrons. Shape of field_T."""
    return np.asarray(2 * model.hbar_v_meV_angstrom**2 * FLUX_DENSITY * np.asarray(field_T, dtype=float))


def level_density_per_angstrom2(model: FourBandModel, field_T: ArrayLike) -> Array:
    """N_phi = degeneracy * e B / h: states per area in one level, in 1/angstrom^2. Shape of field_T."""
    return np.asarray(model.degeneracy * FLUX_DENSITY / (2 * np.pi) * np.asarray(field_T, dtype=float))


def landau_levels_meV(model: FourBandModel, field_T: ArrayLike, highest: int) -> tuple[Array, Array]:
    """Energies of the levels l = 0 and l = 1 ... highest, in meV, for fields in tesla, shape (N,).

    Returns the two energies of l = 0, shape (2,), which do not depend on the field, and those of l >= 1, shape
    (N, highest, 4); both ascending in the last axis. Raises InputError for a field or `highest` not above zero.
    """
    field = positive("field_T", field_T)
    if highest < 1:
        raise InputError(f"highest = {highest}: give the number of Landau levels, 1 or more")
    kinetic = np.sqrt(dirac_scale_meV2(model, field)[:, None] * np.arange(1, highest + 1))
    pairs = np.concatenate([model.energies(kinetic), model.energies(-kinetic)], axis=-1)
    return model.energies(0.0), np.sort(pairs, axis=-1)
