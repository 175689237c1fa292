"""Whether a bench may sweep: its last check is in order and not too old, or somebody says why it goes on without."""

from datetime import datetime
from pathlib import Path

from bandproof.bench.check_chart import used
from bandproof.bench.check_file import Entry, History, check_path, read_history
from bandproof.bench.errors import BadInput
from bandproof.bench.types import Bench, CheckHistory

__all__ = ["CheckRefused", "checks_for", "reason_against"]


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

    ``without`` is why the sweep goes on whatever the check standard says.

    Raises
    ------
    CheckRefused
        The bench file has a [check] table and its last check does not allow a sweep.
    FileMistakes
        The history cannot be read.
    """
    history = read_history(check_path(bench_path))
    notes = [f"{history.path.name}: {damage}" for damage in history.damages]
    reason = reason_against(bench, history, utc) if bench.check else ""
    if reason and not without:
        raise CheckRefused(str(history.path), reason, str(bench_path))
    if without:
        notes.append(f"swept without a check of the bench ({without}){f'; {reason}' if reason else ''}")
    elif history.entries and history.entries[-1].verdict != "pass" and history.entries[-1].accepted:
        notes.append(f"the bench's last check was out of order and accepted: {history.entries[-1].accepted}")
    return used(history.entries), tuple(notes)


def reason_against(bench: Bench, history: History, utc: datetime) -> str:
    """Return why a bench must not sweep, or nothing."""
    assert bench.check is not None
    if not history.entries:
        return "it was never checked"
    last = history.entries[-1]
    if history.ends_damaged:
        return f"the last line of {history.path.name} is damaged, nobody knows what that check said"
    if not last.stands:
        return f"its last check, {_when(last)}, was out of order ({last.verdict})"
    age = (utc - datetime.fromisoformat(last.started)).total_seconds()
    if age < 0.0:
        return f"its last check is dated {_when(last)}, later than now: look at the computer's clock"
    if age >= bench.check.longest_age:
        longest = f"{bench.check.longest_age / 3600.0:.3g} h (longest_age)"
        return f"its last check is {age / 3600.0:.3g} h old, the bench file allows {longest}"
    return ""


def _when(entry: Entry) -> str:
    return f"{entry.started[:16].replace('T', ' ')} UTC"
