"""The end of a run: its journal becomes a run, is evaluated, and is kept as run file and picture."""

from collections.abc import Sequence
from dataclasses import dataclass, replace
from pathlib import Path
from typing import TYPE_CHECKING, Any

from bandproof.bench.bench_file import parse_bench
from bandproof.bench.board_file import parse_board
from bandproof.bench.budget import budget_plain
from bandproof.bench.chain import CHAIN, add_to_chain, link_of
from bandproof.bench.errors import BadInput, Stopped
from bandproof.bench.evaluate import evaluate, views
from bandproof.bench.journal import Journal
from bandproof.bench.plain import checks_from, thru_from
from bandproof.bench.pooling import with_earlier
from bandproof.bench.result import result_object
from bandproof.bench.runfile import digest_of, read_result, read_run, write_run
from bandproof.bench.thru import THRU
from bandproof.bench.types import Bench, Board, Run, StageResult

if TYPE_CHECKING:
    from bandproof.bench.picture import StageView

__all__ = ["CUT_SHORT", "PICTURE", "REPORT", "RUN", "Outcome", "board_and_bench", "finish", "run_of"]

RUN, CUT_SHORT, PICTURE, REPORT = "run.h5", "run.cut_short-{}.h5", "picture.svg", "report.pdf"


@dataclass(frozen=True, slots=True)
class Outcome:
    """What a job ended in: the run, its stages, the result object as stored, where the files are."""

    run: Run
    stages: tuple[StageResult, ...]
    result: dict[str, Any]
    folder: Path


def finish(journal: Journal, folder: Path, problem: Exception | None, words: str) -> Outcome:
    """Write run file, picture and the journal's last line; a problem that cut the run short is kept in words.

    A run file that is already there, from a run killed before its journal's last line, is kept as it is.

    Raises
    ------
    OSError
        The folder cannot be written; nothing is left under a final name that is not whole.
    """
    if not folder.exists():  # somebody deleted it while it was measured: all of it is still in memory
        journal.alarm("the run's folder was deleted while it ran and was made again; the journal is lost")
        folder.mkdir(parents=True)
    run = run_of(journal, problem, words)
    path = folder / RUN if problem is None else folder / CUT_SHORT.format(_next_number(folder))
    if path.exists():
        run, result = read_run(path), read_result(path)
        stages, _ = _with_earlier(run, journal, folder)
    else:
        stages, attempts = _with_earlier(run, journal, folder)
        result = result_object(run, stages, {"run": path.name, "picture": PICTURE, "report": REPORT})
        result["attempts"] = attempts
        write_run(
            path, run, result, raw=journal.volts, budget={stage.name: budget_plain(stage.budgets) for stage in stages}
        )
    drawn = views(run, stages)
    result = _drawn(run, result, drawn, folder)
    digest = digest_of(path)
    result = {**result, "alarms": [*result["alarms"], *_chained(run, folder)]}
    journal.ended(run.ended, path.name, digest)
    return Outcome(run, stages, _reported(run, stages, result, digest, link_of(path, digest), drawn, folder), folder)


def _with_earlier(
    run: Run, journal: Journal, folder: Path
) -> tuple[tuple[StageResult, ...], list[dict[str, Any]] | None]:
    head = journal.head
    return with_earlier(run, evaluate(run), folder.parent, head["earlier"], head["retest"])


def run_of(journal: Journal, problem: Exception | None, words: str) -> Run:
    """Return the run a journal tells of, complete or cut short by a problem."""
    head = journal.head
    board, bench = board_and_bench(journal)
    kept = ("run_id", "serial", "attempt", "identities", "version", "started", "operator", "note", "ambient")
    return Run(
        **{name: head[name] for name in kept},
        board=board,
        bench=bench,
        thru=None if head["thru"] is None else thru_from(head["thru"]),
        checks=None if head["checks"] is None else checks_from(head["checks"]),
        ended="complete" if problem is None else "cut_short",
        reason=words,
        stopped=isinstance(problem, Stopped),
        bench_seconds=round(journal.finished[-1] - head["clock_start"], 6) if journal.finished else 0.0,
        steps=tuple(journal.steps),
        points=tuple(journal.points),
        alarms=tuple(journal.alarms),
        history=tuple(journal.history),
    )


def board_and_bench(journal: Journal) -> tuple[Board, Bench]:
    """Return board and bench from the texts a run began with, whatever has become of the files."""
    head = journal.head
    board = parse_board(head["board"], "the run's board file")
    strangers = {step.stage for step in journal.steps} - {THRU, *(stage.name for stage in board.stages)}
    if strangers:
        raise BadInput(f"the journal plans stages its board does not have: {', '.join(sorted(strangers))}")
    bench = parse_bench(head["bench"], head["bench_path"] or "the run's bench file")
    return board, replace(bench, dialect_texts=head["dialects"])


def _next_number(folder: Path) -> int:
    number = 1
    while (folder / CUT_SHORT.format(number)).exists():
        number += 1
    return number


def _chained(run: Run, folder: Path) -> list[str]:
    """Add the run files of an attempt to the chain of its runs' folder; return what to tell where that cannot be.

    All of them, because a run that was killed before its line was written is resumed and leaves another file.
    """
    if (folder.parent.name, folder.name) != (run.serial, str(run.attempt)):
        return []  # not FOLDER/SERIAL/ATTEMPT: it is in nobody's folder of runs
    paths = [folder / CUT_SHORT.format(number) for number in range(1, _next_number(folder))]
    try:
        runs = [
            (run.started, f"{run.serial}/{run.attempt}/{path.name}", digest_of(path))
            for path in (*paths, folder / RUN)
            if path.exists()
        ]
        cut = add_to_chain(folder.parent.parent, runs)
    except (OSError, BadInput) as problem:  # the run is kept all the same
        return [f"the run is not in {folder.parent.parent / CHAIN}: {problem}"]
    return [cut] if cut else []


def _reported(
    run: Run,
    stages: tuple[StageResult, ...],
    result: dict[str, Any],
    digest: str,
    link: str,
    drawn: "Sequence[StageView]",
    folder: Path,
) -> dict[str, Any]:
    """Write the report; return the result, without its name and with a note where it could not be written.

    The run file names it in any case: its digest is in the report, so it is closed before the report is made.
    """
    try:
        from bandproof.bench.documents.report import write_report

        write_report(folder / REPORT, run, stages, result, digest, drawn, link)
    except Exception as problem:  # whatever it is: the run is kept and decides alone
        files = {**result["files"], "report": None}
        again = folder / files["run"]
        alarm = f"there is no {REPORT} ({type(problem).__name__}: {problem}); try: bandproof report {again}"
        return {**result, "files": files, "alarms": [*result["alarms"], alarm]}
    return result


def _drawn(run: Run, result: dict[str, Any], drawn: "Sequence[StageView]", folder: Path) -> dict[str, Any]:
    """Draw the picture; return the result, without its name and with a note where it could not be drawn."""
    if not drawn:
        return result
    try:
        from bandproof.bench.picture import draw, save

        save(draw(drawn, f"{run.board.title}   serial {run.serial}, attempt {run.attempt}"), folder / PICTURE)
    except OSError:
        raise
    except Exception as problem:  # whatever it is: the run is kept and decides alone
        alarm = f"there is no {PICTURE} ({type(problem).__name__}: {problem})"
        return {**result, "files": {**result["files"], "picture": None}, "alarms": [*result["alarms"], alarm]}
    return result
