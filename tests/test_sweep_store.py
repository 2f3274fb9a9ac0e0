"""The live record: what it gives back is what the twin in memory gives back, and what is not a record is refused."""

import sqlite3
from dataclasses import replace

import numpy as np
import pytest

from kondomf.errors import InputError
from kondomf.sweep import store as store_module
from kondomf.sweep.record import FAILED, Execution, Launch, PointKey, PointRecord, PointResult, unit_of
from kondomf.sweep.store import MemoryStore, SqliteStore, create_store

LAUNCH = Launch(1000.0, "here", 1, "serial", 1, {"numpy": "2.0"})
ARRAYS = {
    "awkward": np.array([np.nan, -np.nan, np.inf, -0.0, 5e-324]),
    "complex": np.array([[1 + 2j, complex(np.nan, -0.0)]]),
    "fortran": np.asfortranarray(np.arange(6.0).reshape(2, 3)),
    "big endian": np.arange(3, dtype=">f4"),
    "scalar": np.array(3),
    "empty": np.zeros((0, 4), bool),
}
SCALARS = {"gap_meV": 0.1 + 0.2, "evaluations": 2**60, "phase": "FL* \N{GREEK SMALL LETTER CHI}", "nothing": None}


def record(index, phase="any", status="minimum", launch=1, committed=1010.0, arrays=ARRAYS):
    execution = Execution(launch, 1, 0.25, "here", committed)
    result = PointResult(status, SCALARS, arrays, "why" if status == FAILED else "")
    return PointRecord(PointKey(phase, index), {"kondo": {"coupling_meV": 0.1}}, 7, result, execution)


@pytest.fixture
def path(tmp_path):
    path = tmp_path / "points.sqlite"
    create_store(path, "print")
    return path


@pytest.fixture
def stores(path):
    """The record on disk and its oracle, filled alike."""
    with SqliteStore(path, "print") as stored:
        twins = (stored, MemoryStore())
        for store in twins:
            assert store.begin_launch(LAUNCH) == 1
            assert store.begin_launch(replace(LAUNCH, started=2000.0)) == 2
            store.put(record((10, 0)))
            store.put(record((2, 0), launch=2, committed=2002.0))
            store.put(record((2, 1), status=FAILED, arrays={}))
            store.put(record((2, 0), phase="magnetic", launch=2, committed=2001.0, arrays={"other": np.ones(2)}))
        yield twins


def same(a, b):
    return a.dtype == b.dtype and a.shape == b.shape and a.tobytes() == b.tobytes()


def test_arrays_come_back_bit_for_bit(stores):
    for store in stores:
        arrays = store.arrays(PointKey("any", (10, 0)))
        assert arrays.keys() == ARRAYS.keys()
        assert all(same(arrays[name], ARRAYS[name]) for name in ARRAYS)


def test_the_stored_record_agrees_with_its_twin_in_memory(stores):
    stored, twin = stores
    assert stored.statuses() == twin.statuses()
    for phase in ("any", "magnetic", "paramagnetic"):
        assert stored.records(phase) == twin.records(phase)
        assert stored.array_names(phase) == twin.array_names(phase)
        for name in twin.array_names(phase):
            mine, other = list(stored.array(phase, name)), list(twin.array(phase, name))
            assert [index for index, _ in mine] == [index for index, _ in other]
            assert all(same(a, b) for (_, a), (_, b) in zip(mine, other, strict=True))
    assert stored.arrays(PointKey("any", (9, 9))) == twin.arrays(PointKey("any", (9, 9))) == {}


def test_records_are_sorted_by_index_and_keep_scalars_and_failures(stores):
    for store in stores:
        records = store.records("any")
        assert [r.key.index for r in records] == [(2, 0), (2, 1), (10, 0)]
        assert all(r.result.scalars == SCALARS for r in records)
        assert (records[1].result.status, records[1].result.message) == (FAILED, "why")


def test_the_pace_counts_every_launch_from_its_start_to_its_last_commit(stores):
    for store in stores:
        points, seconds = store.pace()
        assert (points, seconds) == (4, (1010.0 - 1000.0) + (2002.0 - 2000.0))


def test_a_point_is_recorded_once(stores):
    for store in stores:
        with pytest.raises(ValueError, match="already recorded"):
            store.put(record((10, 0), status="saddle"))
        assert store.statuses()[PointKey("any", (10, 0))] == "minimum"


def test_a_point_that_cannot_be_stored_as_a_whole_leaves_nothing(stores, path):
    stored, _ = stores
    connection = sqlite3.connect(path)
    connection.execute(
        "CREATE TRIGGER full BEFORE INSERT ON arrays WHEN NEW.name = 'scalar' BEGIN SELECT RAISE(ROLLBACK, 'full'); END"
    )
    connection.commit()
    connection.close()
    before = stored.statuses()
    with pytest.raises((ValueError, sqlite3.DatabaseError)):
        stored.put(record((5, 5)))
    assert stored.statuses() == before
    assert stored.arrays(PointKey("any", (5, 5))) == {}


def test_a_reader_sees_a_point_as_soon_as_it_is_committed(stores, path):
    stored, _ = stores
    with SqliteStore(path, "print", readonly=True) as early:
        before = early.statuses()
        stored.put(record((7, 7)))
        assert early.statuses() == before, "one look is one moment"
    with SqliteStore(path, "print", readonly=True) as reader:
        assert reader.statuses() == stored.statuses() != before
        with pytest.raises(sqlite3.OperationalError, match="readonly"):
            reader.put(record((8, 8)))


def test_a_closed_record_can_be_read_where_nothing_may_be_written(stores, path, monkeypatch):
    stored, twin = stores
    stored.close()
    monkeypatch.setattr(store_module, "access", lambda *_: False)
    with SqliteStore(path, "print", readonly=True) as reader:
        assert reader.statuses() == twin.statuses()
        assert not list(path.parent.glob("*-wal"))


def test_writing_is_fully_synchronised(path):
    with SqliteStore(path, "print") as store:
        assert store._rows("PRAGMA journal_mode") == [("wal",)]
        assert store._rows("PRAGMA synchronous") == [(2,)]


@pytest.mark.parametrize("readonly", [False, True])
def test_what_is_no_record_of_this_run_is_refused_with_a_remedy(stores, path, readonly):
    stored, _ = stores
    stored.close()
    whole = path.read_bytes()
    other = path.with_name("other.sqlite")
    sqlite3.connect(other).executescript("CREATE TABLE t (a); INSERT INTO t VALUES (1)").connection.close()
    cases = {
        "is not the record of a run": [b"", whole[:50], other.read_bytes()],
        "damaged": [b"plain text " * 1000, whole[:-4096], whole[: len(whole) // 2]],
        "schema version 9": [whole[:60] + (9).to_bytes(4, "big") + whole[64:]],
    }
    for reason, contents in cases.items():
        for content in contents:
            path.write_bytes(content)
            with pytest.raises(InputError, match=reason) as caught:
                SqliteStore(path, "print", readonly=readonly)
            assert str(path) in str(caught.value)
    path.write_bytes(whole)
    with pytest.raises(InputError, match="another run"):
        SqliteStore(path, "other print", readonly=readonly)
    path.unlink()
    with pytest.raises(InputError, match="missing"):
        SqliteStore(path, "print", readonly=readonly)
    assert not path.exists()


def test_a_new_record_never_replaces_an_old_one(stores, path):
    stored, twin = stores
    with pytest.raises(sqlite3.OperationalError):
        create_store(path, "print")
    assert stored.statuses() == twin.statuses()


@pytest.mark.parametrize(
    ("name", "unit"),
    [
        ("gap_meV", "meV"),
        ("kondo.coupling_meV", "meV"),
        ("free_energy_meV_per_cell", "meV/cell"),
        ("entropy_kB_per_cell", "kB/cell"),
        ("conduction_layer.density_per_cm2", "1/cm2"),
        ("mean_field.temperature_K", "K"),
        ("spin_layer.lattice_constant_angstrom", "angstrom"),
        ("field_T", "T"),
        ("filling", "1"),
        ("OK", "1"),
        ("bandwidthmeV", "1"),
    ],
)
def test_the_unit_is_the_end_of_the_name(name, unit):
    assert unit_of(name) == unit
