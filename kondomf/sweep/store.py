"""The live record of a run: one transaction a point in an SQLite file, and a twin in memory with the same interface.

The file is in write-ahead mode with full synchronisation: what `put` has returned from survives a killed process and a
power loss, and readers see committed points only, also while the run goes on. All processes that open it must be on one
host, on a local disk.
"""

import io
import json
import sqlite3
from collections import defaultdict
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import asdict
from os import W_OK, access
from pathlib import Path
from typing import Any, Protocol, Self

import numpy as np
from numpy.typing import NDArray

from kondomf.errors import InputError
from kondomf.sweep.record import Arrays, Execution, Launch, Pace, PointKey, PointRecord, PointResult

SCHEMA_VERSION = 1
_APPLICATION = 0x4B4D4653  # marks an SQLite file as a record of this package

_TABLES = """
CREATE TABLE run (fingerprint TEXT NOT NULL);
CREATE TABLE launches (id INTEGER PRIMARY KEY, started REAL NOT NULL, description TEXT NOT NULL);
CREATE TABLE points (
    phase TEXT NOT NULL, idx TEXT NOT NULL, inputs TEXT NOT NULL, seed INTEGER NOT NULL, status TEXT NOT NULL,
    message TEXT NOT NULL, scalars TEXT NOT NULL, launch INTEGER NOT NULL, attempt INTEGER NOT NULL,
    wall_seconds REAL NOT NULL, host TEXT NOT NULL, committed REAL NOT NULL, PRIMARY KEY (phase, idx)
);
CREATE TABLE arrays (
    phase TEXT NOT NULL, idx TEXT NOT NULL, name TEXT NOT NULL, data BLOB NOT NULL, PRIMARY KEY (phase, idx, name)
);
"""


class Store(Protocol):
    """What the driver, the product and the readers need of a record."""

    def begin_launch(self, launch: Launch) -> int:
        """Note a start of the driver; returns its number for the executions that follow."""

    def put(self, record: PointRecord) -> None:
        """Commit one point; raises ValueError if it is already recorded."""

    def statuses(self) -> dict[PointKey, str]:
        """Status of every committed point."""

    def arrays(self, key: PointKey) -> Arrays:
        """Arrays of a committed point by name; empty if there are none."""

    def array_names(self, phase: str) -> list[str]:
        """Sorted names of the arrays that any point of a phase class has."""

    def array(self, phase: str, name: str) -> Iterator[tuple[tuple[int, ...], NDArray[Any]]]:
        """(index, array) of every committed point of a phase class that has the array, sorted by index."""

    def records(self, phase: str) -> list[PointRecord]:
        """Committed points of a phase class sorted by index, their arrays left out."""

    def pace(self) -> Pace:
        """Points and seconds over all launches."""

    def close(self) -> None:
        """Give back what the store holds open."""


class MemoryStore:
    """The same record in memory: what every test of the stored one is compared with."""

    def __init__(self) -> None:
        self._records: dict[PointKey, PointRecord] = {}
        self._launches: list[Launch] = []

    def begin_launch(self, launch: Launch) -> int:
        self._launches.append(launch)
        return len(self._launches)

    def put(self, record: PointRecord) -> None:
        if record.key in self._records:
            raise ValueError(f"{record.key} is already recorded")
        self._records[record.key] = record

    def statuses(self) -> dict[PointKey, str]:
        return {key: record.result.status for key, record in self._records.items()}

    def arrays(self, key: PointKey) -> Arrays:
        return dict(self._records[key].result.arrays) if key in self._records else {}

    def array_names(self, phase: str) -> list[str]:
        return sorted({name for key in self._keys(phase) for name in self.arrays(key)})

    def array(self, phase: str, name: str) -> Iterator[tuple[tuple[int, ...], NDArray[Any]]]:
        return ((key.index, self.arrays(key)[name]) for key in self._keys(phase) if name in self.arrays(key))

    def records(self, phase: str) -> list[PointRecord]:
        records = (self._records[key] for key in self._keys(phase))
        return [_without_arrays(record) for record in records]

    def pace(self) -> Pace:
        last: dict[int, float] = defaultdict(float)
        for record in self._records.values():
            launch = record.execution.launch
            last[launch] = max(last[launch], record.execution.committed)
        return Pace(len(self._records), sum(end - self._launches[number - 1].started for number, end in last.items()))

    def close(self) -> None:
        """Nothing is held open."""

    def _keys(self, phase: str) -> list[PointKey]:
        return sorted(key for key in self._records if key.phase == phase)


class SqliteStore:
    """The record on disk. One writer at a time (the lock of the run folder sees to it), any number of readers."""

    def __init__(self, path: Path, fingerprint: str, *, readonly: bool = False) -> None:
        """Open an existing record. A read-only store shows what is committed now for as long as it is open.

        Raises InputError: no record, cut off or damaged, of another version, or of another run.
        """
        self.path = path
        if not path.is_file():
            raise InputError(f"{path} is missing; put it back, or start the sweep in another folder")
        with self._errors():
            self._connection = sqlite3.connect(_address(path, readonly), uri=True, timeout=30)
        try:
            if readonly:
                self._rows("BEGIN")
            self._check(fingerprint, thorough=not readonly)
            if not readonly:
                self._rows("PRAGMA synchronous = FULL")
        except BaseException:
            self._connection.close()
            raise

    def __enter__(self) -> Self:
        return self

    def __exit__(self, *_: object) -> None:
        self.close()

    def begin_launch(self, launch: Launch) -> int:
        with self._connection:
            row = (launch.started, json.dumps(asdict(launch)))
            number = self._connection.execute(
                "INSERT INTO launches (started, description) VALUES (?, ?)", row
            ).lastrowid
        assert number is not None
        return number

    def put(self, record: PointRecord) -> None:
        place, result, execution = (record.key.phase, _text(record.key.index)), record.result, record.execution
        point = (*place, json.dumps(record.inputs), record.seed, result.status, result.message,
                 json.dumps(result.scalars, sort_keys=True), *asdict(execution).values())  # fmt: skip
        blobs = [(*place, name, _blob(array)) for name, array in result.arrays.items()]
        try:
            with self._connection:
                self._connection.execute(f"INSERT INTO points VALUES ({', '.join('?' * len(point))})", point)
                self._connection.executemany("INSERT INTO arrays VALUES (?, ?, ?, ?)", blobs)
        except sqlite3.IntegrityError:
            raise ValueError(f"{record.key} is already recorded") from None

    def statuses(self) -> dict[PointKey, str]:
        rows = self._rows("SELECT phase, idx, status FROM points")
        return {PointKey(phase, _index(idx)): status for phase, idx, status in rows}

    def arrays(self, key: PointKey) -> Arrays:
        place = (key.phase, _text(key.index))
        rows = self._rows("SELECT name, data FROM arrays WHERE phase = ? AND idx = ? ORDER BY name", place)
        return {name: _array(data) for name, data in rows}

    def array_names(self, phase: str) -> list[str]:
        return [
            name for (name,) in self._rows("SELECT DISTINCT name FROM arrays WHERE phase = ? ORDER BY name", (phase,))
        ]

    def array(self, phase: str, name: str) -> Iterator[tuple[tuple[int, ...], NDArray[Any]]]:
        places = self._rows("SELECT idx FROM arrays WHERE phase = ? AND name = ?", (phase, name))
        query = "SELECT data FROM arrays WHERE phase = ? AND idx = ? AND name = ?"
        for index in sorted(_index(idx) for (idx,) in places):
            ((data,),) = self._rows(query, (phase, _text(index), name))
            yield index, _array(data)

    def records(self, phase: str) -> list[PointRecord]:
        rows = self._rows(
            "SELECT idx, inputs, seed, status, scalars, message, launch, attempt, wall_seconds, host, committed"
            " FROM points WHERE phase = ?",
            (phase,),
        )
        records = [
            PointRecord(
                PointKey(phase, _index(idx)),
                json.loads(inputs),
                seed,
                PointResult(status, json.loads(scalars), {}, message),
                Execution(*execution),
            )
            for idx, inputs, seed, status, scalars, message, *execution in rows
        ]
        return sorted(records, key=lambda record: record.key)

    def pace(self) -> Pace:
        rows = self._rows(
            "SELECT COUNT(*), MAX(committed) - started FROM points"
            " JOIN launches ON launches.id = points.launch GROUP BY launches.id"
        )
        return Pace(sum(points for points, _ in rows), sum(seconds for _, seconds in rows))

    def close(self) -> None:
        self._connection.close()

    def _rows(self, query: str, values: tuple[Any, ...] = ()) -> list[Any]:
        with self._errors():
            return self._connection.execute(query, values).fetchall()

    @contextmanager
    def _errors(self) -> Iterator[None]:
        try:
            yield
        except sqlite3.OperationalError as error:
            raise InputError(f"cannot read {self.path}: {error}; check its disk and permissions") from error
        except sqlite3.DatabaseError as error:
            raise InputError(
                f"{self.path} is damaged, cut off or not the record of a run ({error}); put a copy back, or start the "
                "sweep in another folder"
            ) from error

    def _check(self, fingerprint: str, thorough: bool) -> None:
        ((application,),) = self._rows("PRAGMA application_id")
        ((schema,),) = self._rows("PRAGMA user_version")
        if application != _APPLICATION:
            raise InputError(f"{self.path} is not the record of a run; start the sweep in another folder")
        if schema != SCHEMA_VERSION:
            raise InputError(
                f"{self.path} has schema version {schema}, this version of kondomf reads {SCHEMA_VERSION}; use the "
                "version that wrote it (see run.toml), or start the sweep in another folder"
            )
        ((pages,),), ((page_bytes,),) = self._rows("PRAGMA page_count"), self._rows("PRAGMA page_size")
        # Pages that are still in the write-ahead log are missing from the file for a good reason.
        whole = self.path.stat().st_size >= pages * page_bytes or _has_log(self.path)
        if not whole or (thorough and self._rows("PRAGMA quick_check") != [("ok",)]):
            raise InputError(
                f"{self.path} is damaged or cut off; put a copy back, or start the sweep in another folder"
            )
        if self._rows("SELECT fingerprint FROM run") != [(fingerprint,)]:
            raise InputError(f"{self.path} belongs to another run than the run.toml beside it; put the right one back")


def create_store(path: Path, fingerprint: str) -> None:
    """Write an empty record for the run with this fingerprint; the file must not exist yet."""
    connection = sqlite3.connect(path)
    try:
        connection.execute("PRAGMA journal_mode = WAL")
        connection.executescript(_TABLES)
        connection.execute(f"PRAGMA application_id = {_APPLICATION}")
        connection.execute(f"PRAGMA user_version = {SCHEMA_VERSION}")
        with connection:
            connection.execute("INSERT INTO run VALUES (?)", (fingerprint,))
    finally:
        connection.close()


def _address(path: Path, readonly: bool) -> str:
    mode = "mode=rw"
    if readonly:
        # Without write permission SQLite cannot make its shared-memory file; a record nobody has open needs none.
        mode = "mode=ro" if _has_log(path) or access(path.parent, W_OK) else "immutable=1"
    return f"{path.absolute().as_uri()}?{mode}"


def _has_log(path: Path) -> bool:
    log = path.with_name(f"{path.name}-wal")
    return log.exists() and log.stat().st_size > 0


def _without_arrays(record: PointRecord) -> PointRecord:
    result = PointResult(record.result.status, record.result.scalars, {}, record.result.message)
    return PointRecord(record.key, record.inputs, record.seed, result, record.execution)


def _text(index: tuple[int, ...]) -> str:
    return ",".join(map(str, index))


def _index(text: str) -> tuple[int, ...]:
    return tuple(map(int, text.split(",")))


def _blob(array: NDArray[Any]) -> bytes:
    buffer = io.BytesIO()
    np.save(buffer, array, allow_pickle=False)
    return buffer.getvalue()


def _array(blob: bytes) -> NDArray[Any]:
    array: NDArray[Any] = np.load(io.BytesIO(blob), allow_pickle=False)
    return array
