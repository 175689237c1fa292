"""Whether the right part is suspected, and nobody where nothing is wrong: many drawn boards of the demo's design.

Parts are drawn within tolerance, one of them (or all capacitors) is made wrong, the figures are those of the nodal
curve plus errors drawn from the covariance that the reference bench's budget has on a swept board. A part that leaves
no band is counted as such. Then boards are swept on the simulated bench, whose errors are its own. Bounds: of healthy
boards at most 1 % accused; a wrong decade, half and twice the value named first in 98 %; all capacitors 8 % off named
as such in 80 %; a part 10 % off: another one named in at most 5 %, the right one, told from all others, in 55 %.
"""

import sys
from collections import Counter
from collections.abc import Callable
from functools import cache

import numpy as np

from bandproof.analysis.suspects import DISTINGUISHABLE, Judgement, judged
from bandproof.analysis.tolerances import Circuit, Seen
from bandproof.analysis.types import FloatArray
from bandproof.bench.circuit import draw_parts, predict
from bandproof.bench.evaluate import evaluate_stage
from bandproof.bench.rehearsal import demo_board, rehearsal_bench
from bandproof.bench.suspects import circuit_of, seen_of, suspected
from bandproof.bench.thru import paths
from bandproof.bench.types import QUANTITIES, StageResult, Suspect
from bandproof.bench.verbs.rehearse import world_of
from tests.benchmarks._direct import measured, with_designs_kept

HEALTHY, WRONG, SWEPT = 1000, 300, 50
Drawn = dict[str, dict[str, float]]
Truth = tuple[str, str]  # stage and part; for a common factor "" and the kind


@cache
def circuits() -> dict[str, Circuit]:
    """Return the demo board's stages, kept so that their scans are made once."""
    board, found = demo_board(), {}
    for stage in board.stages:
        prediction = predict(board, stage)
        found[stage.name] = circuit_of(board, stage, np.log([prediction[quantity] for quantity in QUANTITIES]))
    return found


def swept(seed: int, drawn: Drawn) -> list[StageResult]:
    """Return what is concluded about a board that was swept on a simulated reference bench, without suspects."""
    board = demo_board()
    bench = rehearsal_bench(board)
    found = measured(board, bench, world_of(board, bench, drawn, seed, 1))
    known = paths(found.points)
    return [
        evaluate_stage(board, bench, stage, [p for p in found.points if p.stage == stage.name], known)
        for stage in board.stages
        if any(p.stage == stage.name for p in found.points)
    ]


@cache
def covariances() -> tuple[FloatArray, ...]:
    """Return each stage's covariance of ln f0, ln Q, ln gain by the budget of a swept healthy board."""
    return tuple(seen_of(result).covariance for result in swept(1, draw_parts(demo_board(), 1)))


# --- what is made wrong: changes the parts, returns which ---


def one_part(*factors: float) -> Callable[[Drawn, np.random.Generator], Truth]:
    """Return what replaces one part, any, by one of other nominal value, within its tolerance of that."""

    def change(drawn: Drawn, rng: np.random.Generator) -> Truth:
        board = demo_board()
        stage = board.stages[rng.integers(len(board.stages))]
        part = stage.parts[rng.integers(len(stage.parts))]
        drawn[stage.name][part.name] *= rng.choice(factors)
        return stage.name, part.name

    return change


def exactly(*factors: float) -> Callable[[Drawn, np.random.Generator], Truth]:
    """Return what makes one part, any, exactly so many times its drawn value."""

    def change(drawn: Drawn, rng: np.random.Generator) -> Truth:
        board = demo_board()
        stage = board.stages[rng.integers(len(board.stages))]
        part = stage.parts[rng.integers(len(stage.parts))]
        drawn[stage.name][part.name] = part.value * rng.choice(factors)
        return stage.name, part.name

    return change


def all_capacitors(*factors: float) -> Callable[[Drawn, np.random.Generator], Truth]:
    """Return what multiplies all capacitors of the board."""

    def change(drawn: Drawn, rng: np.random.Generator) -> Truth:
        factor = rng.choice(factors)
        for parts in drawn.values():
            parts.update({name: value * factor for name, value in parts.items() if name.startswith("C")})
        return "", "capacitor"

    return change


def nothing(drawn: Drawn, rng: np.random.Generator) -> Truth:
    """Leave the board healthy."""
    return "", ""


CASES: dict[str, Callable[[Drawn, np.random.Generator], Truth]] = {
    "healthy": nothing,
    "wrong decade": one_part(0.1, 10.0),
    "half or twice the value": one_part(0.5, 2.0),
    "all capacitors 8 % off": all_capacitors(0.92, 1.08),
    "one part 10 % off": exactly(0.9, 1.1),
}
# verdict counted, least or most share of boards
BOUNDS = {
    "healthy": [("accused", "most", 0.01)],
    "wrong decade": [("right first", "least", 0.98)],
    "half or twice the value": [("right first", "least", 0.98)],
    "all capacitors 8 % off": [("right", "least", 0.80)],
    "one part 10 % off": [("wrong", "most", 0.05), ("right", "least", 0.55)],
}


def drawn_board(case: str, seed: int) -> tuple[Drawn, Truth, np.random.Generator]:
    """Return a board's parts, what is wrong with them, and the rest of the draw."""
    rng = np.random.default_rng([seed, list(CASES).index(case), 0x5C5])
    drawn = draw_parts(demo_board(), int(rng.integers(2**31)))
    return drawn, CASES[case](drawn, rng), rng


def drawn_figures(boards: list[tuple[Drawn, Truth, np.random.Generator]]) -> list[list[Seen]]:
    """Return what would be measured of boards: their nodal figures and errors as the budget has them."""
    found: list[list[Seen]] = [[] for _ in boards]
    for (name, circuit), covariance in zip(circuits().items(), covariances(), strict=True):
        figures = circuit.figures(np.array([[drawn[name][part] for part in circuit.parts] for drawn, *_ in boards]))
        for one, true, (_, _, rng) in zip(found, figures, boards, strict=True):
            one.append(Seen(true + rng.multivariate_normal(np.zeros(3), covariance), covariance))
    return found


def verdict(found: list[Judgement], truth: Truth) -> str:
    """Return "silent", "right", "right, not told apart", "other first, not told apart", "unexplained" or "wrong"."""
    stages = list(circuits())
    if not found:
        return "silent"
    told = []
    for judgement in found:
        named = [
            (stages[h.stages[0]] if h.kind == "part" else "", h.names[0])
            for h in judgement.candidates
            if h.kind in ("part", "common")
        ]
        first = bool(named) and named[0] == truth and judgement.candidates[0].kind in ("part", "common")
        if not judgement.explained:
            told.append("unexplained")
        elif judgement.delta_chi_square >= DISTINGUISHABLE:
            told.append("right" if first else "wrong")
        else:
            told.append("right, not told apart" if first else "other first, not told apart")
    return "wrong" if "wrong" in told or ("right" in told and len(told) > 1) else told[0]


def counted(case: str, count: int) -> tuple[Counter[str], dict[str, Counter[str]]]:
    """Return how many boards got which verdict, all and by part."""
    total: Counter[str] = Counter()
    by_part: dict[str, Counter[str]] = {}
    boards = [drawn_board(case, seed) for seed in range(count)]
    for (_, truth, _), seen in zip(boards, drawn_figures(boards), strict=True):
        whole = all(np.isfinite(one.figures).all() for one in seen)
        said = verdict(judged(list(circuits().values()), seen), truth) if whole else "no band"
        total[said] += 1
        by_part.setdefault(truth[1], Counter())[said] += 1
    return total, by_part


def share(total: Counter[str], what: str) -> float:
    """Return the part of all boards that a bound is about."""
    parts = {"accused": total.total() - total["silent"], "right first": total["right"] + total["right, not told apart"]}
    return float(parts.get(what, total[what]) / total.total())


def listed(total: Counter[str]) -> str:
    """Return verdicts and how many boards got each, the most frequent first."""
    return ", ".join(f"{count} {said}" for said, count in total.most_common())


def judge(case: str, total: Counter[str]) -> bool:
    """Print a case's shares beside their bounds; return whether they are kept."""
    good = True
    for what, side, bound in BOUNDS[case]:
        found = share(total, what)
        kept = found <= bound if side == "most" else found >= bound
        print(f"  {what} {100 * found:.1f} % (at {side} {100 * bound:g} %){'' if kept else '  <- short'}", flush=True)
        good = good and kept
    return good


def drawn_boards(healthy: int = HEALTHY, wrong: int = WRONG) -> bool:
    """Print what is said of drawn boards; return whether all bounds are kept."""
    good = True
    for case in CASES:
        total, by_part = counted(case, healthy if case == "healthy" else wrong)
        print(f"{case}: {total.total()} boards: {listed(total)}", flush=True)
        good = judge(case, total) and good
        for part, some in sorted(by_part.items()) if len(by_part) > 1 else ():
            print(f"    {part:<12} {listed(some)}")
    return good


def swept_boards(count: int = SWEPT) -> bool:
    """Print what is said of swept boards, two fifths healthy; return whether no healthy one is accused."""
    order = ["healthy", "wrong decade", "healthy", "half or twice the value", "one part 10 % off"]
    found: dict[str, Counter[str]] = {}
    with with_designs_kept():
        for seed in range(count):
            case = order[seed % len(order)]
            drawn, truth, _ = drawn_board(case, 10_000 + seed)
            said = suspected(demo_board(), swept(seed, drawn), circuits())
            found.setdefault(case, Counter())[_of_swept(said, truth)] += 1
    for case, total in found.items():
        print(f"swept, {case}: {listed(total)}", flush=True)
    return found["healthy"]["silent"] == found["healthy"].total()


def _of_swept(said: dict[str, tuple[Suspect, ...]], truth: Truth) -> str:
    told = [(stage, suspect) for stage, some in said.items() for suspect in some]
    if not told:
        return "silent"
    if len(told) == 1 and told[0][1].kind in ("part", "missing", "bridged"):
        return "right" if (told[0][0], *told[0][1].parts) == truth else "wrong"
    unsure = [suspect.kind for _, suspect in told if suspect.kind in ("not distinguishable", "unexplained")]
    return unsure[0] if len(unsure) == len(told) else "wrong"


def main(healthy: int = HEALTHY, wrong: int = WRONG, count: int = SWEPT) -> bool:
    """Print every case; return whether all bounds are kept."""
    for name, covariance in zip(circuits(), covariances(), strict=True):
        u = 100.0 * np.sqrt(np.diag(covariance))
        correlation = covariance[1, 2] / np.sqrt(covariance[1, 1] * covariance[2, 2])
        print(f"u of {name}: f0 {u[0]:.3f} %, Q {u[1]:.3f} %, gain {u[2]:.3f} %, Q with gain {correlation:+.2f}")
    good = drawn_boards(healthy, wrong)
    return swept_boards(count) and good


if __name__ == "__main__":
    sys.exit(not main())
