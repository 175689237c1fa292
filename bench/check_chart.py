"""The control chart of a bench's check standard: which checks count, their limits, whether a new one is in order."""

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from math import inf, isfinite, sqrt

import numpy as np

from bandproof.analysis.control_chart import Limits, prediction_limits, relative_spread, run_length
from bandproof.analysis.decision import worst
from bandproof.bench.check_file import Entry
from bandproof.bench.types import QUANTITIES, Board, CheckHistory, Quantity, StageResult, Verdict

__all__ = [
    "FEWEST",
    "Judged",
    "Line",
    "blocker",
    "counting",
    "judged",
    "lines_of",
    "reproducibility",
    "standard_of",
    "used",
    "warnings",
]

FEWEST = 8  # checks that limits and the reproducibility are made of; arbitrary
_FIRST = 20  # checks at most that limits are made of, so that they do not follow a slow drift; arbitrary
# Of checks of a healthy bench: three figures with limits at three standard deviations have it, 0.27 % each. It comes to
# 1 % while limits grow, because a check that is out by chance is left out of them.
_FALSE_ALARMS = 0.0081
_USED = 200  # last checks at most that the reproducibility is made of; arbitrary
_ONE_SIDE = 8  # in a row: once in 128 such rows by chance (a usual run rule, e-Handbook 6.3.2, from memory)
Key = tuple[str, Quantity]


@dataclass(frozen=True, slots=True)
class Line:
    """The chart of one figure: its limits, of how many checks they are made (0: declared in the standard's file)."""

    limits: Limits
    made_of: int


@dataclass(frozen=True, slots=True)
class Judged:
    """A new check against its chart: the verdict, and what is out of order in words."""

    verdict: Verdict
    reasons: tuple[str, ...]


def standard_of(board: Board) -> str:
    """Return what a standard is known by: title, drawing, revision and where it is measured, not its limits."""
    head = ", ".join(text for text in (board.title, board.drawing, board.revision) if text)
    return f"{head} ({', '.join(f'{stage.name}: {stage.tap_in} to {stage.tap_out}' for stage in board.stages)})"


def counting(entries: Sequence[Entry], standard: str) -> tuple[Entry, ...]:
    """Return the checks a chart is made of: of one standard, in order, since the last one accepted out of order.

    Who accepts such a one says that the bench has changed for a known cause: what was before tells nothing of it.
    """
    standing = [entry for entry in entries if entry.standard == standard and entry.stands]
    changes = [i for i, entry in enumerate(standing) if entry.verdict != "pass"]
    return tuple(standing[changes[-1] if changes else 0 :])


def blocker(entries: Sequence[Entry], standard: str) -> str:
    """Return why the first check of a standard must not call the bench in order by itself; nothing where it may.

    Its chart has yet to begin, so all it has are declared limits: another box would free a bench that was found out.
    """
    last = {entry.standard: entry for entry in entries}
    others = [entry.standard for entry in last.values() if not entry.stands]
    if not others or counting(entries, standard):
        return ""
    return f"it is the first check of this standard, and the last one of {others[-1]} was out of order"


def used(entries: Sequence[Entry], standard: str) -> CheckHistory | None:
    """Return what a run keeps of a history: the checks that count for the bench's standard; None for none."""
    found = counting(entries, standard)[-_USED:]
    return CheckHistory(standard, tuple(entry.check() for entry in found)) if found else None


def lines_of(board: Board, entries: Sequence[Entry]) -> dict[Key, Line]:
    """Return the chart of each figure from the checks that count; of fewer than `FEWEST`, the declared limits."""
    first = [entry.check() for entry in entries[:_FIRST]]
    chance = _FALSE_ALARMS / (len(QUANTITIES) * len(board.stages))
    lines = {}
    for stage in board.stages:
        for quantity in QUANTITIES:
            limit = stage.limits[quantity]
            line = Line(Limits(limit.designed, limit.lower, limit.upper), 0)
            if len(first) >= FEWEST:
                found = np.array([check.figures[stage.name][quantity] for check in first])
                noise = sqrt(float((found[:, 1] ** 2).mean()))
                line = Line(prediction_limits(found[:, 0], chance=chance, least=noise), len(first))
            lines[stage.name, quantity] = line
    return lines


def judged(lines: Mapping[Key, Line], stages: Sequence[StageResult], doubt: str = "") -> Judged:
    """Return whether a new check is in order: within the limits of its standard's file, and within its chart's.

    ``doubt`` is what speaks against it whatever its figures are.
    """
    reasons, verdicts = list[str](), list[Verdict]()
    if doubt:
        reasons.append(doubt)
        verdicts.append("undecided")
    for stage in stages:
        for quantity, figure in stage.figures.items():
            line = lines[stage.name, quantity]
            what, value = f"{quantity} of {stage.name}", figure.measured
            assert figure.verdict is not None  # a check that was cut short is not judged
            verdicts.append(figure.verdict)
            if not isfinite(value):
                reasons.append(f"{what} could not be had: {stage.status}")
            elif figure.verdict != "pass":
                reasons.append(
                    f"{what} is {value:.6g}, {_WORDS[figure.verdict]} the {figure.lower_limit:.6g} to "
                    f"{figure.upper_limit:.6g} that its board file declares"
                )
            if line.made_of and isfinite(value) and not line.limits.lower <= value <= line.limits.upper:
                verdicts.append("fail")
                reasons.append(
                    f"{what} is {value:.6g}, outside its chart's {line.limits.lower:.6g} to {line.limits.upper:.6g}"
                )
    return Judged(worst(*verdicts), tuple(reasons))


_WORDS: Mapping[Verdict, str] = {"fail": "outside", "undecided": "undecided against"}


def warnings(lines: Mapping[Key, Line], entries: Sequence[Entry]) -> list[str]:
    """Return what speaks of a drift although every check is in order: many in a row on one side of the centre line."""
    told = []
    for (stage, quantity), line in lines.items():
        if not line.made_of:
            continue
        values = np.array([entry.check().figures[stage][quantity][0] for entry in entries])
        run = run_length(values, line.limits.centre)
        if abs(run) >= _ONE_SIDE:
            side = "above" if run > 0 else "below"
            told.append(f"{quantity} of {stage}: the last {abs(run)} checks lie {side} the centre line: a drift?")
    return told


def reproducibility(history: CheckHistory | None) -> tuple[str, dict[Quantity, float] | None, float]:
    """Return where the reproducibility comes from, what it does to each figure, relative, its degrees of freedom.

    Of several stages of the standard the one that scatters most counts. The noise of each check is part of the scatter;
    it is not taken out, and so counts a second time beside repeatability.
    """
    if history is None:
        return "0, because this bench has no history of a check standard: U does not hold it", None, inf
    checks = history.checks
    if len(checks) < FEWEST:
        return f"0, because the bench has {len(checks)} of the {FEWEST} checks it takes: U does not hold it", None, inf
    spreads: dict[Quantity, float] = {
        quantity: max(
            relative_spread(np.array([check.figures[stage][quantity][0] for check in checks]))
            for stage in checks[0].figures
        )
        for quantity in QUANTITIES
    }
    dates = " to ".join(checks[i].started[:10] for i in (0, -1))
    reason = f"scatter of {len(checks)} checks of the bench, {dates}, their own noise not taken out"
    return reason, spreads, len(checks) - 1
