"""The folder of a run: frozen inputs (run.toml), live record (points.sqlite), product (run.h5), LOCK."""

import fcntl
import hashlib
import json
import os
import platform
import shutil
import socket
import tempfile
import time
import tomllib
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass
from datetime import datetime
from importlib.metadata import version
from pathlib import Path
from typing import Any

from kondomf.errors import InputError
from kondomf.sweep.store import SCHEMA_VERSION, create_store

HEADER, RECORD, PRODUCT, LOCK = "run.toml", "points.sqlite", "run.h5", "LOCK"


@dataclass(frozen=True)
class Header:
    """What run.toml holds: the inputs every point derives from, their fingerprint, the versions that started the run.

    inputs: point (dotted path of the point function), phases, axes (values by key), axis_order, material (nested dict).
    """

    inputs: dict[str, Any]
    fingerprint: str
    versions: dict[str, str]


def versions() -> dict[str, str]:
    """Versions of what the numbers of a run depend on."""
    names = ("kondomf", "numpy", "scipy", "numba", "h5py", "distributed")
    return {"python": platform.python_version(), "machine": platform.machine()} | {
        name: version(name) for name in names
    }


def fingerprint_of(inputs: dict[str, Any]) -> str:
    """SHA-256 of the inputs, independent of the order of their keys."""
    return hashlib.sha256(json.dumps(inputs, sort_keys=True).encode()).hexdigest()


def prepare_folder(folder: Path, inputs: dict[str, Any]) -> Header:
    """Make `folder` a run with these inputs, or check that it is one already; returns its header.

    Raises InputError: the folder holds something else, a run with other inputs (the differences are listed) or of
    another schema version, or it cannot be written.
    """
    if folder.exists() and not folder.is_dir():
        raise InputError(f"{folder} is a file; give the name of a folder for the run")
    if not folder.exists() or not any(folder.iterdir()):
        _create(folder, inputs)
    if not os.access(folder, os.W_OK):
        raise InputError(f"no permission to write in {folder}; choose another folder")
    header = read_header(folder)
    changed = differences(header.inputs, inputs)
    if changed:
        listing = "\n  ".join(changed)
        raise InputError(
            f"{folder} holds a run with other inputs:\n  {listing}\nundo the change, or choose another folder"
        )
    return header


def read_header(folder: Path) -> Header:
    """Read and check run.toml. Raises InputError: no run, unreadable, of another schema version, or edited."""
    path = folder / HEADER
    if not folder.is_dir():
        raise InputError(f"{folder} is not the folder of a run; give the folder that `kondomf sweep` made")
    if not path.is_file():
        remedy = "give the folder that `kondomf sweep` made, or for a new run a name that does not exist"
        raise InputError(f"{folder} is not the folder of a run: {HEADER} is missing; {remedy}")
    try:
        data = tomllib.loads(path.read_text(encoding="utf-8"))
        schema, inputs = data["schema"], data["inputs"]
        header = Header(inputs, data["fingerprint"], data["versions"])
    except (OSError, tomllib.TOMLDecodeError, UnicodeDecodeError, KeyError) as error:
        raise InputError(
            f"{path} is damaged or cut off ({error}); put a copy back, or start in another folder"
        ) from None
    if schema != SCHEMA_VERSION:
        raise InputError(
            f"{path} has schema version {schema}, this version of kondomf reads {SCHEMA_VERSION}; use kondomf "
            f"{header.versions.get('kondomf')}, which wrote it, or start in another folder"
        )
    if fingerprint_of(inputs) != header.fingerprint:
        raise InputError(
            f"{path} was edited after the run had started; undo that, or start the sweep in another folder"
        )
    return header


def differences(old: Any, new: Any, place: str = "") -> list[str]:
    """One line for every entry in which the inputs of a run (`old`) and of the present files (`new`) differ."""
    if isinstance(old, dict) and isinstance(new, dict):
        lines = [differences(old.get(k), new.get(k), f"{place}.{k}".lstrip(".")) for k in old | new]
        return [line for group in lines for line in group]
    return [] if old == new else [f"{place}: {_brief(old)} in the run, {_brief(new)} now"]


@contextmanager
def locked(folder: Path) -> Iterator[None]:
    """Hold the run for this process. Raises InputError, with host, process and start, if another one has it."""
    with (folder / LOCK).open("a+", encoding="utf-8") as stream:
        if not _try_lock(stream.fileno(), fcntl.LOCK_EX, patience_seconds=1.0):
            raise InputError(f"{folder} is being worked on by {_holder(folder)}; wait for it, or stop it with Ctrl-C")
        stream.truncate(0)
        started = datetime.now().astimezone().isoformat(timespec="seconds")
        stream.write(json.dumps({"host": socket.gethostname(), "pid": os.getpid(), "started": started}) + "\n")
        stream.flush()
        yield


def working_process(folder: Path) -> str | None:
    """Who is working on the run, in words; None if nobody is."""
    path = folder / LOCK
    if not path.exists():
        return None
    # A shared lock: two onlookers do not take each other for the driver, and the driver waits a moment for them.
    with path.open(encoding="utf-8") as stream:
        return None if _try_lock(stream.fileno(), fcntl.LOCK_SH, patience_seconds=0) else _holder(folder)


def _try_lock(descriptor: int, kind: int, patience_seconds: float) -> bool:
    deadline = time.monotonic() + patience_seconds
    while True:
        try:
            fcntl.flock(descriptor, kind | fcntl.LOCK_NB)
            return True
        except BlockingIOError:
            if time.monotonic() >= deadline:
                return False
            time.sleep(0.1)


def _holder(folder: Path) -> str:
    try:
        holder = json.loads((folder / LOCK).read_text(encoding="utf-8"))
        return f"process {holder['pid']} on {holder['host']} since {holder['started']}"
    except (ValueError, KeyError, OSError):
        return "another process"


def _create(folder: Path, inputs: dict[str, Any]) -> None:
    """Fill a folder beside the final one and rename it: a run exists completely or not at all."""
    try:
        folder.parent.mkdir(parents=True, exist_ok=True)
        temporary = Path(tempfile.mkdtemp(prefix=f".{folder.name}-", dir=folder.parent))
    except OSError as error:
        raise InputError(f"cannot create {folder}: {error.strerror}; choose another folder") from None
    try:
        fingerprint = fingerprint_of(inputs)
        create_store(temporary / RECORD, fingerprint)
        content = {"schema": SCHEMA_VERSION, "fingerprint": fingerprint, "versions": versions(), "inputs": inputs}
        with (temporary / HEADER).open("w", encoding="utf-8") as stream:
            stream.write(
                "# Frozen inputs of this run. Do not edit: points computed from other inputs would be mixed.\n"
            )
            stream.write(_toml(content))
            stream.flush()
            os.fsync(stream.fileno())
        temporary.chmod(0o777 & ~_umask())
        os.replace(temporary, folder)
        _sync_folder(folder.parent)
    except OSError as error:
        raise InputError(f"cannot create {folder}: {error.strerror}; choose another folder") from None
    finally:
        shutil.rmtree(temporary, ignore_errors=True)


def _sync_folder(folder: Path) -> None:
    descriptor = os.open(folder, os.O_RDONLY)
    try:
        os.fsync(descriptor)
    finally:
        os.close(descriptor)


def _umask() -> int:
    mask = os.umask(0)
    os.umask(mask)
    return mask


def _toml(table: dict[str, Any], heading: str = "") -> str:
    """A nested dict of text, numbers, truth values and lists as TOML; tables follow the plain keys."""
    plain = "".join(f"{_key(k)} = {_value(v)}\n" for k, v in table.items() if not isinstance(v, dict))
    tables = ((f"{heading}{_key(k)}", v) for k, v in table.items() if isinstance(v, dict))
    return plain + "".join(f"\n[{name}]\n{_toml(value, f'{name}.')}" for name, value in tables)


def _key(name: str) -> str:
    return name if name.replace("_", "a").replace("-", "a").isalnum() and name.isascii() else _value(name)


def _value(value: Any) -> str:
    if isinstance(value, dict):
        return f"{{ {', '.join(f'{_key(k)} = {_value(v)}' for k, v in value.items())} }}"
    if isinstance(value, list):
        return f"[{', '.join(map(_value, value))}]"
    if isinstance(value, float):
        return repr(value)
    return json.dumps(value, ensure_ascii=False).replace("\x7f", "\\u007f")


def _brief(value: Any) -> str:
    if value is None:
        return "nothing"
    if isinstance(value, list) and len(value) > 6:
        return f"{len(value)} values from {value[0]} to {value[-1]}"
    return json.dumps(value, ensure_ascii=False)
