"""Which points, in which order, on which workers, stored how?"""

from kondomf.sweep.plan import Axis, SweepPlan, load_sweep
from kondomf.sweep.product import compare_products
from kondomf.sweep.progress import console_progress
from kondomf.sweep.read import Run, RunSummary, open_run, progress_text
from kondomf.sweep.record import FAILED, PointRecord, PointResult
from kondomf.sweep.run import RunOutcome, run_sweep

__all__ = [
    "FAILED",
    "Axis",
    "PointRecord",
    "PointResult",
    "Run",
    "RunOutcome",
    "RunSummary",
    "SweepPlan",
    "compare_products",
    "console_progress",
    "load_sweep",
    "open_run",
    "progress_text",
    "run_sweep",
]
