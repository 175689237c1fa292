"""Refits: new conclusions from an old run, kept beside it and naming its digest; no run file is ever modified."""

import json
from collections.abc import Mapping
from importlib.metadata import version
from pathlib import Path
from typing import Any

from bandproof.bench.runfile import digest_of

__all__ = ["keep_refit"]


def keep_refit(run_path: Path, result: Mapping[str, Any]) -> Path:
    """Write a result beside its run file under the next free number and return the path.

    Raises
    ------
    RunFileDamaged
        The run file is not as it was written.
    OSError
        The folder cannot be written.
    """
    content = {"parent_sha256": digest_of(run_path), "version": version("bandproof"), "result": result}
    number = 1
    while True:
        path = run_path.with_name(f"{run_path.stem}.refit-{number}.json")
        try:
            with path.open("x", encoding="utf-8") as file:
                file.write(json.dumps(content, indent=1) + "\n")
        except FileExistsError:
            number += 1
            continue
        return path
