"""Which Gaussian states are stationary, and are they minima? MeanFieldModel to Solution."""

from kondomf.meanfield.driver import Settings
from kondomf.meanfield.search import named_start, solve
from kondomf.meanfield.solution import Minimum, Solution, Trial, chance_of_another, distinct_minima
from kondomf.meanfield.starts import Start, carried_over
from kondomf.meanfield.state import load_state, save_state

__all__ = [
    "Minimum",
    "Settings",
    "Solution",
    "Start",
    "Trial",
    "carried_over",
    "chance_of_another",
    "distinct_minima",
    "load_state",
    "named_start",
    "save_state",
    "solve",
]
