"""What the report costs: that of a hundred bands against that of ten, and its share of a rehearsal of five.

Processor seconds: of rehearsals the least of interleaved rounds; of the long report one, between two halves of as many
short ones as make its length, so that both see the machine equally busy. Bounds: a hundred bands take less than 10
times what ten take; a rehearsal with its report takes at most 1.5 times one that leaves it out (in the benchmark's
child only: the module that writes it is replaced there).
"""

import math
import resource
import subprocess
import sys
import tempfile
import time
from dataclasses import replace
from pathlib import Path

from bandproof.bench.documents.report import report_bytes
from bandproof.bench.documents.stored import Stored, read_stored

_REHEARSE = "from bandproof.bench.verbs import console; sys.exit(console.run(['rehearse', '--folder', sys.argv[1]]))"
_WITH = f"import sys; {_REHEARSE}"
_WITHOUT = (
    "import sys, types; m = types.ModuleType('report'); m.write_report = lambda *given: None; "
    f"sys.modules['bandproof.bench.documents.report'] = m; {_REHEARSE}"
)


def of_bands(stored: Stored, count: int) -> float:
    """Return the processor seconds of the report of a board with copies of one measured band, each at its own f0."""
    view, stages, drawn = stored.views[0], [], []
    for number in range(count):
        factor, figures = 1.03**number, dict(view.result.figures)
        moved = ("designed", "predicted", "measured", "lower_limit", "upper_limit", "expanded_uncertainty")
        figures["centre"] = replace(
            figures["centre"], **{name: factor * getattr(figures["centre"], name) for name in moved}
        )
        theta = (view.result.theta[0] + math.log(factor), *view.result.theta[1:])
        stages.append(replace(view.result, name=f"band-{number + 1}", figures=figures, theta=theta))
        places = {name: factor * getattr(view, name) for name in ("frequency", "at", "near")}
        drawn.append(replace(view, result=stages[-1], **places))
    asked = tuple(replace(stored.run.board.stages[0], name=stage.name) for stage in stages)
    run = replace(stored.run, board=replace(stored.run.board, stages=asked))
    begin = time.process_time()
    report_bytes(run, stages, stored.result, stored.digest, drawn)
    return time.process_time() - begin


def rehearsed(program: str, folder: str) -> float:
    """Return the processor seconds of a rehearsal of the demo board, its simulated instruments included."""
    before = resource.getrusage(resource.RUSAGE_CHILDREN)
    subprocess.run([sys.executable, "-c", program, folder], check=True, capture_output=True)
    after = resource.getrusage(resource.RUSAGE_CHILDREN)
    return after.ru_utime + after.ru_stime - before.ru_utime - before.ru_stime


def main(rounds: int = 3, few: int = 10, many: int = 100) -> bool:
    """Print both ratios beside their bounds."""
    with tempfile.TemporaryDirectory() as folder:
        costs = [(rehearsed(_WITH, f"{folder}/with"), rehearsed(_WITHOUT, f"{folder}/without")) for _ in range(rounds)]
        assert not list(Path(folder, "without").rglob("report.pdf"))
        stored = read_stored(next(Path(folder, "with").rglob("run.h5")))
        of_bands(stored, 1)  # libraries are loaded here
        half = max(1, many // few // 2)
        before = [of_bands(stored, few) for _ in range(half)]
        longer = of_bands(stored, many)
        short = [*before, *(of_bands(stored, few) for _ in range(half))]
    found = [
        (f"report of {many} bands / of {few}", [longer, sum(short) / len(short)], many / few),
        ("rehearsal with its report / without", [min(column) for column in zip(*costs, strict=True)], 1.5),
    ]
    for name, (larger, smaller), bound in found:
        kept = larger < bound * smaller
        print(f"{name}: ratio {larger / smaller:.2f} (below {bound:g}){'' if kept else '  <- missed'}", flush=True)
    return all(larger < bound * smaller for _, (larger, smaller), bound in found)
