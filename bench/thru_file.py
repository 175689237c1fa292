"""The file a thru is kept in, beside its bench file: NAME.thru.json, checked by its digest; earlier ones are kept."""

import hashlib
import json
import os
from pathlib import Path

from bandproof.bench.errors import FileMistakes
from bandproof.bench.plain import thru_from, thru_plain, to_json
from bandproof.bench.reading import read_text
from bandproof.bench.system import sync_folder
from bandproof.bench.types import Thru

__all__ = ["SCHEMA", "digest_of_text", "keep_thru", "read_thru", "thru_path"]

SCHEMA = "bandproof-thru/1"
_INSTEAD = "measure a new one (bandproof thru), or leave it out (sweep --without-thru)"


def thru_path(bench_path: Path) -> Path:
    """Return where the thru of a bench is kept: NAME.thru.json beside NAME.bench.toml."""
    name = bench_path.name.removesuffix(".toml").removesuffix(".bench")
    return bench_path.with_name(f"{name}.thru.json")


def digest_of_text(text: str) -> str:
    """Return the SHA-256 of a text in UTF-8."""
    return hashlib.sha256(text.encode("utf-8")).hexdigest()


def keep_thru(path: Path, thru: Thru) -> Path | None:
    """Write a thru, synced before it gets its name; return where the one that was there before is kept now.

    Raises
    ------
    OSError
        The folder cannot be written; the thru that was there is still there.
    """
    earlier = _set_aside(path) if path.exists() else None
    plain = thru_plain(thru)
    content = {"schema": SCHEMA, "sha256": digest_of_text(to_json(plain)), "thru": plain}
    part = path.with_name(path.name + ".part")
    try:
        with part.open("w", encoding="utf-8") as file:
            file.write(json.dumps(content, indent=1, ensure_ascii=False) + "\n")
            file.flush()
            os.fsync(file.fileno())
        part.replace(path)
    except OSError:
        part.unlink(missing_ok=True)
        raise
    sync_folder(path.parent)
    return earlier


def _set_aside(path: Path) -> Path:
    """Copy a thru under the next free number, so that at no instant there is none."""
    number = 1
    while True:
        copy = path.with_name(f"{path.name.removesuffix('.json')}.{number}.json")
        try:
            with copy.open("xb") as file:
                file.write(path.read_bytes())
                file.flush()
                os.fsync(file.fileno())
        except FileExistsError:
            number += 1
            continue
        return copy


def read_thru(path: Path) -> Thru | None:
    """Return the thru a file keeps; None where there is no file.

    Raises
    ------
    FileMistakes
        It cannot be read, is no thru, or is not as it was written.
    """
    if not path.exists():
        return None
    try:
        content = json.loads(read_text(path))
        if content["schema"] != SCHEMA:
            raise FileMistakes(str(path), (f"has a schema this version does not read; {_INSTEAD}",))
        if digest_of_text(to_json(content["thru"])) != content["sha256"]:
            raise FileMistakes(str(path), (f"is damaged: its content does not match its digest; {_INSTEAD}",))
        return thru_from(content["thru"])
    except (KeyError, TypeError, ValueError, RecursionError) as problem:
        raise FileMistakes(str(path), (f"is no thru of this program; {_INSTEAD}",)) from problem
