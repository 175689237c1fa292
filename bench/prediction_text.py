"""A prediction as people and programs read it: lines of 80 columns, and one plain object."""

import textwrap
from collections.abc import Iterator, Sequence
from typing import Any

from bandproof.analysis.spread import Fraction
from bandproof.analysis.types import BoolArray
from bandproof.bench.expectation import LEAST_RATIO, Expectation, ExpectedFigure, Verdicts
from bandproof.bench.prediction import PredictedBoards, PredictedFigure, PredictedStage
from bandproof.bench.quantities import engineering
from bandproof.bench.summary import TITLES, dB
from bandproof.bench.types import QUANTITIES, UNITS, Bench, Board, Quantity

__all__ = ["SCHEMA", "prediction_lines", "prediction_object", "warnings"]

SCHEMA = "bandproof-prediction/1"
_LABELS: dict[Quantity, str] = {"centre": "f0", "q": "Q", "gain": "gain"}
_BAND = 12  # columns of a band's name; a longer one has a line of its own
_NEAR = 1.0 / 3.0  # of the tolerance; arbitrary: a drawing that uses more is told
_TOLD = 0.8  # of a figure's variance that the parts named make together, at least; arbitrary
_THRU = "a thru: both probes on one node, a wire named thru in the bench file's [wiring]"
_STRAIGHTER = "a scope whose converter is straighter or has more bits, declared as linearity in the bench file"
_HELP = {
    "repeatability": "a scope with more bits or less noise, or a higher level (the bench's ceiling, input_maximum)",
    "reseating": "contacts that repeat better, declared as reseating in the bench file",
    "reproducibility": "a bench that repeats better from check to check",
    "thru": "a scope with more bits or less noise",
    "drift": "a warm scope whose drift is smaller and declared, or a thru nearer in time",
    "range to range": _THRU,
    "compensation": _THRU,
    "channel gain": _THRU,
    "tap loading": "probes that load less, their resistance and capacitance declared",
    "linearity in": _STRAIGHTER,
    "linearity out": _STRAIGHTER,
    "generator": "a generator of better frequency accuracy, declared in the bench file",
    "temperature": "the room's temperature stated and near the board's reference",
}


def prediction_object(
    board: Board, boards: PredictedBoards, bench: Bench | None, found: Expectation | None
) -> dict[str, Any]:
    """Return what ``--json`` prints: plain values, SI, ratios."""
    return {
        "schema": SCHEMA,
        "board": {"title": board.title, "drawing": board.drawing, "revision": board.revision},
        "draws": len(boards.true),
        "seed": boards.seed,
        "yield": _plain(boards.conforming),
        "stages": [_plain_stage(stage, found) for stage in boards.stages],
        "bench": None
        if bench is None or found is None
        else {
            "title": bench.title,
            "converter_bits": found.bits,
            "thru": found.thru,
            "board": _plain_verdicts(found.board),
            "least_ratio": LEAST_RATIO,
            "warnings": warnings(found),
            "notes": list(found.notes),
        },
    }


def _plain(found: Fraction | None) -> dict[str, float] | None:
    return None if found is None else {"value": found.value, "standard_error": found.error}


def _plain_verdicts(found: Verdicts | None) -> dict[str, Any]:
    return {
        "pass": found and _plain(found.passed),
        "undecided": found and _plain(found.undecided),
        "fail": found and _plain(found.failed),
        "consumer_risk": found and _plain(found.consumer),
        "producer_risk": found and _plain(found.producer),
    }


def _plain_stage(stage: PredictedStage, found: Expectation | None) -> dict[str, Any]:
    expected = found.stages[stage.name] if found else {}
    parameters = {
        quantity: {**_plain_figure(quantity, figure), "bench": _plain_expected(expected.get(quantity))}
        for quantity, figure in stage.figures.items()
    }
    facts = {"name": stage.name, "kind": "band", "yield": _plain(stage.conforming)}
    return {**facts, "parameters": parameters, "notes": list(stage.notes)}


def _plain_figure(quantity: Quantity, figure: PredictedFigure) -> dict[str, Any]:
    spread = figure.spread
    return {
        "unit": UNITS[quantity],
        "designed": figure.limit.designed,
        "lower_limit": figure.limit.lower,
        "upper_limit": figure.limit.upper,
        "textbook": figure.textbook,
        "predicted": figure.nodal,
        "mean": spread and spread.mean,
        "standard_deviation": spread and {"value": spread.sd, "standard_error": spread.sd_error},
        "range_95": spread and [spread.low, spread.high],
        "relative_standard_deviation_first_order": figure.first_order,
        "variance_shares": dict(figure.shares),
        "yield": _plain(figure.conforming),
    }


def _plain_expected(found: ExpectedFigure | None) -> dict[str, Any] | None:
    if found is None:
        return None
    return {
        "expanded_uncertainty": found.expanded,
        "coverage_factor": found.coverage_factor,
        "tolerance_to_uncertainty": found.ratio,
        "largest_source": found.largest,
        "largest_share": found.largest_share,
        "rule": found.rule,
        **_plain_verdicts(found.verdicts),
    }


def prediction_lines(
    board: Board, boards: PredictedBoards, bench: Bench | None, found: Expectation | None
) -> Iterator[str]:
    """Yield the lines a person reads, at most 80 columns."""
    yield from _wrapped(board.title)
    drawn = "parts uniform within tolerance, independent; spread: one standard deviation"
    yield from _wrapped(f"{len(boards.true)} boards drawn: {drawn} (seed {boards.seed})")
    for quantity in QUANTITIES:
        yield from _figure_lines(quantity, boards.stages)
    yield from _yield_lines(boards)
    yield from _spread_lines(boards.stages)
    yield from _off_centre_lines(boards.stages)
    for stage in boards.stages:
        for note in stage.notes:
            yield from _wrapped(f"note: {note}")
    if bench is not None and found is not None:
        yield from _bench_lines(bench, found, _whole(boards.known))


def _row(name: str, cells: Sequence[str], widths: Sequence[int]) -> Iterator[str]:
    if len(name) >= _BAND:
        yield from textwrap.wrap(name, 80)
        name = ""
    line = f"{name:<{_BAND}}" + "".join(f"{cell:>{width}}" for cell, width in zip(cells, widths, strict=True))
    yield line.rstrip()


def _figure_lines(quantity: Quantity, stages: Sequence[PredictedStage]) -> Iterator[str]:
    widths = (11, 11, 11, 11, 24)
    yield ""
    yield TITLES[quantity]
    yield from _row("band", ("designed", "textbook", "nodal", "spread", "95 % of the boards"), widths)
    for stage in stages:
        figure = stage.figures[quantity]
        textbook = "-" if figure.textbook is None else _shown(quantity, figure.textbook)
        cells = (_shown(quantity, figure.limit.designed), textbook, _shown(quantity, figure.nodal))
        yield from _row(stage.name, (*cells, *_spread_cells(quantity, figure)), widths)


def _spread_cells(quantity: Quantity, figure: PredictedFigure) -> tuple[str, str]:
    spread = figure.spread
    if spread is None or not spread.sd:
        return "-", "-"
    if quantity == "gain":
        size = f"{dB(1.0 + spread.sd / spread.mean):.2g} dB"
        return size, f"{dB(spread.low):.2f} to {dB(spread.high):.2f} dB"
    ends = f"{_shown(quantity, spread.low)} to {_shown(quantity, spread.high)}"
    return f"{100.0 * spread.sd / spread.mean:.2g} %", ends


def _shown(quantity: Quantity, value: float) -> str:
    match quantity:
        case "centre":
            return engineering(value, "Hz")
        case "q":
            return f"{value:.4g}"
        case "gain":
            return f"{dB(value):.4g} dB"


def _yield_lines(boards: PredictedBoards) -> Iterator[str]:
    widths = (17, 17, 17, 17)
    yield ""
    yield from _wrapped("Boards within limits in %, ± one standard error; < or >: none or all of the draws (95 % sure)")
    yield from _row("band", ("f0", "Q", "gain", "band"), widths)
    for stage in boards.stages:
        each = [stage.figures[quantity].conforming for quantity in QUANTITIES]
        yield from _row(stage.name, [_percent(one) for one in (*each, stage.conforming)], widths)
    yield from _row(_whole(boards.known), ["", "", "", _percent(boards.conforming)], widths)


def _whole(known: BoolArray) -> str:
    return "whole board" if known.all() else "whole board, of the stages with parts"


def _percent(found: Fraction | None, *, with_error: bool = True) -> str:
    """Return a fraction of draws; what none or all of them show, as its bound by the rule of three."""
    if found is None:
        return "-"
    bound = 300.0 * found.error  # of none or all, the error is that of one draw
    if found.value in (0.0, 1.0):
        return f"<{bound:.2g}" if found.value == 0.0 else f">{100.0 - bound:.6g}"
    places = 1 if with_error and found.error >= 1e-3 else 2
    error = f" ± {100.0 * found.error:.{places}f}" if with_error else ""
    return f"{100.0 * found.value:.{places}f}{error}"


def _spread_lines(stages: Sequence[PredictedStage]) -> Iterator[str]:
    """Yield which parts make most of each figure's variance, bands with the same parts together."""
    yield ""
    yield "Which parts' tolerances cost most (share of the variance, to first order)"
    if not any(figure.first_order for stage in stages for figure in stage.figures.values()):
        yield "  none: no parts with a tolerance are stated"
    for quantity in QUANTITIES:
        groups: dict[tuple[str, ...], list[tuple[str, float]]] = {}
        for stage in stages:
            named, share = _most(stage.figures[quantity])
            if named:
                groups.setdefault(named, []).append((stage.name, share))
        for named, members in groups.items():
            yield from _wrapped(_cost(quantity, named, members, everywhere=len(members) == len(stages)))


def _off_centre_lines(stages: Sequence[PredictedStage]) -> Iterator[str]:
    """Yield the figures that the drawing itself brings near a limit: other values mend them, not better parts."""
    for stage in stages:
        for quantity, figure in stage.figures.items():
            used = _used(quantity, figure)
            if figure.spread is not None and _NEAR < used <= 1.0:
                yield from _wrapped(
                    f"  {_LABELS[quantity]} of {stage.name}: its parts as drawn make {_shown(quantity, figure.nodal)}, "
                    f"{100.0 * used:.0f} % of the tolerance before any part varies: other values cost nothing "
                    "(bandproof parts)"
                )


def _used(quantity: Quantity, figure: PredictedFigure) -> float:
    """Return how much of the tolerance lies between the designed value and the nodal one, gain in decibels."""
    scale = dB if quantity == "gain" else float
    nodal, designed = scale(figure.nodal), scale(figure.limit.designed)
    end = scale(figure.limit.upper if nodal >= designed else figure.limit.lower)
    return abs((nodal - designed) / (end - designed))


def _most(figure: PredictedFigure) -> tuple[tuple[str, ...], float]:
    """Return the fewest parts that make most of a figure's variance, largest first, and their share."""
    ordered = sorted(figure.shares.items(), key=lambda item: (-round(item[1], 3), item[0]))
    named, total = list[str](), 0.0
    for name, share in ordered:
        if total >= _TOLD or not share:
            break
        named.append(name)
        total += share
    return tuple(sorted(named)), total


def _cost(quantity: Quantity, named: Sequence[str], members: Sequence[tuple[str, float]], *, everywhere: bool) -> str:
    where = "every band" if everywhere else ", ".join(name for name, _ in members)
    shares = sorted(round(100.0 * share) for _, share in members)
    size = f"{shares[0]}" if shares[0] == shares[-1] else f"{shares[0]} to {shares[-1]}"
    together = " together" if len(named) > 1 else ""
    return f"  {_joined(named)}{together} {size} % of {_LABELS[quantity]}'s spread ({where})"


def _joined(names: Sequence[str]) -> str:
    return " and ".join([", ".join(names[:-1]), names[-1]]) if len(names) > 1 else names[0]


def _bench_lines(bench: Bench, found: Expectation, whole: str) -> Iterator[str]:
    widths = (6, 10, 8, 9, 11, 8, 8, 8)
    yield ""
    yield from _wrapped(f"Measured on {bench.title or 'this bench'} ({found.bits:.3g} bits; thru: {found.thru})")
    yield from _wrapped(
        "Boards in %; out: truly out of limits and passed (consumer's risk); in: truly within and not passed "
        "(producer's risk)"
    )
    yield from _row("band", ("", "U", "tol./U", "pass", "undecided", "fail", "out", "in"), widths)
    for name, figures in found.stages.items():
        for i, (quantity, figure) in enumerate(figures.items()):
            size = dB(1.0 + figure.relative) if quantity == "gain" else 100.0 * figure.relative
            u = f"{size:.2g} {'dB' if quantity == 'gain' else '%'}"
            cells = [_LABELS[quantity], u, f"{figure.ratio:.3g}", *_verdict_cells(figure.verdicts)]
            yield from _row("" if i else name, cells, widths)
    yield from _row(whole, ["", "", "", *_verdict_cells(found.board)], widths)
    for text in (*(f"warning: {warning}" for warning in warnings(found)), *(f"note: {note}" for note in found.notes)):
        yield from _wrapped(text)


def _verdict_cells(found: Verdicts | None) -> list[str]:
    every = (found.passed, found.undecided, found.failed, found.consumer, found.producer) if found else (None,) * 5
    return [_percent(one, with_error=False) for one in every]


def warnings(found: Expectation) -> list[str]:
    """Return, in sentences, figures whose tolerance is too narrow for the bench, and what would help."""
    groups: dict[tuple[Quantity, str], list[tuple[str, float]]] = {}
    for name, figures in found.stages.items():
        for quantity, figure in figures.items():
            if figure.ratio < LEAST_RATIO:
                groups.setdefault((quantity, figure.largest), []).append((name, figure.ratio))
    told = []
    for (quantity, source), members in groups.items():
        ratios = sorted({f"{ratio:.2g}" for _, ratio in members}, key=float)
        size = ratios[0] if len(ratios) == 1 else f"{ratios[0]} to {ratios[-1]}"
        told.append(
            f"{_LABELS[quantity]} of {_joined([name for name, _ in members])}: its tolerance is only {size} times U, "
            f"less than {LEAST_RATIO:g}; most of U is {source}. What would help: "
            f"{_HELP.get(source, f'less of {source}')}; or a wider tolerance"
        )
    return told


def _wrapped(text: str) -> list[str]:
    indent = "    " if text.startswith("  ") else "  "
    return textwrap.wrap(text, 80, subsequent_indent=indent, break_on_hyphens=False)
