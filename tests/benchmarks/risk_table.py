"""What the program's rules do to boards: accepted, and escapes, for a process and a measurement of known size.

A centred process of Cp 1.33 (3.99 standard deviations from middle to limit), 30 figures a board, each measured with U
(k = 2) of a half, a quarter, a tenth of the tolerance's half-width. Boards accepted: all figures pass, drawn as boards.
Escapes: figures that are out and pass, whatever else is on their board, per million boards made. They are too rare to
wait for, so figures that are out are drawn alone and weighted with how often they occur. Verdicts are the program's.
Beside each: its statistical error (one standard deviation), the same by integrals, and the table as it was computed
apart from this program, before it.
"""

from dataclasses import dataclass
from math import sqrt

import numpy as np

from bandproof.analysis.decision import SIMPLE, Rule, outcomes
from tests.benchmarks._risk import Risks, normal_process, risks

CP, FIGURES = 1.33, 30
LIMIT = 3.0 * CP  # standard deviations of the process
RATIOS = (2.0, 4.0, 10.0)
RULES = {"simple": SIMPLE, "guarded 0.5": Rule("guarded", 0.5), "guarded 1": Rule("guarded", 1.0)}
# Boards accepted in %, escapes per million: computed apart from this program.
TABLE = {
    2.0: {"simple": ("87", "820"), "guarded 0.5": ("35", "230"), "guarded 1": ("0.6", "29")},
    4.0: {"simple": ("98.9", "680"), "guarded 0.5": ("94.8", "175"), "guarded 1": ("80", "21")},
    10.0: {"simple": ("99.7", "430"), "guarded 0.5": ("99.4", "101"), "guarded 1": ("98.7", "11")},
}
BOARDS, OUT = 400_000, 4_000_000  # boards, and figures that are out
MOST = 4.0  # standard deviations between draws and integrals
_CHUNK = 20_000  # boards at a time


@dataclass(frozen=True)
class Cell:
    """One cell of the table: boards accepted in %, escapes per million boards, with their statistical errors."""

    accepted: float
    accepted_error: float
    escapes: float
    escapes_error: float

    def agrees(self, accepted: float, escapes: float) -> bool:
        """Return whether both are those wanted within the statistical error."""
        near = abs(self.accepted - accepted) <= MOST * self.accepted_error
        return near and abs(self.escapes - escapes) <= MOST * self.escapes_error


def passed(value: np.ndarray, ratio: float, rule: Rule) -> np.ndarray:
    """Return which measured values pass, as the program decides them."""
    expanded = LIMIT / ratio
    return outcomes(value, 0.5 * expanded, low=-LIMIT, high=LIMIT, rule=rule, expanded=expanded) == 0


def share(hits: int, draws: int) -> tuple[float, float]:
    """Return a fraction and its standard deviation, that of one hit where there is none."""
    fraction = hits / draws
    return fraction, sqrt(max(fraction * (1.0 - fraction), 1.0 / draws) / draws)


def simulated(boards: int, out: int, seed: int) -> dict[tuple[float, str], Cell]:
    """Return every cell from seeded draws."""
    from scipy.special import ndtr, ndtri

    rng = np.random.default_rng(seed)
    cells = [(ratio, name) for ratio in RATIOS for name in RULES]
    good, escaped = dict.fromkeys(cells, 0), dict.fromkeys(cells, 0)
    for start in range(0, boards, _CHUNK):
        true, error = rng.normal(size=(2, min(_CHUNK, boards - start), FIGURES))
        for ratio, name in cells:
            value = true + 0.5 * LIMIT / ratio * error
            good[ratio, name] += int(passed(value, ratio, RULES[name]).all(axis=1).sum())
    tail = float(ndtr(-LIMIT))  # below the lower limit, and as often above the upper
    for start in range(0, out, FIGURES * _CHUNK):
        count = min(FIGURES * _CHUNK, out - start)
        true, error = -ndtri(tail * rng.uniform(size=count)), rng.normal(size=count)
        side = rng.choice([-1.0, 1.0], size=count)
        for ratio, name in cells:
            value = side * true + 0.5 * LIMIT / ratio * error
            escaped[ratio, name] += int(passed(value, ratio, RULES[name]).sum())
    weight = 1e6 * FIGURES * 2.0 * tail
    found = {}
    for cell in cells:
        (accepted, first), (fraction, second) = share(good[cell], boards), share(escaped[cell], out)
        found[cell] = Cell(100.0 * accepted, 100.0 * first, weight * fraction, weight * second)
    return found


def integrated(ratio: float, name: str) -> Risks:
    """Return the risks of one figure by integrals."""
    expanded = LIMIT / ratio
    inside = LIMIT - RULES[name].size * expanded
    return risks(
        *normal_process(0.0, 1.0), 0.5 * expanded, low=-LIMIT, high=LIMIT, accept_low=-inside, accept_high=inside
    )


def rounds_to(value: float, printed: str) -> bool:
    """Return whether a value is the printed one, at most half a unit of its last digit away (of 820: the 2)."""
    unit = 10.0 ** -len(printed.partition(".")[2]) if "." in printed else 1.0
    return abs(value - float(printed)) <= 0.5 * (10.0 if len(printed) == 3 and printed.endswith("0") else unit)


def main(boards: int = BOARDS, out: int = OUT, seed: int = 1) -> bool:
    """Print the table; return whether draws, integrals and the table given agree."""
    print(f"{boards} boards of {FIGURES} figures, {out} figures that are out, Cp {CP}; ± one standard deviation")
    print(f"{'tolerance/U':<12}{'rule':<13}{'boards accepted / %':>29}{'escapes per million boards':>34}")
    print(f"{'':<25}{'draws':>14}{'integral':>10}{'table':>6}{'draws':>16}{'integral':>10}{'table':>6}")
    good = True
    for (ratio, name), cell in simulated(boards, out, seed).items():
        exact, table = integrated(ratio, name), TABLE[ratio][name]
        accepted, escapes = 100.0 * exact.accepted**FIGURES, 1e6 * FIGURES * exact.consumer
        told = cell.agrees(accepted, escapes) and rounds_to(accepted, table[0]) and rounds_to(escapes, table[1])
        good = good and told
        print(
            f"{ratio:<12g}{name:<13}{cell.accepted:>7.3f} ± {cell.accepted_error:.3f}{accepted:>9.3f}{table[0]:>7}"
            f"{cell.escapes:>9.2f} ± {cell.escapes_error:4.2f}{escapes:>10.2f}{table[1]:>6}{'' if told else '  WRONG'}"
        )
    one, many = integrated(2.0, "simple"), FIGURES
    boards_out = 1e6 * (one.accepted**many - (one.accepted - one.consumer) ** many)
    print(f"(of ratio 2, simple, accepted boards with a figure out: {boards_out:.0f} per million boards made)")
    return good
