"""What `predict` says of the demo board, beside boards that a rehearsal draws and measures.

Thousands of boards drawn as a rehearsal draws them, their figures by definition from the nodal curve: spread of every
figure, yield of every figure, band and board. Some of them really measured, thru and all, on simulated benches that
keep what their file declares: fractions passed, undecided, failed, and how often the predicted U holds the truth. The
board as it is, and with limits so tight that neither yield nor verdicts are all the same. Every difference is judged in
standard errors of both sides together.
"""

import multiprocessing
import sys
from dataclasses import dataclass
from math import hypot, inf, sqrt

import numpy as np

from bandproof.analysis.curve import network_figures
from bandproof.analysis.spread import Fraction, fraction, spread_of
from bandproof.bench.board_file import parse_board
from bandproof.bench.circuit import draw_parts, predict, stage_network, taps
from bandproof.bench.evaluate import evaluate_stage
from bandproof.bench.expectation import Expectation, expected
from bandproof.bench.prediction import PredictedBoards, predicted_boards
from bandproof.bench.rehearsal import DEMO_BOARD, demo_board, demo_text, rehearsal_bench
from bandproof.bench.thru import paths
from bandproof.bench.types import QUANTITIES, Board
from bandproof.bench.verbs.rehearse import world_of
from tests.benchmarks._direct import measured, with_designs_kept

BOARDS, MEASURED = 2000, 60
MOST = 4.0  # standard errors
TIGHT = {
    'centre = "6 %", q = "6 %", gain = "1 dB"': 'centre = "4 %", q = "1 %", gain = "0.5 dB"',
    'rule      = "simple"': 'rule      = "guarded 0.5"',
}
CODES = {"pass": 0, "undecided": 1, "fail": 2}
_CHUNK = 100  # boards whose curves are read at once


def tightened() -> Board:
    """Return the demo board with narrower limits and a rule that can leave figures undecided."""
    text = demo_text(DEMO_BOARD)
    for old, new in TIGHT.items():
        assert old in text
        text = text.replace(old, new)
    return parse_board(text, "the demo board, tightened")


def true_figures(board: Board, seeds: range) -> np.ndarray:
    """Return f0, Q, gain of each stage (K, F) of rehearsed boards, by definition from their nodal curves."""
    drawn = [draw_parts(board, seed) for seed in seeds]
    found = []
    for start in range(0, len(drawn), _CHUNK):
        row = []
        for stage in board.stages:
            node_in, node_out = taps(board, stage)
            centre = stage.limits["centre"].designed
            some = [one[stage.name] for one in drawn[start : start + _CHUNK]]
            values = {f"{stage.name}.{p.name}": np.array([one[p.name] for one in some]) for p in stage.parts}
            figures = network_figures(
                stage_network(board, stage),
                node_in=node_in,
                node_out=node_out,
                low=centre / 1e3,
                high=centre * 1e3,
                values=values,
            )
            row += [figures.f0, figures.q, figures.gain]
        found.append(np.stack(row, axis=1))
    return np.concatenate(found)


@dataclass(frozen=True)
class One:
    """A measured board: verdicts of its figures under each board's limits, relative errors of the figures."""

    codes: tuple[tuple[int, ...], ...]
    errors: tuple[float, ...]


def one(seed: int) -> One:
    """Return what a rehearsed board gives, measured."""
    plain = demo_board()
    bench, drawn = rehearsal_bench(plain), draw_parts(plain, seed)
    found = measured(plain, bench, world_of(plain, bench, drawn, seed, 1))
    assert not found.stopped, found.stopped
    codes, errors = [], list[float]()
    for board in (plain, tightened()):
        results = [
            evaluate_stage(board, bench, stage, [p for p in found.points if p.stage == stage.name], paths(found.points))
            for stage in board.stages
        ]
        codes.append(tuple(CODES[result.figures[q].verdict] for result in results for q in QUANTITIES))
        errors = [
            result.figures[q].measured / predict(board, board.stage(result.name), drawn[result.name])[q] - 1.0
            for result in results
            for q in QUANTITIES
        ]
    return One(tuple(codes), tuple(errors))


def _many(seeds: range) -> list[One]:
    with with_designs_kept():
        return [one(seed) for seed in seeds]


def all_measured(count: int, processes: int) -> list[One]:
    """Return measured boards of seeds from 0."""
    if processes == 1:
        return _many(range(count))
    with multiprocessing.get_context("fork").Pool(processes) as pool:
        return [
            found for part in pool.map(_many, [range(k, count, processes) for k in range(processes)]) for found in part
        ]


class Tally:
    """Prints differences in standard errors; remembers whether all are small, and the largest."""

    def __init__(self) -> None:
        self.good, self.count, self.largest, self.squares = True, 0, 0.0, 0.0

    def compare(self, name: str, said: float, seen: float, error: float, *, show: bool = True) -> None:
        """Judge a difference; print it where asked, and always when it is too large."""
        away = (seen - said) / error if error else (0.0 if seen == said else inf)
        self.count, self.largest, self.squares = self.count + 1, max(self.largest, abs(away)), self.squares + away**2
        near = abs(away) <= MOST
        self.good = self.good and near
        if show or not near:
            print(f"{name:<34} {said:10.5f} {seen:10.5f} {error:10.5f} {away:+7.2f}{'' if near else '  <- too far'}")


def compare_parts(tally: Tally, board: Board, said: PredictedBoards, true: np.ndarray) -> None:
    """Compare spreads and yields with those of rehearsed boards."""
    low = np.array([stage.limits[q].lower for stage in board.stages for q in QUANTITIES])
    high = np.array([stage.limits[q].upper for stage in board.stages for q in QUANTITIES])
    inside = (low <= true) & (true <= high)

    def share(name: str, one: Fraction, hit: np.ndarray, *, show: bool) -> None:
        other = fraction(hit)
        tally.compare(f"yield of {name}", one.value, other.value, hypot(one.error, other.error), show=show)

    for s, stage in enumerate(said.stages):
        for i, (quantity, figure) in enumerate(stage.figures.items()):
            at, seen = 3 * s + i, spread_of(true[:, 3 * s + i])
            sizes = figure.spread.sd / figure.nodal, seen.sd / figure.nodal
            error = hypot(figure.spread.sd_error, seen.sd_error) / figure.nodal
            tally.compare(f"relative sd of {stage.name} {quantity}", *sizes, error, show=s == 0)
            share(f"{stage.name} {quantity}", figure.conforming, inside[:, at], show=s == 0)
        share(f"band {stage.name}", stage.conforming, inside[:, 3 * s : 3 * s + 3].all(axis=1), show=True)
    share("the whole board", said.conforming, inside.all(axis=1), show=True)


def compare_verdicts(tally: Tally, said: Expectation, codes: np.ndarray) -> None:
    """Compare fractions of verdicts, of boards and of each figure over its bands, with measured boards' (n, F).

    The standard error is that of so many boards as predicted. Bands of one board share its bench: boards are counted.
    """
    for word, code in CODES.items():
        for name, columns in [("board", None), *((q, range(i, codes.shape[1], 3)) for i, q in enumerate(QUANTITIES))]:
            if columns is None:
                each, seen = said.codes.max(axis=1) == code, codes.max(axis=1) == code
            else:
                each, seen = ((c[:, list(columns)] == code).mean(axis=1) for c in (said.codes, codes))
            scatter = max(float(each.std()), 1.0 / sqrt(len(each)))
            error = scatter * sqrt(1.0 / len(each) + 1.0 / len(seen))
            tally.compare(f"{word} of {name}", float(each.mean()), float(seen.mean()), error)


def compare_u(tally: Tally, said: Expectation, found: list[One]) -> None:
    """Compare how often the predicted U holds the truth with its coverage, boards counted."""
    u = np.array([figure.relative for stage in said.stages.values() for figure in stage.values()])
    held = np.abs([one.errors for one in found]) <= u
    for i, quantity in enumerate(QUANTITIES):
        each = held[:, i::3].mean(axis=1)
        error = sqrt(0.9545 * 0.0455 / len(each))  # bands of one board counted as one figure: they share the bench
        tally.compare(f"predicted U of {quantity} holds", 0.9545, float(each.mean()), error)


def main(boards: int = BOARDS, measured_boards: int = MEASURED, processes: int = 2) -> bool:
    """Print every comparison; return whether all are within the statistical error."""
    true = true_figures(demo_board(), range(boards))
    found = all_measured(measured_boards, processes)
    tally = Tally()
    for i, (name, board) in enumerate({"the demo board": demo_board(), "tightened": tightened()}.items()):
        said = predicted_boards(board)
        on_bench = expected(board, rehearsal_bench(board), said)
        print(f"{name}: {boards} boards drawn, {measured_boards} of them measured")
        print(f"{'':<34} {'predicted':>10} {'rehearsed':>10} {'std error':>10} {'away':>7}")
        compare_parts(tally, board, said, true)
        compare_verdicts(tally, on_bench, np.array([one.codes[i] for one in found]))
        if i == 0:
            compare_u(tally, on_bench, found)
    rms = sqrt(tally.squares / tally.count)
    print(f"{tally.count} comparisons, largest {tally.largest:.2f} standard errors (at most {MOST:g}), rms {rms:.2f}")
    return tally.good


if __name__ == "__main__":
    sys.exit(not main())
