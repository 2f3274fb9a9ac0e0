"""The product of a run: one HDF5 file with stacked, labelled arrays, rebuilt as a whole from the live record.

    /axes/<key>                       values of an axis, dimension scale, attribute "units"
    /<phase>/status, message, seed    shape of the axes; "" and -1 where a point is missing
    /<phase>/committed                true where a point is recorded, also if it failed
    /<phase>/quantities/<name>        shape of the axes; numbers (NaN where missing) or texts ("" where missing)
    /<phase>/arrays/<name>            axes + shape of the array, NaN where missing; a group with one dataset a point,
                                      named by its index, where shapes differ or gaps could not be told from numbers
    /execution/<phase>/...            launch, attempt, wall_seconds, host, committed: left aside by comparisons

    /inputs, /versions                JSON texts: what every point derives from; what the run was started with

Attributes of the file: schema, fingerprint.
"""

import json
import os
import subprocess
import sys
from collections.abc import Callable, Iterable
from dataclasses import fields
from operator import attrgetter
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from kondomf.errors import InputError
from kondomf.files import write_atomically
from kondomf.sweep.folder import PRODUCT, RECORD, Header, read_header
from kondomf.sweep.record import Execution, PointRecord, unit_of
from kondomf.sweep.store import SCHEMA_VERSION, SqliteStore, Store

if TYPE_CHECKING:
    import h5py

_EXECUTION = "execution"


def build_product(store: Store, header: Header, path: Path) -> None:
    """Write the product of a record to `path` (replaced if it exists) and read it back before anything counts on it."""
    import h5py

    axes = [np.array(header.inputs["axes"][key], float) for key in header.inputs["axis_order"]]
    with h5py.File(path, "w") as file:
        file.attrs.update(schema=SCHEMA_VERSION, fingerprint=header.fingerprint)
        for name, value in (("inputs", header.inputs), ("versions", header.versions)):
            file[name] = json.dumps(value)  # no attribute: those end at 64 kB
        scales = []
        for key, values in zip(header.inputs["axis_order"], axes, strict=True):
            scale = file.create_dataset(f"axes/{key}", data=values)
            scale.make_scale(key)
            scale.attrs["units"] = unit_of(key)
            scales.append(scale)
        for phase in header.inputs["phases"]:
            _write_phase(file, phase, store, scales)
    _verify(path, {phase: len(store.records(phase)) for phase in header.inputs["phases"]})


def rebuild_product(folder: Path) -> None:
    """Build the product of a run folder from its record; readers see the old file or the complete new one."""
    header = read_header(folder)
    for leftover in folder.glob(f".{Path(PRODUCT).stem}-*"):  # of a build that was killed
        leftover.unlink(missing_ok=True)
    with SqliteStore(folder / RECORD, header.fingerprint, readonly=True) as store:
        write_atomically(folder / PRODUCT, lambda path: build_product(store, header, path), overwrite=True)


class ProductBuild:
    """Rebuilds in a process of its own: a full disk can crash the HDF5 library, and the driver must outlive that."""

    def __init__(self, folder: Path) -> None:
        self._folder = folder
        self._process: subprocess.Popen[str] | None = None

    def renew(self) -> None:
        """Start a rebuild, unless one is under way."""
        if self._process is not None and self._process.poll() is None:
            return
        self.abandon()
        path = os.pathsep.join(entry or os.getcwd() for entry in sys.path)
        self._process = subprocess.Popen(
            [sys.executable, "-P", "-c", f"from {__name__} import main; main()", str(self._folder)],
            env={**os.environ, "PYTHONPATH": path},
            stdout=subprocess.DEVNULL,
            stderr=subprocess.PIPE,
            text=True,
            start_new_session=True,  # a Ctrl-C in the terminal is for the driver
        )

    def finish(self) -> str | None:
        """Rebuild with all that is committed now, and wait; returns what went wrong, None if nothing did."""
        self.abandon()
        self.renew()
        assert self._process is not None
        _, errors = self._process.communicate()
        code, self._process = self._process.returncode, None
        if code == 0:
            return None
        reason = errors.strip().splitlines()[-1] if errors.strip() else f"exit code {code}"
        return (
            f"the product was not rebuilt ({reason}); the record is complete, start the same sweep again to rebuild it"
        )

    def abandon(self) -> None:
        """End a rebuild at once; the old product stays."""
        if self._process is not None:
            self._process.kill()
            self._process.communicate()
            self._process = None


def compare_products(a: Path, b: Path) -> list[str]:
    """Differences of two products, bit by bit, one line each; how points were executed is left aside."""
    import h5py

    with h5py.File(a, "r") as left, h5py.File(b, "r") as right:
        contents = [_content(left), _content(right)]
    names = sorted(contents[0].keys() | contents[1].keys())
    lines = (_difference(name, contents[0].get(name), contents[1].get(name)) for name in names)
    return [line for line in lines if line]


def stack(values: Iterable[tuple[tuple[int, ...], Any]], shape: tuple[int, ...]) -> NDArray[Any]:
    """(index, value) pairs as one array: float, NaN where missing or None; texts, "" there, if any value is a text."""
    values = list(values)
    texts = any(isinstance(value, str) for _, value in values)
    missing = "" if texts else np.nan
    array = np.full(shape, missing, dtype=object if texts else float)
    for index, value in values:
        array[index] = missing if value is None else str(value) if texts else value
    return array


def _write_phase(file: "h5py.File", phase: str, store: Store, scales: "list[h5py.Dataset]") -> None:
    records, shape = store.records(phase), tuple(len(scale) for scale in scales)

    def write(name: str, pick: Callable[[PointRecord], Any], missing: Any) -> None:
        values = np.full(shape, missing, dtype=object if missing == "" else None)
        for record in records:
            values[record.key.index] = pick(record)
        _dataset(file, name, values, scales)

    write(f"{phase}/committed", lambda record: True, False)
    write(f"{phase}/status", attrgetter("result.status"), "")
    write(f"{phase}/message", attrgetter("result.message"), "")
    write(f"{phase}/seed", attrgetter("seed"), -1)
    for field in fields(Execution):
        missing = "" if field.name == "host" else np.nan
        write(f"{_EXECUTION}/{phase}/{field.name}", attrgetter(f"execution.{field.name}"), missing)
    for name in sorted({name for record in records for name in record.result.scalars}):
        values = [(record.key.index, record.result.scalars.get(name)) for record in records]
        _dataset(file, f"{phase}/quantities/{name}", stack(values, shape), scales)
    for name in store.array_names(phase):
        _write_array(file, f"{phase}/arrays/{name}", store, phase, name, scales)


def _dataset(file: "h5py.File", path: str, values: NDArray[Any], scales: "list[h5py.Dataset]") -> None:
    import h5py

    dtype = h5py.string_dtype() if values.dtype == object else values.dtype
    _label(file.create_dataset(path, data=values, dtype=dtype), scales)


def _label(dataset: "h5py.Dataset", scales: "list[h5py.Dataset]") -> None:
    """Name the dimensions of a dataset by the axes it is swept along, and note its unit."""
    for dimension, scale in enumerate(scales):
        dataset.dims[dimension].label = scale.name.rpartition("/")[2]
        dataset.dims[dimension].attach_scale(scale)
    name = dataset.name.rpartition("/")[2]
    for dimension in range(len(scales), dataset.ndim):
        dataset.dims[dimension].label = f"{name} index {dimension - len(scales)}"
    if dataset.dtype.kind != "O":
        dataset.attrs["units"] = unit_of(name)


def _write_array(
    file: "h5py.File", path: str, store: Store, phase: str, name: str, scales: "list[h5py.Dataset]"
) -> None:
    shape = tuple(len(scale) for scale in scales)
    kinds = [(array.shape, array.dtype) for _, array in store.array(phase, name)]
    own_shape, dtype = kinds[0]
    complete = len(kinds) == np.prod(shape)
    if len(set(kinds)) == 1 and (complete or dtype.kind in "fc"):
        missing = dtype.type(np.nan) if dtype.kind in "fc" else None
        dataset = file.create_dataset(path, shape=shape + own_shape, dtype=dtype, fillvalue=missing)
        for index, array in store.array(phase, name):
            dataset[index] = array
        _label(dataset, scales)
        return
    for index, array in store.array(phase, name):
        point = file.create_dataset(f"{path}/{','.join(map(str, index))}", data=array)
        point.attrs["units"] = unit_of(name)


def _verify(path: Path, expected: dict[str, int]) -> None:
    """Read a product back as a whole. Raises OSError if it does not hold the expected number of points."""
    import h5py

    with h5py.File(path, "r") as file:
        _content(file)
        for phase, points in expected.items():
            found = int(np.sum(file[f"{phase}/committed"]))
            if found != points:
                raise OSError(f"the product holds {found} of {points} points of phase {phase}")


def _content(file: "h5py.File") -> dict[str, Any]:
    """Attributes and datasets by path, without what tells how points were executed."""
    import h5py

    content: dict[str, Any] = {f"attribute {key}": value for key, value in file.attrs.items()}

    def visit(name: str, item: Any) -> None:
        if isinstance(item, h5py.Dataset) and not name.startswith(f"{_EXECUTION}/"):
            content[name] = item[()]
            content[f"{name} units"] = item.attrs.get("units")

    file.visititems(visit)
    return content


def _difference(name: str, a: Any, b: Any) -> str | None:
    if a is None or b is None:
        return None if a is b else f"{name}: only in the {'second' if a is None else 'first'}"
    a, b = np.asarray(a), np.asarray(b)
    if a.shape != b.shape or a.dtype != b.dtype:
        return f"{name}: {a.dtype} {a.shape} against {b.dtype} {b.shape}"
    same = np.array_equal(a, b) if a.dtype == object else a.tobytes() == b.tobytes()
    if same:
        return None
    if a.dtype.kind not in "fc":
        return f"{name}: {np.count_nonzero(a != b)} of {a.size} values differ"
    unlike = (a != b) & ~(np.isnan(a) & np.isnan(b))
    return (
        f"{name}: {np.count_nonzero(unlike)} of {a.size} values differ, by up to {np.nanmax(abs(a - b), initial=0):.3g}"
    )


def main() -> None:
    """Rebuild the product of the folder named on the command line; what `ProductBuild` runs."""
    try:
        rebuild_product(Path(sys.argv[1]))
    except (InputError, OSError) as error:
        sys.exit(str(error))
