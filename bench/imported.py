"""What is concluded from a response measured elsewhere: its figures, their budgets, and the design where one is named.

A budget has what the points tell and nothing else: of the instruments that measured them nothing is known.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, replace
from math import inf, sqrt
from pathlib import PurePath
from typing import Any

from bandproof.analysis.decision import worst
from bandproof.analysis.uncertainty import Combined, Row, combine
from bandproof.bench.circuit import predict
from bandproof.bench.comparison import compared, figure, outside_by_design
from bandproof.bench.conformance import board_probability
from bandproof.bench.model_choice import Choice, choose
from bandproof.bench.response_file import Response
from bandproof.bench.result import RESULT_SCHEMA, bare_parameter, stage_object
from bandproof.bench.suspects import suspected
from bandproof.bench.types import QUANTITIES, UNITS, Board, Comparison, Quantity, Stage, StageResult

__all__ = ["Imported", "imported_object", "read_off"]


@dataclass(frozen=True, slots=True, eq=False)
class Imported:
    """A response, the model it was read with, its figures' budgets and their comparison with the design, if any."""

    response: Response
    choice: Choice
    budgets: Mapping[Quantity, Combined]
    stage: StageResult

    @property
    def measured(self) -> Mapping[Quantity, float]:
        """The figures: Hz, ratio, ratio."""
        return {quantity: figure(self.choice.fit, quantity)[0] for quantity in QUANTITIES}


def read_off(found: Response, *, model: str | None = None, board: Board | None = None, stage: str = "") -> Imported:
    """Return what is concluded from a response; with a board, compared with the stage of that name.

    Raises
    ------
    FileMistakes
        The points follow no band.
    KeyError
        The board has no such stage.
    """
    designed = board.stage(stage) if board is not None else None
    choice = choose(found, model)
    budgets = {quantity: combine(_rows(choice, quantity)) for quantity in QUANTITIES}
    figures: dict[Quantity, Comparison] = {}
    alarms = list(choice.alarms)
    if board is not None and designed is not None:
        prediction = predict(board, designed)
        figures = {
            quantity: compared(designed, quantity, prediction, choice.fit, budgets[quantity], choice.doubt)
            for quantity in QUANTITIES
        }
        alarms += outside_by_design(designed, prediction)
    concluded = _result(found, choice, designed, figures, budgets, alarms)
    if board is not None:
        concluded = replace(concluded, suspects=suspected(board, [concluded]).get(concluded.name, ()))
    return Imported(found, choice, budgets, concluded)


def _rows(choice: Choice, quantity: Quantity) -> list[Row]:
    _, u = figure(choice.fit, quantity)
    dof = choice.scatter.dof
    source = "stated in the file" if choice.scatter.is_stated else "estimated from the points"
    noise = Row("repeatability", "A", "normal" if dof == inf else "t", u, 1.0, dof, f"noise {source}, through the fit")
    shift = abs(choice.shifts.get(quantity, 0.0))
    reason = "what a leakage would move" if choice.shifts else "0, because the model follows the points, or see alarms"
    return [noise, Row("misfit", "B", "uniform", shift / sqrt(3.0), 1.0, inf, reason)]


def _result(
    found: Response,
    choice: Choice,
    stage: Stage | None,
    figures: Mapping[Quantity, Comparison],
    budgets: Mapping[Quantity, Combined],
    alarms: list[str],
) -> StageResult:
    fit = choice.fit
    name = stage.name if stage else PurePath(found.path).stem
    return StageResult(
        name=name,
        kind="band",
        verdict=worst(*(figure.verdict for figure in figures.values() if figure.verdict)) if figures else None,
        model=choice.model,
        figures=figures,
        theta=tuple(fit.theta[0].tolist()),
        theta_covariance=tuple(tuple(row) for row in fit.covariance[0].tolist()),
        reduced_chi_square=float(fit.chi_square[0]),
        points=len(found.frequency),
        lack_of_fit=choice.significant,
        status=fit.status[0],
        alarms=tuple(f"{name}: {alarm}" for alarm in alarms),
        budgets=budgets,
    )


def imported_object(found: Imported) -> dict[str, Any]:
    """Return the result as plain values, shaped as a run's; what no board was there to say is null."""
    stage = stage_object(found.stage)
    if not found.stage.figures:
        stage["parameters"] = {
            quantity: bare_parameter(UNITS[quantity], found.measured[quantity], budget)
            for quantity, budget in found.budgets.items()
        }
    return {
        "schema": RESULT_SCHEMA,
        "verdict": found.stage.verdict,
        "conformance_probability": board_probability([found.stage]),
        "ended": "complete",
        "serial": None,
        "run_id": None,
        "bench_seconds": None,
        "wall_seconds": None,
        "points": found.stage.points,
        "alarms": list(found.stage.alarms),
        "stages": [stage],
        "files": {"run": None, "picture": None, "report": None},
        "attempts": None,
    }
