"""State files: a solution and the other minima met, in an HDF5 file from which other commands go on."""

import json
from collections.abc import Mapping
from dataclasses import asdict, fields, replace
from pathlib import Path
from typing import Any

import numpy as np

import kondomf
from kondomf.errors import InputError
from kondomf.files import write_atomically
from kondomf.material import material_from_dict
from kondomf.meanfield.solution import Solution, Trial
from kondomf.meanfield.zero_modes import SoftMode, ZeroModes
from kondomf.meanfield.zone import uniform
from kondomf.model import build_model

FORMAT = "kondomf state"
SCHEMA = 2
ARRAYS = {"phi": "meV", "p": "1", "correlators": "1", "multipliers": "meV"}
"""Stored arrays of a solution and their units."""
NOT_SCALAR = (*ARRAYS, "model", "zone", "inputs", "soft_mode", "others")


def save_state(solution: Solution, path: Path, *, overwrite: bool = False) -> None:
    """Write `solution` to an HDF5 file, whole or not at all. Raises InputError if the file cannot be written."""
    import h5py

    def write(temporary: Path) -> None:
        with h5py.File(temporary, "w") as file:
            file.attrs.update(format=FORMAT, schema=SCHEMA, version=kondomf.__version__)
            file.attrs["inputs"] = json.dumps(solution.inputs)
            file["channels"] = solution.model.table
            _write(file, solution)
            for number, other in enumerate(solution.others):
                _write(file.create_group(f"others/{number}"), other)

    write_atomically(path, write, overwrite=overwrite)


def _write(group: Any, solution: Solution) -> None:
    """One solution, without others, model and inputs, into an HDF5 group."""
    names = [field.name for field in fields(solution) if field.name not in NOT_SCALAR]
    scalars = {name: getattr(solution, name) for name in names}
    scalars["trials"] = [asdict(trial) for trial in solution.trials]
    scalars["ended_lower"] = asdict(solution.ended_lower) if solution.ended_lower else None
    scalars["zero_modes"] = asdict(solution.zero_modes) if solution.zero_modes else None
    group["evidence"] = json.dumps(scalars)  # an attribute could not hold the trials of a long search
    for name, unit in ARRAYS.items():
        group[name] = getattr(solution, name)
        group[name].attrs["units"] = unit
    if mode := solution.soft_mode:
        group["soft_mode"] = mode.change
        group["soft_mode"].attrs.update(curvature=mode.curvature, degeneracy=mode.degeneracy, units="1")


def _read(group: Any) -> dict[str, Any]:
    """What `_write` has written, by the names of the fields."""
    found: dict[str, Any] = {name: np.array(group[name]) for name in ARRAYS}
    found |= json.loads(group["evidence"].asstr()[()])
    if "soft_mode" in group:
        mode = group["soft_mode"]
        found["soft_mode"] = SoftMode(float(mode.attrs["curvature"]), int(mode.attrs["degeneracy"]), np.array(mode))
    return found


def load_state(path: Path) -> Solution:
    """Read a state file; the model is rebuilt from its inputs.

    Raises InputError: missing, not HDF5, truncated, not a state file, or of another schema or model.
    """
    import h5py

    if path.is_dir():
        raise InputError(f"{path} is a directory; give the state file that kondomf solve MATERIAL --state wrote")
    if not path.is_file():
        raise InputError(f"no state file {path}; write one with: kondomf solve MATERIAL --state {path}")
    try:
        with h5py.File(path, "r") as file:
            found = (str(file.attrs.get("format", "")), file.attrs.get("schema", 0))
            if found != (FORMAT, SCHEMA):
                raise InputError(
                    f"{path} is {_description(found)}; this version reads state files of schema {SCHEMA}: "
                    "solve the material again with --state"
                )
            channels = np.array(file["channels"])
            inputs = json.loads(file.attrs["inputs"])
            others = file.get("others", {})
            states = [_read(file), *(_read(others[str(number)]) for number in range(len(others)))]
    except (OSError, KeyError, RuntimeError, TypeError, json.JSONDecodeError) as error:
        raise InputError(
            f"{path} cannot be read as a state file (truncated or not HDF5): {error}; "
            "solve the material again with --state"
        ) from error
    material = material_from_dict(inputs, where=str(path))
    model = build_model(material)
    if not np.array_equal(channels, model.table):
        raise InputError(f"{path} was written for other channels than this version builds; solve the material again")
    zone = uniform(material.zone.points, material.zone.offset)
    try:
        best, *rest = (Solution(model=model, zone=zone, inputs=inputs, **_evidence(state)) for state in states)
        return replace(best, others=tuple(rest))
    except (KeyError, TypeError) as error:
        raise InputError(
            f"{path} holds other evidence than this version reads ({error}); solve the material again with --state"
        ) from None


def _evidence(found: Mapping[str, Any]) -> dict[str, Any]:
    """The fields of a solution from what JSON makes of them."""
    zero, lower = found["zero_modes"], found["ended_lower"]
    return {"soft_mode": None, "others": ()} | {
        **found,
        "trials": tuple(Trial(**trial) for trial in found["trials"]),
        "ended_lower": Trial(**lower) if lower else None,
        "history": tuple(tuple(entry) for entry in found["history"]),
        "curvatures": tuple(found["curvatures"]),
        "zero_modes": ZeroModes(**zero) if zero else None,
    }


def _description(found: tuple[str, object]) -> str:
    name, schema = found
    return f"a {name} file of schema {schema}" if name else "an HDF5 file of another kind"
