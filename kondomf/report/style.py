"""One look for all figures: the Agg canvas, readable sizes, colours that colour-blind readers can tell apart."""

from collections.abc import Callable
from pathlib import Path
from typing import TYPE_CHECKING, Any

from kondomf.errors import InputError
from kondomf.files import write_atomically

if TYPE_CHECKING:
    from matplotlib.figure import Figure

FORMATS = (".png", ".pdf", ".svg")

CYCLE = ("#0072B2", "#D55E00", "#009E73", "#CC79A7", "#E69F00", "#56B4E9", "#000000", "#F0E442", "#8C6D31", "#7F7F7F")
"""Colours of Nature Methods 8, 441 (2011), "Color blindness", in an order of our own, and two more."""

_RC: dict[str, Any] = {
    "font.size": 10,
    "axes.spines.top": False,
    "axes.spines.right": False,
    "figure.dpi": 150,
    "savefig.bbox": "tight",
    "svg.hashsalt": "kondomf",
}


def check_format(path: Path) -> None:
    """Raise InputError unless the suffix names a figure format."""
    if path.suffix.lower() not in FORMATS:
        raise InputError(f"figure {path}: the ending {path.suffix!r} is no figure format; use {', '.join(FORMATS)}")


def save_figure(path: Path, draw: Callable[["Figure"], Any], size: tuple[float, float], overwrite: bool) -> None:
    """Let `draw` fill a figure of `size` inches and write it to `path`, whole or not at all.

    Raises InputError for an unknown format, an existing file without `overwrite`, or a folder that refuses the file.
    """
    import matplotlib
    from cycler import cycler
    from matplotlib.backends.backend_agg import FigureCanvasAgg
    from matplotlib.figure import Figure

    check_format(path)
    rc: Any = {**_RC, "axes.prop_cycle": cycler(color=CYCLE)}
    with matplotlib.rc_context(rc):
        figure = Figure(figsize=size, layout="constrained")
        FigureCanvasAgg(figure)
        draw(figure)
        write_atomically(path, lambda temporary: figure.savefig(temporary), overwrite=overwrite)
