"""From points to conclusions: the fit of each stage, its figures with their uncertainty, compared with the design."""

from collections.abc import Sequence
from math import inf, isfinite, nan, sqrt

import numpy as np

from bandproof.analysis.decision import decide, worst
from bandproof.analysis.fit import BandFit, fit_bands
from bandproof.analysis.models import band_response
from bandproof.analysis.types import FloatArray
from bandproof.analysis.uncertainty import Combined, Row, combine
from bandproof.bench.circuit import Prediction, predict
from bandproof.bench.misfit import StageFit, arrays, look_for_misfit
from bandproof.bench.picture import StageView
from bandproof.bench.types import QUANTITIES, UNITS, Bench, Board, Comparison, Point, Quantity, Run, Stage, StageResult

__all__ = ["StageFit", "evaluate", "evaluate_stage", "fit_points", "usable", "views"]

LEAST_LSB = 20.0  # peak; below, quantization is not white and costs 2.5 to 5 times the fit's own variance
MODEL = "band+delay"
_SPOILED = {"overload", "undersampled", "folded"}
_FEWEST = 3  # points: five unknowns, two data a point, and one to judge the fit by


def usable(points: Sequence[Point]) -> tuple[Point, ...]:
    """Return the points of one stage that may enter a fit: of its curve, at its last level, sound and large enough."""
    curve = [point for point in points if point.purpose in ("curve", "closing")]
    level = min((point.amplitude for point in curve), default=0.0)  # the last one, where distortion asked for less
    return tuple(
        point
        for point in curve
        if not _SPOILED & set(point.flags) and _is_large(point) and point.amplitude <= 1.01 * level
    )


def fit_points(points: Sequence[Point]) -> StageFit:
    """Fit the band model with delay to a stage's points; without a fit the reason is in words."""
    used = usable(points)
    if len({point.frequency for point in used}) < _FEWEST:
        return StageFit(used, None, f"only {len(used)} usable points{_lost(points)}")
    frequency, response, covariance = arrays(used)
    fit = fit_bands(frequency[None], response[None], covariance[None])
    sound = fit.status[0] in ("converged", "no progress") and all(map(isfinite, (fit.f0[0], fit.q[0], fit.u_f0[0])))
    return StageFit(used, fit if sound else None, "" if sound else f"the fit ended with {fit.status[0]!r}")


def _lost(points: Sequence[Point]) -> str:
    """Return in words what became of the points that cannot be used."""
    curve = [point for point in points if point.purpose in ("curve", "closing")]
    overloaded = [point for point in curve if "overload" in point.flags]
    small = [point for point in curve if point not in overloaded and not _is_large(point)]
    told = [f"{len(overloaded)} were overloaded"] if overloaded else []
    if small:
        levels = [max(point.levels[channel] for point in small) for channel in (0, 1)]
        told.append(
            f"{len(small)} were too small for their range (at most {levels[0]:.3g} V in, {levels[1]:.3g} V out): is "
            "the board powered, does it clip, is a probe off?"
        )
    return "".join(f", {text}" for text in told)


def _is_large(point: Point) -> bool:
    return all(level >= LEAST_LSB * lsb for level, lsb in zip(point.levels, point.lsb, strict=True))


def evaluate(run: Run) -> tuple[StageResult, ...]:
    """Return what is concluded about every stage that has points; one without a fit is undecided, and why."""
    measured = {point.stage for point in run.points}
    return tuple(
        evaluate_stage(run.board, run.bench, stage, [p for p in run.points if p.stage == stage.name])
        for stage in run.board.stages
        if stage.name in measured
    )


def evaluate_stage(board: Board, bench: Bench, stage: Stage, points: Sequence[Point]) -> StageResult:
    """Return what is concluded about one stage from its points."""
    found = fit_points(points)
    prediction = predict(board, stage)
    misfit = look_for_misfit(board, bench, stage, points, found)
    u = {quantity: _budget(found.fit, quantity, bench) for quantity in QUANTITIES}
    doubt = found.reason or misfit.doubt({name: budget.expanded for name, budget in u.items() if budget is not None})
    figures = {name: _compared(stage, name, prediction, found.fit, u[name], doubt) for name in QUANTITIES}
    fit = found.fit
    alarms = [doubt] if doubt else []
    alarms += [*misfit.alarms, *_outside_by_design(stage, prediction)]
    return StageResult(
        name=stage.name,
        kind=stage.kind,
        verdict=worst(*(figure.verdict for figure in figures.values())),
        model=MODEL,
        figures=figures,
        theta=tuple(fit.theta[0].tolist()) if fit else (),
        theta_covariance=tuple(tuple(row) for row in fit.covariance[0].tolist()) if fit else (),
        reduced_chi_square=misfit.reduced_chi_square,
        points=len(found.points),
        lack_of_fit=misfit.significant,
        status=fit.status[0] if fit else found.reason,
        alarms=tuple(f"{stage.name}: {alarm}" for alarm in alarms),
    )


def _outside_by_design(stage: Stage, prediction: Prediction) -> list[str]:
    """Return what the stage's own parts cannot keep, so that the board is not blamed for its drawing."""
    return [
        f"its parts as drawn should give {quantity} {prediction[quantity]:.4g}, outside its own limits "
        f"{limit.lower:.4g} to {limit.upper:.4g}: look at the design first"
        for quantity, limit in stage.limits.items()
        if not limit.lower <= prediction[quantity] <= limit.upper
    ]


def _budget(fit: BandFit | None, quantity: Quantity, bench: Bench) -> Combined | None:
    if fit is None:
        return None
    value, repeatability = _measured(fit, quantity)
    return combine(_rows(quantity, value, repeatability, bench))


def _compared(
    stage: Stage, quantity: Quantity, prediction: Prediction, fit: BandFit | None, budget: Combined | None, doubt: str
) -> Comparison:
    limit = stage.limits[quantity]
    value, repeatability = _measured(fit, quantity)
    u = budget.u if budget else nan
    decision = decide(value, 0.0 if budget is None else u, low=limit.lower, high=limit.upper, doubt=doubt)
    return Comparison(
        quantity=quantity,
        unit=UNITS[quantity],
        designed=limit.designed,
        predicted=prediction[quantity],
        measured=value,
        repeatability=repeatability,
        standard_uncertainty=u,
        expanded_uncertainty=budget.expanded if budget else nan,
        coverage_factor=budget.coverage_factor if budget else nan,
        rule=limit.rule,
        lower_limit=limit.lower,
        upper_limit=limit.upper,
        verdict=decision.verdict,
        conformance_probability=decision.probability,
    )


def _measured(fit: BandFit | None, quantity: Quantity) -> tuple[float, float]:
    """Return a figure and its standard uncertainty from the records' noise."""
    if fit is None:
        return nan, nan
    match quantity:
        case "centre":
            return float(fit.f0[0]), float(fit.u_f0[0])
        case "q":
            return float(fit.q[0]), float(fit.u_q[0])
        case "gain":
            return float(abs(fit.gain[0])), float(fit.u_gain[0])


def _rows(quantity: Quantity, value: float, repeatability: float, bench: Bench) -> list[Row]:
    """Return the rows known so far: noise, channel gains (for gain), the generator's frequency (for f0)."""
    rows = [Row("repeatability", "A", "normal", repeatability, 1.0, inf, "noise of the records through the fit")]
    if quantity == "gain":
        # Two channels, each uniform within the half-width; a ratio has the difference of both.
        declared = bench.channel_gain * sqrt(2.0 / 3.0)
        rows.append(Row("channel gain", "B", "triangular", declared, value, inf, "declared in the bench file, no thru"))
    if quantity == "centre":
        declared = bench.generator_frequency / sqrt(3.0)
        rows.append(Row("generator frequency", "B", "uniform", declared, value, inf, "declared in the bench file"))
    return rows


def views(run: Run, stages: Sequence[StageResult]) -> list[StageView]:
    """Return what the picture draws: every stage that has a fit, over three decades around the designed centres."""
    fitted = [stage for stage in stages if stage.theta]
    centres = [stage.figures["centre"].designed for stage in fitted]
    by_stage = [[point for point in run.points if point.stage == stage.name] for stage in fitted]
    measured = [point.frequency for points in by_stage for point in usable(points)]
    if not fitted:
        return []
    grid = np.geomspace(min(*centres, *measured) / 1.5, max(*centres, *measured) * 1.5, 400)
    return [_view(run, stage, grid) for stage in fitted]


def _view(run: Run, stage: StageResult, grid: FloatArray) -> StageView:
    points = usable([point for point in run.points if point.stage == stage.name])
    frequency, response, covariance = arrays(points)
    designed = [stage.figures[quantity].designed for quantity in QUANTITIES]
    target = np.array([[np.log(designed[0]), np.log(designed[1]), -designed[2], 0.0, 0.0, 0.0, 0.0]])
    along = response / np.abs(response)
    variance = (
        covariance[:, 0, 0] * along.real**2
        + 2.0 * covariance[:, 0, 1] * along.real * along.imag
        + covariance[:, 1, 1] * along.imag**2
    )
    return StageView(
        result=stage,
        frequency=grid,
        designed=band_response(target, grid[None])[0],
        at=frequency,
        measured=response,
        fitted=band_response(np.array([stage.theta]), frequency[None])[0],
        uncertainty=np.sqrt(variance),
    )
