"""The verdict of several attempts on a serial number together, and whether one more can change it.

Figures are averaged where attempts do not contradict each other, and only what repeats by chance (type A) is lowered.
What noise left undecided earns one attempt with longer records; where U is of what is the same in every attempt, none
helps.
"""

from collections.abc import Mapping, Sequence
from dataclasses import replace
from math import copysign, hypot, isfinite
from pathlib import Path
from typing import Any

from bandproof.analysis.decision import worst
from bandproof.analysis.uncertainty import Combined, Row, combine, share
from bandproof.bench.attempts import RUN, Attempt
from bandproof.bench.comparison import judged, read_figure
from bandproof.bench.errors import RunFileDamaged
from bandproof.bench.evaluate import evaluate
from bandproof.bench.result import board_verdict
from bandproof.bench.runfile import digest_of, read_run
from bandproof.bench.types import QUANTITIES, Board, Limit, Quantity, Run, Stage, StageResult

__all__ = ["LONGER", "earned", "judged_otherwise", "outlook", "pooled", "with_earlier"]

LONGER = 4.0  # times: halves the noise of a record, and two attempts together then have 0.45 of the first one's
_WORTH = 0.25  # of u², what repeats by chance: less, and longer records lower U by less than a tenth; arbitrary
_APART = 2.0  # times both U together: noise alone does it to one figure in fifteen thousand
_SHARED = "thru"  # type A, but two runs that used one stored thru have it in common
_OF_BENCH = "reproducibility"  # type A, but of the bench over days: two runs may well be on one


def earned(place: Path, known: Sequence[Attempt]) -> float:
    """Return how many times as long as usual the next attempt's records are: `LONGER` where noise left it undecided."""
    counting = [attempt for attempt in known if attempt.counts]
    if [attempt.verdict for attempt in counting] != ["undecided"]:
        return 1.0
    run = _run_of(place, counting[0].number)
    noisy, stuck = _undecided(run, evaluate(run))
    return LONGER if noisy and not stuck else 1.0


def judged_otherwise(place: Path, known: Sequence[Attempt], board: Board) -> str:
    """Return by what other limits an attempt that counts was judged, in words; "" where by none."""
    for attempt in known:
        if attempt.counts and attempt.verdict and (told := _other_limits(_run_of(place, attempt.number), board)):
            return told
    return ""


def _run_of(place: Path, number: int) -> Run:
    return read_run(place / str(number) / RUN)


def _other_limits(before: Run, board: Board) -> str:
    """Return in words the first limit of a run that is not the board's."""
    theirs = {stage.name: stage for stage in before.board.stages}
    for stage in board.stages:
        for quantity, limit in stage.limits.items():
            other = theirs[stage.name].limits[quantity] if stage.name in theirs else limit
            if other != limit:
                return (
                    f"attempt {before.attempt} was judged by other limits: {quantity} of {stage.name} "
                    f"{_span(quantity, other)}, now {_span(quantity, limit)}"
                )
    return ""


def _span(quantity: Quantity, limit: Limit) -> str:
    spread = f", spread {limit.prior.sd:.3g}" if limit.prior else ""
    return f"{read_figure(quantity, limit.lower)} to {read_figure(quantity, limit.upper)} by rule {limit.rule}{spread}"


def outlook(run: Run, stages: Sequence[StageResult], result: Mapping[str, Any]) -> str:
    """Return whether measuring once more can decide an undecided board, in words; "" where there is nothing to say."""
    if result["verdict"] != "undecided":
        return ""
    attempts = result["attempts"] or ()
    if sum(entry["pooled"] for entry in attempts) > 1 or (attempts and attempts[-1]["reason"]):
        return "It was measured twice: now a person decides."
    noisy, stuck = _undecided(run, stages)
    if not stuck:
        return _EARNED if noisy else ""
    name, budget = next(iter(stuck.items()))
    row = max((row for row in budget.rows if not _by_chance(row, common=True)), key=lambda row: row.contribution)
    return (
        f"Measuring it again cannot help: {name} is undecided, and {100.0 * share(row, budget):.0f} % of its u² is "
        f"{row.name}, the same in every attempt. A better bench decides, or a person."
    )


_EARNED = (
    "Noise left it undecided. Sweep it once more, no reason is needed: records will be "
    f"{LONGER:.0f} times as long, and the verdict is of both attempts."
)


def _undecided(run: Run, stages: Sequence[StageResult]) -> tuple[dict[str, Combined], dict[str, Combined]]:
    """Return the budgets of undecided figures: those in which chance counts, and the others; none that is in doubt."""
    noisy, stuck = dict[str, Combined](), dict[str, Combined]()
    for stage in filter(_is_sound, stages):
        for quantity, budget in stage.budgets.items():
            if stage.figures[quantity].verdict == "undecided":
                chance = sum(share(row, budget) for row in budget.rows if _by_chance(row, common=run.thru is not None))
                (noisy if chance >= _WORTH else stuck)[f"{quantity} of {stage.name}"] = budget
    return noisy, stuck


def with_earlier(
    run: Run, stages: tuple[StageResult, ...], place: Path, known: Sequence[Mapping[str, Any]], reason: str
) -> tuple[tuple[StageResult, ...], list[dict[str, Any]] | None]:
    """Return a run's stages pooled with its earlier attempts that count, and all attempts as the result names them.

    ``known`` are the attempts that were there when the run began (``attempt``, ``digest``, ``verdict``, ``pooled``);
    None is returned where there are none. A run file that is not what it was then leaves the verdict undecided.
    """
    if not known:
        return stages, None
    own = board_verdict(run, stages)
    named = [dict(entry) for entry in known]
    named.append({"attempt": run.attempt, "digest": None, "verdict": own, "pooled": own is not None})
    named[-1]["reason"] = reason
    if own is None:
        return stages, named
    runs = []
    for entry in known:
        path = place / str(entry["attempt"]) / RUN
        try:
            if entry["pooled"] and digest_of(path) == entry["digest"]:
                runs.append(read_run(path))
            elif entry["pooled"]:
                raise RunFileDamaged(str(path), "is not the run that was there before")
        except RunFileDamaged as problem:
            told = f"attempt {entry['attempt']} cannot be pooled: {problem}"
            return tuple(
                replace(s, verdict="undecided", alarms=(*s.alarms, f"{s.name}: {told}")) for s in stages
            ), named
    return pooled([*runs, run], [*map(evaluate, runs), stages]), named


def pooled(runs: Sequence[Run], results: Sequence[Sequence[StageResult]]) -> tuple[StageResult, ...]:
    """Return the stages of the last of several runs, their figures the means over all runs, judged anew.

    A run counts by the samples of its records, to which the variance of its noise is inverse. A stage that is in doubt
    stays so in the last run, and is left out where it was so before.
    """
    stored = [run.thru.started for run in runs if run.thru is not None]
    common = len(set(stored)) < len(stored)
    found = []
    others = [told for run in runs[:-1] if (told := _other_limits(run, runs[-1].board))]
    for last in results[-1]:
        same = [
            (run.attempt, stage, _samples(run, stage.name))
            for run, result in zip(runs, results, strict=True)
            for stage in result
            if stage.name == last.name and _is_sound(stage)
        ]
        several = len(same) > 1 and _is_sound(last)
        found.append(_together(runs[-1].board.stage(last.name), same, common) if several else last)
    if found and others:
        found[0] = replace(found[0], alarms=(*found[0].alarms, *others))
    return tuple(found)


def _samples(run: Run, name: str) -> int:
    return max(point.samples for point in run.points if point.stage == name and point.purpose == "curve")


def _is_sound(stage: StageResult) -> bool:
    return bool(stage.budgets) and all(isfinite(f.conformance_probability) for f in stage.figures.values())


def _together(stage: Stage, same: Sequence[tuple[int, StageResult, int]], common: bool) -> StageResult:
    results = [result for _, result, _ in same]
    if told := _contradiction(same[0][0], results[0], same[-1][0], results[-1]):
        return _in_doubt(stage, results[-1], told)
    weights = [samples / sum(samples for *_, samples in same) for *_, samples in same]
    last, figures, budgets = results[-1], {}, {}
    for quantity in QUANTITIES:
        rows = zip(*(result.budgets[quantity].rows for result in results), strict=True)
        budgets[quantity] = combine([_row(together, weights, common) for together in rows])
        value = sum(w * result.figures[quantity].measured for w, result in zip(weights, results, strict=True))
        predicted, repeatability = last.figures[quantity].predicted, budgets[quantity].rows[0].contribution
        figures[quantity] = judged(stage, quantity, predicted, value, repeatability, budgets[quantity], "")
    verdict = worst(*(figure.verdict for figure in figures.values() if figure.verdict))
    return replace(last, figures=figures, budgets=budgets, verdict=verdict)


def _contradiction(one: int, first: StageResult, two: int, last: StageResult) -> str:
    """Return in words that two attempts cannot both be right about one stage, or nothing."""
    for quantity in QUANTITIES:
        a, b = first.figures[quantity], last.figures[quantity]
        if abs(a.measured - b.measured) > _APART * hypot(a.expanded_uncertainty, b.expanded_uncertainty):
            return (
                f"attempts {one} and {two} do not agree: {quantity} {read_figure(quantity, a.measured)} and "
                f"{read_figure(quantity, b.measured)}, farther apart than U allows. They are not averaged: what is "
                "shown is the last. Was the board, a contact or the bench changed? After a repair, sweep with --repair"
            )
    return ""


def _in_doubt(stage: Stage, last: StageResult, told: str) -> StageResult:
    figures = {
        quantity: judged(stage, quantity, old.predicted, old.measured, old.repeatability, last.budgets[quantity], told)
        for quantity, old in last.figures.items()
    }
    return replace(last, figures=figures, verdict="undecided", alarms=(*last.alarms, f"{last.name}: {told}"))


def _row(together: Sequence[Row], weights: Sequence[float], common: bool) -> Row:
    """Return a row of a mean: what repeats by chance adds in squares, all else is the same in each attempt."""
    parts = [replace(row, sensitivity=w * row.sensitivity) for w, row in zip(weights, together, strict=True)]
    size, dof = sum(part.contribution for part in parts), min(part.dof for part in parts)
    if _by_chance(parts[-1], common=common):
        chance = combine(parts)
        size, dof = chance.u, chance.dof  # JCGM 100:2008, G.4.1
    if not size:
        return together[-1]
    told = max(parts, key=lambda row: row.contribution)
    return replace(
        told,
        standard_uncertainty=size,
        sensitivity=copysign(1.0, told.sensitivity),
        dof=dof,
        reason=f"{told.reason}; mean of {len(together)} attempts",
    )


def _by_chance(row: Row, *, common: bool) -> bool:
    return row.type == "A" and row.name != _OF_BENCH and not (common and row.name == _SHARED)
