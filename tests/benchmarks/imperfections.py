"""Each imperfection of a bench alone: how it moves f0, Q and gain, and which of the record's own checks sees it.

Three bands of the demo board (160 Hz, 1 kHz, 6.3 kHz), 8 bits and noise as on the reference bench, everything else
ideal but the one imperfection at its declared or its undeclared size, the path measured as in every run. The largest
errors of three seeds, against the nodal curve.
"""

from collections.abc import Iterator
from dataclasses import replace

from bandproof.bench.circuit import draw_parts, predict
from bandproof.bench.evaluate import evaluate_stage
from bandproof.bench.instruments import opened
from bandproof.bench.journal import Journal
from bandproof.bench.operator import Absent
from bandproof.bench.rehearsal import demo_board, rehearsal_bench
from bandproof.bench.sweep import Sweep
from bandproof.bench.thru import paths
from bandproof.bench.types import QUANTITIES, Point, StageResult
from bandproof.bench.verbs.rehearse import simulated, world_of
from bandproof.simulated_instruments.imperfections import Imperfections

SEEDS = (1, 2, 3)
BANDS = ("low", "voice", "breath")
QUIET = Imperfections(adc_bits=8, noise=0.5)
LEVELS = (1.4, 4.4)  # V peak at the taps of these stages

# name: (field, declared size, undeclared size); sizes as `Imperfections` counts them, per channel with opposite signs
CASES: dict[str, tuple[str, object, object]] = {
    "none": ("output_resistance", 0.0, 0.0),
    "generator output 50 ohm": ("output_resistance", 50.0, 600.0),
    "generator flatness": ("flatness", 0.01, 0.05),
    "generator frequency": ("frequency_error", 20e-6, 1e-3),
    "channel gain": ("channel_gain", (0.015, -0.015), (0.05, -0.05)),
    "range to range": ("range_gain", 0.005, 0.02),
    "channel skew": ("skew", (20e-9, -20e-9), (0.5e-6, -0.5e-6)),
    "probe compensation": ("probe_compensation", (0.01, -0.01), (0.05, -0.05)),
    "coupling corners": ("ac_corner", (0.1, 0.05), (5.0, 6.0)),
    "converter linearity": ("nonlinearity", (0.5, -0.5), (2.0, -2.0)),
    "time base": ("timebase_error", 20e-6, 1e-2),
    "hum": ("hum", (1e-3, 1e-3), (0.01 * LEVELS[0], 0.01 * LEVELS[1])),
    "drift": ("drift", (0.0002 / 60, -0.0002 / 60), (0.005 / 60, -0.005 / 60)),
    "reseating": ("reseating", 0.0005, 0.005),
    "probe capacitance": ("probe_capacitance", 15e-12, 100e-12),
    "slew rate": ("slew", 2e5, 5e4),
    "scope bandwidth": ("bandwidth_limit", (20e6, 20.2e6), (100e3, 101e3)),
}


def _with(field: str, size: object) -> Imperfections:
    if field == "range_gain":  # each range its own error, alternating, the second channel the other way round
        row = tuple((-1) ** i * float(str(size)) for i in range(len(QUIET.range_gain[0])))
        size = (row, tuple(-value for value in row))
    return replace(QUIET, **{field: size})


def _measured(imperfections: Imperfections, seed: int) -> Iterator[tuple[StageResult, list[Point], list[float], str]]:
    """Yield, per band, its result, points, relative errors of f0, Q and gain, and what stopped the sweep."""
    board = demo_board()
    board = replace(board, stages=tuple(stage for stage in board.stages if stage.name in BANDS))
    bench, drawn = rehearsal_bench(board), draw_parts(board, seed)
    world = replace(world_of(board, bench, drawn, seed, 1), imperfections=imperfections)
    journal, stopped = Journal(), ""
    with simulated(world, bench) as (reachable, clock):
        try:
            with opened(reachable, clock, None) as devices:
                sweep = Sweep(board, reachable, devices, clock, Absent(), journal)
                sweep.prepare()
                sweep.run()
        except Exception as problem:  # whatever ends a sweep is part of what is reported
            stopped = type(problem).__name__
    known = paths(journal.points)
    for stage in board.stages:
        points = [point for point in journal.points if point.stage == stage.name]
        if not points:
            continue
        result = evaluate_stage(board, bench, stage, points, known)
        true = predict(board, stage, drawn[stage.name])
        errors = [result.figures[name].measured / true[name] - 1.0 for name in QUANTITIES]
        alarms = " ".join((*result.alarms, *journal.alarms))
        yield result, points, errors, f"{stopped} {alarms}"


_SEEN = {
    "closing point": "first point",
    "lack of fit": "do not follow",
    "delay": "needs a delay",
    "hum record": "hum or noise",
    "settling": "had not settled",
    "level": "BenchFault",
    "first look": "low-level point",
    "distortion": "distorted",
    "linearity": "converters that depart",
}


def _row(name: str, size: object, field: str, seeds: tuple[int, ...]) -> str:
    worst, seen = [0.0, 0.0, 0.0], set[str]()
    for seed in seeds:
        for result, points, errors, words in _measured(_with(field, size), seed):
            worst = [max(a, abs(b)) for a, b in zip(worst, errors, strict=True)]
            seen |= {check for check, phrase in _SEEN.items() if phrase in words}
            seen |= {"lack of fit"} if result.lack_of_fit else set()
            seen |= {
                flag for point in points for flag in point.flags if flag in ("off-frequency", "folded", "overload")
            }
    shown = "/".join(f"{value:.3g}" for value in size) if isinstance(size, tuple) else str(size)
    figures = " | ".join(f"{100.0 * value:.3f}" for value in worst)
    return f"| {name} | {shown} | {figures} | {', '.join(sorted(seen)) or '-'} |"


def main(seeds: tuple[int, ...] = SEEDS, names: tuple[str, ...] = tuple(CASES)) -> bool:
    """Print the table; True: there is no bound, it shows what the budget has to hold."""
    print("| imperfection | size | f0 / % | Q / % | gain / % | seen by |\n| --- | --- | --- | --- | --- | --- |")
    for name in names:
        field, declared, undeclared = CASES[name]
        for size in dict.fromkeys((declared, undeclared)):
            print(_row(name, size, field, seeds), flush=True)
    return True
