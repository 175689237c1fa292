"""Whether the intervals hold what they claim: thousands of simulated benches, each with its own errors and board.

The simulator's physics go through records, points, thru, fit and budget of the program, without sockets; a few benches
are also swept over TCP and must give the same figures. Declared imperfections: every figure's interval should hold the
truth in 93 % at least, all together in 94.5 to 99 %, be neither wider than 1.3 times nor narrower than 0.95 times the
half-width that holds 95 % of the errors, and alarms stay below 2 %. Undeclared ones: the truth is held or something is
said in 93 %.
"""

import multiprocessing
import sys
from collections.abc import Iterable
from dataclasses import dataclass, replace
from functools import partial
from math import sqrt

import numpy as np

from bandproof.bench.circuit import draw_parts, predict
from bandproof.bench.evaluate import evaluate_stage
from bandproof.bench.rehearsal import demo_board, rehearsal_bench
from bandproof.bench.sweep import Sweep
from bandproof.bench.thru import paths
from bandproof.bench.types import QUANTITIES, Bench, Board, Point
from bandproof.bench.verbs.rehearse import world_of
from bandproof.simulated_instruments.bench import World
from bandproof.simulated_instruments.faults import Fault
from tests.benchmarks._direct import measured, with_designs_kept

BENCHES, OVER_TCP = 2000, 50
LEAST, POOLED, WIDTHS, MOST_ALARMS = 0.93, (0.945, 0.99), (0.95, 1.3), 0.02


@dataclass(frozen=True)
class Case:
    """One kind of bench: sizes of the simulator that differ from the reference, and what its bench file leaves out."""

    sizes: dict[str, float]
    undeclared: tuple[str, ...] = ()
    fault: str = ""


CASES = {
    "declared": Case({}),
    "probe 5 %": Case({"probe_compensation": 0.05}),
    "corners 6 Hz": Case({"ac_corner": 6.0}),
    "skew 1 us": Case({"skew": 1e-6}),
    "non-linearity 2 LSB": Case({"nonlinearity": 2.0}),
    "range 2 %": Case({"range_gain": 0.02}, ("range_gain",)),
    "hum 1 %": Case({"hum": 0.03}),
    "drift 0.5 %/min": Case({"drift": 0.005 / 60}),
    "reseating 0.5 %": Case({"reseating": 0.005}, ("reseating",)),
    "50 ohm taken for high impedance": Case({}, fault="wrong-load-assumption"),
}


@dataclass(frozen=True)
class One:
    """What one bench gave: relative errors and U of f0, Q, gain (nan without a result), and what it said."""

    errors: tuple[float, float, float]
    expanded: tuple[float, float, float]
    said: str


def board_of(seed: int) -> Board:
    """Return one stage of the demo board, another one with each seed."""
    board = demo_board()
    return replace(board, stages=(board.stages[seed % len(board.stages)],))


def bench_of(board: Board, case: Case) -> Bench:
    """Return the bench as its file says: the reference bench's, without what the case leaves out."""
    bench = rehearsal_bench(board)
    usual = {"range_gain": 0.02, "reseating": 0.005}
    accuracy = replace(bench.accuracy, **{name: usual[name] for name in case.undeclared})
    return replace(bench, accuracy=replace(accuracy, declared=accuracy.declared - set(case.undeclared)))


def world(board: Board, bench: Bench, case: Case, seed: int) -> World:
    """Return the bench as it is."""
    made = world_of(board, bench, draw_parts(board, seed), seed, 1, **case.sizes)
    return replace(made, faults=(Fault(case.fault, 0),) if case.fault else ())


def concluded(board: Board, bench: Bench, seed: int, points: tuple[Point, ...], said: str) -> One:
    """Return what is concluded from points against the truth."""
    stage, nothing = board.stages[0], (np.nan, np.nan, np.nan)
    if not points:
        return One(nothing, nothing, said)
    true = predict(board, stage, draw_parts(board, seed)[stage.name])
    result = evaluate_stage(board, bench, stage, [p for p in points if p.stage == stage.name], paths(points))
    figures = [result.figures[name] for name in QUANTITIES]
    errors = tuple(figure.measured / true[name] - 1.0 for name, figure in zip(QUANTITIES, figures, strict=True))
    expanded = tuple(figure.expanded_uncertainty / figure.measured for figure in figures)
    return One(errors, expanded, "; ".join([said, *result.alarms]).strip("; "))  # type: ignore[arg-type]


def one(seed: int, case: Case) -> One:
    """Return what one bench gave."""
    board = board_of(seed)
    bench = bench_of(board, case)
    found = measured(board, bench, world(board, bench, case, seed))
    return concluded(board, bench, seed, found.points, "; ".join([*found.alarms, found.stopped]).strip("; "))


def table(found: list[One]) -> dict[str, object]:
    """Return the statistics of many benches."""
    errors, expanded = np.array([o.errors for o in found]), np.array([o.expanded for o in found])
    said = np.array([bool(o.said) for o in found])
    with np.errstate(invalid="ignore"):
        held = np.abs(errors) <= expanded
    widths = []
    for i in range(3):
        size = np.abs(errors[np.isfinite(errors[:, i]), i])
        widths.append(float(np.nanmedian(expanded[:, i]) / np.quantile(size, 0.95)) if len(size) else np.nan)
    return {
        "held": held.mean(axis=0),
        "pooled": float(held.mean()),
        "seen": (held | said[:, None]).mean(axis=0),
        "said": float(said.mean()),
        "widths": widths,
        "count": len(found),
    }


def line(name: str, stats: dict[str, object]) -> str:
    """Return a case as a row of the table."""
    n = int(stats["count"])  # type: ignore[call-overload]

    def cell(p: float) -> str:
        return f"{100 * p:.1f} ± {100 * sqrt(max(p * (1 - p), 1 / n) / n):.1f}"

    held = " | ".join(cell(p) for p in stats["held"])  # type: ignore[attr-defined]
    seen = " | ".join(cell(p) for p in stats["seen"])  # type: ignore[attr-defined]
    widths = " / ".join(f"{w:.2f}" for w in stats["widths"])  # type: ignore[attr-defined]
    return f"| {name} | {held} | {cell(stats['pooled'])} | {seen} | {cell(stats['said'])} | {widths} |"  # type: ignore[arg-type]


def _within(name: str, stats: dict[str, object]) -> bool:
    if name != "declared":
        return bool((stats["seen"] >= LEAST).all())  # type: ignore[operator]
    return (
        bool((stats["held"] >= LEAST).all())  # type: ignore[operator]
        and POOLED[0] <= stats["pooled"] <= POOLED[1]  # type: ignore[operator]
        and all(WIDTHS[0] <= width <= WIDTHS[1] for width in stats["widths"])  # type: ignore[attr-defined]
        and stats["said"] <= MOST_ALARMS  # type: ignore[operator]
    )


def over_tcp(seed: int) -> tuple[One, One]:
    """Return what one bench gave over TCP and without; both must be the same."""
    from bandproof.bench.instruments import opened
    from bandproof.bench.journal import Journal
    from bandproof.bench.operator import Absent
    from bandproof.bench.verbs.rehearse import simulated

    board, case, journal = board_of(seed), CASES["declared"], Journal()
    bench = bench_of(board, case)
    with (
        simulated(world(board, bench, case, seed), bench) as (reachable, clock),
        opened(reachable, clock, None) as devices,
    ):
        sweep = Sweep(board, reachable, devices, clock, Absent(), journal)
        sweep.prepare()
        sweep.run()
    return concluded(board, bench, seed, tuple(journal.points), "; ".join(journal.alarms)), one(seed, case)


def many(seeds: Iterable[int], case: Case) -> list[One]:
    """Return what benches gave, in this process."""
    with with_designs_kept():
        return [one(seed, case) for seed in seeds]


def _all(case: Case, benches: int, processes: int) -> list[One]:
    if processes == 1:
        return many(range(benches), case)
    with multiprocessing.get_context("fork").Pool(processes) as pool:
        parts = pool.map(partial(many, case=case), [range(k, benches, 4 * processes) for k in range(4 * processes)], 1)
    return [found for part in parts for found in part]


HEAD = (
    "| bench | f0 held / % | Q held / % | gain held / % | together / % "
    "| f0 held or said / % | Q | gain | something said / % | median U over the errors' 95 %: f0 / Q / gain |\n"
    + "| --- " * 10
    + "|"
)


def main(
    benches: int = BENCHES, tcp: int = OVER_TCP, names: tuple[str, ...] = tuple(CASES), processes: int = 2
) -> bool:
    """Print a row per case; return whether every figure is within its bounds."""
    same = [first == second for first, second in map(over_tcp, range(tcp))]
    print(f"{sum(same)} of {tcp} benches gave the same figures over TCP, to the last digit")
    print(HEAD, flush=True)
    good = all(same)
    for name in names:
        stats = table(_all(CASES[name], benches, processes))
        within = _within(name, stats)
        print(line(name, stats) + ("" if within else "  <- short"), flush=True)
        good = good and within
    return good


if __name__ == "__main__":
    sys.exit(not main())
