"""Damaged files, runs, journals and instrument replies: a clear error or a right result each time, nothing else.

Bounds: no exception that is none of ours, no hang, no unbounded memory, no message a terminal would obey.
"""

from __future__ import annotations

import tempfile
from pathlib import Path

from tests.benchmarks._fuzz_files import damaged_files
from tests.benchmarks._fuzz_replies import damaged_replies
from tests.benchmarks._fuzz_runs import damaged_journals, damaged_run_files, rehearsed
from tests.benchmarks._tally import traced

FULL = 2000  # cases of each kind
SEED = 20260101
MEMORY = 50_000_000  # bytes, one case; arbitrary, far above what the largest intact input takes


def files(count: int = FULL, seed: int = SEED) -> bool:
    """Damaged board, bench and dialect files; return whether every one was told or right."""
    with tempfile.TemporaryDirectory() as folder, traced():
        tally, _ = damaged_files(count, seed, Path(folder))
        return tally.is_good(MEMORY)


def runs(count: int = FULL, seed: int = SEED) -> bool:
    """Damaged run files and journals, half each; return whether every one was told, or whole before the damage."""
    with tempfile.TemporaryDirectory() as name:
        folder = Path(name)
        original = rehearsed(folder / "original", 3)
        (folder / "runs").mkdir()
        (folder / "journals").mkdir()
        with traced():
            run_files, _ = damaged_run_files(original, count // 2, seed, folder / "runs")
            journals, _ = damaged_journals(original, count // 2, seed, folder / "journals")
        return all([run_files.is_good(MEMORY), journals.is_good(MEMORY)])


def replies(count: int = FULL, seed: int = SEED) -> bool:
    """Damaged instrument replies; return whether every one was told or right, in time and in step."""
    with traced():
        return damaged_replies(count, seed).is_good(MEMORY)


def main() -> bool:
    """Print the account of every kind; return whether all are good."""
    return all([files(), runs(), replies()])
