"""From points to conclusions: the fit of each stage, its figures with their uncertainty, compared with the design."""

from collections.abc import Mapping, Sequence
from dataclasses import replace
from datetime import datetime
from math import isfinite, nan

import numpy as np

from bandproof.analysis.decision import worst
from bandproof.analysis.fit import fit_bands
from bandproof.analysis.models import band_response
from bandproof.analysis.types import ComplexArray, FloatArray
from bandproof.bench.budget import budgets
from bandproof.bench.circuit import predict, predicted_response
from bandproof.bench.comparison import compared, outside_by_design
from bandproof.bench.linear import level_alarms
from bandproof.bench.misfit import Misfit, StageFit, arrays, look_for_misfit
from bandproof.bench.picture import StageView
from bandproof.bench.sources import Measured, Source, sources, systematic
from bandproof.bench.suspects import suspected
from bandproof.bench.thru import Path, Ranges, corrected, paths
from bandproof.bench.types import PASSIVE, QUANTITIES, Bench, Board, CheckHistory, Point, Run, Stage, StageResult

__all__ = ["StageFit", "described", "evaluate", "evaluate_stage", "fit_points", "known_paths", "usable", "views"]

LEAST_LSB = 20.0  # peak; below, quantization is not white and costs 2.5 to 5 times the fit's own variance
MODEL = "band+delay"
_SPOILED = {"overload", "undersampled", "folded"}
_FEWEST = 3  # points: five unknowns, two data a point, and one to judge the fit by


def usable(points: Sequence[Point], *, level: bool = True) -> tuple[Point, ...]:
    """Return the points of one stage that may enter a fit: of its curve, at its last level, sound and large enough.

    Without ``level`` those at any level, of any stages.
    """
    curve = [point for point in points if point.purpose in ("curve", "closing")]
    last = (
        min((point.amplitude for point in curve), default=0.0) if level else np.inf
    )  # where distortion asked for less
    return tuple(
        point
        for point in curve
        if not _SPOILED & set(point.flags) and _is_large(point) and point.amplitude <= 1.01 * last
    )


def fit_points(points: Sequence[Point], known: Mapping[Ranges, Path] | None = None) -> StageFit:
    """Fit the band model with delay to a stage's points, a known path divided out; without a fit: why."""
    used = usable(points)
    if len({point.frequency for point in used}) < _FEWEST:
        reason = f"{f'only {len(used)}' if used else 'no'} usable points{_lost(points)}"
        return StageFit(used, None, reason, np.zeros(0, dtype=np.complex128), np.zeros((0, 2, 2)), ())
    frequency, response, covariance = arrays(used)
    response, covariance, along = corrected(used, response, covariance, known or {})
    fit = fit_bands(frequency[None], response[None], covariance[None])
    sound = fit.status[0] in ("converged", "no progress") and all(map(isfinite, (fit.f0[0], fit.q[0], fit.u_f0[0])))
    reason = "" if sound else f"the fit ended with {fit.status[0]!r}"
    return StageFit(used, fit if sound else None, reason, response, covariance, tuple(along))


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
    """Return what is concluded about every stage that was driven; one without a fit is undecided, and why.

    Of a run that was cut short neither a stage nor a figure has a verdict.
    """
    measured, known = {point.stage for point in run.points if point.purpose != "no-signal"}, known_paths(run)
    board, bench = run.board, run.bench
    results = [
        evaluate_stage(
            board, bench, stage, [p for p in run.points if p.stage == stage.name], known, run.ambient, run.checks
        )
        for stage in board.stages
        if stage.name in measured
    ]
    suspects = suspected(board, results)
    found = tuple(replace(result, suspects=suspects.get(result.name, ())) for result in results)
    return found if run.ended == "complete" else tuple(map(_without_verdict, found))


def _without_verdict(stage: StageResult) -> StageResult:
    figures = {
        name: replace(figure, verdict=None, conformance_probability=nan) for name, figure in stage.figures.items()
    }
    return replace(stage, figures=figures, verdict=None)


def known_paths(run: Run) -> dict[Ranges, Path]:
    """Return the path on each pair of ranges, from the thru the run measured, else from the stored one it used."""
    own = paths(run.points)
    if run.thru is None:
        return own
    age = datetime.fromisoformat(run.started) - datetime.fromisoformat(run.thru.started)
    return {**paths(run.thru.points, before=age.total_seconds()), **own}


def evaluate_stage(
    board: Board,
    bench: Bench,
    stage: Stage,
    points: Sequence[Point],
    known: Mapping[Ranges, Path] | None = None,
    ambient: float | None = None,
    checks: CheckHistory | None = None,
) -> StageResult:
    """Return what is concluded about one stage from its points and the path known, in a room at ``ambient`` °C.

    ``checks`` are those of the bench on its check standard.
    """
    found = fit_points(points, known)
    prediction = predict(board, stage)
    seen, listed, misfit, doubt = _look(board, bench, stage, points, found, ambient, checks)
    rows = budgets(seen, listed) if seen else {}
    figures = {
        name: compared(stage, name, prediction, found.fit, rows.get(name), doubt, misfit.reach(name))
        for name in QUANTITIES
    }
    fit = found.fit
    alarms = [doubt] if doubt else []
    expanded_gain = rows["gain"].expanded if rows else nan
    alarms += [*misfit.alarms, *level_alarms(bench, points, found, known or {}, expanded_gain)]
    if any(path is not None and not path.is_smooth for path in found.paths):
        alarms.append(
            "the path itself is not smooth in frequency: look at probes, cables and contacts, U may be too small"
        )
    alarms += outside_by_design(stage, prediction)
    return StageResult(
        name=stage.name,
        kind=stage.kind,
        verdict=worst(*(figure.verdict for figure in figures.values() if figure.verdict)),
        model=MODEL,
        figures=figures,
        theta=tuple(fit.theta[0].tolist()) if fit else (),
        theta_covariance=tuple(tuple(row) for row in fit.covariance[0].tolist()) if fit else (),
        reduced_chi_square=misfit.reduced_chi_square,
        points=len(found.points),
        lack_of_fit=misfit.significant,
        status=fit.status[0] if fit else found.reason,
        budgets=rows,
        alarms=tuple(f"{stage.name}: {alarm}" for alarm in alarms),
    )


def described(run: Run, name: str) -> tuple[Measured, list[Source]] | None:
    """Return a stage of a run as measured, and every source of its budget but noise; None without a fit."""
    stage, points = run.board.stage(name), [point for point in run.points if point.stage == name]
    found = fit_points(points, known_paths(run))
    seen, listed, *_ = _look(run.board, run.bench, stage, points, found, run.ambient, run.checks)
    return (seen, listed) if seen else None


def _look(
    board: Board,
    bench: Bench,
    stage: Stage,
    points: Sequence[Point],
    found: StageFit,
    ambient: float | None,
    checks: CheckHistory | None,
) -> tuple[Measured | None, list[Source], Misfit, str]:
    """Return a stage as measured, its sources of uncertainty, what speaks against its fit, and the doubt in words."""
    seen = _measured(board, bench, stage, points, found, ambient, checks)
    listed = sources(seen) if seen else []
    misfit = look_for_misfit(board, bench, points, found, systematic(listed, len(found.points)))
    expanded = {name: budget.expanded for name, budget in budgets(seen, listed).items()} if seen else {}
    doubt = found.reason or misfit.doubt(expanded)
    if seen and misfit.shifts and not doubt:
        seen = replace(seen, shifts=misfit.shifts)
        listed = sources(seen)
    return seen, listed, misfit, doubt


def _measured(
    board: Board,
    bench: Bench,
    stage: Stage,
    points: Sequence[Point],
    found: StageFit,
    ambient: float | None,
    checks: CheckHistory | None,
) -> Measured | None:
    """Return a stage as measured, None without a fit."""
    if found.fit is None:
        return None
    quiet = next((point for point in points if point.purpose == "no-signal"), None)
    kept = found.points, found.covariance, found.paths, found.fit
    return Measured(board, bench, stage, *kept, quiet, {}, ambient, checks)


def views(run: Run, stages: Sequence[StageResult]) -> list[StageView]:
    """Return what the picture draws: every stage that has a fit, over three decades around the designed centres."""
    fitted = [stage for stage in stages if stage.theta]
    centres = [stage.figures["centre"].designed for stage in fitted]
    if not fitted:
        return []
    known = known_paths(run)
    fits = [fit_points([point for point in run.points if point.stage == stage.name], known) for stage in fitted]
    measured = [frequency for fit in fits for frequency in fit.frequency.tolist()]
    grid = np.geomspace(min(*centres, *measured) / 1.5, max(*centres, *measured) * 1.5, 400)
    return [_view(run.board, stage, fit, grid) for stage, fit in zip(fitted, fits, strict=True)]


def _view(board: Board, result: StageResult, found: StageFit, grid: FloatArray) -> StageView:
    stage, frequency, response = board.stage(result.name), found.frequency, found.response
    is_passive = stage.circuit == PASSIVE
    designed = [result.figures[quantity].designed for quantity in QUANTITIES]
    gain = designed[2] if is_passive else -designed[2]
    target = np.array([[np.log(designed[0]), np.log(designed[1]), gain, 0.0, 0.0, 0.0, 0.0]])
    along = response / np.abs(response)
    centre = result.figures["centre"]
    ends = [*frequency.tolist(), centre.lower_limit, centre.upper_limit]  # the limits, wherever the band was found
    near = np.geomspace(min(ends) / 1.25, max(ends) * 1.25, 200)
    return StageView(
        result=result,
        frequency=grid,
        designed=band_response(target, grid[None])[0],
        at=frequency,
        measured=response,
        fitted=band_response(np.array([result.theta]), frequency[None])[0],
        uncertainty=_spread(found.covariance, along),
        across=_spread(found.covariance, 1j * along),
        near=near,
        predicted=None if is_passive else predicted_response(board, stage, near),
    )


def _spread(covariance: FloatArray, direction: ComplexArray) -> FloatArray:
    """Return the standard uncertainty (N,) of points with covariances (N, 2, 2) in directions (N,) of length 1."""
    x, y = direction.real, direction.imag
    variance = covariance[:, 0, 0] * x**2 + 2.0 * covariance[:, 0, 1] * x * y + covariance[:, 1, 1] * y**2
    spread: FloatArray = np.sqrt(variance)
    return spread
