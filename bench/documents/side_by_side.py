"""Two runs of one board on one page: before and after a repair, or two attempts, figure by figure."""

from collections.abc import Sequence
from dataclasses import dataclass
from datetime import datetime
from math import hypot, isfinite, nan
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from bandproof.analysis.models import band_response
from bandproof.bench.attempts import repairs
from bandproof.bench.documents import cells
from bandproof.bench.documents.report import typeset, write_whole
from bandproof.bench.errors import BadInput
from bandproof.bench.evaluate import evaluate, views
from bandproof.bench.picture import StageView, as_svg, draw_limits, labels, numbered, ticks
from bandproof.bench.result import board_verdict
from bandproof.bench.runfile import digest_of, read_result, read_run
from bandproof.bench.types import QUANTITIES, Comparison, Run, StageResult

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

__all__ = [
    "Side",
    "change",
    "change_in_U",
    "draw_both",
    "in_order",
    "read_side",
    "side_by_side_bytes",
    "write_side_by_side",
]

_TEMPLATE = "side_by_side.typ"
_NAMES = ("before", "after")
_SIZE = (6.85, 3.1)  # inches: the width of the text on A4
_SMALLEST = 7.0  # points
_NONE = "–"


@dataclass(frozen=True)
class Side:
    """One of the two runs, evaluated by itself: pooled with the other one it would hide half of the change."""

    path: Path
    run: Run
    stages: tuple[StageResult, ...]
    result: dict[str, Any]
    digest: str


def read_side(path: Path) -> Side:
    """Return a stored run as one of two (RunFileDamaged when it is not as it was written)."""
    run = read_run(path)
    return Side(path, run, evaluate(run), read_result(path), digest_of(path))


def in_order(one: Side, other: Side) -> tuple[Side, Side]:
    """Return two runs, the earlier one first.

    Raises
    ------
    BadInput
        They are one run, or of two boards: another serial number, or other stages.
    """
    before, after = sorted((one, other), key=lambda side: (side.run.started, side.run.attempt, side.digest))
    serials = [side.run.serial for side in (before, after)]
    stages = [{(stage.name, stage.kind) for stage in side.run.board.stages} for side in (before, after)]
    if before.digest == after.digest:
        raise BadInput(f"{one.path} and {other.path} are the same run: name two")
    if serials[0] != serials[1]:
        raise BadInput(f"{before.path} is of {serials[0]}, {after.path} of {serials[1]}: name two runs of one serial")
    if lone := sorted({name for name, _ in stages[0] ^ stages[1]}):
        told = f"{', '.join(lone[:3])}{' ...' if len(lone) > 3 else ''}"
        raise BadInput(f"{before.path} and {after.path} are not of one board: stages that only one has: {told}")
    return before, after


def write_side_by_side(one: Path, other: Path, out: Path | None) -> Path:
    """Write the page about two stored runs and return its path, without ``out`` beside the later run.

    Raises
    ------
    BadInput
        They are no two runs of one board, or one is not as it was written (RunFileDamaged), or there is no typst.
    """
    before, after = in_order(read_side(one), read_side(other))
    path = out or after.path.with_name(f"attempts_{before.run.attempt}_and_{after.run.attempt}.pdf")
    write_whole(path, side_by_side_bytes(before, after))
    return path


def side_by_side_bytes(before: Side, after: Side) -> bytes:
    """Return the page about two runs, a PDF, the same bytes for the same runs (NoReport)."""
    return typeset(_TEMPLATE, _content(before, after), datetime.fromisoformat(after.run.started))


def change(before: Comparison, after: Comparison) -> str:
    """Return how a figure changed, in per cent, gain in decibels."""
    ratio = after.measured / before.measured
    if not (isfinite(ratio) and ratio > 0.0):
        return _NONE
    return f"{20.0 * np.log10(ratio):+.2f} dB" if after.quantity == "gain" else f"{100.0 * (ratio - 1.0):+.2f} %"


def change_in_U(before: Comparison, after: Comparison) -> float:
    """Return the change over both U, added in squares: above 1 it is more than both measurements together explain.

    What both runs have in common cancels in the change but not here, so it claims less than it could.
    Source: ISO 13528, E_n score.
    """
    return (after.measured - before.measured) / hypot(before.expanded_uncertainty, after.expanded_uncertainty)


def _content(before: Side, after: Side) -> dict[str, Any]:
    run, sides = after.run, (before, after)
    drawn = [views(side.run, side.stages) for side in sides]
    return {
        "head": {
            "title": run.board.title,
            "drawing": run.board.drawing,
            "revision": run.board.revision,
            "serial": run.serial,
            "attempt": f"{before.run.attempt} and {run.attempt}",
            "started": cells.utc(run.started),
            "date": run.started[:19],
            "file": f"run files {before.digest[:8]}… and {after.digest[:8]}…",
        },
        "facts": _facts(before, after),
        "digests": [[f"Run file {name}, SHA-256", side.digest] for name, side in zip(_NAMES, sides, strict=True)],
        "rows": _rows(before.stages, after.stages),
        "picture": as_svg(draw_both(*drawn)) if any(drawn) else None,
        "cautions": [*_differences(before.run, run), *_told(sides, "alarms")],
        "suspects": _told(sides, "suspects"),
    }


def _facts(before: Side, after: Side) -> list[list[str]]:
    """Return name, before, after of what is to be known of each run."""
    both = (before, after)
    first, second = before.run, after.run
    log = repairs(after.path.parent.parent)
    done = [
        [repair for repair in log if repair.after < first.attempt],
        [repair for repair in log if first.attempt <= repair.after < second.attempt],
    ]
    return [
        ["Attempt", *(str(side.run.attempt) for side in both)],
        ["Measured", *(cells.utc(side.run.started) for side in both)],
        ["Verdict", *map(_verdict, both)],
        [
            "Repaired before it",
            *("; ".join(f"{r.text} ({r.utc[:10]}, {r.operator})" for r in some) or "no entry" for some in done),
        ],
        ["Reason to retest", *((side.result["attempts"] or [{}])[-1].get("reason") or "none" for side in both)],
        ["Operator", *(side.run.operator or "not stated" for side in both)],
        ["Bench", *(side.run.bench.title for side in both)],
        ["Ambient", *("not stated" if s.run.ambient is None else f"{s.run.ambient:.4g} °C" for s in both)],
        ["Note", *(side.run.note or "none" for side in both)],
    ]


def _verdict(side: Side) -> str:
    """Return a run's verdict by itself, and the stored one where that is of several attempts together."""
    own = cells.WORDS[board_verdict(side.run, side.stages)]
    together = [str(entry["attempt"]) for entry in side.result["attempts"] or () if entry["pooled"]]
    if side.run.ended == "cut_short":
        return f"none, cut short: {side.run.reason}"
    if len(together) < 2:
        return own
    return f"{own} by itself; attempts {', '.join(together)} together: {cells.WORDS[side.result['verdict']]}"


def _rows(before: Sequence[StageResult], after: Sequence[StageResult]) -> list[dict[str, Any]]:
    first, second = ({stage.name: stage for stage in stages} for stages in (before, after))
    names = dict.fromkeys([*second, *first])
    return [row for name in names for row in _band(name, first.get(name), second.get(name))]


def _band(name: str, before: StageResult | None, after: StageResult | None) -> list[dict[str, Any]]:
    rows = []
    for quantity in QUANTITIES:
        first, last = (stage.figures[quantity] if stage else None for stage in (before, after))
        pair, (known, *_) = (first, last), [figure for figure in (last, first) if figure]
        size = change_in_U(first, last) if first and last else nan
        rows.append(
            {
                "band": name,
                "figure": cells.SYMBOLS[quantity],
                "designed": cells.designed(known),
                "measured": [cells.measured(figure) if figure else "not measured" for figure in pair],
                "change": change(first, last) if first and last else _NONE,
                "in_U": f"{size:+.1f}" if isfinite(size) else _NONE,
                "beyond": isfinite(size) and abs(size) > 1.0,
                "verdicts": [cells.WORDS[figure.verdict] if figure else _NONE for figure in pair],
            }
        )
    return rows


def _differences(before: Run, after: Run) -> list[str]:
    """Return in which other respects than the board the two runs differ."""
    found = []
    if before.board.text != after.board.text:
        found.append("The board file changed between the runs; designed values are those of the later one.")
    if dict(before.identities) != dict(after.identities):
        found.append("Other instruments answered in the later run.")
    return found


def _told(sides: Sequence[Side], what: str) -> list[str]:
    """Return the alarms or suspects of both runs."""
    found = []
    for name, side in zip(_NAMES, sides, strict=True):
        told = [entry for stage in side.stages for entry in getattr(stage, what)]
        texts = [*side.run.alarms, *told] if what == "alarms" else [suspect.text for suspect in told]
        found += [f"{name}: {text}" for text in texts]
    return found


# --- the picture ---


def draw_both(before: Sequence[StageView], after: Sequence[StageView]) -> "Figure":
    """Return both runs' curves: the later one broad and grey with dots, the earlier one dashed with rings over it."""
    from matplotlib.figure import Figure

    figure = Figure(figsize=_SIZE, layout="constrained")
    axes = figure.add_subplot()
    for view in after:
        _draw(axes, view, "-", color="0.65", width=2.4)
        axes.plot(view.at, _dB(view.measured), "o", markersize=2.2, color="black", zorder=4)
    for view in before:
        _draw(axes, view, "--", color="black", width=0.9)
        axes.plot(
            view.at, _dB(view.measured), "o", markersize=5.0, fillstyle="none", color="black", markeredgewidth=0.7
        )
    for view, label in zip(after or before, labels(after or before), strict=True):
        draw_limits(axes, view, label, letters=_SMALLEST)
    _dress(axes, [*before, *after], numbered(after or before))
    return figure


def _dB(ratio: Any) -> Any:
    return 20.0 * np.log10(np.abs(ratio))


def _draw(axes: "Axes", view: StageView, style: str, *, color: str, width: float) -> None:
    ends = [*view.frequency[[0, -1]].tolist(), *view.at.tolist()]
    frequency = np.geomspace(min(ends), max(ends), 200)
    curve = band_response(np.array([view.result.theta]), frequency[None])[0]
    axes.plot(frequency, _dB(curve), style, color=color, linewidth=width)


def _dress(axes: "Axes", drawn: Sequence[StageView], more: str) -> None:
    lowest = min(min(view.frequency[0], view.at.min()) for view in drawn)
    highest = max(max(view.frequency[-1], view.at.max()) for view in drawn)
    top = max(_dB(view.result.figures["gain"].upper_limit) for view in drawn)
    points = np.concatenate([_dB(view.measured) for view in drawn])
    axes.set_xscale("log")
    axes.set_xlim(lowest, highest)
    axes.set_ylim(min(top - 16.0, float(points.min()) - 2.0), max(top, float(points.max())) + 2.5)
    ticks(axes, lowest, highest)
    axes.grid(True, color="0.9", linewidth=0.6)
    axes.tick_params(labelsize=_SMALLEST)
    axes.set_xlabel("frequency / Hz", fontsize=_SMALLEST)
    axes.set_ylabel("gain / dB", fontsize=_SMALLEST)
    axes.set_title(
        f"dashed and rings: before   grey and dots: after   field: limits of centre and gain{more}",
        loc="left",
        fontsize=_SMALLEST,
        pad=3,
    )
