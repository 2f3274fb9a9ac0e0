"""What is this state? Solution to order parameters and a label with its evidence."""

from kondomf.phases.labels import Label, label
from kondomf.phases.order import Order
from kondomf.phases.spectrum import bands, density_of_states, gap, path
from kondomf.phases.summary import summarize

__all__ = ["Label", "Order", "bands", "density_of_states", "gap", "label", "path", "summarize"]
