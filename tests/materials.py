"""Dimensionless materials for tests: t = 1000 meV, so that an energy in units of t is its meV value over 1000."""

from typing import Any

import numpy as np

from kondomf.material import Material, material_from_dict

T = 1000.0
"""Hopping t in meV."""

EXCHANGE = {
    "spin_layer__heisenberg_meV": 0.5,
    "spin_layer__gamma_meV": 0.3,
    "spin_layer__gamma_prime_meV": -0.2,
    "spin_layer__heisenberg_2_meV": 0.21,
    "spin_layer__kitaev_2_meV": 0.17,
    "spin_layer__heisenberg_3_meV": 0.35,
}
"""Every exchange beside the Kitaev one, in units of t, for `dimensionless`."""


def dimensionless(
    kitaev: float | list[float] = -1.0, kondo: float = 0.0, filling: float = 1.0, **keys: Any
) -> Material:
    """A material with K, J_K and the energies in `keys` in units of t; "section__key" reaches every other key.

    `points` and `offset` name the zone (12 midpoints), `temperature` k_B T / t (0.005), `form` the exchange form.
    """
    data: dict[str, Any] = {
        "name": "dimensionless",
        "spin_layer": {"lattice_constant_angstrom": 1.0, "kitaev_meV": (T * np.asarray(kitaev)).tolist()},
        "conduction_layer": {
            "lattice_constant_angstrom": 1.0,
            "hopping_meV": T * keys.pop("hopping", 1.0),
            "filling": filling,
            "match": "hopping",
        },
        "kondo": {"coupling_meV": T * kondo},
        "mean_field": {
            "exchange_form": keys.pop("form", "kitaev"),
            "magnetic_channel": keys.pop("magnetic", True),
            "temperature_meV": T * keys.pop("temperature", 0.005),
            "cell": keys.pop("cell", "1x1"),
        },
        "zone": {"points": keys.pop("points", 12), "offset": keys.pop("offset", "midpoint")},
    }
    for name, value in keys.items():
        section, _, key = name.partition("__")
        data.setdefault(section, {})[key] = (T * np.asarray(value)).tolist() if key.endswith("_meV") else value
    return material_from_dict(data)
