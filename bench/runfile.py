"""The run file: everything of one run in one HDF5 file that stands up years later.

A user block of 512 bytes says ``bandproof-run/1 sha256=...`` of all bytes that follow; it is checked before HDF5
opens the file, because HDF5's own checksums leave text and attributes unprotected. The file is written once, at the
end: a part file in the same folder, closed, digested, synced, renamed, the folder synced. It is never modified.
"""

import hashlib
import io
import json
import os
import re
import struct
from collections.abc import Callable, Mapping
from dataclasses import asdict, fields, replace
from pathlib import Path
from typing import TYPE_CHECKING, Any, TypeVar

from bandproof.analysis.types import FloatArray
from bandproof.bench.bench_file import parse_bench
from bandproof.bench.board_file import parse_board
from bandproof.bench.errors import RunFileDamaged
from bandproof.bench.plain import checks_from, checks_plain, step_from, thru_from, thru_plain, to_json
from bandproof.bench.run_schema import ABOUT, COLUMNS, RAW, READABLE, SCHEMA, USER_BLOCK
from bandproof.bench.system import sync_folder
from bandproof.bench.types import Point, Run

if TYPE_CHECKING:
    import h5py

__all__ = ["SCHEMA", "digest_of", "read_columns", "read_result", "read_run", "read_version", "write_run"]

_T = TypeVar("_T")
_LARGEST = 4_000_000_000  # bytes read for a digest; arbitrary
_NAME = b"bandproof-run/"
_VERSION = re.compile(rb"bandproof-run/(\d{1,9}) sha256=")
_HDF5 = b"\x89HDF\r\n\x1a\n"  # its signature, at 0, 512 or twice the place before (HDF5 file format, II.A)
_HDF5_PLACES = [512 << power for power in range(12)]
_SUPERBLOCK = struct.Struct("<20s8xQ")  # of version 2 and 3 (II.A): the last one here is where the file ends


def write_run(
    path: Path,
    run: Run,
    result: Mapping[str, Any],
    *,
    raw: Callable[[int], FloatArray | None] = lambda index: None,
    budget: Mapping[str, Any] | None = None,
) -> str:
    """Write a run file beside its final name, sync it, rename it; return its digest.

    ``raw`` gives the record (2, N) V kept for the run's point of that index, or None; ``budget`` has the rows of each
    figure by stage.

    Raises
    ------
    OSError
        The folder cannot be written. Nothing is left under the final name.
    """
    image = _image(run, result, raw, budget or {})
    digest = hashlib.sha256(image).hexdigest()
    part = path.with_name(path.name + ".part")
    try:
        with part.open("wb") as file:
            file.write(_user_block(digest) + image)
            file.flush()
            os.fsync(file.fileno())
        part.rename(path)
    except OSError:
        part.unlink(missing_ok=True)
        raise
    sync_folder(path.parent)
    return digest


def _user_block(digest: str, version: int = READABLE[-1]) -> bytes:
    return f"bandproof-run/{version} sha256={digest}\n".encode("ascii").ljust(USER_BLOCK, b"\0")


def _image(
    run: Run, result: Mapping[str, Any], raw: Callable[[int], FloatArray | None], budget: Mapping[str, Any]
) -> bytes:
    import h5py

    memory = io.BytesIO()
    with h5py.File(memory, "w", libver=("v110", "v110"), userblock_size=USER_BLOCK) as file:
        file.attrs["schema"] = _fixed(SCHEMA)
        for name, text in {**_texts(run, result), "budget": to_json(budget)}.items():
            _write_text(file, name, text)
        for stage in dict.fromkeys(point.stage for point in run.points):
            _write_points(file.create_group(f"points/{stage}"), [p for p in run.points if p.stage == stage])
        for index, point in enumerate(run.points):
            if (volts := raw(index)) is not None:
                _write_raw(file.create_group(f"raw/{point.step:06d}"), volts)
    return memory.getvalue()[USER_BLOCK:]


def _texts(run: Run, result: Mapping[str, Any]) -> dict[str, str]:
    more = {f"texts/dialect_{role}": text for role, text in sorted(run.bench.dialect_texts.items())}
    if run.thru is not None:
        more["texts/thru"] = to_json(thru_plain(run.thru))
    if run.checks is not None:
        more["texts/checks"] = to_json(checks_plain(run.checks))
    return {
        "about": to_json({name: getattr(run, name) for name in ABOUT}),
        "history": "".join(to_json(entry) + "\n" for entry in run.history),
        "result": to_json(result),
        "steps": "".join(to_json(asdict(step)) + "\n" for step in run.steps),
        "texts/bench": run.bench.text,
        "texts/board": run.board.text,
        **more,
    }


def _fixed(text: str) -> Any:
    import numpy as np

    return np.bytes_(text.encode("utf-8"))


def _write_text(file: "h5py.Group", name: str, text: str) -> None:
    import numpy as np

    data = np.frombuffer(text.encode("utf-8"), dtype=np.uint8)
    dataset = file.create_dataset(name, data=data, track_times=False)
    dataset.attrs["encoding"] = _fixed("utf-8")


def _write_points(group: "h5py.Group", points: list[Point]) -> None:
    import numpy as np

    for name, one in COLUMNS.items():
        column: Any = [_cell(getattr(point, one.field), one.part) for point in points]
        if isinstance(column[0], str):
            column = np.array([text.encode("ascii") for text in column])
        dataset = group.create_dataset(name, data=np.asarray(column), track_times=False)
        dataset.attrs["units"] = _fixed(one.unit)


def _write_raw(group: "h5py.Group", volts: FloatArray) -> None:
    for name, channel in zip(RAW, volts, strict=True):
        dataset = group.create_dataset(name, data=channel.astype("<f4"), track_times=False)
        dataset.attrs["units"] = _fixed("V")


def _cell(value: Any, part: int | None) -> Any:
    if isinstance(value, complex):
        return value.imag if part else value.real
    if isinstance(value, tuple):
        return " ".join(value) if part is None else value[part]
    return value


# --- reading ---


def digest_of(path: Path) -> str:
    """Return the digest a run file carries, after comparing it with the file's content.

    Raises
    ------
    RunFileDamaged
        The file cannot be read, is no run file, or its content is not what its digest says.
    """
    return _checked(path)[0]


def _checked(path: Path) -> tuple[str, bytes]:
    try:
        if path.is_dir():
            raise RunFileDamaged(str(path), "is a folder: name the run file in it, run.h5")
        if path.exists() and not path.is_file():
            raise RunFileDamaged(str(path), "is not a file")
        if path.stat().st_size > _LARGEST:
            raise RunFileDamaged(str(path), f"is larger than {_LARGEST // 10**9} GB, no run file is")
        content = path.read_bytes()
    except OSError as problem:
        raise RunFileDamaged(str(path), f"cannot be read: {problem.strerror or problem}") from problem
    head, image = content[:USER_BLOCK], content[USER_BLOCK:]
    digest = hashlib.sha256(image).hexdigest()
    if head not in [_user_block(digest, version) for version in READABLE]:
        raise RunFileDamaged(str(path), _what_is_wrong(content))
    return digest, content


def _what_is_wrong(content: bytes) -> str:
    """Return what a file is that is no sound run file, and what to do."""
    if not content:
        return "is empty: nothing of a run is in it, use a copy"
    if not content.startswith(_NAME):
        if _NAME.startswith(content):
            return _truncated(len(content))
        foreign = content.startswith(_HDF5) or _HDF5 in (content[offset : offset + 8] for offset in _HDF5_PLACES)
        return f"is {'HDF5, but ' if foreign else ''}not a run file of this program"
    named = _VERSION.match(content)
    if named and int(named[1]) not in READABLE:
        age = "newer" if int(named[1]) > READABLE[-1] else "older"
        return (
            f"has schema version {int(named[1])}, {age} than this bandproof reads ({READABLE[0]} to {READABLE[-1]}): "
            f"use {'a later' if age == 'newer' else 'an earlier'} version of it"
        )
    if len(content) < USER_BLOCK + _SUPERBLOCK.size or len(content) < _SUPERBLOCK.unpack_from(content, USER_BLOCK)[1]:
        return _truncated(len(content))
    return "is damaged: its content does not match its digest; use a copy, the figures in it cannot be trusted"


def _truncated(size: int) -> str:
    return f"is damaged: its end is missing, there are {size} bytes; use a copy, the figures in it cannot be trusted"


def read_result(path: Path) -> dict[str, Any]:
    """Return the result object stored in a run file (RunFileDamaged as digest_of)."""
    return _read(path, lambda file: {**json.loads(_text(file, "result"))})


def read_version(path: Path) -> int:
    """Return the version of the schema of a run file (RunFileDamaged as digest_of)."""
    return _read(path, lambda file: int(file.attrs["schema"].rpartition(b"/")[2]))


def read_columns(path: Path) -> dict[str, dict[str, tuple[str, list[Any]]]]:
    """Return the points as stored, by stage and by column: its unit and its values (RunFileDamaged as digest_of)."""
    return _read(path, lambda file: {stage: _columns(group) for stage, group in file.get("points", {}).items()})


def _columns(group: "h5py.Group") -> dict[str, tuple[str, list[Any]]]:
    found = {}
    for name in COLUMNS:
        values = group[name][()].tolist()
        texts = [value.decode("ascii") if isinstance(value, bytes) else value for value in values]
        found[name] = (group[name].attrs["units"].decode("utf-8"), texts)
    return found


def read_run(path: Path) -> Run:
    """Return a run as it was written.

    Raises
    ------
    RunFileDamaged
        The file is no run file, is damaged, or lacks what a run file has.
    """
    return _read(path, _run)


def _read(path: Path, what: Callable[["h5py.File"], _T]) -> _T:
    import h5py

    _, content = _checked(path)
    try:
        file = h5py.File(io.BytesIO(content), "r")
    except Exception as problem:  # whatever it is: its digest is right, and yet nothing reads it
        raise RunFileDamaged(str(path), f"is not HDF5 behind its user block ({problem})") from problem
    with file:
        try:
            if bytes(file.attrs["schema"]) != content.partition(b" ")[0]:
                raise ValueError("its schema attribute is not the version in its user block")
            return what(file)
        except Exception as problem:  # whatever it is: what the program wrote is read
            raise RunFileDamaged(str(path), f"lacks what a run file has ({problem})") from problem


def _run(file: "h5py.File") -> Run:
    about = json.loads(_text(file, "about"))
    bench = parse_bench(_text(file, "texts/bench"), "bench text of the run")
    dialects = {
        name.removeprefix("dialect_"): _text(file, f"texts/{name}")
        for name in file["texts"]
        if name.startswith("dialect_")
    }
    points = [point for stage in file.get("points", ()) for point in _read_points(file[f"points/{stage}"], stage)]
    return Run(
        **{**about, "alarms": tuple(about["alarms"])},
        board=parse_board(_text(file, "texts/board"), "board text of the run"),
        bench=replace(bench, dialect_texts=dialects),
        steps=tuple(step_from(json.loads(line)) for line in _text(file, "steps").splitlines()),
        points=tuple(sorted(points, key=lambda point: point.step)),
        thru=thru_from(json.loads(_text(file, "texts/thru"))) if "thru" in file["texts"] else None,
        checks=checks_from(json.loads(_text(file, "texts/checks"))) if "checks" in file["texts"] else None,
        history=tuple(json.loads(line) for line in _text(file, "history").splitlines()),
    )


def _text(file: "h5py.Group", name: str) -> str:
    return bytes(file[name][()]).decode("utf-8")


def _read_points(group: "h5py.Group", stage: str) -> list[Point]:
    columns = [group[name][()].tolist() for name in COLUMNS]
    return [_point(stage, dict(zip(COLUMNS, row, strict=True))) for row in zip(*columns, strict=True)]


def _point(stage: str, row: dict[str, Any]) -> Point:
    values: dict[str, Any] = {"stage": stage}
    for name, one in COLUMNS.items():
        value = row[name].decode("ascii") if isinstance(row[name], bytes) else row[name]
        values[one.field] = value if one.part is None else (*values.get(one.field, ()), value)
    values["response"] = complex(*values["response"])
    values["flags"] = tuple(values["flags"].split())
    return Point(**{field.name: values[field.name] for field in fields(Point)})
