"""What did the user write, in which units, is it sane? TOML to a validated, immutable Material."""

from kondomf.material.commensurate import CommensurateCell
from kondomf.material.derive import Derived, derive, table
from kondomf.material.load import NUMERIC_KEYS, load_material, material_from_dict, with_value
from kondomf.material.new import write_templates
from kondomf.material.schema import (
    ConductionLayer,
    Kondo,
    MagneticField,
    Material,
    MeanField,
    Search,
    SpinLayer,
    Zone,
)

__all__ = [
    "NUMERIC_KEYS",
    "CommensurateCell",
    "ConductionLayer",
    "Derived",
    "Kondo",
    "MagneticField",
    "Material",
    "MeanField",
    "Search",
    "SpinLayer",
    "Zone",
    "derive",
    "load_material",
    "material_from_dict",
    "table",
    "with_value",
    "write_templates",
]
