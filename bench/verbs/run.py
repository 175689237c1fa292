"""``sweep``: the whole job on a real bench; and what every job prints."""

import json
import secrets
import sys
import textwrap
from collections.abc import Sequence
from pathlib import Path
from typing import TYPE_CHECKING, Any

import click

from bandproof.bench.types import Bench, Board
from bandproof.bench.verbs.conditions import in_words, person, stated
from bandproof.bench.verbs.screen import columns

if TYPE_CHECKING:
    from datetime import datetime

    from bandproof.bench.attempts import Attempt
    from bandproof.bench.finish import Outcome
    from bandproof.bench.job import Job
    from bandproof.bench.journal import Journal
    from bandproof.drivers.clock import Clock

__all__ = ["carried_out", "clock_of", "command", "exit_code", "job_of", "of_head", "show", "wall", "wrapped"]


def clock_of(bench: Bench) -> "Clock":
    """Return the real clock, or the shared one of a simulated bench that names its clock file."""
    from bandproof.drivers.clock import RealClock, VirtualClock

    return VirtualClock(bench.clock) if bench.clock else RealClock()


class Progress:
    """Progress on standard error: one line that is rewritten on a terminal, a line per stage elsewhere."""

    def __init__(self) -> None:
        self._stage, self._live = "", sys.stderr.isatty()

    def __call__(self, done: int, planned: int, left: float, stage: str) -> None:
        """Tell how far the run is: records done and planned so far, bench seconds left, stage."""
        if self._live:
            room = columns() - 1  # a full line would begin the next one, and could not be rewritten
            text = f"{stage:<12} record {done} of {planned} planned so far, about {_duration(left)} of bench time left"
            click.echo(f"\r{text:<{room}.{room}}", err=True, nl=False)
        elif stage != self._stage:
            click.echo(f"measuring {stage}, about {_duration(left)} of bench time left", err=True)
        self._stage = stage

    def close(self) -> None:
        """Leave the line."""
        if self._live and self._stage:
            click.echo("\r" + " " * (columns() - 1) + "\r", err=True, nl=False)


def _duration(seconds: float) -> str:
    return f"{seconds:.0f} s" if seconds < 100.0 else f"{seconds / 60.0:.0f} min"


def show(outcome: "Outcome", wall_seconds: float, as_json: bool, *, simulated: bool = False) -> int:
    """Print a job's outcome, on simulated instruments if so, and return the exit code."""
    from bandproof.bench.summary import dominating_lines, rule_lines, summary_lines, verdict_counts

    if as_json:
        files = {kind: str(outcome.folder / name) if name else None for kind, name in outcome.result["files"].items()}
        click.echo(json.dumps({**outcome.result, "wall_seconds": round(wall_seconds, 3), "files": files}, indent=1))
        return exit_code(outcome)
    run, result = outcome.run, outcome.result
    click.echo(run.board.title)
    bench = ", simulated instruments" if simulated else ""
    click.echo(f"serial {run.serial}, attempt {run.attempt}, {run.started[:16].replace('T', ' ')} UTC{bench}")
    together = [str(entry["attempt"]) for entry in result["attempts"] or () if entry["pooled"]]
    if len(together) > 1:
        click.echo(f"The figures are means of attempts {', '.join(together)} where these agree.")
    for line in [*summary_lines(outcome.stages), *dominating_lines(outcome.stages)]:
        click.echo(line)
    click.echo("")
    for alarm in result["alarms"]:
        click.echo(wrapped(f"note: {alarm}"))
    for suspect in [suspect for stage in outcome.stages for suspect in stage.suspects]:
        click.echo(wrapped(f"suspect: {suspect.text}"))
    if run.ended == "cut_short":
        click.echo(wrapped(f"CUT SHORT: {run.reason}"))
        click.echo(f"No verdict. What was measured is kept; to go on:  bandproof resume {outcome.folder}")
    else:
        figures = [figure for stage in outcome.stages for figure in stage.figures.values()]
        click.echo(f"Board: {str(result['verdict']).upper()}   {verdict_counts(figures)}")
        for line in rule_lines(outcome.stages, result["conformance_probability"]):
            click.echo(line)
    click.echo(
        f"{result['points']} points in {run.bench_seconds:.1f} s of bench time ({wall_seconds:.1f} s by the wall)"
    )
    for kind, name in result["files"].items():
        if name:
            click.echo(f"  {kind:<8} {outcome.folder / name}")
    if run.thru is not None:
        click.echo(f"  thru     a stored one, of {run.thru.started[:16].replace('T', ' ')} UTC")
    if run.checks is not None:
        last = run.checks.checks[-1].started[:16].replace("T", " ")
        click.echo(f"  checks   {len(run.checks.checks)} of the bench, the last of {last} UTC")
    return exit_code(outcome)


def wrapped(text: str) -> str:
    """Return a text on lines as wide as the terminal, at most 80 columns, all but the first indented."""
    return textwrap.fill(text, columns(), subsequent_indent="  ", break_long_words=False, break_on_hyphens=False)


def exit_code(outcome: "Outcome") -> int:
    """Return the exit code of an outcome: by verdict, or 3 and 5 for a run that was cut short."""
    from bandproof.bench.verbs.console import BENCH_FAULT, INTERRUPTED, VERDICT_CODES

    if outcome.run.ended == "cut_short":
        return INTERRUPTED if outcome.run.stopped else BENCH_FAULT
    return VERDICT_CODES[outcome.result["verdict"]]


def worst_code(codes: Sequence[int]) -> int:
    """Return the exit code of several outcomes: bench fault, interrupted, fails, undecided, passes."""
    from bandproof.bench.verbs.console import BENCH_FAULT, BOARD_FAILS, DONE, INTERRUPTED, UNDECIDED

    return next(code for code in (BENCH_FAULT, INTERRUPTED, BOARD_FAILS, UNDECIDED, DONE) if code in codes)


@click.command("sweep")
@click.argument("board_path", metavar="BOARD", type=click.Path(path_type=Path))
@click.option("--bench", "bench_path", help="Bench file; else BANDPROOF_BENCH, else the only *.bench.toml here.")
@click.option("--serial", required=True, help="The board's serial number: letters, digits and . _ -")
@click.option(
    "--folder", type=click.Path(path_type=Path), default=Path("runs"), show_default=True, help="Where runs go."
)
@click.option("--operator", "name", default="", help="Who does this; kept in the run file.")
@click.option("--ambient", help='Temperature of the room, such as "23 °C"; kept in the run file.')
@click.option("--note", default="", help="A remark; kept in the run file.")
@click.option(
    "--retest",
    default="",
    metavar="REASON",
    callback=in_words,
    help="Why a board that has a verdict, or an unfinished attempt, is measured once more.",
)
@click.option(
    "--repair",
    default="",
    metavar="TEXT",
    callback=in_words,
    help="What was repaired since; kept in the serial number's log.",
)
@click.option("--without-thru", is_flag=True, help="Leave out the thru that is stored beside the bench file.")
@click.option(
    "--without-check",
    default="",
    metavar="REASON",
    callback=in_words,
    help="Why to sweep on a bench that wants a check first.",
)
@click.option("--raw", is_flag=True, help="Keep every record in the run file.")
@click.option("--json", "as_json", is_flag=True, help="Print the result object and nothing else.")
def command(
    board_path: Path,
    bench_path: str | None,
    serial: str,
    folder: Path,
    name: str,
    ambient: str | None,
    note: str,
    retest: str,
    repair: str,
    without_thru: bool,
    without_check: str,
    raw: bool,
    as_json: bool,
) -> int:
    """Sweep BOARD on a real bench: every stage, fit, compare with the design, decide, keep the record.

    A thru that `bandproof thru` stored beside the bench file is used while all its conditions hold. A board that has a
    verdict is measured once more only with --retest; the verdict is then of both attempts together. After --repair
    counting begins anew. A bench file with a [check] table wants the last `bandproof check` in order and not too old.

    \b
    Example:
      bandproof sweep my.board.toml --bench my.bench.toml --serial TB-0001
    """
    from bandproof.bench.bench_file import check_wiring, find_bench, read_bench
    from bandproof.bench.board_file import read_board
    from bandproof.bench.check_use import checks_for, counted
    from bandproof.bench.job import new_attempt
    from bandproof.bench.thru_file import read_thru, thru_path

    path, why = find_bench(bench_path)
    board, bench = read_board(board_path), read_bench(path)
    check_wiring(board, bench, str(path))
    click.echo(f"bench: {path} ({why})", err=as_json)
    thru = None if without_thru else read_thru(thru_path(path))
    operator, room = stated(name, ambient)
    clock = clock_of(bench)
    checks, notes = checks_for(bench, path, clock.utc(), without_check)
    known, longer = _may_begin(board, folder, serial, retest, repair, operator=operator, utc=clock.utc())
    if longer > 1.0:
        notes = (*notes, f"records are {longer:.0f} times as long: for their noise the attempt before was undecided")
    place, attempt = new_attempt(folder, serial)
    job = job_of(
        board=board,
        bench=bench,
        serial=serial,
        attempt=attempt,
        run_id=secrets.token_hex(8),
        folder=place,
        clock=clock,
        earlier=known,
        retest=retest,
        longer=longer,
        checks=checks,
        notes=notes,
        operator_name=operator,
        note=note,
        ambient=room,
        thru=thru,
        thru_path=str(thru_path(path)),
        keep_raw=raw,
        bench_path=str(path.resolve()),
        begin_journal=counted(bench, path),
    )
    return carried_out(job, as_json=as_json)


def _may_begin(
    board: Board, folder: Path, serial: str, retest: str, repair: str, *, operator: str, utc: "datetime"
) -> "tuple[list[Attempt], float]":
    """Return the attempts there are and how many times longer the next one's records are, after logging a repair.

    Raises
    ------
    BadInput
        Another attempt may not begin; nothing is logged.
    """
    from bandproof.bench.attempts import earlier, log_repair, place_of, refusal
    from bandproof.bench.errors import BadInput
    from bandproof.bench.pooling import earned, judged_otherwise

    place = place_of(folder, serial)
    known = earlier(place, repaired=bool(repair))
    if why := refusal(known, retest, place):
        raise BadInput(f"{serial}: {why}")
    if not retest and (why := judged_otherwise(place, known, board)):
        raise BadInput(f'{serial}: {why}. Say why: --retest "REASON"; both will be told in the result')
    if repair:
        log_repair(place, repair, operator=operator, utc=utc)
    return known, earned(place, known)


def job_of(**facts: Any) -> "Job":
    """Return a job with a person to ask where there is a terminal, progress on standard error, a flag to stop."""
    from bandproof.bench.job import Job
    from bandproof.bench.stop import Stop

    stop = Stop()
    operator = person(stop, there=not facts.get("rehearsal"))
    return Job(operator=operator, stop=stop, progress=Progress(), **facts)


def of_head(head: dict[str, Any]) -> dict[str, Any]:
    """Return what a job is told again when it is resumed, from its journal's head."""
    kept = ("serial", "attempt", "run_id", "note", "ambient", "keep_raw", "rehearsal", "bench_path")
    return {**{name: head[name] for name in kept}, "operator_name": head["operator"]}


def carried_out(job: "Job", *, as_json: bool, journal: "Journal | None" = None) -> int:
    """Carry a job out, or go on with its journal, print the outcome and return the exit code."""
    from bandproof.bench.pooling import outlook
    from bandproof.bench.stop import watching_signals

    begin = wall()
    try:
        with watching_signals(job.stop):
            outcome = job.carry_out() if journal is None else job.go_on(journal)
    finally:
        job.progress.close()
    code = show(outcome, wall() - begin, as_json, simulated=job.rehearsal is not None)
    if not as_json and (told := outlook(outcome.run, outcome.stages, outcome.result)):
        click.echo(wrapped(told))
    return code


def wall() -> float:
    """Return monotonic seconds by the wall."""
    from bandproof.drivers.clock import RealClock

    return RealClock().now()
