"""The files a command may write: checked before anything is computed, written whole or not at all."""

import csv
import json
import math
from collections.abc import Callable, Iterable, Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Any

from kondomf.errors import InputError
from kondomf.files import refuse_existing, write_atomically
from kondomf.report.style import check_format, save_figure

if TYPE_CHECKING:
    from matplotlib.figure import Figure


@dataclass(frozen=True)
class Outputs:
    """Names of the outputs asked for, None where not; json may be "-" for standard output.

    Raises InputError if an output exists without `overwrite`, cannot be written, has no figure format, or if two
    outputs have the same name.
    """

    json: Path | None = None
    figure: Path | None = None
    data: Path | None = None
    state: Path | None = None
    overwrite: bool = False

    def __post_init__(self) -> None:
        if self.figure is not None:
            check_format(self.figure)
        given = [path for path in (self.json, self.figure, self.data, self.state) if path is not None]
        for path in given:
            if str(path) != "-":
                refuse_existing(path, self.overwrite)
                if given.count(path) > 1:
                    raise InputError(f"{path} is named for two outputs; give each its own file")

    def draw(self, draw: Callable[["Figure"], Any], size: tuple[float, float]) -> None:
        """Write the figure, if asked for: `draw` fills a figure of `size` inches."""
        if self.figure is not None:
            save_figure(self.figure, draw, size, self.overwrite)

    def write_columns(self, columns: Mapping[str, Iterable[Any]]) -> None:
        """Write the data, if asked for: a CSV file with the names of the columns as header."""

        def write(temporary: Path) -> None:
            with temporary.open("w", newline="", encoding="utf-8") as stream:
                writer = csv.writer(stream)
                writer.writerow(columns)
                writer.writerows(zip(*columns.values(), strict=True))

        if self.data is not None:
            write_atomically(self.data, write, overwrite=self.overwrite)

    def report(self, result: Mapping[str, Any], text: str, echo: Callable[[str], Any]) -> None:
        """Print the text, and write the result as JSON if asked for; "-" prints the JSON and nothing else."""
        document = json.dumps(plain(result), indent=2, ensure_ascii=False, allow_nan=False)
        if self.json is not None and str(self.json) == "-":
            echo(document)
            return
        echo(text)
        if self.json is not None:
            write_atomically(
                self.json,
                lambda path: _write_text(path, document + "\n"),
                overwrite=self.overwrite,
            )


def _write_text(path: Path, text: str) -> None:
    path.write_text(text, encoding="utf-8")


def plain(value: Any) -> Any:
    """What JSON can hold: numbers of numpy as Python's, NaN and infinities as null."""
    if isinstance(value, Mapping):
        return {key: plain(entry) for key, entry in value.items()}
    if isinstance(value, list | tuple):
        return [plain(entry) for entry in value]
    if value is None or isinstance(value, str | int):
        return value
    number = float(value)
    return number if math.isfinite(number) else None
