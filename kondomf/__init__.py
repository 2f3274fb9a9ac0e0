"""kondomf: mean-field phases of conduction electrons on Kitaev magnets and their quantum oscillations."""

from importlib import import_module
from importlib.metadata import version
from typing import Any

__version__ = version("kondomf")

_PUBLIC = {
    "load_material": "kondomf.material",
    "solve": "kondomf.meanfield",
    "load_state": "kondomf.meanfield",
    "save_state": "kondomf.meanfield",
    "follow_branches": "kondomf.meanfield",
    "thermodynamics": "kondomf.meanfield",
    "summarize": "kondomf.phases",
    "open_run": "kondomf.sweep",
    "effective_model": "kondomf.effective",
    "predict": "kondomf.oscillations",
}
"""Names of the Python interface and where they live; imported on first use, so that the command line starts fast."""

__all__ = ["__version__", *_PUBLIC]


def __getattr__(name: str) -> Any:
    if name not in _PUBLIC:
        raise AttributeError(f"module 'kondomf' has no attribute {name!r}")
    return getattr(import_module(_PUBLIC[name]), name)
