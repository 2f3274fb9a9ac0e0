"""Which Gaussian states are stationary, and are they minima? MeanFieldModel to Solution."""

from kondomf.meanfield.branches import Diagram, follow_branches
from kondomf.meanfield.driver import Settings
from kondomf.meanfield.search import named_start, solve
from kondomf.meanfield.solution import Solution, Trial, chance_not_excluded, chance_of_another, distinct_minima
from kondomf.meanfield.starts import Start, carried_over
from kondomf.meanfield.state import load_state, save_state
from kondomf.meanfield.thermodynamics import Thermodynamics, thermodynamics

__all__ = [
    "Diagram",
    "Settings",
    "Solution",
    "Start",
    "Thermodynamics",
    "Trial",
    "carried_over",
    "chance_not_excluded",
    "chance_of_another",
    "distinct_minima",
    "follow_branches",
    "load_state",
    "named_start",
    "save_state",
    "solve",
    "thermodynamics",
]
