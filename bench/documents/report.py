"""The report of a run as PDF: typst sets the template with what `content` says.

What a run holds travels as JSON in one input of the template, never in its markup, so a title is set as it is written.
Only fonts that come with typst are used and every date is the run's: one run, one PDF, byte for byte.
"""

import json
import os
import re
from collections.abc import Mapping, Sequence
from datetime import datetime
from importlib import resources
from pathlib import Path
from typing import Any

from bandproof.bench.documents.content import content
from bandproof.bench.errors import BadInput
from bandproof.bench.picture import StageView
from bandproof.bench.types import Run, StageResult

__all__ = ["REPORT", "NoReport", "report_bytes", "typeset", "write_report", "write_whole"]

REPORT = "report.pdf"
_STYLE, _TEMPLATE = "style.typ", "report.typ"
_STANDARD = "a-2b"  # PDF/A: readable without anything outside the file
_LONG = re.compile(r"\S{25,}")  # a word that no column holds; arbitrary
_JOINT = re.compile(r"(?<=[_/.,:=-])")  # where such a word may break; within a part that is longer than ...
_WHOLE = 15  # ... so many letters, anywhere; arbitrary
_BREAK = "\u200b"  # where a line may break, without width


class NoReport(BadInput):
    """No report can be made; says why."""

    def __init__(self, reason: str) -> None:
        super().__init__(reason)
        self.reason = reason

    def __str__(self) -> str:
        return f"no report was written: {self.reason}"


def write_report(
    path: Path,
    run: Run,
    stages: Sequence[StageResult],
    result: Mapping[str, Any],
    digest: str,
    views: Sequence[StageView],
    link: str = "",
) -> None:
    """Write a run's report, whole or not at all.

    Raises
    ------
    NoReport
        typst is missing or refuses.
    OSError
        The folder cannot be written.
    """
    write_whole(path, report_bytes(run, stages, result, digest, views, link))


def write_whole(path: Path, content: bytes) -> None:
    """Write a file whole or not at all, over one that is there (OSError)."""
    part = path.with_name(path.name + ".part")
    try:
        part.write_bytes(content)
        os.replace(part, path)
    except OSError:
        part.unlink(missing_ok=True)
        raise


def report_bytes(
    run: Run,
    stages: Sequence[StageResult],
    result: Mapping[str, Any],
    digest: str,
    views: Sequence[StageView],
    link: str = "",
) -> bytes:
    """Return a run's report, a PDF (NoReport when typst is missing or refuses)."""
    return typeset(_TEMPLATE, content(run, stages, result, digest, views, link), datetime.fromisoformat(run.started))


def typeset(name: str, said: dict[str, Any], moment: datetime) -> bytes:
    """Return a PDF of what is said (with ``head`` and ``cautions``), dated ``moment``, by a template of this folder.

    Raises
    ------
    NoReport
        typst is missing or refuses.
    """
    try:
        import typst
    except ImportError as missing:
        raise NoReport(f"the package typst is not installed ({missing}); pip install typst") from missing
    fonts = typst.Fonts(include_system_fonts=False, include_embedded_fonts=True)
    folder = resources.files("bandproof.bench.documents")
    template = (folder / _STYLE).read_bytes() + (folder / name).read_bytes()

    def compiled(**standard: Any) -> bytes:
        given = {"content": json.dumps(_breakable(said), ensure_ascii=False)}
        document: bytes = typst.compile(template, sys_inputs=given, font_paths=fonts, timestamp=moment, **standard)
        return document

    try:
        return compiled(pdf_standards=_STANDARD)
    except typst.TypstError:  # a letter that no bundled font has: PDF/A forbids it, a plain PDF shows a box
        said["cautions"].append("Some characters are not in this document's fonts; they are shown as boxes.")
    try:
        return compiled()
    except typst.TypstError as refused:
        raise NoReport(f"typst refuses: {refused.message}") from refused


def _breakable(value: Any) -> Any:
    """Return plain values with places to break a line in every word longer than a column; pictures as they are."""
    if isinstance(value, str):
        return value if value.startswith("<?xml") else _LONG.sub(lambda word: _broken(word[0]), value)
    if isinstance(value, dict):
        return {key: _breakable(entry) for key, entry in value.items()}
    return [_breakable(entry) for entry in value] if isinstance(value, list) else value


def _broken(word: str) -> str:
    parts = _JOINT.split(word)
    return _BREAK.join(_BREAK.join(part) if len(part) > _WHOLE else part for part in parts)
