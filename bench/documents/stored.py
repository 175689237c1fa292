"""A stored run, read and evaluated again for a document."""

from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from bandproof.bench.chain import link_of
from bandproof.bench.documents.report import REPORT
from bandproof.bench.evaluate import evaluate, views
from bandproof.bench.picture import StageView
from bandproof.bench.pooling import with_earlier
from bandproof.bench.runfile import digest_of, read_result, read_run
from bandproof.bench.types import Run, StageResult

__all__ = ["Stored", "read_stored"]


@dataclass(frozen=True)
class Stored:
    """A run as a document shows it: stages evaluated again, pooled as the run was; result and digest as stored.

    ``link`` is that of the chain of its folder after this run, "" where no chain has it.
    """

    path: Path
    run: Run
    stages: tuple[StageResult, ...]
    result: dict[str, Any]
    digest: str
    link: str

    @property
    def views(self) -> Sequence[StageView]:
        """Return what is drawn of it."""
        return views(self.run, self.stages)

    @property
    def default_path(self) -> Path:
        """Return where its report belongs: one run a folder, what was cut short under its own name."""
        return self.path.with_name(REPORT if self.path.name == "run.h5" else f"{self.path.stem}.pdf")


def read_stored(path: Path) -> Stored:
    """Return a stored run (RunFileDamaged when it is not as it was written)."""
    run, result = read_run(path), read_result(path)
    stages = evaluate(run)
    if attempts := result["attempts"]:
        *known, own = attempts
        stages, _ = with_earlier(run, stages, path.parent.parent, known, own.get("reason", ""))
    digest = digest_of(path)
    return Stored(path, run, stages, result, digest, link_of(path, digest))
