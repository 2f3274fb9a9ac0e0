"""What a material file may hold. The description of a field is what an error message tells the user to write."""

import sys
from typing import Annotated, Any, Literal, Self

import numpy as np
from numpy.typing import NDArray
from pydantic import (
    AfterValidator,
    BaseModel,
    BeforeValidator,
    ConfigDict,
    Field,
    StrictBool,
    StrictStr,
    model_validator,
)

from kondomf.material import honeycomb
from kondomf.units import BOLTZMANN

Matrix = NDArray[np.float64]
Triple = tuple[float, float, float]

NAMED_CELLS = {"1x1": ((1, 0), (0, 1)), "1x2": ((1, 0), (-1, 2)), "sqrt3": ((1, 1), (-1, 2))}
"""Magnetic cells in units of (a1, a2); 1x2 is the rectangle with sides a and sqrt(3) a."""
DOPING_KEYS = ("filling", "charge_transfer_meV", "density_per_cm2")
TEMPERATURE_KEYS = ("temperature_K", "temperature_meV")
NEEDS_SO4 = {
    "heavy-fermi-liquid": 'search.phase = "heavy-fermi-liquid" is no stationary state of the kitaev form: it breaks '
    "the local SU(2) symmetry, so that the electrons pair explicitly; set mean_field.exchange_form and "
    'mean_field.kondo_form to "so4", or search another phase',
    "paramagnetic": 'search.phase = "paramagnetic" cannot hold a hybridization in the kitaev form: that form keeps '
    "time reversal only if it leaves the spinons alone up to a sign, which no hybridization survives; set "
    'mean_field.exchange_form and mean_field.kondo_form to "so4", or mean_field.magnetic_channel = false to suppress '
    'the moments, or search.phase = "decoupled"',
}
"""Classes that a form other than so4 cannot hold, and why."""


def _number(value: Any) -> float:
    if isinstance(value, bool) or not isinstance(value, int | float):
        raise ValueError("not a number")
    if not abs(value) <= sys.float_info.max:  # also catches NaN, and whole numbers that no float can hold
        raise ValueError("not finite")
    return float(value)


def _whole(value: Any) -> int:
    if isinstance(value, bool) or not isinstance(value, int):
        raise ValueError("not a whole number")
    return value


def _numbers(value: Any, *lengths: int) -> tuple[float, ...]:
    if not isinstance(value, list | tuple):
        raise ValueError("not a list of numbers")
    if len(value) not in lengths:
        raise ValueError(f"{len(value)} entries")
    return tuple(_number(entry) for entry in value)


def _triple(value: Any) -> tuple[float, ...]:
    return _numbers(value, 3)


def _bonds(value: Any) -> tuple[float, ...]:
    return _numbers(value, 3) if isinstance(value, list | tuple) else (_number(value),) * 3


def _anisotropic(value: Any) -> float | tuple[float, ...]:
    return _numbers(value, 2, 3) if isinstance(value, list | tuple) else _number(value)


def _cell(value: Any) -> str | tuple[tuple[int, int], tuple[int, int]]:
    if isinstance(value, str) and value in NAMED_CELLS:
        return value
    rows = value if isinstance(value, list | tuple) else ()
    if len(rows) != 2 or not all(isinstance(row, list | tuple) and len(row) == 2 for row in rows):
        raise ValueError("not a cell")
    (a, b), (c, d) = ((_whole(row[0]), _whole(row[1])) for row in rows)
    determinant = a * d - b * c
    if determinant == 0:
        raise ValueError("singular, its rows are parallel")
    if determinant < 0:
        raise ValueError(f"left-handed (determinant {determinant}); swap the two rows")
    return (a, b), (c, d)


def _even(value: int) -> int:
    if value < 2 or value % 2:
        raise ValueError("not an even number of at least 2")
    return value


def _method(value: Any) -> Any:
    if value == "adaptive":
        raise ValueError("this version sums over uniform grids only")
    return value


Number = Annotated[float, BeforeValidator(_number)]
WholeNumber = Annotated[int, BeforeValidator(_whole)]
Vector = Annotated[Triple, BeforeValidator(_triple)]
Cell = str | tuple[tuple[int, int], tuple[int, int]]


class Section(BaseModel):
    """Common rules: values never change, unknown keys are errors."""

    model_config = ConfigDict(frozen=True, extra="forbid")


class SpinLayer(Section):
    """Exchange couplings M of H = sum S.M.S and g-factor of the magnetic layer."""

    lattice_constant_angstrom: Number = Field(gt=0, description="the lattice constant in angstrom, above 0")
    kitaev_meV: Annotated[Triple, BeforeValidator(_bonds)] = Field(
        description="the Kitaev coupling in meV (negative: ferromagnetic), one number or three for the x, y, z bonds"
    )
    heisenberg_meV: Number = Field(0.0, description="the nearest-neighbour Heisenberg coupling in meV, any number")
    gamma_meV: Number = Field(0.0, description="the off-diagonal coupling Gamma in meV, any number")
    gamma_prime_meV: Number = Field(0.0, description="the off-diagonal coupling Gamma' in meV, any number")
    heisenberg_2_meV: Number = Field(0.0, description="the second-neighbour Heisenberg coupling in meV, any number")
    heisenberg_3_meV: Number = Field(0.0, description="the third-neighbour Heisenberg coupling in meV, any number")
    kitaev_2_meV: Number = Field(0.0, description="the second-neighbour Kitaev coupling in meV, any number")
    g_factor: Annotated[float | tuple[float, ...], BeforeValidator(_anisotropic)] = Field(
        2.0, description="one number, three along the spin axes, or two (in plane, out of plane)"
    )

    @property
    def g_tensor(self) -> Matrix:
        """g-tensor, shape (3, 3), dimensionless, in the cubic spin axes; the layer normal is [111]."""
        if isinstance(self.g_factor, float):
            return self.g_factor * np.eye(3)
        if len(self.g_factor) == 3:
            return np.diag(self.g_factor)
        in_plane, out_of_plane = self.g_factor
        normal = np.full((3, 3), 1 / 3)
        return in_plane * (np.eye(3) - normal) + out_of_plane * normal


class ConductionLayer(Section):
    """Bands, doping and g-factor of the conduction layer."""

    lattice_constant_angstrom: Number = Field(gt=0, description="the lattice constant in angstrom, above 0")
    hopping_meV: Number = Field(gt=0, description="the nearest-neighbour hopping t in meV, above 0")
    next_hopping_meV: Number = Field(0.0, description="the second-neighbour hopping in meV, any number")
    sublattice_offset_meV: Number = Field(0.0, description="the energy offset of the sublattices in meV, any number")
    kane_mele_meV: Number = Field(0.0, description="the intrinsic spin-orbit coupling in meV, any number")
    rashba_meV: Number = Field(0.0, description="the Rashba spin-orbit coupling in meV, any number")
    g_factor: Number = Field(2.0, description="one number; only the spin layer may be anisotropic")
    twist_degree: Number = Field(0.0, description="the twist between the layers in degree, any number")
    filling: Number | None = Field(
        None, gt=0, lt=2, description="electrons per conduction site, strictly between 0 and 2 (1: charge neutrality)"
    )
    charge_transfer_meV: Number | None = Field(
        None, description="the energy of the Dirac point above the Fermi level in meV (positive: hole doping)"
    )
    density_per_cm2: Number | None = Field(
        None, description="the carrier density in 1/cm^2 (positive: electrons, negative: holes)"
    )
    match: Literal["velocity", "hopping"] = Field(
        "velocity", description='"velocity" (keep the Dirac velocity on the spin lattice) or "hopping" (keep t)'
    )

    @model_validator(mode="after")
    def _one_doping_key(self) -> Self:
        _exactly_one(self, DOPING_KEYS)
        return self

    @property
    def g_tensor(self) -> Matrix:
        """g-tensor, shape (3, 3), dimensionless, in the cubic spin axes."""
        return self.g_factor * np.eye(3)


class Kondo(Section):
    """Exchange sum_a J_a S_a s_a between a spin and the conduction electrons of its site, J_a = J_K anisotropy_a.

    The neighbour coupling J_1 adds the same with the electrons of each of the three neighbouring sites.
    """

    coupling_meV: Number = Field(description="the Kondo coupling J_K in meV (positive: antiferromagnetic)")
    anisotropy: Vector = Field(
        (1.0, 1.0, 1.0), description="three numbers that multiply J_K and J_1 along the spin axes"
    )
    neighbour_coupling_meV: Number = Field(
        0.0, description="the Kondo coupling J_1 to the electrons of each first-neighbour site in meV, any number"
    )


class MagneticField(Section):
    """External field."""

    tesla: Vector = Field(
        (0.0, 0.0, 0.0), description="three numbers, the field in tesla along the spin axes ([1, 1, 1]: perpendicular)"
    )


class MeanField(Section):
    """Spin representation, temperature and magnetic cell of the mean-field theory."""

    exchange_form: Literal["kitaev", "so4"] = Field("kitaev", description='"kitaev" or "so4"')
    kondo_form: Literal["so4", "kitaev"] = Field("so4", description='"so4" or "kitaev"')
    magnetic_channel: StrictBool = Field(True, description="true or false")
    temperature_K: Number | None = Field(None, gt=0, description="the temperature in kelvin, above 0")
    temperature_meV: Number | None = Field(None, gt=0, description="the temperature k_B T in meV, above 0")
    cell: Annotated[Cell, BeforeValidator(_cell)] = Field(
        "1x1", description='"1x1", "1x2", "sqrt3" or [[a, b], [c, d]], whole numbers with a d - b c > 0'
    )

    @model_validator(mode="after")
    def _one_temperature_key(self) -> Self:
        _exactly_one(self, TEMPERATURE_KEYS)
        return self


class Zone(Section):
    """Grid of the zone sums."""

    method: Annotated[Literal["uniform"], BeforeValidator(_method)] = Field("uniform", description='"uniform"')
    tolerance_meV: Number = Field(1e-3, gt=0, description="the error of F per cell in meV, above 0")
    points: Annotated[WholeNumber, AfterValidator(_even)] = Field(
        24, description="the grid points per direction, an even whole number (the gauge copies need half a period)"
    )
    offset: Literal["c3", "midpoint"] = Field(
        "c3", description='"c3" (offset 1/3, 2/3; keeps threefold symmetry) or "midpoint" (1/2, 1/2; breaks it)'
    )


class Search(Section):
    """Which states are searched, from how many starting points."""

    phase: Literal["any", "decoupled", "paramagnetic", "heavy-fermi-liquid", "magnetic"] = Field(
        "any", description='"any", "decoupled", "paramagnetic", "heavy-fermi-liquid" or "magnetic"'
    )
    starts: WholeNumber = Field(8, ge=1, description="the number of starting points, a whole number of at least 1")
    seed: WholeNumber = Field(1, ge=0, description="the seed of random starts, a whole number of at least 0")


class Material(Section):
    """A heterostructure of a conduction layer on a Kitaev magnet, and how its mean-field theory is to be solved."""

    name: StrictStr = Field(min_length=1, description="a name in quotes")
    spin_layer: SpinLayer
    conduction_layer: ConductionLayer
    kondo: Kondo
    magnetic_field: MagneticField = MagneticField()
    mean_field: MeanField
    zone: Zone = Zone()
    search: Search = Search()

    @model_validator(mode="after")
    def _consistent(self) -> Self:
        forms = (self.mean_field.exchange_form, self.mean_field.kondo_form)
        if self.search.phase in NEEDS_SO4 and forms != ("so4", "so4"):
            raise ValueError(NEEDS_SO4[self.search.phase])
        if self.search.phase == "paramagnetic" and any(self.magnetic_field.tesla):
            raise ValueError(
                'search.phase = "paramagnetic" keeps time reversal, which magnetic_field.tesla breaks; set the field '
                "to zero, or search another phase"
            )
        if not 0 < self.model_filling < 2:
            raise ValueError(
                f"conduction_layer.density_per_cm2 gives a filling of {self.model_filling:g} electrons per site on the "
                f"spin lattice; give an absolute value below {2 / self.spin_cell_area_cm2:.3g}"
            )
        return self

    @property
    def spin_cell_area_cm2(self) -> float:
        """Area of the primitive cell of the spin lattice in cm^2."""
        return float(np.sqrt(3) / 2 * (self.spin_layer.lattice_constant_angstrom * 1e-8) ** 2)

    @property
    def model_hopping_meV(self) -> float:
        """Nearest-neighbour hopping on the spin lattice: t a_c/a_s keeps the Dirac velocity, or t itself (`match`)."""
        layer = self.conduction_layer
        if layer.match == "hopping":
            return layer.hopping_meV
        return layer.hopping_meV * layer.lattice_constant_angstrom / self.spin_layer.lattice_constant_angstrom

    @property
    def model_filling(self) -> float:
        """Electrons per conduction site of the model lattice.

        A density keeps its value per area, two sites per cell; a charge transfer is turned into a filling with the
        nearest-neighbour band of `model_hopping_meV` at T = 0 (`honeycomb.filling_of_dirac_energy`).
        """
        layer = self.conduction_layer
        if layer.filling is not None:
            return layer.filling
        if layer.density_per_cm2 is not None:
            return 1 + layer.density_per_cm2 * self.spin_cell_area_cm2 / 2
        assert layer.charge_transfer_meV is not None
        return honeycomb.filling_of_dirac_energy(layer.charge_transfer_meV, self.model_hopping_meV)

    @property
    def temperature_meV(self) -> float:
        """Temperature k_B T in meV."""
        if self.mean_field.temperature_meV is not None:
            return self.mean_field.temperature_meV
        assert self.mean_field.temperature_K is not None
        return self.mean_field.temperature_K * BOLTZMANN

    @property
    def cell_matrix(self) -> NDArray[np.int64]:
        """Magnetic cell, shape (2, 2): rows are the cell vectors in units of (a1, a2); determinant > 0."""
        cell = self.mean_field.cell
        return np.array(NAMED_CELLS[cell] if isinstance(cell, str) else cell, dtype=np.int64)

    def to_dict(self) -> dict[str, Any]:
        """The keys the user wrote as nested dict of plain numbers, strings and lists, ready for TOML or JSON.

        `material_from_dict` gives back an equal material.
        """
        return self.model_dump(mode="json", exclude_unset=True)


def _exactly_one(section: Section, keys: tuple[str, ...]) -> None:
    given = [key for key in keys if getattr(section, key) is not None]
    if not given:
        raise ValueError(f"needs one of {', '.join(keys)}")
    if len(given) > 1:
        raise ValueError(f"{' and '.join(given)} exclude each other; keep one of them")
