"""Which bilinears, one-body couplings and quadratic form? Material to MeanFieldModel."""

from kondomf.model.build import build_model
from kondomf.model.lattice import MagneticCell
from kondomf.model.model import MeanFieldModel

__all__ = ["MagneticCell", "MeanFieldModel", "build_model"]
