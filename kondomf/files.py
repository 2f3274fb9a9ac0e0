"""Output files: never overwritten silently, never half written."""

import os
import tempfile
from collections.abc import Callable
from pathlib import Path

from kondomf.errors import InputError


def refuse_existing(path: Path, overwrite: bool) -> None:
    """Raise InputError if `path` exists and may not be replaced, or if its folder cannot take a new file."""
    try:
        exists, is_folder = path.exists(), path.is_dir()
    except OSError as error:
        raise InputError(f"cannot write {path}: {error.strerror}; choose another name or folder") from None
    if is_folder:
        raise InputError(f"{path} is a directory; give the name of a file")
    if exists and not overwrite:
        raise InputError(f"{path} exists; choose another name or pass --overwrite to replace it")
    folder = path.parent
    if not folder.is_dir():
        problem = (
            "is a file, not a folder; choose another one" if folder.exists() else "does not exist; create it first"
        )
        raise InputError(f"cannot write {path}: {folder} {problem}")
    if not os.access(folder, os.W_OK):
        raise InputError(f"cannot write {path}: no permission to write in {folder}; choose another folder")


def write_atomically(path: Path, write: Callable[[Path], None], *, overwrite: bool = False) -> None:
    """Let `write(temporary)` fill a temporary file beside `path`, sync it and rename it into place.

    A reader sees the old file or the complete new one. The temporary keeps the suffix of `path`, which
    matplotlib and others use to choose the format.

    Raises InputError: `path` exists without `overwrite`, or the folder or disk refuses the file.
    """
    refuse_existing(path, overwrite)
    try:
        handle, name = tempfile.mkstemp(prefix=f".{path.stem}-", suffix=path.suffix, dir=path.parent)
    except OSError as error:
        raise InputError(f"cannot write {path}: {error.strerror}; choose another folder") from error
    os.close(handle)
    temporary = Path(name)
    try:
        write(temporary)
        with temporary.open("rb") as stream:
            os.fsync(stream.fileno())
        os.chmod(temporary, 0o666 & ~_umask())
        os.replace(temporary, path)
    except OSError as error:
        raise InputError(
            f"cannot write {path}: {error.strerror or error}; free space or choose another folder"
        ) from error
    finally:
        temporary.unlink(missing_ok=True)


def _umask() -> int:
    mask = os.umask(0)
    os.umask(mask)
    return mask
