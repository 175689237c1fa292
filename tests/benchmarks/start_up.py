"""What a user waits for: a rehearsal against the bare import of its libraries, ``--help`` against that of click."""

import statistics
import subprocess
import sys
import sysconfig
import tempfile
import time
from pathlib import Path

DEMO_BOUND, HELP_BOUND = 6.0, 5.0  # times the bare import
LIBRARIES = "import numpy, scipy.optimize, h5py, matplotlib.figure, pyvisa"
ROUNDS = 5


def _wall(command: list[str]) -> float:
    start = time.perf_counter()
    subprocess.run(command, check=True, capture_output=True)
    return time.perf_counter() - start


def _ratio(command: list[str], bare: list[str], rounds: int) -> tuple[float, float, float]:
    """Return the median ratio of pairs run in turn, and both medians in s."""
    pairs = [(_wall(command), _wall(bare)) for _ in range(rounds + 1)][1:]  # the first warms the caches
    return (
        statistics.median(a / b for a, b in pairs),
        statistics.median(a for a, _ in pairs),
        statistics.median(b for _, b in pairs),
    )


def main(rounds: int = ROUNDS) -> bool:
    """Print both ratios; return whether both are within their bounds."""
    program = str(Path(sysconfig.get_path("scripts")) / "bandproof")
    with tempfile.TemporaryDirectory() as folder:
        demo = _ratio([program, "rehearse", "--folder", folder], [sys.executable, "-c", LIBRARIES], rounds)
    shown = _ratio([program, "--help"], [sys.executable, "-c", "import click"], rounds)
    print(f"rehearse {demo[1]:.2f} s, bare import {demo[2]:.2f} s, ratio {demo[0]:.2f} (bound {DEMO_BOUND:g})")
    print(f"--help {shown[1]:.3f} s, import click {shown[2]:.3f} s, ratio {shown[0]:.2f} (bound {HELP_BOUND:g})")
    return demo[0] <= DEMO_BOUND and shown[0] <= HELP_BOUND
