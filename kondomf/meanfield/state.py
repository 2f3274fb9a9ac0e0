"""State files: one solution in an HDF5 file, from which other commands go on."""

import json
from dataclasses import asdict, fields
from pathlib import Path
from typing import Any

import numpy as np

import kondomf
from kondomf.errors import InputError
from kondomf.files import write_atomically
from kondomf.material import material_from_dict
from kondomf.meanfield.solution import Solution, Trial
from kondomf.meanfield.zero_modes import ZeroModes
from kondomf.meanfield.zone import uniform
from kondomf.model import build_model

FORMAT = "kondomf state"
SCHEMA = 1
ARRAYS = {"phi": "meV", "p": "1", "correlators": "1", "multipliers": "meV"}
"""Stored arrays of a solution and their units."""
REBUILT = ("model", "zone", "inputs")


def save_state(solution: Solution, path: Path, *, overwrite: bool = False) -> None:
    """Write `solution` to an HDF5 file, whole or not at all. Raises InputError if the file cannot be written."""
    import h5py

    scalars = {
        field.name: getattr(solution, field.name)
        for field in fields(solution)
        if field.name not in ARRAYS and field.name not in REBUILT
    }
    scalars["trials"] = [asdict(trial) for trial in solution.trials]
    scalars["zero_modes"] = asdict(solution.zero_modes) if solution.zero_modes else None

    def write(temporary: Path) -> None:
        with h5py.File(temporary, "w") as file:
            file.attrs.update(format=FORMAT, schema=SCHEMA, version=kondomf.__version__)
            file.attrs["inputs"] = json.dumps(solution.inputs)
            file.attrs["evidence"] = json.dumps(scalars)
            file["channels"] = solution.model.table
            for name, unit in ARRAYS.items():
                file[name] = getattr(solution, name)
                file[name].attrs["units"] = unit

    write_atomically(path, write, overwrite=overwrite)


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
            arrays: dict[str, Any] = {name: np.array(file[name]) for name in ARRAYS}
            channels = np.array(file["channels"])
            inputs = json.loads(file.attrs["inputs"])
            evidence: dict[str, Any] = json.loads(file.attrs["evidence"])
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
        evidence["trials"] = tuple(Trial(**trial) for trial in evidence["trials"])
        evidence["history"] = tuple(tuple(entry) for entry in evidence["history"])
        evidence["curvatures"] = tuple(evidence["curvatures"])
        evidence["zero_modes"] = ZeroModes(**evidence["zero_modes"]) if evidence["zero_modes"] else None
        return Solution(model=model, zone=zone, inputs=inputs, **arrays, **evidence)
    except (KeyError, TypeError) as error:
        raise InputError(
            f"{path} holds other evidence than this version reads ({error}); solve the material again with --state"
        ) from None


def _description(found: tuple[str, object]) -> str:
    name, schema = found
    return f"a {name} file of schema {schema}" if name else "an HDF5 file of another kind"
