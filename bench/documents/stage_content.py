"""What the report says of one stage: its points, its fit, its budgets, what is noted and suspected."""

from collections.abc import Sequence
from math import degrees, isfinite
from typing import Any

import numpy as np

from bandproof.analysis.uncertainty import Row
from bandproof.bench.budget import dominating
from bandproof.bench.documents.cells import SYMBOLS, WORDS, measured, why_undecided
from bandproof.bench.documents.stage_picture import draw_stage
from bandproof.bench.picture import StageView, as_svg
from bandproof.bench.quantities import engineering
from bandproof.bench.types import QUANTITIES, Quantity, Run, StageResult

__all__ = ["full_stop", "stage_content", "undecided"]


def full_stop(text: str) -> str:
    """Return a sentence with its end, where it has none yet."""
    return text if text.endswith((".", "?", "!")) else f"{text}."


def undecided(stage: StageResult) -> list[str]:
    """Return why figures of a stage that were found are undecided, a sentence each."""
    return [
        f"{stage.name} {SYMBOLS[figure.quantity]} {measured(figure)} {why_undecided(figure)}."
        for figure in stage.figures.values()
        if figure.verdict == "undecided" and isfinite(figure.measured)
    ]


def stage_content(run: Run, stage: StageResult, view: StageView | None) -> dict[str, Any]:
    """Return all the report says of one stage; ``view`` is None where it has no fit."""
    asked = run.board.stage(stage.name)
    return {
        "name": stage.name,
        "verdict": WORDS[stage.verdict],
        "taps": f"{stage.kind}, from {asked.tap_in} to {asked.tap_out}, {asked.circuit}",
        "fit": _fit(stage),
        "picture": as_svg(draw_stage(view)) if view is not None else None,
        "points": _points(view) if view is not None else [],
        "closing": view is not None and bool(view.at[0] == view.at[-1]),
        "budget": _budget(stage),
        "notes": _notes(run, stage),
        "undecided": undecided(stage),
        "suspects": [suspect.text for suspect in stage.suspects],
    }


def _notes(run: Run, stage: StageResult) -> list[str]:
    """Return what the run and the stage warn of this stage, but for what `_fit` says already."""
    mine = [alarm for alarm in run.alarms if alarm.startswith(f"{stage.name}: ")]
    told = dict.fromkeys(alarm.removeprefix(f"{stage.name}: ") for alarm in (*mine, *stage.alarms))
    return [text for text in told if stage.theta or text != stage.status]


def _fit(stage: StageResult) -> str:
    if not stage.theta:
        return full_stop(f"No fit: {stage.status}")
    lack = " The points do not follow the model." if stage.lack_of_fit else ""
    chi = f"{stage.reduced_chi_square:.3g}" if isfinite(stage.reduced_chi_square) else "not known"
    return f"Model {stage.model}, {stage.points} points, chi-square per degree of freedom {chi}.{lack}"


def _points(view: StageView) -> list[list[str]]:
    """Return the points of the fit: frequency, magnitude, phase, 2 u of the magnitude, distance from the fit."""
    peak = view.result.figures["gain"].measured
    return [
        [
            engineering(float(frequency), "Hz", 6),
            f"{20.0 * np.log10(abs(ratio)):.3f}",
            f"{degrees(float(np.angle(ratio))):.2f}",
            f"{200.0 * u / abs(ratio):.3f}",
            f"{100.0 * abs(ratio - fitted) / peak:.3f}",
        ]
        for frequency, ratio, fitted, u in zip(view.at, view.measured, view.fitted, view.uncertainty, strict=True)
    ]


def _budget(stage: StageResult) -> dict[str, Any] | None:
    """Return every source, the largest first, with what it gives to each figure in % of the figure."""
    if not stage.budgets:
        return None
    budgets = [stage.budgets[quantity] for quantity in QUANTITIES]
    values = [stage.figures[quantity].measured for quantity in QUANTITIES]
    together = list(zip(*(budget.rows for budget in budgets), strict=True))
    together.sort(key=lambda rows: -max(row.contribution / b.u for row, b in zip(rows, budgets, strict=True)))
    largest = [dominating(budget).name for budget in budgets]
    return {
        "rows": [_source(rows, values, largest) for rows in together],
        "u": [_percent(budget.u, value) for budget, value in zip(budgets, values, strict=True)],
        "expanded": [_percent(budget.expanded, value) for budget, value in zip(budgets, values, strict=True)],
        "k": [f"{budget.coverage_factor:.2f}" for budget in budgets],
        "dominating": _told(stage),
    }


def _source(rows: Sequence[Row], values: Sequence[float], largest: Sequence[str]) -> dict[str, Any]:
    told = next((row for row in rows if row.contribution), rows[0])
    return {
        "name": told.name,
        "type": f"{told.type} {told.distribution}" if told.contribution else "",
        "sizes": [_percent(row.contribution, value) for row, value in zip(rows, values, strict=True)],
        "most": [told.name == name for name in largest],
        "reason": told.reason,
    }


def _percent(size: float, value: float) -> str:
    return f"{100.0 * size / value:.4f}" if size else "0"


def _told(stage: StageResult) -> str:
    parts = []
    for quantity in QUANTITIES:
        row, budget = dominating(stage.budgets[quantity]), stage.budgets[quantity]
        parts.append(f"{_symbol(quantity)}: {row.name}, {100.0 * (row.contribution / budget.u) ** 2:.0f} %")
    return "Largest source and its share of u². " + "; ".join(parts) + "."


def _symbol(quantity: Quantity) -> str:
    return SYMBOLS[quantity]
