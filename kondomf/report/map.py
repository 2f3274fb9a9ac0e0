"""Phase map of a run over its two axes, and line cuts along the first of them."""

import math
import textwrap
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from kondomf.errors import InputError
from kondomf.report.outputs import plain
from kondomf.report.style import CYCLE
from kondomf.report.tables import align
from kondomf.sweep import FAILED, Run

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

Array = NDArray[np.float64]

MARKERS = "osD^vP*Xh8"
CUTS = (
    ("free_energy_meV_per_cell", "F (meV per cell)"),
    ("hybridization", "largest hybridization"),
    ("spin_moment", "spin moment (ħ)"),
)
"""Quantities of a line cut and their labels."""
LABELLED_POINTS = 6
"""Smaller regions are named in the legend alone."""
GOOD = ("minimum", "minimum-in-class")
UNITS = {"meV": "meV", "K": "K", "angstrom": "Å", "degree": "degree", "per_cm2": "1/cm²"}
"""Unit at the end of a key, and how a person writes it."""


@dataclass(frozen=True)
class PhaseMap:
    """Phases and statuses (Nx, Ny) of one class of a run at ascending x (Nx,), y (Ny,), and the cuts asked for.

    quantities: arrays (Nx, Ny) by name; cuts: indices along y. Points without a result are "" and NaN.
    """

    name: str
    phase_class: str
    keys: tuple[str, str]
    x: Array
    y: Array
    phase: NDArray[Any]
    status: NDArray[Any]
    quantities: dict[str, Array]
    cuts: tuple[int, ...]

    @property
    def names(self) -> list[str]:
        """Phases met, most frequent first."""
        found, counts = np.unique(self.phase[self.phase != ""].astype(str), return_counts=True)
        return [str(found[i]) for i in np.argsort(-counts, kind="stable")]

    def columns(self) -> dict[str, Any]:
        """One row per point."""
        x, y = np.meshgrid(self.x, self.y, indexing="ij")
        table = {self.keys[0]: x.ravel(), self.keys[1]: y.ravel(), "phase": self.phase.ravel()}
        table["status"] = self.status.ravel()
        return table | {name: values.ravel() for name, values in self.quantities.items()}

    def to_dict(self) -> dict[str, Any]:
        return {
            "name": self.name,
            "class": self.phase_class,
            "axes": {self.keys[0]: self.x.tolist(), self.keys[1]: self.y.tolist()},
            "phase": self.phase.tolist(),
            "status": self.status.tolist(),
            "cuts": {self.keys[1]: [float(self.y[cut]) for cut in self.cuts]},
            **{name: plain(values.tolist()) for name, values in self.quantities.items()},
        }

    def text(self) -> str:
        """How many points each phase holds, and the ranges where it is found."""
        rows = [("map", f"{self.name}, class {self.phase_class}")]
        for name in self.names:
            i, j = np.nonzero(self.phase == name)
            ranges = ", ".join(
                f"{axis_label(key)} {values[index].min():g} to {values[index].max():g}"
                for key, values, index in zip(self.keys, (self.x, self.y), (i, j), strict=True)
            )
            rows.append((name, f"{_points(len(i))}, {ranges}"))
        rows += [self._cut_row(cut) for cut in self.cuts]
        bad = (self.status != "") & ~np.isin(self.status.astype(str), GOOD)
        rows.append(("no minimum", _points(int(bad.sum()))))
        rows.append(("not computed yet", _points(int((self.status == "").sum()))))
        return align(rows)

    def _cut_row(self, cut: int) -> tuple[str, str]:
        """The phases met along a cut, each with the first axis value where it is found."""
        names = [str(name) or "not computed" for name in self.phase[:, cut]]
        first = [i for i, name in enumerate(names) if i == 0 or name != names[i - 1]]
        text = ", ".join(f"{names[i]} from {self.x[i]:g}" for i in first)
        return f"cut at {self.y[cut]:g}", f"along {axis_label(self.keys[0])}: {text}"


def read_map(run: Run, phase_class: str | None, cuts: tuple[str, ...] = ()) -> PhaseMap:
    """Read one class of a run with two axes; `cuts` are texts "key=value" on the second axis.

    Raises InputError: no such class, not two axes, or a cut along another key.
    """
    if len(run.axes) != 2:
        axes = ", ".join(axis.key for axis in run.axes)
        raise InputError(f"{run.folder} is swept along {axes}; a map needs exactly two axes")
    name = phase_class or run.phases[0]
    status = run.status(name)
    if np.isin(status.astype(str), ("", FAILED)).all():
        raise InputError(f"{run.folder} holds no finished point of class {name} yet; look at it with: kondomf progress")
    one, two = run.axes
    order = np.ix_(np.argsort(one.values), np.argsort(two.values))
    quantities = {key: np.asarray(run.quantity(name, key), dtype=float)[order] for key, _ in CUTS}
    y = np.sort(two.values)
    indices = tuple(_cut_index(text, two.key, y) for text in cuts)
    return PhaseMap(
        name=str(run.material["name"]),
        phase_class=name,
        keys=(one.key, two.key),
        x=np.sort(one.values),
        y=y,
        phase=run.quantity(name, "phase")[order],
        status=status[order],
        quantities=quantities,
        cuts=indices,
    )


def _cut_index(text: str, key: str, values: Array) -> int:
    name, _, value = text.partition("=")
    try:
        number = float(value)
    except ValueError:
        number = math.nan
    if not math.isfinite(number):
        raise InputError(f"--cut {text!r}: give KEY=VALUE, for instance {key}={values[len(values) // 2]:g}")
    if name != key:
        raise InputError(f"--cut {text!r}: cuts run along the first axis; fix a value of the second, {key}")
    return int(np.abs(values - number).argmin())


def axis_label(key: str) -> str:
    """What people call a swept key: its last part, with the unit in brackets."""
    section, name = key.split(".")[0], key.split(".")[-1]
    unit = next((unit for unit in UNITS if name.endswith(f"_{unit}")), None)
    words = (name.removesuffix(f"_{unit}") if unit else name).replace("_", " ")
    words = f"Kondo {words}" if section == "kondo" else words
    return f"{words} ({UNITS[unit]})" if unit else words


def figure_size(found: PhaseMap) -> tuple[float, float]:
    """Inches: one panel for a map, three for cuts."""
    return (9.0, 3.4) if found.cuts else (6.5, 4.8)


def draw(figure: "Figure", found: PhaseMap) -> None:
    """The map, or if cuts were asked for one panel per quantity."""
    if found.cuts:
        draw_cuts(list(figure.subplots(1, len(CUTS))), found)
    else:
        draw_map(figure.subplots(), found)
    figure.suptitle(f"{found.name}: class {found.phase_class}", fontsize=9)


def draw_map(axes: "Axes", found: PhaseMap) -> None:
    """Phases as pale cells with a marker per point and the name written in the region; doubtful points are crossed."""
    from matplotlib.colors import ListedColormap

    number = np.full(found.phase.shape, np.nan)
    for i, name in enumerate(found.names):
        number[found.phase == name] = i
    colors = [_pale(CYCLE[i % len(CYCLE)]) for i in range(len(found.names))]
    x_edges, y_edges = _edges(found.x), _edges(found.y)
    axes.pcolormesh(x_edges, y_edges, number.T, cmap=ListedColormap(colors), vmin=-0.5, vmax=len(colors) - 0.5)
    for i, name in enumerate(found.names):
        x, y = np.nonzero(found.phase == name)
        color, marker = CYCLE[i % len(CYCLE)], MARKERS[i % len(MARKERS)]
        axes.scatter(found.x[x], found.y[y], s=9, color=color, marker=marker, label=f"{name} ({len(x)})")
    for name in found.names:
        _write_name(axes, found, name)
    bad = (found.status != "") & ~np.isin(found.status.astype(str), GOOD)
    if bad.any():
        x, y = np.nonzero(bad)
        axes.scatter(found.x[x], found.y[y], marker="x", s=40, color="black", label=f"no minimum ({len(x)})")
    axes.set_xlabel(axis_label(found.keys[0]))
    axes.set_ylabel(axis_label(found.keys[1]))
    axes.figure.legend(loc="outside lower center", ncols=2, frameon=False, fontsize=8)


def _write_name(axes: "Axes", found: PhaseMap, name: str) -> None:
    """The name inside the largest connected region of a phase, where that is large enough to hold it."""
    from scipy.ndimage import label

    regions, count = label(found.phase == name)
    size, region = max((int((regions == i).sum()), i) for i in range(1, count + 1))
    if size < LABELLED_POINTS:
        return
    i, j = np.nonzero(regions == region)
    centre = np.argmin((i - i.mean()) ** 2 + (j - j.mean()) ** 2)
    axes.annotate(
        textwrap.fill(name, 15, break_long_words=False),
        (found.x[i[centre]], found.y[j[centre]]),
        ha="center",
        va="center",
        fontsize=7,
        bbox={"boxstyle": "round,pad=0.2", "facecolor": "white", "edgecolor": "none", "alpha": 0.8},
    )


def draw_cuts(panels: "list[Axes]", found: PhaseMap) -> None:
    """F, hybridization and moments along the first axis, one line per cut."""
    for axes, (name, label) in zip(panels, CUTS, strict=True):
        for i, cut in enumerate(found.cuts):
            values, marker = found.quantities[name][:, cut], MARKERS[i % len(MARKERS)]
            axes.plot(found.x, values, marker=marker, markersize=3.5, label=f"{found.y[cut]:g}")
        axes.set_ylabel(label)
        axes.set_xlabel(axis_label(found.keys[0]))
    panels[0].legend(frameon=False, fontsize=8, title=axis_label(found.keys[1]))


def _edges(values: Array) -> Array:
    """Borders (N + 1,) of the cells around ascending grid values (N,); a single value gets a cell of width 1."""
    if len(values) == 1:
        return values[0] + np.array([-0.5, 0.5])
    middle = (values[1:] + values[:-1]) / 2
    return np.concatenate([[2 * values[0] - middle[0]], middle, [2 * values[-1] - middle[-1]]])


def _points(count: int) -> str:
    return f"{count} point" if count == 1 else f"{count} points"


def _pale(color: str) -> tuple[float, float, float]:
    red, green, blue = (0.6 + 0.4 * int(color[i : i + 2], 16) / 255 for i in (1, 3, 5))
    return red, green, blue
