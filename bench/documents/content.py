"""What the report says of a run, as plain values for the template: page one, and how the board was decided."""

from collections.abc import Iterator, Mapping, Sequence
from dataclasses import replace
from math import isfinite, nan
from typing import TYPE_CHECKING, Any

from bandproof.bench.circuit import Prediction
from bandproof.bench.comparison import compared
from bandproof.bench.documents import cells
from bandproof.bench.documents.bench_content import bench_content
from bandproof.bench.documents.stage_content import full_stop, stage_content, undecided
from bandproof.bench.picture import StageView, as_svg, draw, of_tolerance
from bandproof.bench.result import board_verdict
from bandproof.bench.summary import verdict_counts
from bandproof.bench.types import QUANTITIES, Comparison, Run, Stage, StageResult

if TYPE_CHECKING:
    from matplotlib.figure import Figure

__all__ = ["content", "draw_board", "worst_figure"]

_WIDTH = 6.85  # inches of text on A4
_UNSETTLED = "had not settled"  # an alarm that ends so weighs least
_BESIDE = 6  # bands whose figures fit beside the curves
_CUT_SHORT = (
    "none, NO VERDICT",
    "the run ended early: neither board nor band is judged, whatever was measured until then",
)
_SIMULATED = "BANDPROOF,SIMULATED "  # how instruments of a rehearsal name themselves
_WORDS = {"pass": "PASS", "fail": "FAIL", "undecided": "UNDECIDED", None: "NO VERDICT"}
_TERMS = (
    ("f0", "the frequency of greatest |H|; H is the complex ratio of the voltages at the two test points of a band"),
    ("Q", "f0 divided by the distance of the two half-power points of |H|"),
    ("gain", "|H| at f0, here in decibels"),
    ("± U", "the true value is within measured ± U with a probability of 95.45 % (JCGM 100; U = k u)"),
    ("deviation", "measured against designed"),
    ("u", "standard uncertainty; type A: from observations, type B: from anything else (JCGM 100)"),
    ("k", "U / u: 2 for a normal distribution, less where a source with ends dominates"),
    ("tap", "a test point of the board that a channel of the scope is connected to"),
    ("thru, the path", "what probes, switches and channels do by themselves: measured, divided out of every point"),
    (
        "chi-square",
        "squared distances of the points from the fit over their u²; near 1 a degree of freedom: noise alone",
    ),
    ("misfit", "what the points leave of the model beyond their noise"),
    ("along, across", "in the direction of the fitted phasor (its length) and at right angles to it (its angle)"),
    (
        "bars, 2 u of point",
        "noise and rounding of its own records; what moves many points at once is in the budget alone",
    ),
    ("closing point", "the first frequency of a band again, as its last: has anything drifted meanwhile?"),
    ("off fit", "distance of a point from the fitted curve, in any direction"),
    ("dialect", "the file that says in which words an instrument is spoken to"),
    ("undecided", "the rule permits neither pass nor fail, or something speaks against the measurement itself"),
    ("suspect", "the part whose change would explain what was measured; a hint for the search, not a verdict"),
)


def content(
    run: Run,
    stages: Sequence[StageResult],
    result: Mapping[str, Any],
    digest: str,
    views: Sequence[StageView],
    link: str = "",
) -> dict[str, Any]:
    """Return all the report says.

    Parameters
    ----------
    run : Run
    stages : sequence of StageResult
        What was concluded, as the table shows it.
    result : mapping
        The result object stored in the run file.
    digest : str
        That of the run file.
    views : sequence of StageView
        What is drawn, of the stages that have a fit.
    link : str
        That of the chain of the run's folder after it, "" where no chain has it.
    """
    drawn = {view.result.name: view for view in views}
    verdict = board_verdict(run, stages)
    return {
        "head": _head(run, result, digest, link),
        "verdict": _WORDS[verdict],
        "simulated": any(identity.startswith(_SIMULATED) for identity in run.identities.values()),
        "sentence": _sentence(run, stages),
        "undecided": [text for stage in stages for text in undecided(stage)],
        "worst": _worst_line(run, stages),
        "cautions": _cautions(run, stages, result),
        "suspects": [suspect.text for stage in stages for suspect in stage.suspects],
        "rows": list(_rows(run, stages)),
        "picture": as_svg(draw_board(views)) if views else None,
        "stages": [stage_content(run, stage, drawn.get(stage.name)) for stage in stages],
        "bench": bench_content(run),
        "rules": [[rule, cells.rule_meaning(rule)] for rule in _rules(stages)],
        "terms": [list(term) for term in (*_TERMS, *([_CUT_SHORT] if run.ended == "cut_short" else []))],
        "attempts": [_attempt(entry) for entry in result["attempts"] or ()],
    }


def _head(run: Run, result: Mapping[str, Any], digest: str, link: str) -> dict[str, Any]:
    return {
        "title": run.board.title,
        "drawing": run.board.drawing,
        "revision": run.board.revision,
        "serial": run.serial,
        "attempt": run.attempt,
        "operator": run.operator or "not stated",
        "started": cells.utc(run.started),
        "date": run.started[:19],
        "where": f"{run.bench.place or 'place not stated'}; {run.bench.title or 'bench without a name'}",
        "ambient": "not stated" if run.ambient is None else f"{run.ambient:.4g} °C",
        "note": run.note,
        "run_id": run.run_id,
        "version": run.version,
        "digest": digest,
        "file": f"run file {digest[:8]}…",
        "link": link or "not in a chain",
        "points": result["points"],
        "bench_seconds": f"{run.bench_seconds:.1f} s",
    }


def _sentence(run: Run, stages: Sequence[StageResult]) -> str:
    if run.ended == "cut_short":
        return full_stop(f"The run was cut short: {run.reason}")
    figures = [figure for stage in stages for figure in stage.figures.values()]
    return f"{len(figures)} figures of {len(stages)} band{'' if len(stages) == 1 else 's'}: {verdict_counts(figures)}."


def worst_figure(stages: Sequence[StageResult]) -> tuple[str, Comparison] | None:
    """Return the band and the figure that uses most of its tolerance, of those that were found."""
    found = [(stage.name, figure) for stage in stages for figure in stage.figures.values() if isfinite(figure.measured)]
    return max(found, key=lambda named: abs(of_tolerance(named[1])), default=None)


def _worst_line(run: Run, stages: Sequence[StageResult]) -> str:
    """Return the worst figure in words; what was not measured or not found comes first, nothing is worse."""
    driven = {stage.name for stage in stages}
    missed = [stage.name for stage in run.board.stages if stage.name not in driven]
    lost = [
        f"{stage.name} {cells.SYMBOLS[figure.quantity]}"
        for stage in stages
        for figure in stage.figures.values()
        if not isfinite(figure.measured)
    ]
    told = [f"Not measured: {', '.join(missed)}."] if missed else []
    told += [f"Not found: {', '.join(lost)}."] if lost else []
    if worst := worst_figure(stages):
        band, figure = worst
        used = abs(of_tolerance(figure))
        how = (
            f"closest to a limit, uses {100.0 * used:.0f} % of its tolerance"
            if used <= 1.0
            else f"farthest outside its limits, {used:.3g} times its tolerance from design"
        )
        told.append(
            f"Worst figure{' of those measured' if told else ''}: {band} {cells.SYMBOLS[figure.quantity]}, "
            f"{cells.measured(figure)}, {how} (limits {cells.limits(figure)}, rule {figure.rule})."
        )
    return " ".join(told)


def _cautions(run: Run, stages: Sequence[StageResult], result: Mapping[str, Any]) -> list[str]:
    """Return all cautions once, by weight: another verdict, bands without a fit first, what had not settled last."""
    lost = [alarm for stage in stages if not stage.theta for alarm in stage.alarms]
    told = [alarm for stage in stages if stage.theta for alarm in stage.alarms]
    found = list(dict.fromkeys([*lost, *sorted([*run.alarms, *told], key=lambda text: text.endswith(_UNSETTLED))]))
    together = [str(entry["attempt"]) for entry in result["attempts"] or () if entry["pooled"]]
    if len(together) > 1 and not any("cannot be pooled" in alarm for alarm in found):
        found.insert(
            0,
            f"The figures are means of attempts {', '.join(together)} where these agree; "
            "points and pictures are of this one.",
        )
    if result["verdict"] != board_verdict(run, stages):
        found.insert(0, f"The run file says {result['verdict']}; evaluated again here the board comes out otherwise.")
    return found


def _rows(run: Run, stages: Sequence[StageResult]) -> Iterator[dict[str, Any]]:
    """Yield the rows of the table: every band of the board, driven or not."""
    found = {stage.name: stage for stage in stages}
    for asked in run.board.stages:
        if asked.name in found:
            yield from (_row(asked.name, figure) for figure in found[asked.name].figures.values())
        else:
            yield from (_row(asked.name, figure) | {"measured": "not measured"} for figure in _unmeasured(asked))


def _unmeasured(stage: Stage) -> Iterator[Comparison]:
    """Yield the figures of a band that was never driven: limits, nothing else."""
    for quantity in QUANTITIES:
        yield replace(compared(stage, quantity, Prediction(nan, nan, nan), None, None, ""), verdict=None)


def _row(band: str, figure: Comparison) -> dict[str, Any]:
    return {
        "band": band,
        "figure": cells.SYMBOLS[figure.quantity],
        "designed": cells.designed(figure),
        "measured": cells.measured(figure),
        "deviation": cells.deviation(figure),
        "limits": cells.limits(figure),
        "rule": figure.rule,
        "verdict": cells.WORDS[figure.verdict],
    }


def draw_board(views: Sequence[StageView]) -> "Figure":
    """Return the picture of all bands as page one has it."""
    beside = len(views) <= _BESIDE
    return draw(views, "", size=(_WIDTH, 4.9 if beside else 3.9), beside=beside)


def _rules(stages: Sequence[StageResult]) -> list[str]:
    return list(dict.fromkeys(figure.rule for stage in stages for figure in stage.figures.values()))


def _attempt(entry: Mapping[str, Any]) -> dict[str, Any]:
    return {
        "attempt": entry["attempt"],
        "verdict": cells.WORDS[entry["verdict"]],
        "pooled": "yes" if entry["pooled"] else "no",
        "digest": entry["digest"] or ("this run" if "reason" in entry else "unfinished"),
        "reason": entry.get("reason", ""),
    }
