"""Which points, in which order, on which workers, stored how?"""

from importlib import import_module
from typing import Any

_PUBLIC = {
    "load_sweep": "plan",
    "SweepPlan": "plan",
    "compare_products": "product",
    "console_progress": "progress",
    "open_run": "read",
    "progress_text": "read",
    "Run": "read",
    "RunSummary": "read",
    "Axis": "record",
    "FAILED": "record",
    "PointRecord": "record",
    "PointResult": "record",
    "run_sweep": "run",
    "RunOutcome": "run",
}
"""Public names and where they live; imported on first use, so that processes that need a part of it start fast."""

__all__ = [*_PUBLIC]


def __getattr__(name: str) -> Any:
    if name not in _PUBLIC:
        raise AttributeError(f"module 'kondomf.sweep' has no attribute {name!r}")
    return getattr(import_module(f"kondomf.sweep.{_PUBLIC[name]}"), name)
