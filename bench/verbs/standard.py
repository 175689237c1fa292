"""``check``: the bench's check standard measured, its control chart kept, the bench blocked when it leaves them."""

import json
import secrets
from collections.abc import Mapping, Sequence
from math import isfinite
from pathlib import Path
from typing import TYPE_CHECKING, Any

import click

from bandproof.bench.errors import BadInput
from bandproof.bench.verbs.conditions import in_words

if TYPE_CHECKING:
    from bandproof.bench.check_chart import Judged, Key, Line
    from bandproof.bench.check_file import Entry
    from bandproof.bench.finish import Outcome
    from bandproof.bench.job import Job
    from bandproof.bench.journal import Journal
    from bandproof.bench.types import Bench, Board

__all__ = ["command"]

RESULT_SCHEMA = "bandproof-check-result/1"
_SERIAL = "check"  # what stands for a serial number in the folder of checks


@click.command("check")
@click.argument("bench_path", metavar="[BENCH]", required=False, type=click.Path(path_type=Path))
@click.option("--board", "board_path", type=click.Path(path_type=Path), help="The standard's board file, else [check].")
@click.option("--ambient", help='Temperature of the room, such as "23 °C".')
@click.option("--operator", "name", default="", help="Who does this.")
@click.option("--note", default="", help="A remark; kept in the history.")
@click.option(
    "--accept",
    default="",
    metavar="REASON",
    callback=in_words,
    help="Why the bench goes on out of limits; begins a new chart.",
)
@click.option("--without-thru", is_flag=True, help="Leave out the thru that is stored beside the bench file.")
@click.option("--json", "as_json", is_flag=True, help="Print the result object and nothing else.")
def command(
    bench_path: Path | None,
    board_path: Path | None,
    ambient: str | None,
    name: str,
    note: str,
    accept: str,
    without_thru: bool,
    as_json: bool,
) -> int:
    """Measure the check standard of BENCH, a stable passive network, as a board is measured, and keep its chart.

    Exit 0: the bench is in order. Exit 1 or 4: it is not; a bench file with a [check] table then refuses sweeps until a
    check is in order, or accepted with a reason. A file says once what the standard is:

    \b
      [check]
      board       = "check.board.toml"   # a board file whose stage has circuit = "passive"
      every       = 20                   # sweeps begun
      longest_age = "12 h"

    \b
    Example:
      bandproof check my.bench.toml --ambient "23 °C" --operator Ann
    """
    from bandproof.bench.bench_file import check_wiring, find_bench, read_bench
    from bandproof.bench.board_file import read_board
    from bandproof.bench.check_chart import standard_of
    from bandproof.bench.check_file import check_path, read_history

    path, why = find_bench(str(bench_path) if bench_path else None)
    bench = read_bench(path)
    named = _board_path(bench, path, board_path)
    board = read_board(named)
    _must_be_passive(board, named)
    check_wiring(board, bench, str(path))
    click.echo(f"bench: {path} ({why})", err=as_json)
    if bench.check and standard_of(read_board(Path(bench.check.board))) != standard_of(board):
        other = Path(bench.check.board).name
        click.echo(f"note: {path.name} names {other} in [check]: this check does not free the bench", err=True)
    read_history(check_path(path))  # what cannot be read is told before anything is measured
    job = _job(board, bench, path, without_thru, name, ambient, note)
    return concluded(job, path, accept=accept, as_json=as_json)


def _board_path(bench: "Bench", path: Path, named: Path | None) -> Path:
    if named is not None:
        return named
    if bench.check is None:
        raise BadInput(
            f"{path} has no [check] table: name the standard's board file with --board, or write\n"
            '  [check]\n  board = "check.board.toml"'
        )
    return Path(bench.check.board)


def _must_be_passive(board: "Board", path: Path) -> None:
    from bandproof.bench.types import PASSIVE

    if active := [stage.name for stage in board.stages if stage.circuit != PASSIVE]:
        raise BadInput(
            f'{path} is no check standard: {", ".join(active)} is not of circuit = "{PASSIVE}". An amplifier drifts, '
            "and would be charted as the bench; name a board file of a passive network"
        )


def _job(
    board: "Board", bench: "Bench", path: Path, without_thru: bool, name: str, ambient: str | None, note: str
) -> "Job":
    """Return the job that measures the standard as a board, with the stored path; its run is kept by the history."""
    from bandproof.bench.job import new_attempt
    from bandproof.bench.thru_file import read_thru, thru_path
    from bandproof.bench.verbs.conditions import stated
    from bandproof.bench.verbs.run import clock_of, job_of

    thru = None if without_thru else read_thru(thru_path(path))
    operator, room = stated(name, ambient)
    place, attempt = new_attempt(_runs(path), _SERIAL)
    return job_of(
        board=board,
        bench=bench,
        serial=_SERIAL,
        attempt=attempt,
        run_id=secrets.token_hex(8),
        folder=place,
        clock=clock_of(bench),
        operator_name=operator,
        note=note,
        ambient=room,
        thru=thru,
        thru_path=str(thru_path(path)),
        bench_path=str(path.resolve()),
    )


def checked_bench(place: Path, head: Mapping[str, Any]) -> Path | None:
    """Return the bench file that a run in a folder, with its journal's head, is a check of; None for a board's run."""
    path = Path(head["bench_path"])
    is_check = head["serial"] == _SERIAL and place.resolve().parent.parent == _runs(path)
    return path if is_check else None


def concluded(
    job: "Job", path: Path, *, accept: str = "", as_json: bool = False, journal: "Journal | None" = None
) -> int:
    """Carry out a check of the bench in a file, or go on with its journal; keep and print it, return the exit code."""
    from bandproof.bench.check_file import check_path
    from bandproof.bench.stop import watching_signals
    from bandproof.bench.verbs.run import show, wall

    begin = wall()
    try:
        with watching_signals(job.stop):
            outcome = job.carry_out() if journal is None else job.go_on(journal)
    finally:
        job.progress.close()
    if outcome.run.ended == "cut_short":
        return show(outcome, wall() - begin, as_json)
    return _concluded(job.board, job.bench, outcome, check_path(path), accept, as_json)


def _runs(path: Path) -> Path:
    name = path.name.removesuffix(".toml").removesuffix(".bench")
    return path.with_name(f"{name}.checks")


def _concluded(
    board: "Board", bench: "Bench", outcome: "Outcome", history_path: Path, accept: str, as_json: bool
) -> int:
    """Judge a check against its chart, keep it, print it, and return the exit code."""
    from bandproof.bench.check_chart import blocker, counting, judged, lines_of, standard_of, warnings
    from bandproof.bench.check_file import append, read_history
    from bandproof.bench.verbs.console import DONE, VERDICT_CODES

    history = read_history(history_path)  # again: another check may have ended meanwhile
    standard = standard_of(board)
    before = counting(history.entries, standard)
    lines = lines_of(board, before)
    found = judged(lines, outcome.stages, blocker(history.entries, standard))
    entry = _entry(history.next_number, standard, outcome, found, accept)
    append(history_path, entry)
    entries = (*history.entries, entry)
    notes = [*history.damages, *outcome.result["alarms"]]
    notes += [] if not accept or entry.accepted else _not_accepted(found)
    if others := [one for one in entries if one.standard != standard]:
        notes.append(f"{len(others)} earlier checks are of another standard and left out: {others[-1].standard}")
    if entry.stands:
        notes += warnings(lines, counting(entries, standard))
    mine = tuple(one for one in entries if one.standard == standard)
    if as_json:
        _print_object(entry, found, lines, len(before), notes, history_path, outcome)
    else:
        _print(bench, entry, mine, before, found, lines, notes, history_path, outcome)
    return DONE if entry.stands else VERDICT_CODES[found.verdict]


def _not_accepted(found: "Judged") -> list[str]:
    why = "it is in order" if found.verdict == "pass" else "it has no figures a chart could begin with"
    return [f"the check was not marked as accepted: {why}"]


def _entry(number: int, standard: str, outcome: "Outcome", found: "Judged", accept: str) -> "Entry":
    from bandproof.bench.check_file import Entry
    from bandproof.bench.runfile import digest_of

    run, path = outcome.run, outcome.folder / outcome.result["files"]["run"]
    figures = {
        stage.name: {
            quantity: [figure.measured, figure.repeatability] if isfinite(figure.measured) else None
            for quantity, figure in stage.figures.items()
        }
        for stage in outcome.stages
    }
    whole = all(value for of_stage in figures.values() for value in of_stage.values())
    return Entry(
        number=number,
        started=run.started,
        standard=standard,
        figures=figures,
        verdict=found.verdict,
        accepted=accept if whole and found.verdict != "pass" else "",
        operator=run.operator,
        ambient=run.ambient,
        note=run.note,
        identities=run.identities,
        run=str(Path(*path.parts[-4:])),
        digest=digest_of(path),
        version=run.version,
    )


def _print(
    bench: "Bench",
    entry: "Entry",
    mine: "Sequence[Entry]",
    before: "Sequence[Entry]",
    found: "Judged",
    lines: "dict[Key, Line]",
    notes: Sequence[str],
    history_path: Path,
    outcome: "Outcome",
) -> None:
    from bandproof.bench.check_text import chart_lines, origin, table_lines
    from bandproof.bench.verbs.run import wrapped
    from bandproof.bench.verbs.screen import columns

    click.echo(wrapped(entry.standard))
    for line in table_lines(mine):
        click.echo(line)
    since = [one for one in mine if one.number >= (before[0].number if before else entry.number)]
    for key, chart in lines.items():
        click.echo("")
        for line in chart_lines(key, chart, since, most=columns() - 14):  # beside the names of its rows
            click.echo(line)
    click.echo("")
    click.echo(wrapped(origin(lines, before)))
    for text in [*(f"note: {note}" for note in notes), *(f"OUT: {reason}" for reason in found.reasons)]:
        click.echo(wrapped(text))
    click.echo(wrapped(f"Bench: {_state(entry)}"))
    if bench.check is not None and entry.stands:
        hours = bench.check.longest_age / 3600.0
        click.echo(f"check again within {hours:.3g} h or {bench.check.every} sweeps")
    click.echo(f"  history  {history_path}\n  run      {outcome.folder / outcome.result['files']['run']}")


def _state(entry: "Entry") -> str:
    if entry.verdict == "pass":
        return "IN ORDER"
    if entry.accepted:
        return f"OUT OF ORDER, accepted, a new chart begins: {entry.accepted}"
    return (
        "OUT OF ORDER, do not measure boards: look at probes, cables, contacts and the standard, then check again (or "
        '--accept "REASON", when the cause is known and stays)'
    )


def _print_object(
    entry: "Entry",
    found: "Judged",
    lines: "dict[Key, Line]",
    count: int,
    notes: Sequence[str],
    history_path: Path,
    outcome: "Outcome",
) -> None:
    figures: dict[str, dict[str, Any]] = {stage: {} for stage in entry.figures}
    for (stage, quantity), line in lines.items():
        measured = entry.figures[stage][quantity]
        figures[stage][quantity] = {
            "measured": measured[0] if measured else None,
            "noise": measured[1] if measured else None,
            "centre_line": line.limits.centre,
            "lower_limit": line.limits.lower,
            "upper_limit": line.limits.upper,
            "provisional": not line.made_of,
        }
    kept = ("number", "started", "standard", "verdict", "accepted", "operator", "ambient", "note", "digest")
    files = {"history": str(history_path), "run": str(outcome.folder / outcome.result["files"]["run"])}
    facts = {name: getattr(entry, name) for name in kept}
    more = {"reasons": list(found.reasons), "notes": list(notes), "checks_before": count, "stages": figures}
    click.echo(json.dumps({"schema": RESULT_SCHEMA, **facts, **more, "files": files}, indent=1))
