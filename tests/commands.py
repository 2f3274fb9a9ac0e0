"""Commands run in this process, small inputs for them, and the law that every refusal keeps."""

import json
from inspect import signature

from click.testing import CliRunner

from kondomf.cli import main
from kondomf.material.schema import DOPING_KEYS, TEMPERATURE_KEYS

COMMANDS = list(main.commands)
MATERIAL = {
    "name": "invented for tests",
    "spin_layer": {"lattice_constant_angstrom": 5.0, "kitaev_meV": 300.0},
    "conduction_layer": {"lattice_constant_angstrom": 5.0, "hopping_meV": 1000.0, "filling": 0.9},
    "kondo": {"coupling_meV": 2200.0},
    "mean_field": {"exchange_form": "so4", "magnetic_channel": False, "temperature_meV": 20.0},
    "zone": {"points": 6},
    "search": {"phase": "heavy-fermi-liquid", "starts": 1},
}
COLD = {"conduction_layer.filling": 0.985, "kondo.coupling_meV": 1300.0, "mean_field.temperature_meV": 0.1}
SWEEP = """
material = "material.toml"
[axes]
"kondo.coupling_meV" = [0.0, 2200.0]
"conduction_layer.filling" = [0.9, 1.0]
"""
MAP = {"search.phase": "any", "mean_field.exchange_form": "kitaev", "zone.points": 4}
RESULT_KEYS = [
    "free_energy_meV_per_cell",
    "entropy_kB_per_cell",
    "filling",
    "chemical_potential_meV",
    "multipliers_meV",
    "status",
    "residual_meV",
    "curvature_min",
    "curvature_full_space",
    "zero_modes",
    "hybridization_singular_values",
    "spin_moment",
    "electron_moment",
    "bond_energies_meV",
    "pairing",
    "gap_meV",
    "chern_number",
    "phase",
    "phase_evidence",
    "zone_error_meV",
    "evaluations",
    "wall_seconds",
    "inputs",
    "versions",
]


def kondomf(*arguments):
    """Run a command in this process, with standard output and error apart."""
    apart = {"mix_stderr": False} if "mix_stderr" in signature(CliRunner).parameters else {}
    return CliRunner(**apart).invoke(main, [str(argument) for argument in arguments])


def done(*arguments):
    result = kondomf(*arguments)
    assert result.exit_code == 0, result.output
    return result.stdout


def toml(data):
    """A material as TOML; `data` holds plain keys and one level of sections."""
    lines = [f"{key} = {json.dumps(value)}" for key, value in data.items() if not isinstance(value, dict)]
    for section, keys in data.items():
        if isinstance(keys, dict):
            lines += [f"[{section}]", *(f"{key} = {json.dumps(value)}" for key, value in keys.items())]
    return "\n".join(lines) + "\n"


def changed(values):
    """MATERIAL with dotted keys set; None removes one, and a doping or temperature key replaces its rivals."""
    data = json.loads(json.dumps(MATERIAL))
    for dotted, value in values.items():
        section, _, key = dotted.rpartition(".")
        place = data.setdefault(section, {}) if section else data
        for rivals in (DOPING_KEYS, TEMPERATURE_KEYS):
            if key in rivals:
                place = data[section] = {name: kept for name, kept in place.items() if name not in rivals}
        if value is None:
            place.pop(key, None)
        else:
            place[key] = value
    return data


def write(folder, values=(), name="material.toml"):
    path = folder / name
    path.write_text(toml(changed(dict(values))))
    return path


def contents(folder):
    """Every file with its bytes; readers of a run may leave SQLite's own two files beside its record."""
    paths = [path for path in sorted(folder.rglob("*")) if not path.name.endswith(("-shm", "-wal"))]
    return {path: path.read_bytes() if path.is_file() else None for path in paths}


def refused(folder, arguments, *fragments):
    """The command ends with one message on standard error and exit code 2, and changes no file; returns the message."""
    before = contents(folder)
    result = kondomf(*arguments)
    assert isinstance(result.exception, SystemExit), result.exception
    assert result.exit_code == 2
    assert result.stdout == ""
    assert result.stderr.startswith("error: ")
    assert result.stderr.count("error: ") == 1
    assert "Traceback" not in result.stderr
    for fragment in fragments:
        assert fragment in result.stderr, result.stderr
    assert contents(folder) == before
    return result.stderr
