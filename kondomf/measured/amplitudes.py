"""Table of measured oscillation amplitudes: CSV with a header line, # for comments."""

from collections.abc import Callable, Mapping
from dataclasses import dataclass
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from kondomf.errors import InputError

Array = NDArray[np.float64]

REQUIRED = ("field_T", "temperature_K", "amplitude")
ERROR = "amplitude_error"
FEWEST_ROWS = 4

_LEGAL: dict[str, tuple[Callable[[float], bool], str]] = {
    "field_T": (lambda x: x > 0, "give the field in tesla, above zero"),
    "temperature_K": (lambda x: x > 0, "give the temperature in kelvin, above zero"),
    "amplitude": (lambda x: x >= 0, "give the modulus of the oscillation, zero or above"),
    ERROR: (lambda x: x > 0, "give the standard error, above zero, or leave the column out"),
}


@dataclass(frozen=True, kw_only=True)
class AmplitudeData:
    """Amplitudes of one harmonic; all arrays (N,), one entry per measured point.

    field_T, temperature_K: tesla and kelvin, above zero; amplitude: zero or above, in any unit; amplitude_error: its
    standard error in the same unit, above zero, None if unknown; source: where the numbers come from; ignored: names of
    further columns that were not read.

    Raises InputError: arrays of unequal length, fewer than 4 points, a value out of range or not finite.
    """

    field_T: Array
    temperature_K: Array
    amplitude: Array
    amplitude_error: Array | None = None
    source: str = "given by hand"
    ignored: tuple[str, ...] = ()

    def __post_init__(self) -> None:
        columns = {name: np.asarray(getattr(self, name), dtype=float) for name in REQUIRED}
        if self.amplitude_error is not None:
            columns[ERROR] = np.asarray(self.amplitude_error, dtype=float)
        shapes = {array.shape for array in columns.values()}
        if len(shapes) > 1 or columns["amplitude"].ndim != 1:
            raise InputError(
                f"{self.source}: columns of shapes {sorted(shapes)}; give one list of equal length for each"
            )
        count = columns["amplitude"].size
        if count < FEWEST_ROWS:
            raise InputError(f"{self.source}: {count} rows of data; give at least {FEWEST_ROWS}")
        for row, values in enumerate(zip(*columns.values(), strict=True), start=1):
            _check(f"{self.source}, row {row}", dict(zip(columns, values, strict=True)))
        for name, array in columns.items():
            object.__setattr__(self, name, array)

    @property
    def fields_T(self) -> Array:
        """The distinct fields, ascending, shape (N_B,)."""
        return np.unique(self.field_T)

    @property
    def field_index(self) -> NDArray[np.intp]:
        """Index of each point's field in `fields_T`, shape (N,)."""
        return np.searchsorted(self.fields_T, self.field_T)


def read_amplitudes(path: Path) -> AmplitudeData:
    """Read a CSV file (UTF-8) with the columns field_T, temperature_K, amplitude and, if known, amplitude_error.

    The first line that is neither blank nor a # comment names the columns; their order is free, others are ignored.
    Raises InputError with file, line and value: unreadable file, missing or repeated column, a cell that is no number
    or out of range, too few or too many cells, fewer than 4 rows.
    """
    lines = [
        (number, [cell.strip().strip('"') for cell in line.split(",")])
        for number, line in enumerate(_text(path).splitlines(), start=1)
        if line.strip() and not line.lstrip().startswith("#")
    ]
    if not lines:
        raise InputError(f"{path} holds no data; start it with the line {','.join(REQUIRED)}")
    header = lines[0][1]
    _check_header(f"{path}, line {lines[0][0]}", header)
    names = [name for name in (*REQUIRED, ERROR) if name in header]
    rows = [_row(f"{path}, line {number}", header, cells, names) for number, cells in lines[1:]]
    return AmplitudeData(
        **{name: np.array([row[name] for row in rows]) for name in names},
        source=str(path),
        ignored=tuple(name for name in header if name not in names),
    )


def _text(path: Path) -> str:
    try:
        return path.read_text(encoding="utf-8-sig")
    except FileNotFoundError:
        raise InputError(f"{path} does not exist; give a CSV file with the columns {', '.join(REQUIRED)}") from None
    except UnicodeDecodeError as error:
        raise InputError(f"{path} is not UTF-8 text (byte {error.start}); save the table as CSV in UTF-8") from None
    except OSError as error:
        raise InputError(f"cannot read {path}: {error.strerror}; give a CSV file that you may read") from None


def _check_header(place: str, header: list[str]) -> None:
    missing = [name for name in REQUIRED if name not in header]
    if missing:
        found = ", ".join(header)
        raise InputError(
            f"{place}: no column {' and no column '.join(missing)} among {found}; the first line names the columns, "
            f"separated by commas: {','.join(REQUIRED)}, and {ERROR} if known"
        )
    repeated = [name for name in (*REQUIRED, ERROR) if header.count(name) > 1]
    if repeated:
        raise InputError(f"{place}: column {repeated[0]} appears {header.count(repeated[0])} times; keep one")


def _row(place: str, header: list[str], cells: list[str], names: list[str]) -> dict[str, float]:
    if len(cells) != len(header):
        raise InputError(
            f"{place}: {len(cells)} cells for {len(header)} columns; "
            "separate cells by commas and write decimals with a point"
        )
    row: dict[str, float] = {}
    for name in names:
        cell = cells[header.index(name)]
        try:
            row[name] = float(cell)
        except ValueError:
            raise InputError(f"{place}: {name} = {cell!r} is no number; {_LEGAL[name][1]}") from None
    _check(place, row)
    return row


def _check(place: str, row: Mapping[str, float]) -> None:
    for name, value in row.items():
        legal, remedy = _LEGAL[name]
        if not (np.isfinite(value) and legal(value)):
            raise InputError(f"{place}: {name} = {value:g}; {remedy}")
