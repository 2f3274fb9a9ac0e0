"""The product: everything the record knows, labelled, the same for the same record, replaced whole or not at all."""

import json
from dataclasses import replace

import h5py
import numpy as np
import pytest

from kondomf.sweep.folder import PRODUCT, RECORD, Header, prepare_folder
from kondomf.sweep.product import ProductBuild, build_product, compare_products, rebuild_product
from kondomf.sweep.record import FAILED, Execution, Launch, PointKey, PointRecord, PointResult
from kondomf.sweep.store import MemoryStore, SqliteStore

INPUTS = {
    "point": "module:function",
    "phases": ["any", "magnetic"],
    "axis_order": ["kondo.coupling_meV", "conduction_layer.filling"],
    "axes": {"conduction_layer.filling": [0.7, 0.8, 0.9], "kondo.coupling_meV": [100.0, 200.0]},
    "material": {"name": "invented"},
}
HEADER = Header(INPUTS, "print", {"numpy": "2.0"})
LAUNCH = Launch(0.0, "here", 1, "serial", 1, {})


def record(index, phase="any", status="minimum", scalars=None, arrays=None, wall_seconds=1.0):
    fields = np.arange(4.0).reshape(2, 2) + 10 * index[0] + index[1]
    scalars = {"gap_meV": float(sum(index)), "phase": f"label {index}"} if scalars is None else scalars
    arrays = {"fields_meV": fields} if arrays is None else arrays
    result = PointResult(status, scalars, arrays, "broken" if status == FAILED else "")
    return PointRecord(PointKey(phase, index), {}, 5, result, Execution(1, 1, wall_seconds, "here", 1.0))


RECORDS = [
    record((0, 0)),
    record((1, 2), status="saddle"),
    record((0, 1), status=FAILED, scalars={}, arrays={}),
    record((1, 1), scalars={"gap_meV": None, "phase": None}),
]


def product(path, records=RECORDS, header=HEADER):
    store = MemoryStore()
    store.begin_launch(LAUNCH)
    for each in records:
        store.put(each)
    build_product(store, header, path)
    return path


def test_points_stand_where_their_axes_say_and_gaps_are_masked(tmp_path):
    with h5py.File(product(tmp_path / "a.h5")) as file:
        group = file["any"]
        nan = np.nan
        np.testing.assert_array_equal(group["committed"], [[True, True, False], [False, True, True]])
        assert group["status"].asstr()[:].tolist() == [["minimum", FAILED, ""], ["", "minimum", "saddle"]]
        assert group["message"].asstr()[0, 1] == "broken"
        np.testing.assert_array_equal(group["seed"], [[5, 5, -1], [-1, 5, 5]])
        np.testing.assert_array_equal(group["quantities/gap_meV"], [[0, nan, nan], [nan, nan, 3]])
        assert group["quantities/phase"].asstr()[:].tolist() == [["label (0, 0)", "", ""], ["", "", "label (1, 2)"]]
        assert group["arrays/fields_meV"].shape == (2, 3, 2, 2)
        np.testing.assert_array_equal(group["arrays/fields_meV"][1, 2], [[12, 13], [14, 15]])
        assert np.isnan(group["arrays/fields_meV"][0, 1]).all()
        assert not file["magnetic/committed"][:].any()


def test_dimensions_carry_the_axis_keys_and_everything_its_unit(tmp_path):
    with h5py.File(product(tmp_path / "a.h5")) as file:
        for name in ("any/quantities/gap_meV", "any/arrays/fields_meV", "any/status"):
            dims = file[name].dims
            assert [dims[i].label for i in (0, 1)] == INPUTS["axis_order"]
            np.testing.assert_array_equal(dims[0]["kondo.coupling_meV"], [100, 200])
            np.testing.assert_array_equal(dims[1]["conduction_layer.filling"], [0.7, 0.8, 0.9])
        assert file["any/arrays/fields_meV"].dims[3].label == "fields_meV index 1"
        assert file["any/quantities/gap_meV"].attrs["units"] == "meV"
        assert file["axes/kondo.coupling_meV"].attrs["units"] == "meV"
        assert file["axes/conduction_layer.filling"].attrs["units"] == "1"


def test_the_product_tells_its_inputs_however_long_they_are(tmp_path):
    long = {**INPUTS, "axes": {**INPUTS["axes"], "kondo.coupling_meV": [i / 7 for i in range(9000)]}}
    with h5py.File(product(tmp_path / "a.h5", header=replace(HEADER, inputs=long))) as file:
        assert json.loads(file["inputs"][()]) == long
        assert json.loads(file["versions"][()]) == HEADER.versions
        assert (file.attrs["schema"], file.attrs["fingerprint"]) == (1, "print")


def test_arrays_of_unlike_shape_or_with_gaps_that_no_number_marks_are_kept_point_by_point(tmp_path):
    whole, ragged, counts = np.arange(3), [np.ones(2), np.ones(3)], np.array([1, 2])
    everywhere = [(i, j) for i in range(2) for j in range(3)]
    records = [record(i, arrays={"whole": whole, "ragged": ragged[i[0]]}) for i in everywhere]
    records.append(record((0, 2), phase="magnetic", arrays={"counts": counts}))
    with h5py.File(product(tmp_path / "a.h5", records)) as file:
        assert file["any/arrays/whole"].shape == (2, 3, 3)
        assert file["any/arrays/whole"].dtype == whole.dtype
        np.testing.assert_array_equal(file["any/arrays/ragged/1,2"], ragged[1])
        assert list(file["magnetic/arrays/counts"]) == ["0,2"]


def test_the_product_depends_neither_on_the_order_of_points_nor_on_who_ran_them_when(tmp_path):
    a = product(tmp_path / "a.h5")
    b = product(tmp_path / "b.h5", [replace(r, execution=Execution(1, 3, 9.0, "there", 8.0)) for r in RECORDS[::-1]])
    assert compare_products(a, b) == []


CHANGES = {
    "any/quantities/gap_meV": record((0, 0), scalars={"gap_meV": 1e-300, "phase": "label (0, 0)"}),
    "any/quantities/phase": record((0, 0), scalars={"gap_meV": 0.0, "phase": "other"}),
    "any/status": record((0, 0), status="saddle"),
    "any/arrays/fields_meV": record((0, 0), arrays={"fields_meV": -np.arange(4.0).reshape(2, 2)}),
    "any/committed": record((0, 2)),
    "any/seed": replace(record((0, 0)), seed=6),
    "any/arrays/more: only in the second": record((0, 0), arrays={"fields_meV": np.zeros((2, 2)), "more": np.ones(1)}),
}


@pytest.mark.parametrize("name", CHANGES)
def test_a_difference_in_a_single_point_is_found_and_named(tmp_path, name):
    a, b = product(tmp_path / "a.h5"), product(tmp_path / "b.h5", [CHANGES[name], *RECORDS[1:]])
    assert any(line.startswith(name) for line in compare_products(a, b))
    assert compare_products(a, a) == []


def test_other_inputs_are_a_difference(tmp_path):
    a = product(tmp_path / "a.h5")
    b = product(tmp_path / "b.h5", header=replace(HEADER, fingerprint="other"))
    assert compare_products(a, b) == ["attribute fingerprint: 1 of 1 values differ"]


@pytest.fixture
def run_folder(tmp_path):
    folder = tmp_path / "run"
    header = prepare_folder(folder, INPUTS)
    with SqliteStore(folder / RECORD, header.fingerprint) as store:
        store.begin_launch(LAUNCH)
        for each in RECORDS:
            store.put(each)
    return folder, header


def test_a_child_process_builds_the_product_of_the_record_and_leaves_nothing_else(run_folder):
    folder, header = run_folder
    (folder / ".run-left-by-a-killed-build.h5").write_bytes(b"half")
    before = {path.name for path in folder.iterdir() if not path.name.startswith(".")}
    assert ProductBuild(folder).finish() is None
    shared = {f"{RECORD}-wal", f"{RECORD}-shm"}  # SQLite's, left by a reader until the next writer closes
    assert {path.name for path in folder.iterdir()} - shared == before | {PRODUCT}
    assert compare_products(folder / PRODUCT, product(folder / "twin.h5", header=header)) == []


def test_a_failed_build_says_why_and_leaves_the_old_product(run_folder):
    folder, _ = run_folder
    rebuild_product(folder)
    before = (folder / PRODUCT).read_bytes()
    (folder / RECORD).write_bytes(b"not a record")
    problem = ProductBuild(folder).finish()
    assert "not rebuilt" in problem
    assert "points.sqlite" in problem
    assert (folder / PRODUCT).read_bytes() == before


def test_a_product_that_misses_points_is_not_accepted(tmp_path):
    class Growing(MemoryStore):
        looks = 0

        def records(self, phase):
            self.looks += 1
            return RECORDS[: self.looks]

    with pytest.raises(OSError, match="points of phase"):
        build_product(Growing(), HEADER, tmp_path / "a.h5")
