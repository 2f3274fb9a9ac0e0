"""Figure of predicted oscillations: amplitude against temperature beside Lifshitz-Kosevich, and a trace."""

from typing import TYPE_CHECKING

import numpy as np

from kondomf.oscillations import Prediction
from kondomf.report.style import CYCLE

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

MOST_CURVES = 6


def draw_prediction(figure: "Figure", found: Prediction) -> None:
    """Amplitudes above, the oscillating magnetisation against inverse field below."""
    upper, lower = figure.subplots(2, 1, height_ratios=(3, 2))
    draw_amplitudes(upper, found)
    draw_trace(lower, found)
    model = found.model
    figure.suptitle(
        f"b = {model.b_meV:.3g} meV, $E_D$ = {model.dirac_energy_meV:.4g} meV, $\\epsilon_f$ = "
        f"{model.heavy_level_meV:.3g} meV, mass {found.table.mass:.3g} $m_e$, F = {found.frequency_T:.4g} T",
        fontsize=9,
    )


def draw_amplitudes(axes: "Axes", found: Prediction) -> None:
    """Amplitude over its largest value at the same field, against temperature; dashed: Lifshitz-Kosevich."""
    table = found.table
    chosen = np.unique(np.linspace(0, len(table.fields_T) - 1, MOST_CURVES).round().astype(int))
    for color, i in zip(CYCLE, chosen, strict=False):
        axes.plot(table.temperatures_K, table.relative[i], color=color, label=f"{table.fields_T[i]:g} T")
        axes.plot(table.temperatures_K, table.lk_relative[i], color=color, linestyle="--", linewidth=1)
    axes.plot([], [], color="0.4", linestyle="--", linewidth=1, label="Lifshitz–Kosevich, same mass")
    axes.set_xlabel("temperature (K)")
    axes.set_ylabel(f"amplitude of the {table.observable.replace('_', ' ')}\n(largest at each field = 1)")
    axes.set_xlim(0, table.temperatures_K.max())
    axes.set_ylim(0, 1.05)
    axes.legend(frameon=False, fontsize=8)


def draw_trace(axes: "Axes", found: Prediction) -> None:
    """Oscillating magnetisation of a cell against inverse field at the lowest temperature."""
    one = found.trace
    axes.plot(one.inverse_field_per_T, one.magnetization_muB_per_cell, color="black", linewidth=0.8)
    axes.set_xlabel("1/B (1/T)")
    axes.set_ylabel("magnetization\n($\\mu_B$ per cell)")
    axes.set_title(f"{one.temperature_K:g} K", fontsize=9, loc="right")
    axes.set_xlim(one.inverse_field_per_T.min(), one.inverse_field_per_T.max())
