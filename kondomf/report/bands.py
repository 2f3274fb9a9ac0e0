"""Figure of quasiparticle bands and density of states."""

from typing import TYPE_CHECKING

import numpy as np

from kondomf.phases.band_structure import BandStructure

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.collections import PathCollection
    from matplotlib.figure import Figure


def draw_band_structure(figure: "Figure", found: BandStructure) -> None:
    """Bands on the left, density of states on the right, energies in common."""
    left, right = figure.subplots(1, 2, sharey=True, width_ratios=(3, 1))
    points = draw_bands(left, found)
    draw_density(right, found)
    figure.colorbar(points, ax=right, label="conduction weight", aspect=30)
    figure.suptitle(found.name, fontsize=9)


def draw_bands(axes: "Axes", found: BandStructure) -> "PathCollection":
    """Quasiparticle energies along the path, coloured from the spinons' (0) to the electrons' (1)."""
    energy = found.bands.energy
    x = np.broadcast_to(found.distance[:, None], energy.shape)
    inside = np.abs(energy) <= found.window_meV
    points = axes.scatter(
        x[inside],
        energy[inside],
        c=found.bands.conduction[inside],
        s=2,
        cmap="cividis",
        vmin=0,
        vmax=1,
        rasterized=True,
    )
    axes.axhline(0, color="0.6", linewidth=0.6, zorder=0)
    for corner in found.corners:
        axes.axvline(corner, color="0.85", linewidth=0.6, zorder=0)
    axes.set_xticks(found.corners, ["Γ", "K", "M", "Γ"])
    axes.set_xlim(found.distance[0], found.distance[-1])
    axes.set_ylim(-found.window_meV, found.window_meV)
    axes.set_ylabel("quasiparticle energy (meV)")
    return points


def draw_density(axes: "Axes", found: BandStructure) -> None:
    """Tunnelling density of the electrons and density of spinon states; a peak off the scale is cut."""
    axes.plot(found.dos_electrons, found.energy_meV, color="#E69F00", label="electrons")
    axes.plot(found.dos_spinons, found.energy_meV, color="#0072B2", label="spinons", linestyle="--")
    axes.axhline(0, color="0.6", linewidth=0.6, zorder=0)
    axes.set_xlabel("states per meV\nand cell")
    axes.set_xlim(0, 1.1 * max(found.dos_electrons.max(), 1e-12))
    axes.legend(frameon=False, fontsize=8)
