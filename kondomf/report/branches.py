"""Figure of the branches along a parameter: free energy above the lowest, order parameters, ends and transitions."""

from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray
from scipy.interpolate import CubicSpline

from kondomf.meanfield.continuation import CONTINUOUS, LIMIT, LOST, SPINODAL
from kondomf.phases.along import Along, NamedBranch
from kondomf.report.style import CYCLE

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

Array = NDArray[np.float64]

MARKS = {SPINODAL: "o", CONTINUOUS: "D", LOST: "x"}
PANELS = (("hybridization", "largest hybridization"), ("spin_moment", "spin moment (ħ)"))


def draw_branches(figure: "Figure", found: Along) -> None:
    """Three panels over the parameter; open circles are spinodals, diamonds continuous ends, lines transitions."""
    top, *rest = figure.subplots(3, 1, sharex=True, height_ratios=(3, 2, 2))

    def above(one: NamedBranch, x: Array) -> Array:
        return _free_energy(one, x) - np.min([_free_energy(other, x) for other in found.branches], axis=0)

    for one in found.branches:
        color = CYCLE[(one.number - 1) % len(CYCLE)]
        x = np.linspace(one.table["x"].min(), one.table["x"].max(), 300)
        top.plot(x, above(one, x), label=f"{one.number} {one.phase}", color=color)
        _mark(top, one, above(one, x[[0, -1]]), color)
        for axes, (name, _) in zip(rest, PANELS, strict=True):
            axes.plot(one.table["x"], one.table[name], color=color)
            _mark(axes, one, one.table[name][[0, -1]], color)
    for axes, (_, text) in zip(rest, PANELS, strict=True):
        axes.set_ylabel(text)
        axes.set_ylim(bottom=-0.03 * axes.get_ylim()[1])
    top.set_ylabel("F above the lowest\n(meV per cell)")
    for transition in found.diagram.transitions:
        if transition.lowest:
            for axes in (top, *rest):
                axes.axvline(transition.x, color="0.7", linewidth=0.8, zorder=0)
            top.annotate(
                f"{transition.x:.5g}", (transition.x, 1.0), xycoords=("data", "axes fraction"), fontsize=8, ha="center"
            )
    rest[-1].set_xlabel(found.key)
    figure.suptitle("circles: spinodals; diamonds: continuous ends; grey: transitions of the lowest state", fontsize=8)
    figure.legend(loc="outside lower center", fontsize=8, frameon=False, ncols=2)


def _free_energy(one: NamedBranch, x: Array) -> Array:
    """F of the branch at x by a spline through its states; infinite outside its range."""
    nodes, first = np.unique(one.table["x"], return_index=True)
    inside = (nodes[0] <= x) & (x <= nodes[-1])
    if len(nodes) < 2:
        return np.where(inside, one.table["free_energy_meV_per_cell"][0], np.inf)
    return np.where(inside, CubicSpline(nodes, one.table["free_energy_meV_per_cell"][first])(x), np.inf)


def _mark(axes: "Axes", one: NamedBranch, y: Array, color: str) -> None:
    for end, value in zip(one.branch.ends, y, strict=True):
        if end.kind != LIMIT:
            axes.plot(end.x, value, MARKS[end.kind], color=color, markerfacecolor="white", markersize=5)
