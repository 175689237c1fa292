"""The result object: one run's conclusions as plain values, for ``--json`` and inside the run file."""

from collections.abc import Mapping, Sequence
from math import isfinite
from typing import Any

from bandproof.analysis.uncertainty import Combined
from bandproof.bench.conformance import board_probability
from bandproof.bench.types import Comparison, Run, StageResult, Suspect, Verdict

__all__ = ["RESULT_SCHEMA", "bare_parameter", "board_verdict", "result_object", "stage_object"]

RESULT_SCHEMA = "bandproof-result/1"
_WORST_FIRST: tuple[Verdict, ...] = ("fail", "undecided", "pass")


def board_verdict(run: Run, stages: Sequence[StageResult]) -> Verdict | None:
    """Return the worst stage's verdict: fail, then undecided, then pass; None for a run that was cut short."""
    if run.ended == "cut_short":
        return None
    found = {stage.verdict for stage in stages}
    return next((verdict for verdict in _WORST_FIRST if verdict in found), None)


def result_object(run: Run, stages: Sequence[StageResult], files: Mapping[str, str | None]) -> dict[str, Any]:
    """Return the result of a run; ``wall_seconds`` is null here, a command that prints it puts it in.

    So is ``attempts``: what is pooled with earlier attempts on the serial number names them (`attempts.with_earlier`).
    """
    return {
        "schema": RESULT_SCHEMA,
        "verdict": board_verdict(run, stages),
        "conformance_probability": board_probability(stages) if run.ended == "complete" else None,
        "ended": run.ended,
        "serial": run.serial,
        "run_id": run.run_id,
        "bench_seconds": run.bench_seconds,
        "wall_seconds": None,
        "points": sum(point.purpose in ("curve", "closing") for point in run.points),
        "alarms": [*run.alarms, *(alarm for stage in stages for alarm in stage.alarms)],
        "stages": [stage_object(stage) for stage in stages],
        "files": dict(files),
        "attempts": None,
    }


def stage_object(stage: StageResult) -> dict[str, Any]:
    """Return what is concluded about one stage."""
    return {
        "name": stage.name,
        "kind": stage.kind,
        "verdict": stage.verdict,
        "model": stage.model,
        "parameters": {name: _parameter(figure) for name, figure in stage.figures.items()},
        "fit": {
            "reduced_chi_square": _number(stage.reduced_chi_square),
            "points": stage.points,
            "lack_of_fit": stage.lack_of_fit,
        },
        "suspects": [_suspect(suspect) for suspect in stage.suspects],
    }


def _suspect(suspect: Suspect) -> dict[str, Any]:
    return {
        "text": suspect.text,
        "kind": suspect.kind,
        "parts": list(suspect.parts),
        "estimate": suspect.estimate,
        "delta_chi_square": _number(suspect.delta_chi_square),
    }


def bare_parameter(unit: str, measured: float, budget: Combined) -> dict[str, Any]:
    """Return a figure that has no design to be compared with: the same keys, null what only a design could say."""
    return {
        "unit": unit,
        "designed": None,
        "predicted": None,
        "measured": _number(measured),
        "standard_uncertainty": _number(budget.u),
        "expanded_uncertainty": _number(budget.expanded),
        "coverage_factor": _number(budget.coverage_factor),
        "rule": None,
        "deviation": None,
        "lower_limit": None,
        "upper_limit": None,
        "verdict": None,
        "conformance_probability": None,
        "conformance_prior": None,
    }


def _parameter(figure: Comparison) -> dict[str, Any]:
    return {
        "unit": figure.unit,
        "designed": _number(figure.designed),
        "predicted": _number(figure.predicted),
        "measured": _number(figure.measured),
        "standard_uncertainty": _number(figure.standard_uncertainty),
        "expanded_uncertainty": _number(figure.expanded_uncertainty),
        "coverage_factor": _number(figure.coverage_factor),
        "rule": figure.rule,
        "deviation": _number(figure.deviation),
        "lower_limit": _number(figure.lower_limit),
        "upper_limit": _number(figure.upper_limit),
        "verdict": figure.verdict,
        "conformance_probability": _number(figure.conformance_probability),
        "conformance_prior": "flat" if figure.prior is None else "process spread",
    }


def _number(value: float) -> float | None:
    """JSON has no NaN: what could not be had is null."""
    return float(value) if isfinite(value) else None
