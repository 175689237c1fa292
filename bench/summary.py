"""What a person reads at the end of a run: one line per band and figure, 80 columns, plain text."""

from collections.abc import Iterable, Iterator, Mapping, Sequence
from math import isfinite, log10
from typing import TYPE_CHECKING

from bandproof.bench.quantities import decimals, engineering, with_uncertainty
from bandproof.bench.types import QUANTITIES, UNITS, Comparison, Quantity, StageResult, Verdict

if TYPE_CHECKING:
    from bandproof.analysis.uncertainty import Combined

__all__ = ["dB", "figure_lines", "summary_lines"]

_TITLES: dict[Quantity, str] = {
    "centre": "Centre frequency f0",
    "q": "Q = f0 / (-3 dB bandwidth)",
    "gain": "Gain at f0",
}
_HEADINGS = ("band", "designed", "predicted", "measured ± U", "deviation", "verdict")
_WORDS: dict[Verdict, str] = {"pass": "pass", "fail": "FAIL", "undecided": "undecided"}
_WIDTHS = (12, 10, 10, 24, 10, 9)  # band, designed, predicted, measured ± U, deviation, verdict


def dB(ratio: float) -> float:
    """Return a voltage ratio in decibels."""
    return 20.0 * log10(abs(ratio))


def summary_lines(stages: Sequence[StageResult]) -> list[str]:
    """Return the lines of the table: per figure, one line per band; none without bands."""
    lines: list[str] = []
    for quantity in QUANTITIES if stages else ():
        lines += ["", _TITLES[quantity], *_row(_HEADINGS), *_rows(quantity, stages)]
    return lines


def figure_lines(measured: Mapping[Quantity, float], budgets: "Mapping[Quantity, Combined]") -> list[str]:
    """Return the lines of figures that have no design to be compared with: value ± U, coverage factor."""
    lines = ["", f"{'':<28}{'measured ± U':>32}{'k':>8}"]
    for quantity, budget in budgets.items():
        value, expanded = measured[quantity], budget.expanded
        text = _gain(value, expanded) if quantity == "gain" else with_uncertainty(value, expanded, UNITS[quantity])
        lines.append(f"{_TITLES[quantity]:<28}{text:>32}{budget.coverage_factor:>8.2f}")
    return lines


def _rows(quantity: Quantity, stages: Iterable[StageResult]) -> Iterator[str]:
    for stage in stages:
        yield from _row([stage.name, *_cells(stage.figures[quantity])])


def _row(cells: Sequence[str]) -> list[str]:
    """Return a row of the table, on two lines where the name is longer than its column."""
    name, *rest = cells
    above, name = ([name], "") if len(name) >= _WIDTHS[0] else ([], name)
    figures = (f" {cell:>{width - 1}}" for cell, width in zip(rest, _WIDTHS[1:], strict=True))
    return [*above, f"{name:<{_WIDTHS[0]}}{''.join(figures)}"]


def _cells(figure: Comparison) -> list[str]:
    if figure.quantity == "gain":
        return [*_gain_cells(figure), _WORDS[figure.verdict]]
    deviation = f"{100.0 * figure.deviation:+.2f} %" if isfinite(figure.deviation) else "-"
    return [
        engineering(figure.designed, figure.unit),
        engineering(figure.predicted, figure.unit),
        with_uncertainty(figure.measured, figure.expanded_uncertainty, figure.unit),
        deviation,
        _WORDS[figure.verdict],
    ]


def _gain_cells(figure: Comparison) -> list[str]:
    found = isfinite(figure.measured)
    return [
        f"{dB(figure.designed):.4g} dB",
        f"{dB(figure.predicted):.4g} dB",
        _gain(figure.measured, figure.expanded_uncertainty) if found else "not found",
        f"{dB(figure.measured / figure.designed):+.2f} dB" if found else "-",
    ]


def _gain(measured: float, expanded: float) -> str:
    """Decibels; U is half the span between the gain's ends, which is symmetric enough below 3 dB."""
    relative = expanded / measured
    if not 0.0 < relative < 1.0:
        return f"{dB(measured):.2f} dB ± unknown"
    expanded = 0.5 * (dB(1.0 + relative) - dB(1.0 - relative))
    places = max(0, decimals(expanded))
    return f"{dB(measured):.{places}f} ± {expanded:.{places}f} dB"
