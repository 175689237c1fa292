"""Makes the reference run files: ``python tests/reference_runs/make.py FOLDER`` (those kept here: FOLDER ``v1``).

They are a promise: whatever later versions do, these files are read, verified, fitted to the same figures and reported.
So they are never made again for a version of the schema that has been released; a new version gets files of its own.
Made on simulated instruments in virtual time, the same bytes each time on the same versions of the libraries.

    PASS-1/1  two bands that pass
    PASS-1/2  measured again with a reason: pooled with the first, a stored thru, checks, an ambient temperature
    FAIL-1/1  a wrong part: fails, and the part is suspected
    CUT-1/1   the output opens at record 8: cut short
"""

import sys
from pathlib import Path
from typing import Any

from bandproof.bench.attempts import Attempt
from bandproof.bench.board_file import parse_board
from bandproof.bench.finish import Outcome
from bandproof.bench.job import Job
from bandproof.bench.operator import Absent
from bandproof.bench.rehearsal import DEMO_BOARD, demo_text, rehearsal_bench
from bandproof.bench.runfile import digest_of
from bandproof.bench.stop import Stop
from bandproof.bench.thru_job import ThruJob
from bandproof.bench.types import Check, CheckHistory
from bandproof.bench.verbs.rehearse import Rehearsal, simulated

RULE = 'rule      = "simple"'
RULES = 'rule      = { q = "guarded 0.5", gain = "risk 2 %" }\nspread    = { centre = "2 %", gain = "0.3 dB" }'
CHECKS = CheckHistory(
    "a passive network (made up)",
    tuple(
        Check(
            f"2025-12-31T{hour:02}:00:00+00:00", {"bridge": {"centre": (995.0, 0.1), "q": (q, 1e-4), "gain": (q, 1e-4)}}
        )
        for hour, q in enumerate((0.3333, 0.3332, 0.3334, 0.3333, 0.3331, 0.3333, 0.3335, 0.3332))
    ),
)


class Silent:
    """Tells nobody how far a run is."""

    def __call__(self, *how_far: object) -> None:
        """Say nothing."""

    def close(self) -> None:
        """Say nothing."""


def board_text(bands: int) -> str:
    """Return the demo board's file with its first bands only, under more than one rule."""
    head, *stages = demo_text(DEMO_BOARD).split("\n[stages.")
    return "\n[stages.".join([head, *stages[:bands]]).replace(RULE, RULES, 1) + "\n"


def carried_out(
    folder: Path, serial: str, attempt: int, *, bands: int, rehearsal: Rehearsal, own_thru: bool = True, **facts: Any
) -> Outcome:
    """Carry out a run; without ``own_thru`` on a bench that has measured the path an instant before."""
    board = parse_board(board_text(bands), "board")
    bench = rehearsal_bench(board)
    place = folder / serial / str(attempt)
    place.mkdir(parents=True)
    with simulated(rehearsal.world(board, bench, attempt), bench) as (reachable, clock):
        if not own_thru:
            job = ThruJob(reachable, board, clock, Absent(), Stop(), Silent(), None, ambient=23.0)
            facts |= {"thru": job.carry_out().thru, "thru_path": "thru.json", "ambient": 24.0}
        return Job(
            board=board,
            bench=reachable,
            serial=serial,
            attempt=attempt,
            run_id=f"reference-{serial}-{attempt}",
            folder=place,
            clock=clock,
            operator=Absent(),
            stop=Stop(),
            progress=Silent(),
            **facts,
        ).carry_out()


def make(folder: Path) -> None:
    """Make all of them in a folder; only run files and their chain are left."""
    seed = Rehearsal(1)
    first = carried_out(folder, "PASS-1", 1, bands=2, rehearsal=seed, note='Ω µ ± "quoted"', operator_name="Zoë")
    known = Attempt(1, digest_of(first.folder / "run.h5"), "pass", True)
    more = {"earlier": [known], "retest": "to have both attempts pooled", "checks": CHECKS}
    carried_out(folder, "PASS-1", 2, bands=2, rehearsal=seed, own_thru=False, **more)
    carried_out(folder, "FAIL-1", 1, bands=1, rehearsal=Rehearsal(1, defects=("low.R_shunt=3k4",)))
    carried_out(folder, "CUT-1", 1, bands=1, rehearsal=Rehearsal(1, faults=("open-output@8",)))
    for path in folder.rglob("*"):
        if path.is_file() and path.suffix != ".h5" and path.name != "chain.txt":
            path.unlink()


if __name__ == "__main__":
    make(Path(sys.argv[1]))
