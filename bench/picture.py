"""One picture a run: every band's magnitude and phase on its design, residuals below, figures against limits beside.

Drawn with the Figure API (no pyplot), readable in black and white, the same bytes for the same run.
"""

import io
import warnings
from collections.abc import Sequence
from dataclasses import dataclass, replace
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from bandproof.analysis.types import ComplexArray, FloatArray
from bandproof.bench.quantities import engineering
from bandproof.bench.types import QUANTITIES, Comparison, StageResult

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

__all__ = [
    "MAKER",
    "StageView",
    "as_svg",
    "draw",
    "draw_limits",
    "image",
    "labels",
    "numbered",
    "of_tolerance",
    "save",
    "ticks",
]

MAKER = "bandproof"  # named inside every picture
_DPI = 200  # of a PNG; arbitrary, letters of 7 pt are 20 pixels high

_MARKS = "osD^vP*X<>hp"  # one shape a band, repeated after twelve
_MOST_LETTERS = 90  # of all names together above the curves, without overlap; arbitrary
_SYMBOLS = {"centre": "f0", "q": "Q", "gain": "gain"}


@dataclass(frozen=True)
class StageView:
    """What is drawn of a stage.

    ``frequency`` (G,) Hz with ``designed`` (G,) complex; ``at`` (N,) Hz with ``measured`` and ``fitted`` (N,) complex
    and ``uncertainty`` (N,), the standard uncertainty of each measured point along its phasor (ratio), ``across`` that
    across it. ``near`` (P,) Hz spans the stage's own picture, ``predicted`` (P,) complex is the nodal curve of its
    parts as drawn, None where none are stated.
    """

    result: StageResult
    frequency: FloatArray
    designed: ComplexArray
    at: FloatArray
    measured: ComplexArray
    fitted: ComplexArray
    uncertainty: FloatArray
    across: FloatArray
    near: FloatArray
    predicted: ComplexArray | None


def save(figure: "Figure", path: Path) -> None:
    """Write the picture as SVG or PNG by the path's ending."""
    path.write_bytes(image(figure, path.suffix[1:]))


def image(figure: "Figure", kind: str) -> bytes:
    """Return the picture as a file of a kind, "svg" or "png", without date or random names inside."""
    import matplotlib

    memory = io.BytesIO()
    metadata: dict[str, Any] = {"Date": None, "Creator": MAKER} if kind == "svg" else {"Software": MAKER}
    with matplotlib.rc_context({"svg.hashsalt": "bandproof", "svg.fonttype": "path"}), warnings.catch_warnings():
        warnings.filterwarnings("ignore", message="Glyph .* missing from")  # of another script: a box is drawn
        figure.savefig(memory, format=kind, metadata=metadata, dpi=_DPI)
    return memory.getvalue()


def as_svg(figure: "Figure") -> str:
    """Return the picture as the text of an SVG file."""
    return image(figure, "svg").decode("utf-8")


def draw(
    views: Sequence[StageView], title: str, *, size: tuple[float, float] = (11.0, 7.6), beside: bool = True
) -> "Figure":
    """Return the figure of a run's stages.

    Parameters
    ----------
    views : sequence of StageView
        In board order, at least one.
    title : str
        One line above the picture; "" for none.
    size : tuple of float
        Width and height in inches.
    beside : bool
        Whether the figures are drawn beside the curves, against their limits.
    """
    from matplotlib.figure import Figure

    figure = Figure(figsize=size, layout="constrained")
    is_small = size[0] < 9.0
    widths = (2.4 if is_small else 3.0, 1.25) if beside else (1.0,)
    grid = figure.add_gridspec(3, len(widths), width_ratios=widths, height_ratios=(3.0, 2.0, 1.2))
    magnitude = figure.add_subplot(grid[0, 0])
    phase = figure.add_subplot(grid[1, 0], sharex=magnitude)
    residual = figure.add_subplot(grid[2, 0], sharex=magnitude)
    for number, (view, label) in enumerate(zip(views, labels(views), strict=True)):
        mark = _MARKS[number % len(_MARKS)]
        _draw_magnitude(magnitude, view, mark, label)
        _draw_phase(phase, view, mark)
        _draw_residual(residual, view, mark)
    _dress(magnitude, phase, residual, views, letters=7.5 if is_small else 9.0)
    if beside:
        _draw_figures(figure.add_subplot(grid[:, 1]), views, letters=7.0 if is_small else 8.0)
    if title:
        figure.suptitle(title, fontsize=11, x=0.01, ha="left", parse_math=False)
    return figure


def _dB(ratio: ComplexArray | FloatArray | float) -> Any:
    return 20.0 * np.log10(np.abs(ratio))


def labels(views: Sequence[StageView]) -> list[str]:
    """Return what stands above each curve: names, or numbers in board order where names would overlap, or nothing."""
    if sum(len(view.result.name) + 1 for view in views) <= _MOST_LETTERS:
        return [view.result.name for view in views]
    numbers = [str(number) for number in range(1, len(views) + 1)]
    return numbers if sum(len(number) + 1 for number in numbers) <= _MOST_LETTERS else [""] * len(views)


def numbered(views: Sequence[StageView]) -> str:
    """Return what a picture says of its labels where they are numbers, else ""."""
    return "   numbers: as in the table" if labels(views)[0] == "1" else ""


def _draw_magnitude(axes: "Axes", view: StageView, mark: str, label: str) -> None:
    axes.plot(view.frequency, _dB(view.designed), color="0.45", linewidth=1.0)
    axes.plot(view.at, _dB(view.measured), mark, **_open_mark())
    draw_limits(axes, view, label, letters=8.0)


def draw_limits(axes: "Axes", view: StageView, label: str, *, letters: float) -> None:
    """Draw where f0 and gain may be as a grey field behind the marks, which are white and black, and its name above."""
    centre, gain = (view.result.figures[name] for name in ("centre", "gain"))
    low, high = _dB(gain.lower_limit), _dB(gain.upper_limit)
    axes.fill_between([centre.lower_limit, centre.upper_limit], low, high, facecolor="0.75", linewidth=0.0, zorder=0.5)
    if label:
        axes.annotate(label, (centre.designed, high), (0, 4), textcoords="offset points", ha="center", fontsize=letters)


def _open_mark() -> dict[str, Any]:
    return {"markersize": 4.5, "markerfacecolor": "white", "markeredgecolor": "black", "markeredgewidth": 0.9}


def _phase_deg(response: ComplexArray) -> Any:
    """Degrees around the inverting band's 180, so that -90 … 90 is the band itself."""
    return np.degrees(np.angle(-response))


def _draw_phase(axes: "Axes", view: StageView, mark: str) -> None:
    axes.plot(view.frequency, _phase_deg(view.designed), color="0.45", linewidth=1.0)
    axes.plot(view.at, _phase_deg(view.measured), mark, **_open_mark())


def _draw_residual(axes: "Axes", view: StageView, mark: str) -> None:
    peak = view.result.figures["gain"].measured
    error = 100.0 * np.abs(view.measured / view.fitted) - 100.0
    weight = np.abs(view.measured) / peak
    axes.errorbar(
        view.at,
        error * weight,
        yerr=2.0 * 100.0 * view.uncertainty / peak,
        fmt=mark,
        ecolor="0.4",
        elinewidth=0.8,
        capsize=1.5,
        **_open_mark(),
    )


def _dress(magnitude: "Axes", phase: "Axes", residual: "Axes", views: Sequence[StageView], *, letters: float) -> None:
    magnitude.set_xscale("log")
    lowest = min(float(view.frequency[0]) for view in views)
    highest = max(float(view.frequency[-1]) for view in views)
    magnitude.set_xlim(lowest, highest)
    top = max(_dB(view.result.figures["gain"].upper_limit) for view in views)
    drawn = np.concatenate([_dB(view.measured) for view in views])
    magnitude.set_ylim(min(top - 22.0, float(np.min(drawn)) - 2.0), max(top, float(np.max(drawn))) + 3.0)
    magnitude.set_ylabel("gain / dB")
    magnitude.set_title(
        f"line: as designed   marks: measured   grey: limits of centre and gain{numbered(views)}",
        loc="left",
        fontsize=8,
        pad=4,
    )
    phase.set_ylabel("phase − 180° / °")
    phase.set_yticks([-90, -45, 0, 45, 90])
    phase.set_ylim(-100, 100)
    residual.set_ylabel("measured − fit\n/ % of gain")
    residual.axhline(0.0, color="0.45", linewidth=0.8)
    residual.set_xlabel("frequency / Hz   (bars: ± 2 standard uncertainties)")
    ticks(residual, lowest, highest)
    for axes in (magnitude, phase, residual):
        axes.grid(True, color="0.9", linewidth=0.6)
        axes.tick_params(labelsize=8, labelbottom=axes is residual)
        axes.yaxis.label.set_fontsize(letters)
    residual.xaxis.label.set_fontsize(letters)


_MANTISSAS = ((1.0,), (1.0, 2.0, 5.0), (1.0, 1.5, 2.0, 3.0, 4.0, 6.0, 8.0))
_FEWEST_TICKS = 4


def ticks(axes: "Axes", lowest: float, highest: float) -> None:
    """Put ticks at round frequencies, few enough to be read, labelled in Hz, k and M (1 k, 2.5 k)."""
    from matplotlib.ticker import MaxNLocator

    for mantissas in _MANTISSAS:
        steps = [mantissa * 10.0**decade for decade in range(-3, 12) for mantissa in mantissas]
        shown = [step for step in steps if lowest <= step <= highest]
        if len(shown) >= _FEWEST_TICKS:
            break
    else:  # a narrow band: evenly spaced
        evenly = MaxNLocator(_FEWEST_TICKS + 1, steps=[1, 2, 2.5, 5, 10]).tick_values(lowest, highest)
        shown = [float(step) for step in evenly if lowest <= step <= highest]
    axes.set_xticks(shown, labels=[engineering(step, "", 6) for step in shown])
    axes.minorticks_off()


def of_tolerance(figure: Comparison) -> float:
    """Return the deviation in units of the room on its side, gain in dB: beyond ± 1 outside the limits; NaN unfound."""
    ends = [figure.measured, figure.designed, figure.lower_limit, figure.upper_limit]
    if figure.quantity == "gain":
        ends = [float(_dB(max(end, _NOTHING))) for end in ends]
    measured, designed, lower, upper = ends
    room = abs((upper if measured >= designed else lower) - designed)
    return (measured - designed) / room if room else float(np.copysign(np.inf, measured - designed))


_FACES: dict[str | None, dict[str, Any]] = {
    "fail": {"markerfacecolor": "black"},
    "undecided": {"markerfacecolor": "black", "markerfacecoloralt": "white", "fillstyle": "bottom"},
}
_NOTHING = 1e-9  # a gain that stands for 0, which has no dB; arbitrary
_END = 1.9  # tolerances from design; what is farther is off the scale


def _draw_figures(axes: "Axes", views: Sequence[StageView], *, letters: float) -> None:
    """Deviation of each figure in units of its own tolerance: between the two lines is inside the limits."""
    rows = [(view.result, quantity) for view in views for quantity in QUANTITIES]
    for row, (result, quantity) in enumerate(rows):
        figure = result.figures[quantity]
        place = of_tolerance(figure)
        is_off = abs(place) > _END
        axes.errorbar(
            [float(np.clip(place, -_END, _END))],
            [row],
            xerr=[[0.0], [0.0]] if is_off else _bar(figure, place),
            fmt=_MARKS[(row // len(QUANTITIES)) % len(_MARKS)],
            ecolor="0.3",
            elinewidth=0.9,
            capsize=0.0 if is_off else 2.0,
            **{**_open_mark(), **_FACES.get(figure.verdict, {})},
        )
        if is_off:
            side, words = ("left", "← off scale") if place < 0.0 else ("right", "off scale →")
            spot, field = (np.copysign(_END - 0.2, place), row), {"facecolor": "white", "linewidth": 0.0, "pad": 0.8}
            axes.annotate(words, spot, ha=side, va="center", fontsize=7, bbox=field)
    axes.axvline(0.0, color="0.75", linewidth=0.8)
    for edge in (-1.0, 1.0):
        axes.axvline(edge, color="black", linewidth=1.0)
    axes.set_yticks(range(len(rows)), labels=[f"{result.name}  {_SYMBOLS[q]}" for result, q in rows])
    axes.set_ylim(len(rows) - 0.5, -0.5)
    axes.set_xlim(-2.1, 2.1)
    axes.set_xticks([-1, 0, 1], labels=["lower\nlimit", "design", "upper\nlimit"])
    axes.tick_params(labelsize=7 if len(rows) > 45 else letters)
    axes.set_title("figures against limits, ± U\nfilled: fails; half: undecided", fontsize=letters, pad=4)


def _bar(figure: Comparison, place: float) -> list[list[float]]:
    """Return how far U reaches below and above a figure's place, in units of its tolerance, at most 2."""
    ends = [replace(figure, measured=figure.measured + sign * figure.expanded_uncertainty) for sign in (-1.0, 1.0)]
    return [[min(abs(of_tolerance(end) - place), 2.0)] for end in ends]
