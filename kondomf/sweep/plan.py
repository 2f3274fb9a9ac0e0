"""Which points a sweep has, in which order, from which parent each starts and with which seed. Runs nothing."""

import hashlib
import itertools
import json
import math
import tomllib
from collections.abc import Iterator
from dataclasses import dataclass
from functools import cached_property
from pathlib import Path
from typing import Any

import numpy as np

from kondomf.errors import InputError
from kondomf.material import Material, load_material, material_from_dict, with_value
from kondomf.material.schema import NEEDS_SO4
from kondomf.sweep.record import Axis, PointKey

PHASES = ("any", "decoupled", "paramagnetic", "heavy-fermi-liquid", "magnetic")
"""Classes inside which a point can be minimised."""

Index = tuple[int, ...]


@dataclass(frozen=True)
class SweepPlan:
    """All points of a sweep: the grid spanned by the axes, once for every phase class."""

    material: Material
    material_path: Path
    axes: tuple[Axis, ...]
    phases: tuple[str, ...]

    @cached_property
    def shape(self) -> Index:
        """Number of values on each axis."""
        return tuple(len(axis.values) for axis in self.axes)

    @property
    def size(self) -> int:
        """Number of points, all phase classes counted."""
        return math.prod(self.shape) * len(self.phases)

    def points(self) -> Iterator[PointKey]:
        """Every point once, in the lexicographic order of its index, phase class by phase class."""
        for phase in self.phases:
            for index in itertools.product(*map(range, self.shape)):
                yield PointKey(phase, index)

    def rank(self, key: PointKey) -> tuple[int, Index, int]:
        """Sort key that puts points near the root of the tree first, so that many workers find work early."""
        return sum(key.index), key.index, self.phases.index(key.phase)

    def parent(self, key: PointKey) -> PointKey | None:
        """The point whose result starts this one; None at the root.

        The tree runs along the first axis at index 0 of the others, from each of its points along the second, and so
        on: the parent is one step back on the last axis that is not at 0.
        """
        last = _last_moved(key.index)
        return None if last is None else _step(key, last, -1)

    def children(self, key: PointKey) -> list[PointKey]:
        """The points that start from this one; the inverse of `parent`."""
        first = _last_moved(key.index) or 0
        return [_step(key, axis, 1) for axis in range(first, len(self.shape)) if key.index[axis] + 1 < self.shape[axis]]

    def coordinates(self, index: Index) -> dict[str, float]:
        """Value of every axis key at a grid index."""
        return {axis.key: axis.values[i] for axis, i in zip(self.axes, index, strict=True)}

    def seed(self, key: PointKey) -> int:
        """Seed in [0, 2^31) from the material's seed, the coordinates and the phase class, whoever runs the point when.

        The coordinates enter by value, so that a point keeps its seed when an axis grows.
        """
        address = [self.material.search.seed, sorted(self.coordinates(key.index).items()), key.phase]
        return int.from_bytes(hashlib.sha256(json.dumps(address).encode()).digest()[:4], "big") >> 1

    def material_at(self, key: PointKey) -> Material:
        """The material of a point, in the exchange form that its phase class needs.

        Raises InputError that names the axis values if they make no valid material.
        """
        coordinates = self.coordinates(key.index)
        try:
            material = self.material
            for name, value in coordinates.items():
                material = with_value(material, name, value)
            return _for_phase(material, key.phase)
        except InputError as error:
            place = ", ".join(f"{name} = {value:g}" for name, value in coordinates.items())
            raise InputError(f'sweep point {place}, phase "{key.phase}": {error}') from None


def plain_inputs(material: Material) -> dict[str, Any]:
    """All keys of a material, defaults written out, as plain data that TOML and JSON can hold."""
    return material.model_dump(mode="json", exclude_none=True)


def load_sweep(path: str | Path) -> SweepPlan:
    """Read a sweep file (TOML) and the material it names (relative to the sweep file); validate every point.

    Raises InputError with file, key and value for anything that is not a sweep, and for every point whose material
    would be refused.
    """
    path = Path(path)
    data = _read_toml(path)
    if "refine" in data:
        raise InputError(f"{path}: this version does not refine boundaries; remove the section [refine]")
    for key in data:
        if key not in ("material", "phases", "axes"):
            raise InputError(f"{path}: unknown key {key!r}; a sweep has material, phases and [axes]")
    name = data.get("material")
    if not isinstance(name, str):
        raise InputError(
            f'{path}: material = {name!r}; give the material file as text, e.g. material = "material.toml"'
        )
    material_path = path.parent / name
    plan = SweepPlan(load_material(material_path), material_path, _axes(path, data), _phases(path, data))
    _validate_points(path, plan)
    return plan


def _read_toml(path: Path) -> dict[str, Any]:
    try:
        return tomllib.loads(path.read_text(encoding="utf-8"))
    except OSError as error:
        raise InputError(
            f"cannot read the sweep file {path}: {error.strerror}; give the path of a sweep file"
        ) from None
    except (tomllib.TOMLDecodeError, UnicodeDecodeError) as error:
        raise InputError(f"{path} is not valid TOML: {error}") from None


def _phases(path: Path, data: dict[str, Any]) -> tuple[str, ...]:
    phases = data.get("phases", ["any"])
    legal = ", ".join(PHASES)
    if not isinstance(phases, list) or not phases:
        raise InputError(f"{path}: phases = {phases!r}; give a list of at least one of {legal}")
    for phase in phases:
        if phase not in PHASES:
            raise InputError(f"{path}: phases holds {phase!r}; legal are {legal}")
    if len(set(phases)) < len(phases):
        raise InputError(f"{path}: phases = {phases!r} names a class twice; name each once")
    return tuple(phases)


def _axes(path: Path, data: dict[str, Any]) -> tuple[Axis, ...]:
    axes = data.get("axes")
    if not isinstance(axes, dict) or not axes:
        raise InputError(
            f'{path}: no axis to sweep; add [axes], e.g. "kondo.coupling_meV" = {{ from = 0.0, to = 9.0, points = 4 }}'
        )
    return tuple(Axis(key, _axis_values(f"{path}: axis {key!r}", value)) for key, value in axes.items())


def _axis_values(place: str, given: Any) -> tuple[float, ...]:
    if isinstance(given, dict):
        values = _spaced(place, given)
    elif isinstance(given, list) and given and all(_is_number(value) for value in given):
        values = tuple(map(float, given))
    else:
        raise InputError(f"{place} = {given!r}; give a list of numbers or {{ from = ..., to = ..., points = ... }}")
    if len(set(values)) < len(values):
        raise InputError(f"{place} has a value twice: {list(values)}; every value may come once")
    return values


def _spaced(place: str, given: dict[str, Any]) -> tuple[float, ...]:
    unknown = set(given) - {"from", "to", "points", "spacing"}
    if unknown:
        raise InputError(f"{place}: unknown key {sorted(unknown)[0]!r}; legal are from, to, points, spacing")
    first: Any
    last: Any
    first, last, points, spacing = (given.get(key) for key in ("from", "to", "points", "spacing"))
    if not _is_number(first) or not _is_number(last):
        raise InputError(f"{place}: from = {first!r}, to = {last!r}; both must be finite numbers")
    if isinstance(points, bool) or not isinstance(points, int) or points < 1:
        raise InputError(f"{place}: points = {points!r}; give a whole number of at least 1")
    if points == 1 and first != last:
        raise InputError(f"{place}: points = 1 cannot reach from {first!r} to {last!r}; give 2 or more, or to = from")
    if spacing not in (None, "linear", "log"):
        raise InputError(f'{place}: spacing = {spacing!r}; legal are "linear" and "log"')
    if spacing == "log" and not (first > 0 and last > 0):
        raise InputError(f'{place}: spacing = "log" from {first!r} to {last!r}; both ends must be above 0')
    grid = np.geomspace(first, last, points) if spacing == "log" else np.linspace(first, last, points)
    # Twelve digits: 0.3 instead of 0.30000000000000004, and the same values from every numpy version.
    return tuple(float(f"{value:.12g}") for value in grid)


def _is_number(value: Any) -> bool:
    return isinstance(value, int | float) and not isinstance(value, bool) and math.isfinite(value)


def _validate_points(path: Path, plan: SweepPlan) -> None:
    try:
        for key in plan.points():
            material = plan.material_at(key)
    except InputError as error:
        raise InputError(f"{path}: {error}") from None
    data = plain_inputs(material)
    for axis in plan.axes:
        section, name = axis.key.split(".")
        if name not in data[section]:
            raise InputError(
                f"{path}: axis {axis.key!r} is overruled by another axis; of keys that exclude each other keep one"
            )


def _for_phase(material: Material, phase: str) -> Material:
    data = material.to_dict()
    data["search"] = {**data.get("search", {}), "phase": phase}
    if phase in NEEDS_SO4:
        data["mean_field"] = {**data["mean_field"], "exchange_form": "so4", "kondo_form": "so4"}
    return material_from_dict(data, where=material.name)


def _last_moved(index: Index) -> int | None:
    return max((axis for axis, i in enumerate(index) if i > 0), default=None)


def _step(key: PointKey, axis: int, by: int) -> PointKey:
    index = key.index
    return PointKey(key.phase, (*index[:axis], index[axis] + by, *index[axis + 1 :]))
