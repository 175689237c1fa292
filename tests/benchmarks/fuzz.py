"""Damaged files, runs, journals and instrument replies: a clear error or a right result each time, nothing else.

Bounds: no exception that is none of ours, no hang, no unbounded memory, no message a terminal would obey.
"""

from __future__ import annotations

import tempfile
from pathlib import Path

from tests.benchmarks._fuzz_commands import (
    on_damaged_files,
    on_damaged_journals,
    on_damaged_replies,
    on_damaged_runs,
)
from tests.benchmarks._fuzz_files import damaged_files
from tests.benchmarks._fuzz_replies import damaged_replies
from tests.benchmarks._fuzz_runs import damaged_journals, damaged_run_files, rehearsed
from tests.benchmarks._tally import traced

FULL = 2000  # cases of each kind
SAMPLE, DEAR_SAMPLE = 20, 100  # one in so many goes through the command line too; where it takes a rehearsal, a wait
SEED = 20260101
MEMORY = 50_000_000  # bytes, one case; arbitrary, far above what the largest intact input takes


def files(count: int = FULL, seed: int = SEED) -> bool:
    """Damaged board, bench and dialect files; return whether every one was told or right."""
    with tempfile.TemporaryDirectory() as folder, traced():
        tally, paths = damaged_files(count, seed, Path(folder))
        commands = on_damaged_files(paths[::SAMPLE], Path(folder) / "rehearsals")
        return all([tally.is_good(MEMORY), commands.is_good(MEMORY)])


def runs(count: int = FULL, seed: int = SEED) -> bool:
    """Damaged run files and journals, half each; return whether every one was told, or whole before the damage."""
    with tempfile.TemporaryDirectory() as name:
        folder = Path(name)
        original = rehearsed(folder / "original", 3)
        (folder / "runs").mkdir()
        (folder / "journals").mkdir()
        with traced():
            run_files, paths = damaged_run_files(original, count // 2, seed, folder / "runs")
            journals, folders = damaged_journals(original, count // 2, seed, folder / "journals")
            commands = [on_damaged_runs(paths[::SAMPLE]), on_damaged_journals(folders[:: 2 * SAMPLE])]
        good = [tally.is_good(MEMORY) for tally in (run_files, journals, *commands)]
        return all(good)


def replies(count: int = FULL, seed: int = SEED) -> bool:
    """Damaged instrument replies; return whether every one was told or right, in time and in step."""
    with traced():
        tally = damaged_replies(count, seed)
        with tempfile.TemporaryDirectory() as folder:
            commands = on_damaged_replies(count // DEAR_SAMPLE, seed, Path(folder))
        return all([tally.is_good(MEMORY), commands.is_good(MEMORY)])


def main() -> bool:
    """Print the account of every kind; return whether all are good."""
    return all([files(), runs(), replies()])
