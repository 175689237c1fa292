"""The attempts on one serial number: whether another one may begin, and the verdict of all that count.

Measured again and again, a board on its limit passes some day. So a verdict is asked again once at most, with a reason,
and the second one is of both: figures averaged, only what repeats by chance (type A) lowered. A logged repair makes
another board of it, counting begins anew. An attempt that was cut short does not count, nor is it pooled.
"""

import re
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
from datetime import datetime
from math import copysign, isfinite
from pathlib import Path
from typing import Any

from bandproof.analysis.decision import worst
from bandproof.analysis.uncertainty import Combined, Row, combine
from bandproof.bench.comparison import judged
from bandproof.bench.errors import BadInput, RunFileDamaged
from bandproof.bench.evaluate import evaluate
from bandproof.bench.result import board_verdict
from bandproof.bench.runfile import digest_of, read_result, read_run
from bandproof.bench.types import QUANTITIES, Quantity, Run, Stage, StageResult, Verdict

__all__ = [
    "Attempt",
    "Repair",
    "earlier",
    "log_repair",
    "numbers",
    "place_of",
    "pooled",
    "refusal",
    "repairs",
    "with_earlier",
]

RUN, REPAIRS = "run.h5", "repairs.txt"
_SERIAL = re.compile(r"[A-Za-z0-9._-]{1,64}")
_REPAIRED = re.compile(r"([^\t]*)\tafter attempt ([0-9]{1,9})\t([^\t]*)\t?(.*)")
_SHARED = "thru"  # type A, but two runs that used one stored thru have it in common
_OF_BENCH = "reproducibility"  # type A, but of the bench over days: two runs may well be on one


@dataclass(frozen=True, slots=True)
class Attempt:
    """A complete attempt: number, digest of its run file, verdict, whether it was after the last repair."""

    number: int
    digest: str
    verdict: Verdict
    counts: bool

    def plain(self) -> dict[str, Any]:
        """Return it as the result names it; ``pooled``: it is in the verdict."""
        return {"attempt": self.number, "digest": self.digest, "verdict": self.verdict, "pooled": self.counts}


@dataclass(frozen=True, slots=True)
class Repair:
    """A logged repair: when, after which attempt, by whom, what was done."""

    utc: str
    after: int
    operator: str
    text: str


def place_of(folder: Path, serial: str) -> Path:
    """Return the folder of a serial number.

    Raises
    ------
    BadInput
        It has other characters than letters, digits and ``. _ -``.
    """
    if not _SERIAL.fullmatch(serial) or serial in (".", ".."):
        raise BadInput(f"{serial!r} cannot be a serial number: letters, digits and . _ - only, at most 64")
    return folder / serial


def numbers(place: Path) -> list[int]:
    """Return the numbers of all attempts there are, complete or not, in order."""
    return sorted(int(entry.name) for entry in place.iterdir() if entry.name.isdigit()) if place.is_dir() else []


def earlier(place: Path) -> list[Attempt]:
    """Return the complete attempts on a serial number (RunFileDamaged when one cannot be read)."""
    repaired, found = max((repair.after for repair in repairs(place)), default=0), []
    for number in numbers(place):
        path = place / str(number) / RUN
        if path.exists() and (verdict := read_result(path)["verdict"]) is not None:
            found.append(Attempt(number, digest_of(path), verdict, number > repaired))
    return found


def refusal(verdicts: Sequence[Verdict], retest: str) -> str:
    """Return why no further attempt may begin after these verdicts since the last repair; "" when one may.

    An undecided board is measured once more without asking, a decided one with a reason; then a person decides.

    Examples
    --------
    >>> refusal([], ""), refusal(["undecided"], ""), refusal(["fail"], "a clip had come off")
    ('', '', '')
    """
    if len(verdicts) > 1:
        return (
            f"it was measured twice since {_SINCE} and is {verdicts[-1]} by both attempts together: now a person "
            f"decides. {_REPAIR}"
        )
    if verdicts and verdicts[0] != "undecided" and not retest:
        return f'its verdict is {verdicts[0]}. To ask once more, say why: --retest "REASON". {_REPAIR}'
    if retest and not verdicts:
        return f"there is nothing to retest: no complete attempt since {_SINCE}. Leave --retest out"
    return ""


_SINCE = "its last logged repair, or its first attempt"
_REPAIR = 'After a repair: --repair "WHAT WAS DONE"'


def log_repair(place: Path, text: str, *, operator: str, utc: datetime) -> None:
    """Append a repair to the serial number's log: UTC, the attempts it came after, operator, what was done.

    Raises
    ------
    BadInput
        The text says nothing.
    OSError
        The log cannot be written.
    """
    said, who = (" ".join(words.split()) for words in (text, operator))
    if not said:
        raise BadInput('--repair says nothing: write what was done, such as --repair "R_3 was open, replaced"')
    place.mkdir(parents=True, exist_ok=True)
    last = max(numbers(place), default=0)
    stamp = utc.isoformat(timespec="seconds")
    with (place / REPAIRS).open("a", encoding="utf-8") as log:
        log.write(f"{stamp}\tafter attempt {last}\t{who or 'not stated'}\t{said}\n")


def repairs(place: Path) -> list[Repair]:
    """Return the logged repairs of a serial number, in the log's order (BadInput for a line that is none)."""
    path, found = place / REPAIRS, []
    if not path.exists():
        return []
    for line in filter(str.strip, path.read_text(encoding="utf-8").splitlines()):
        if (entry := _REPAIRED.match(line)) is None:
            told = "is no entry; one is UTC, 'after attempt N', operator and text, tabs between"
            raise BadInput(f"{path}: {line[:60]!r} {told}")
        found.append(Repair(entry[1], int(entry[2]), entry[3], entry[4]))
    return found


# --- the verdict of several attempts ---


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

    A stage that is in doubt stays so in the last run, and is left out where it was so before.
    """
    stored = [run.thru.started for run in runs if run.thru is not None]
    common = len(set(stored)) < len(stored)
    found = []
    for last in results[-1]:
        others = [stage for result in results[:-1] for stage in result if stage.name == last.name and _is_sound(stage)]
        stage = runs[-1].board.stage(last.name)
        found.append(_together(stage, [*others, last], common) if others and _is_sound(last) else last)
    return tuple(found)


def _is_sound(stage: StageResult) -> bool:
    return bool(stage.budgets) and all(isfinite(f.conformance_probability) for f in stage.figures.values())


def _together(stage: Stage, results: Sequence[StageResult], common: bool) -> StageResult:
    last = results[-1]
    budgets = {quantity: _budget(quantity, results, common) for quantity in QUANTITIES}
    figures = {}
    for quantity in QUANTITIES:
        value = sum(result.figures[quantity].measured for result in results) / len(results)
        predicted, repeatability = last.figures[quantity].predicted, budgets[quantity].rows[0].contribution
        figures[quantity] = judged(stage, quantity, predicted, value, repeatability, budgets[quantity], "")
    verdict = worst(*(figure.verdict for figure in figures.values()))
    return replace(last, figures=figures, budgets=budgets, verdict=verdict)


def _budget(quantity: Quantity, results: Sequence[StageResult], common: bool) -> Combined:
    rows = zip(*(result.budgets[quantity].rows for result in results), strict=True)
    return combine([_row(together, common) for together in rows])


def _row(together: Sequence[Row], common: bool) -> Row:
    """Return a row of a mean: what repeats by chance adds in squares, all else is the same in each attempt."""
    parts = [replace(row, sensitivity=row.sensitivity / len(together)) for row in together]
    size, dof = sum(part.contribution for part in parts), min(part.dof for part in parts)
    if parts[-1].type == "A" and parts[-1].name != _OF_BENCH and not (common and parts[-1].name == _SHARED):
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
