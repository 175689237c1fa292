"""Fixtures shared by all rooms: where outside data lie, and an independent circuit simulator."""

from __future__ import annotations

import shutil
import subprocess
from collections.abc import Callable, Sequence
from pathlib import Path

import numpy as np
import pytest

Spice = Callable[[Sequence[str], str, Sequence[str]], np.ndarray]


@pytest.fixture(scope="session")
def outside() -> Path:
    """The folder of data from outside the project; SOURCES.md there tells where each comes from."""
    return Path(__file__).parent / "outside"


@pytest.fixture
def spice(tmp_path: Path) -> Spice:
    """Run ngspice on a netlist; return the numbers of `wrdata`: per vector its scale, then its values."""
    program = shutil.which("ngspice")
    if program is None:
        pytest.skip("ngspice is not installed")

    def run(netlist: Sequence[str], analysis: str, vectors: Sequence[str]) -> np.ndarray:
        table = tmp_path / "table.txt"
        deck = ["a test", *netlist, ".options reltol=1e-9 abstol=1e-15 vntol=1e-12", ".control", "set numdgt=15"]
        deck += ["set wr_singlescale", analysis, f"wrdata {table} {' '.join(vectors)}", "quit", ".endc", ".end"]
        (tmp_path / "deck.cir").write_text("\n".join(deck) + "\n")
        done = subprocess.run(
            [program, "-b", str(tmp_path / "deck.cir")], capture_output=True, text=True, timeout=60, check=False
        )
        assert table.exists(), done.stdout + done.stderr
        return np.loadtxt(table)

    return run
