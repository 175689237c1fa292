"""Whether a bench may sweep: its last check is in order and not too old, or somebody says why it goes on without."""

from collections.abc import Callable
from datetime import datetime
from pathlib import Path
from typing import Any

from bandproof.bench.board_file import read_board
from bandproof.bench.check_chart import standard_of, used
from bandproof.bench.check_file import Entry, History, add_sweep, check_path, read_history
from bandproof.bench.errors import BadInput, BenchFault
from bandproof.bench.journal import Journal
from bandproof.bench.types import Bench, CheckHistory, CheckPlan

__all__ = ["CheckRefused", "checks_for", "counted", "reason_against"]


class CheckRefused(BadInput):
    """The bench's check standard says that it must not sweep, or nobody asked it lately."""

    def __init__(self, path: str, reason: str, bench_path: str) -> None:
        super().__init__(path, reason, bench_path)
        self.path, self.reason, self.bench_path = path, reason, bench_path

    def __str__(self) -> str:
        return (
            f"{self.bench_path} wants its check standard in order before a sweep, nothing was measured: {self.reason}\n"
            f"Check the bench:  bandproof check {self.bench_path}\n"
            'or sweep --without-check "REASON": the reason is kept in the run'
        )


def checks_for(
    bench: Bench, bench_path: Path, utc: datetime, without: str = ""
) -> tuple[CheckHistory | None, tuple[str, ...]]:
    """Return the checks a sweep at ``utc`` counts with, and what a reader of the run must know of them.

    They are those of the standard that the bench file names, without a [check] table of the one measured last.
    ``without`` is why the sweep goes on whatever the check standard says.

    Raises
    ------
    CheckRefused
        The bench file has a [check] table and its last check does not allow a sweep.
    FileMistakes
        The history, or the board file of the standard, cannot be read.
    """
    history = read_history(check_path(bench_path))
    notes = [f"{history.path.name}: {damage}" for damage in history.damages]
    if bench.check:
        standard = standard_of(read_board(Path(bench.check.board)))
        reason = reason_against(bench.check, history, standard, utc)
    else:
        standard, reason = history.entries[-1].standard if history.entries else "", ""
    if reason and not without:
        raise CheckRefused(str(history.path), reason, str(bench_path))
    if without:
        notes.append(f"swept without a check of the bench ({without}){f'; {reason}' if reason else ''}")
    elif (mine := _of(history, standard)) and mine[-1].accepted:
        notes.append(f"the bench's last check was out of order and accepted: {mine[-1].accepted}")
    return used(history.entries, standard), tuple(notes)


def _of(history: History, standard: str) -> list[Entry]:
    return [entry for entry in history.entries if entry.standard == standard]


def reason_against(plan: CheckPlan, history: History, standard: str, utc: datetime) -> str:
    """Return why a bench must not sweep, or nothing: only a check of its ``standard`` can say that it may."""
    mine = _of(history, standard)
    if not mine:
        return f"it was never checked: {standard}"
    last = mine[-1]
    if history.ends_damaged:
        return f"the last line of {history.path.name} is damaged, nobody knows what that check said"
    if out := [entry for entry in history.entries[history.entries.index(last) :] if not entry.stands]:
        box = "" if out[-1].standard == standard else f" with {out[-1].standard},"
        return f"its last check, {_when(out[-1])},{box} was out of order ({out[-1].verdict})"
    begun = sum(before >= last.number for before in history.sweeps)
    if begun >= plan.every:
        return f"{begun} sweeps were begun since its last check, the bench file allows {plan.every} (every)"
    age = (utc - datetime.fromisoformat(last.started)).total_seconds()
    if age < 0.0:
        return f"its last check is dated {_when(last)}, later than now: look at the computer's clock"
    if age >= plan.longest_age:
        longest = f"{plan.longest_age / 3600.0:.3g} h (longest_age)"
        return f"its last check is {age / 3600.0:.3g} h old, the bench file allows {longest}"
    return ""


def _when(entry: Entry) -> str:
    return f"{entry.started[:16].replace('T', ' ')} UTC"


def counted(bench: Bench, bench_path: Path) -> Callable[[Path, dict[str, Any]], Journal]:
    """Return how a sweep's journal begins: counted before, where the bench file wants a check every so many sweeps.

    So a run that was cut short counts, once however often it is resumed.
    """

    def begin(folder: Path, head: dict[str, Any]) -> Journal:
        path = check_path(bench_path)
        try:
            add_sweep(path, head["serial"], head["attempt"], head["started"])
        except OSError as problem:
            raise BenchFault(
                f"{path} cannot be written ({problem.strerror or problem}): it counts the sweeps since the last check. "
                "Nothing was measured; make room there, or let it be written"
            ) from problem
        return Journal.begin(folder, head)

    return begin if bench.check else Journal.begin
