"""Damaged files, runs, journals and instrument replies: a clear error or a right result each time, nothing else.

Bounds: no exception that is none of ours, no hang, no unbounded memory, no message a terminal would obey.
"""

from __future__ import annotations

import tempfile
from pathlib import Path

from tests.benchmarks._fuzz_files import damaged_files
from tests.benchmarks._tally import traced

FULL = 2000  # cases of each kind
SEED = 20260101
MEMORY = 50_000_000  # bytes, one case; arbitrary, far above what the largest intact input takes


def files(count: int = FULL, seed: int = SEED) -> bool:
    """Damaged board, bench and dialect files; return whether every one was told or right."""
    with tempfile.TemporaryDirectory() as folder, traced():
        tally, _ = damaged_files(count, seed, Path(folder))
        return tally.is_good(MEMORY)


def main() -> bool:
    """Print the account of every kind; return whether all are good."""
    return files()
