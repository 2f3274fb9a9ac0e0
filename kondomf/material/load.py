"""From a TOML file or a dict to a validated Material, with errors in the user's words."""

import json
import re
import tomllib
from collections.abc import Mapping, Sequence
from difflib import get_close_matches
from pathlib import Path
from typing import Any

import numpy as np
from pydantic import ValidationError
from pydantic.fields import FieldInfo
from pydantic_core import ErrorDetails

from kondomf.errors import InputError
from kondomf.material.schema import DOPING_KEYS, TEMPERATURE_KEYS, Material, Section

SECTIONS: dict[str, type[Section]] = {
    name: field.annotation
    for name, field in Material.model_fields.items()
    if isinstance(field.annotation, type) and issubclass(field.annotation, Section)
}
"""Section name -> its model."""
FIELDS: dict[str, FieldInfo] = {"name": Material.model_fields["name"]} | {
    f"{section}.{key}": field for section, model in SECTIONS.items() for key, field in model.model_fields.items()
}
"""Dotted key -> its description and default."""
NOT_NUMERIC = (
    "name",
    "conduction_layer.match",
    "mean_field.exchange_form",
    "mean_field.kondo_form",
    "mean_field.magnetic_channel",
    "mean_field.cell",
    "zone.method",
    "zone.offset",
    "search.phase",
)
NUMERIC_KEYS = tuple(key for key in FIELDS if key not in NOT_NUMERIC)
"""Dotted names of the keys that hold numbers and can be the axis of a sweep."""


def load_material(path: str | Path) -> Material:
    """Read a material file (TOML, UTF-8).

    Raises InputError, one line per problem with file, line and key, if the file cannot be read or is no material.
    """
    path = Path(path)
    text = _read(path)
    try:
        data = tomllib.loads(text)
    except tomllib.TOMLDecodeError as error:
        raise InputError(
            f"{path} is not valid TOML: {error}; a line is a [section], a key = value or a # comment, text is quoted"
        ) from None
    return _validate(data, str(path), _key_lines(text))


def material_from_dict(data: Mapping[str, Any], where: str = "material") -> Material:
    """Validate a nested dict with the keys of a material file; `where` opens every line of an InputError."""
    return _validate(data, where, {})


def with_value(material: Material, key: str, value: Any) -> Material:
    """A copy of `material` with the numeric key, e.g. "kondo.coupling_meV", set to `value` and validated again.

    Setting one of filling, charge_transfer_meV, density_per_cm2 removes the other two; the same holds for
    temperature_K and temperature_meV. One number for spin_layer.kitaev_meV sets all three bonds.
    Raises InputError for an unknown or not numeric key and for a value outside its range.
    """
    if key not in NUMERIC_KEYS:
        raise InputError(f"{key} is no numeric key of a material; use {_alternatives(key, NUMERIC_KEYS)}")
    section, name = key.split(".")
    data = material.to_dict()
    values = data.setdefault(section, {})
    for group in (DOPING_KEYS, TEMPERATURE_KEYS):
        if name in group:
            for other in group:
                values.pop(other, None)
    whole = FIELDS[key].annotation is int and isinstance(value, float) and value.is_integer()
    values[name] = int(value) if whole else value
    return material_from_dict(data, where=f"material {material.name}")


def _read(path: Path) -> str:
    if path.is_dir():
        raise InputError(f"{path} is a directory; give the name of a material file, or write one with `kondomf new`")
    try:
        return path.read_text(encoding="utf-8-sig")
    except FileNotFoundError:
        raise InputError(
            f"{path} does not exist; check the name, or write a material file with `kondomf new`"
        ) from None
    except UnicodeDecodeError as error:
        raise InputError(
            f"{path} is not UTF-8 text (byte {error.start}); it may be another kind of file, else save it as UTF-8"
        ) from None
    except OSError as error:
        raise InputError(f"cannot read {path}: {error.strerror}; check its permissions") from None


def _validate(data: Mapping[str, Any], where: str, lines: Mapping[str, int]) -> Material:
    try:
        return Material.model_validate(_plain(data))
    except ValidationError as error:
        # A misspelt key comes first: it explains the missing one.
        errors = sorted(error.errors(), key=lambda entry: entry["type"] != "extra_forbidden")
        problems = [_problem(entry, where, lines) for entry in errors]
    raise InputError("\n".join(problems))


def _plain(value: Any) -> Any:
    """Numpy scalars and arrays as Python numbers and lists, at any depth."""
    if isinstance(value, Mapping):
        return {key: _plain(entry) for key, entry in value.items()}
    return value.tolist() if isinstance(value, np.generic | np.ndarray) else value


def _problem(entry: ErrorDetails, where: str, lines: Mapping[str, int]) -> str:
    """One line of text: place, key, value, what is legal, remedy."""
    location = [str(part) for part in entry["loc"][:2]]
    key = ".".join(location)
    place = f"{where}, line {lines[key]}" if key in lines else where
    return f"{place}: {_complaint(entry, location, key)}"


def _complaint(entry: ErrorDetails, location: list[str], key: str) -> str:
    kind = entry["type"]
    reason = str(entry["ctx"]["error"]) if kind == "value_error" else ""
    if kind == "extra_forbidden":
        siblings = SECTIONS[location[0]].model_fields if len(location) == 2 else Material.model_fields
        return f"unknown key {key}; instead of {location[-1]} use {_alternatives(location[-1], tuple(siblings))}"
    if key in FIELDS:
        legal = FIELDS[key].description
        if kind == "missing":
            return f"{key} is missing; add {legal}"
        return f"{key} = {_show(entry['input'])}{': ' + reason if reason else ''}; give {legal}"
    if kind == "missing":
        return f"section [{key}] is missing; it needs {_required(key)}"
    if key in SECTIONS and not reason:
        return f"{key} = {_show(entry['input'])} is no section; write [{key}] and its keys on lines of their own"
    return f"[{key}] {reason}" if key else reason


def _required(section: str) -> str:
    keys = [name for name, field in SECTIONS[section].model_fields.items() if field.is_required()]
    groups = {"conduction_layer": DOPING_KEYS, "mean_field": TEMPERATURE_KEYS}
    if section in groups:
        keys.append(f"one of {', '.join(groups[section])}")
    return " and ".join(keys)


def _alternatives(word: str, legal: Sequence[str]) -> str:
    """The nearest legal words, or all of them if nothing is near."""
    near = get_close_matches(word, legal, n=3, cutoff=0.6)
    return " or ".join(near) if near else f"one of {', '.join(legal)}"


def _show(value: Any) -> str:
    text = json.dumps(value, default=str, ensure_ascii=False)
    return text if len(text) <= 60 else text[:57] + "..."


def _key_lines(text: str) -> dict[str, int]:
    """Line number of every section header and `key = value` of a TOML text; keys inside inline tables are left out."""
    lines: dict[str, int] = {}
    section = ""
    for number, line in enumerate(text.splitlines(), start=1):
        if header := re.match(r"\s*\[\s*([\w.-]+)\s*\]\s*(#|$)", line):
            section = header[1]
            lines[section] = number
        elif key := re.match(r"\s*\"?([\w.-]+)\"?\s*=", line):
            lines[f"{section}.{key[1]}" if section else key[1]] = number
    return lines
