"""kondomf: mean-field phases of conduction electrons on Kitaev magnets and their quantum oscillations."""

from importlib.metadata import version

__version__ = version("kondomf")
