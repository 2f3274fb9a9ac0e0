"""Commented templates of the files a user writes."""

from functools import partial
from importlib.resources import files
from pathlib import Path

from kondomf.errors import InputError
from kondomf.files import refuse_existing, write_atomically

TEMPLATES = ("material.toml", "sweep.toml", "heavy.toml")
"""A material and a sweep over it for phase maps, and the material of a heavy Fermi liquid for its oscillations."""


def write_templates(folder: str | Path, overwrite: bool = False) -> list[Path]:
    """Write the templates into `folder`, which is created if needed; returns their paths.

    Raises InputError, before anything is written, if one of them exists and `overwrite` is false or the folder cannot
    be written.
    """
    folder = Path(folder)
    try:
        folder.mkdir(parents=True, exist_ok=True)
    except OSError as error:
        raise InputError(f"cannot create the folder {folder}: {error.strerror}; choose another one") from None
    paths = [folder / name for name in TEMPLATES]
    for path in paths:
        refuse_existing(path, overwrite)
    for path in paths:
        source = files("kondomf.material").joinpath("templates", path.name)
        write_atomically(path, partial(_write, source.read_bytes()), overwrite=overwrite)
    return paths


def _write(content: bytes, path: Path) -> None:
    path.write_bytes(content)
