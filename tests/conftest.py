"""Fixtures shared by all rooms: where outside data lie, and an independent circuit simulator."""

from __future__ import annotations

import shutil
import subprocess
from collections.abc import Callable, Sequence
from pathlib import Path

import numpy as np
import pytest

ROLES = ("generator", "scope", "switch", "supply")
AS_TEXT = """before = ["fetch basket {channel}"]
read = "hand over"
framing = "line"
encoding = "ascii"
scaling = "volts"
rate = 1e6
"""
AS_REALS = """read = "haul<{channel}>"
framing = "block"
terminated = false
encoding = "real32"
byte_order = "little"
scaling = "volts"
"""

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


def _with_transfer(text: str, table: str, prepare: tuple[str, str]) -> str:
    head, _, rest = text.partition("[transfer]\n")
    return f"{head.replace(*prepare)}[transfer]\n{table}[overload]{rest.partition('[overload]')[2]}"


@pytest.fixture(scope="session")
def invented() -> dict[str, tuple[str, dict[str, str]]]:
    """Dialects of the invented languages: a name to the language and its texts by role, two kinds of record each."""
    folder = Path(__file__).parent / "invented"
    found = {
        language: (language, {role: (folder / f"{language}-{role}.toml").read_text() for role in ROLES})
        for language in ("orchard", "harbour")
    }
    text = _with_transfer(found["orchard"][1]["scope"], AS_TEXT, ("weigh by eye", "weigh in full"))
    found["orchard, text"] = ("orchard", {**found["orchard"][1], "scope": text})
    text = _with_transfer(found["harbour"][1]["scope"], AS_REALS, ("cargo<codes>", "cargo<reals>"))
    text = text.replace("low = -32768\nhigh = 32509\n", "bits = 8\n")
    found["harbour, reals"] = ("harbour", {**found["harbour"][1], "scope": text})
    return found
