"""Figure of a fit: measured amplitudes against temperature, a panel for each field, and both fitted curves."""

import textwrap
from typing import TYPE_CHECKING

import numpy as np

from kondomf.measured import FitResult
from kondomf.report.style import CYCLE

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

MOST_PANELS = 6


def draw_fit(figure: "Figure", result: FitResult) -> None:
    """One panel for each field, six fields at most, spread over the range; the verdict above."""
    fields = result.data.fields_T
    chosen = np.unique(np.linspace(0, fields.size - 1, MOST_PANELS).round().astype(int))
    columns = min(chosen.size, 3)
    panels = figure.subplots(-(-chosen.size // columns), columns, squeeze=False)
    for axes, i in zip(panels.flat, chosen, strict=False):
        draw_field(axes, result, float(fields[i]))
    for axes in panels.flat[chosen.size :]:
        axes.set_visible(False)
    for axes in panels.flat[: chosen.size][-columns:]:
        axes.set_xlabel("temperature (K)")
    figure.legend(*panels[0, 0].get_legend_handles_labels(), loc="outside lower center", frameon=False, fontsize=8)
    figure.supylabel(f"amplitude of the {result.observable.replace('_', ' ')} (unit of the data)", fontsize=10)
    figure.suptitle(textwrap.fill(result.verdict, 90), fontsize=9)


def draw_field(axes: "Axes", result: FitResult, field_T: float) -> None:
    """Points with error bars and both curves at one field; ticks on every panel, since factors differ."""
    data = result.data
    rows = data.field_T == field_T
    temperature = np.geomspace(data.temperature_K.min(), data.temperature_K.max(), 120)
    for fit, color, line in zip(result.fits, CYCLE, ("--", "-"), strict=False):
        label = f"{fit.shape.name}: {', '.join(fit.texts)}"
        axes.plot(temperature, fit.amplitude(field_T, temperature), color=color, linestyle=line, label=label)
    label = "measured" if result.errors_given else "measured, error estimated"
    axes.errorbar(
        data.temperature_K[rows], data.amplitude[rows], result.error[rows], fmt="o", color="black", ms=3, label=label
    )
    axes.set_title(f"{field_T:g} T", fontsize=9, loc="right")
    axes.set_xlim(0, None)
    axes.set_ylim(0, None)
