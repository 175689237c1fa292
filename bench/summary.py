"""What a person reads at the end of a run: one line per band and figure, 80 columns, plain text."""

import textwrap
from collections.abc import Iterable, Iterator, Mapping, Sequence
from math import isfinite, log10, sqrt
from typing import TYPE_CHECKING

from bandproof.analysis.uncertainty import share
from bandproof.bench.budget import MEANINGS, dominating
from bandproof.bench.quantities import decimals, engineering, tolerance_text, with_uncertainty
from bandproof.bench.rules import SIMPLE_TEXT
from bandproof.bench.types import QUANTITIES, UNITS, Comparison, Quantity, StageResult, Verdict

if TYPE_CHECKING:
    from bandproof.analysis.uncertainty import Combined
    from bandproof.bench.drawing import Drawn

__all__ = [
    "TITLES",
    "budget_lines",
    "dB",
    "dominating_lines",
    "drawn_lines",
    "figure_lines",
    "rule_lines",
    "summary_lines",
    "verdict_counts",
]

TITLES: dict[Quantity, str] = {
    "centre": "Centre frequency f0",
    "q": "Q = f0 / (-3 dB bandwidth)",
    "gain": "Gain at f0",
}
_HEADINGS = ("band", "designed", "predicted", "measured ± U (95 %)", "deviation", "limits", "verdict")
_WORDS: dict[Verdict | None, str] = {"pass": "pass", "fail": "FAIL", "undecided": "undecided", None: "-"}
_WIDTHS = (9, 10, 10, 23, 10, 8, 10)  # of the columns above; 80 together


def dB(ratio: float) -> float:
    """Return a voltage ratio in decibels."""
    return 20.0 * log10(abs(ratio))


def summary_lines(stages: Sequence[StageResult]) -> list[str]:
    """Return the lines of the table: per figure, one line per band; none without bands."""
    lines: list[str] = []
    for quantity in QUANTITIES if stages else ():
        told = "" if lines else " (deviation and limits: from the designed value)"
        lines += ["", TITLES[quantity] + told, *_row(_HEADINGS), *_rows(quantity, stages)]
    return lines


def rule_lines(stages: Sequence[StageResult], probability: float | None) -> list[str]:
    """Return what decided where limits did not as they are, and how probable it is that all figures conform."""
    figures = [figure for stage in stages for figure in stage.figures.values()]
    lines: list[str] = []
    for rule in dict.fromkeys(figure.rule for figure in figures if figure.rule != SIMPLE_TEXT):
        counts = verdict_counts([figure for figure in figures if figure.rule == rule])
        text = f"rule {rule} ({', '.join(_ruled(stages, rule))}): {counts}"
        lines += textwrap.wrap(text, 80, subsequent_indent="  ", break_on_hyphens=False)
    if probability is not None:
        spread = sum(figure.prior is not None for figure in figures)
        prior = f" (process spread known of {spread} of {len(figures)} figures)" if spread else ""
        lines.append(f"probability that the whole board conforms: {probability:.3f}{prior}")
    return lines


def _ruled(stages: Sequence[StageResult], rule: str) -> Iterator[str]:
    """Yield what a rule decides: a stage by its name, single figures of one with theirs."""
    for stage in stages:
        names = [name for name, figure in stage.figures.items() if figure.rule == rule]
        yield from [stage.name] if len(names) == len(stage.figures) else [f"{stage.name} {name}" for name in names]


def verdict_counts(figures: Sequence[Comparison]) -> str:
    """Return how many figures have which verdict, in words."""
    verdicts = [figure.verdict for figure in figures if figure.verdict]
    return ", ".join(f"{verdicts.count(word)} {word}" for word in dict.fromkeys(sorted(verdicts)))


def dominating_lines(stages: Sequence[StageResult]) -> list[str]:
    """Return, per band, the largest row of each figure's budget and its share of the variance."""
    shown = [stage for stage in stages if stage.budgets]
    if not shown:
        return []
    widths = (22, 22, 22)
    headings = "".join(f"{'  ' + name:<{width}}" for name, width in zip(("f0", "Q", "gain"), widths, strict=True))
    lines = ["", "Largest part of each U (share of u²; all parts: bandproof fit RUN --budget)"]
    lines.append(f"{'band':<{_WIDTHS[0]}}{headings}".rstrip())
    for stage in shown:
        rows = [(dominating(stage.budgets[quantity]), stage.budgets[quantity]) for quantity in QUANTITIES]
        cells = [f"  {row.name} {100.0 * share(row, budget):.0f} %" for row, budget in rows]
        name = [stage.name] if len(stage.name) >= _WIDTHS[0] else []
        text = "".join(f"{cell:<{width}}" for cell, width in zip(cells, widths, strict=True))
        lines += [*name, f"{'' if name else stage.name:<{_WIDTHS[0]}}{text}".rstrip()]
    named = dict.fromkeys(dominating(stage.budgets[q]).name for stage in shown for q in QUANTITIES)
    told = "; ".join(f"{name}: {MEANINGS[name]}" for name in named if name in MEANINGS)
    return [*lines, *textwrap.wrap(told, 80, break_on_hyphens=False)]


def budget_lines(stage: StageResult) -> list[str]:
    """Return the whole budget of a stage: every source, what it gives to each figure in %, where it comes from."""
    if not stage.budgets:
        return []
    found = [stage.budgets[quantity] for quantity in QUANTITIES]
    values = [stage.figures[quantity].measured for quantity in QUANTITIES]
    largest = [dominating(budget) for budget in found]
    head = f"Budget of {stage.name}: standard uncertainties in % of the figure, * the largest"
    lines = ["", *textwrap.wrap(head, 80)]
    lines.append(f"{'source':<17}{'':<14}{'f0':>9}{'Q':>10}{'gain':>10}")
    for i, first in enumerate(found[0].rows):
        rows = [budget.rows[i] for budget in found]
        told = next((row for row in rows if row.contribution), None)
        if told is None:
            lines += _told(f"{first.name:<17}", first.reason)
            continue
        cells = [
            f"{100.0 * row.contribution / value:9.4f}{'*' if row is most else ' '}"
            for row, value, most in zip(rows, values, largest, strict=True)
        ]
        lines.append(f"{first.name:<17}{told.type + ' ' + told.distribution:<14}{''.join(cells)}".rstrip())
        lines += _told(" " * 17, told.reason)
    for name, size in (("u, combined", "u"), ("U, 95.45 %", "expanded")):
        cells = [f"{100.0 * getattr(budget, size) / value:9.4f} " for budget, value in zip(found, values, strict=True)]
        lines.append(f"{name:<31}{''.join(cells)}".rstrip())
    factors = "".join(f"{budget.coverage_factor:9.2f} " for budget in found)
    return [*lines, f"{'coverage factor U / u':<31}{factors}".rstrip()]


def drawn_lines(stage: StageResult, found: "Mapping[Quantity, Drawn]") -> list[str]:
    """Return what a budget says beside what draws of all its sources say, in % of each figure."""
    draws = next(iter(found.values())).draws
    head = f"Budget of {stage.name} beside {draws} draws of all its sources (JCGM 101), in % of the figure"
    lines = ["", *textwrap.wrap(head, 80)]
    lines.append(f"{'':<8}{'u, budget':>12}{'u, draws':>12}{'U, budget':>12}{'U, draws':>12}{'mean - fit':>14}")
    for (quantity, drawn), name in zip(found.items(), ("f0", "Q", "gain"), strict=True):
        budget, value = stage.budgets[quantity], stage.figures[quantity].measured
        cells = [100.0 * size / value for size in (budget.u, drawn.u, budget.expanded, drawn.half_width)]
        shift = 100.0 * (drawn.mean / value - 1.0)
        lines.append(f"{name:<8}{''.join(f'{cell:12.4f}' for cell in cells)}{shift:+14.4f}")
    return [*lines, f"(draws alone scatter their u by {100.0 / sqrt(2.0 * draws):.2g} % of it)"]


def _told(head: str, reason: str) -> list[str]:
    return textwrap.wrap(reason, 80, initial_indent=head, subsequent_indent=" " * 17, break_long_words=False)


def figure_lines(measured: Mapping[Quantity, float], budgets: "Mapping[Quantity, Combined]") -> list[str]:
    """Return the lines of figures that have no design to be compared with: value ± U, coverage factor."""
    lines = ["", f"{'':<28}{'measured ± U':>32}{'k':>8}"]
    for quantity, budget in budgets.items():
        value, expanded = measured[quantity], budget.expanded
        text = _gain(value, expanded) if quantity == "gain" else with_uncertainty(value, expanded, UNITS[quantity])
        lines.append(f"{TITLES[quantity]:<28}{text:>32}{budget.coverage_factor:>8.2f}")
    return lines


def _rows(quantity: Quantity, stages: Iterable[StageResult]) -> Iterator[str]:
    for stage in stages:
        yield from _row([stage.name, *_cells(stage.figures[quantity])])


def _row(cells: Sequence[str]) -> list[str]:
    """Return a row of the table, on two lines where the name is longer than its column."""
    name, *rest = cells
    above, name = ([name], "") if len(name) >= _WIDTHS[0] else ([], name)
    line, end = f"{name:<{_WIDTHS[0]}}", _WIDTHS[0]
    for cell, width in zip(rest, _WIDTHS[1:], strict=True):
        end += width
        line += f" {cell:>{end - len(line) - 1}}"  # a cell wider than its column takes the next one's blanks
    return [*above, line]


def _cells(figure: Comparison) -> list[str]:
    if figure.quantity == "gain":
        return [*_gain_cells(figure), _WORDS[figure.verdict]]
    deviation = f"{100.0 * figure.deviation:+.2f} %" if isfinite(figure.deviation) else "-"
    return [
        engineering(figure.designed, figure.unit),
        engineering(figure.predicted, figure.unit),
        with_uncertainty(figure.measured, figure.expanded_uncertainty, figure.unit),
        deviation,
        _limits(figure),
        _WORDS[figure.verdict],
    ]


def _limits(figure: Comparison) -> str:
    return tolerance_text(figure.lower_limit / figure.designed, figure.upper_limit / figure.designed)


def _gain_cells(figure: Comparison) -> list[str]:
    found = isfinite(figure.measured)
    return [
        f"{dB(figure.designed):.4g} dB",
        f"{dB(figure.predicted):.4g} dB",
        _gain(figure.measured, figure.expanded_uncertainty) if found else "not found",
        f"{dB(figure.measured / figure.designed):+.2f} dB" if found else "-",
        _limits(figure),
    ]


def _gain(measured: float, expanded: float) -> str:
    """Decibels; U is half the span between the gain's ends, which is symmetric enough below 3 dB."""
    relative = expanded / measured
    if not 0.0 < relative < 1.0:
        return f"{dB(measured):.2f} dB ± unknown"
    expanded = 0.5 * (dB(1.0 + relative) - dB(1.0 - relative))
    places = max(0, decimals(expanded))
    return f"{dB(measured):.{places}f} ± {expanded:.{places}f} dB"
