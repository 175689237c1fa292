"""A stored run as files for other programs: points and figures as CSV, the result as JSON, pictures.

A number is written with as few digits as read back the same double, so CSV, JSON and HDF5 agree to the last digit. A
file that is there is replaced only when an export wrote it: nothing is written before all of them were looked at.
"""

import csv
import io
import json
from collections.abc import Iterable, Mapping
from pathlib import Path
from typing import Any, Literal

from bandproof.bench.documents.report import write_whole
from bandproof.bench.documents.stage_picture import draw_stage
from bandproof.bench.documents.stored import Stored
from bandproof.bench.errors import BadInput
from bandproof.bench.picture import MAKER, image
from bandproof.bench.result import RESULT_SCHEMA
from bandproof.bench.runfile import read_columns
from bandproof.bench.types import QUANTITIES

__all__ = ["Files", "NoExport", "data_files", "picture_files", "write_exports"]

_FIGURE = (
    *("unit", "designed", "predicted", "measured", "standard_uncertainty", "expanded_uncertainty", "coverage_factor"),
    *("deviation", "lower_limit", "upper_limit", "rule", "verdict", "conformance_probability", "conformance_prior"),
)  # keys of a figure in the result, each a column
_FIT = ("points", "reduced_chi_square", "lack_of_fit")

Files = Mapping[str, tuple[bytes, bytes]]  # name: (content, what is in a file of this name that an export wrote)


class NoExport(BadInput):
    """A folder does not take the files; says why."""

    def __init__(self, path: str, reason: str) -> None:
        super().__init__(path, reason)
        self.path, self.reason = path, reason

    def __str__(self) -> str:
        return f"{self.path}: {self.reason}"


def data_files(stored: Stored) -> Files:
    """Return ``points_STAGE.csv``, ``figures.csv`` and ``result.json``."""
    files = {f"points_{stage}.csv": _points(columns) for stage, columns in read_columns(stored.path).items()}
    files["figures.csv"] = _table(("stage", "model", "figure", *_FIGURE, *_FIT), _figures(stored.result))
    text = json.dumps(stored.result, indent=1) + "\n"
    files["result.json"] = text.encode("utf-8"), f'"{RESULT_SCHEMA}"'.encode()
    return files


def picture_files(stored: Stored, kind: Literal["svg", "png"]) -> Files:
    """Return ``stage_STAGE`` for each stage that has a fit, as SVG or PNG."""
    run = stored.run
    head = f"{run.board.title}   serial {run.serial}, attempt {run.attempt}"
    pictures = {view.result.name: draw_stage(view, f"{head}   {view.result.name}") for view in stored.views}
    return {f"stage_{name}.{kind}": (image(figure, kind), MAKER.encode()) for name, figure in pictures.items()}


def _points(columns: Mapping[str, tuple[str, list[Any]]]) -> tuple[bytes, bytes]:
    head = [f"{name}_{unit}" if unit not in ("", "1") else name for name, (unit, _) in columns.items()]
    return _table(head, zip(*(values for _, values in columns.values()), strict=True))


def _figures(result: Mapping[str, Any]) -> Iterable[list[Any]]:
    for stage in result["stages"]:
        for name in QUANTITIES:
            figure, fit = stage["parameters"][name], stage["fit"]
            yield [
                stage["name"],
                stage["model"],
                name,
                *(figure.get(key) for key in _FIGURE),
                *(fit.get(key) for key in _FIT),
            ]


def _table(head: Iterable[str], rows: Iterable[Iterable[Any]]) -> tuple[bytes, bytes]:
    memory = io.StringIO()
    writer = csv.writer(memory, lineterminator="\n")  # writes a float as repr does
    writer.writerow(head)
    first = memory.getvalue().encode("utf-8")
    writer.writerows(rows)
    return memory.getvalue().encode("utf-8"), first


def write_exports(wanted: Mapping[Path, Files]) -> list[Path]:
    """Write the files of each folder and return their paths.

    Raises
    ------
    NoExport
        A file is there that no export wrote, or one of another run would stay beside these, or a folder cannot be
        written; nothing is written in the first two cases.
    """
    try:
        for folder, files in wanted.items():
            folder.mkdir(parents=True, exist_ok=True)
            _look(folder, files)
        for folder, files in wanted.items():
            for name, (content, _) in files.items():
                write_whole(folder / name, content)
    except OSError as problem:
        where = str(problem.filename or folder).removesuffix(".part")
        raise NoExport(where, f"cannot be written: {problem.strerror}; name another folder") from problem
    return [folder / name for folder, files in wanted.items() for name in files]


def _look(folder: Path, files: Files) -> None:
    for name, (_, mark) in files.items():
        if (folder / name).exists() and mark not in (folder / name).read_bytes():
            raise NoExport(str(folder / name), "is there and no export wrote it; move it or name another folder")
    for name in files:
        kind, _, end = name.partition("_")
        for other in folder.glob(f"{kind}_*{Path(end).suffix}") if end else ():
            if other.name not in files:
                raise NoExport(str(other), "is of another run and would stay beside this one's; name another folder")
