"""One stage as a picture for a page: its points on the designed and fitted curve, limits, and what the fit leaves."""

from typing import TYPE_CHECKING, Any

import numpy as np

from bandproof.analysis.models import band_response
from bandproof.analysis.types import ComplexArray, FloatArray
from bandproof.bench.picture import StageView, ticks
from bandproof.bench.types import QUANTITIES

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

__all__ = ["draw_stage"]

_SIZE = (6.85, 2.9)  # inches: the width of the text on A4, so that letters are as large as they say
_SMALLEST = 7.0  # points
_MARK: dict[str, Any] = {
    "markersize": 4.0,
    "markerfacecolor": "white",
    "markeredgecolor": "black",
    "markeredgewidth": 0.8,
}


def draw_stage(view: StageView) -> "Figure":
    """Return the figure of one stage: magnitude and phase on the left, both residuals of the fit on the right."""
    from matplotlib.figure import Figure

    figure = Figure(figsize=_SIZE)
    grid = figure.add_gridspec(
        2, 2, width_ratios=(1.5, 1.0), left=0.075, right=0.99, bottom=0.13, top=0.93, hspace=0.12, wspace=0.24
    )
    upper, lower = figure.add_subplot(grid[0, 0]), figure.add_subplot(grid[1, 0])
    size, turn = figure.add_subplot(grid[0, 1]), figure.add_subplot(grid[1, 1])
    span = _span(view)
    _draw_curves(upper, lower, view, span)
    _draw_residuals(size, turn, view)
    for axes in (upper, lower, size, turn):
        _dress(axes, span, labelled=axes in (lower, turn))
    return figure


def _span(view: StageView) -> tuple[float, float]:
    """Return what is shown, Hz: all points, and the limits wherever the band was found."""
    centre = view.result.figures["centre"]
    ends = [*view.at.tolist(), centre.lower_limit, centre.upper_limit]
    return min(ends) / 1.25, max(ends) * 1.25


def _dB(ratio: ComplexArray | FloatArray | float) -> Any:
    return 20.0 * np.log10(np.abs(ratio))


def _draw_curves(upper: "Axes", lower: "Axes", view: StageView, span: tuple[float, float]) -> None:
    frequency = np.geomspace(*span, 160)
    turned = -1.0 if view.designed[np.argmax(np.abs(view.designed))].real < 0.0 else 1.0
    as_designed, fitted = _curve(_wanted(view, turned), frequency), _curve(view.result.theta, frequency)
    for curve, color, width in ((as_designed, "0.55", 1.6), (fitted, "black", 0.8)):
        upper.plot(frequency, _dB(curve), color=color, linewidth=width)
        lower.plot(frequency, np.degrees(np.angle(turned * curve)), color=color, linewidth=width)
    upper.plot(view.at, _dB(view.measured), "o", **_MARK)
    lower.plot(view.at, np.degrees(np.angle(turned * view.measured)), "o", **_MARK)
    centre, gain = (view.result.figures[name] for name in ("centre", "gain"))
    left, right = centre.lower_limit, centre.upper_limit
    low, high = _dB(gain.lower_limit), _dB(gain.upper_limit)
    upper.plot([left, right, right, left, left], [low, low, high, high, low], "k--", linewidth=0.8)
    upper.set_title(
        "marks: measured   black: fitted   grey: as designed   dashed: limits", loc="left", fontsize=_SMALLEST, pad=3
    )
    upper.set_ylabel("gain / dB")
    lower.set_ylabel("phase − 180° / °" if turned < 0.0 else "phase / °")
    lower.set_yticks([-90, -45, 0, 45, 90])
    lower.set_ylim(-100, 100)


def _wanted(view: StageView, turned: float) -> tuple[float, ...]:
    centre, q, gain = (view.result.figures[quantity].designed for quantity in QUANTITIES)
    return (np.log(centre), np.log(q), turned * gain, 0.0, 0.0, 0.0, 0.0)


def _curve(theta: tuple[float, ...], frequency: FloatArray) -> ComplexArray:
    curve: ComplexArray = band_response(np.array([theta]), frequency[None])[0]
    return curve


def _draw_residuals(size: "Axes", turn: "Axes", view: StageView) -> None:
    """Draw both parts of what is left along and across the fitted response, relative to the gain: equal scales."""
    peak = view.result.figures["gain"].measured
    left = 100.0 * (view.measured - view.fitted) * np.conj(view.fitted) / np.abs(view.fitted) / peak
    bars = 200.0 * view.uncertainty / peak
    for axes, part, name in ((size, left.real, "along"), (turn, left.imag, "across")):
        axes.errorbar(view.at, part, yerr=bars, fmt="o", ecolor="0.4", elinewidth=0.8, capsize=1.5, **_MARK)
        axes.axhline(0.0, color="0.45", linewidth=0.8)
        axes.set_ylabel(f"{name} / % of gain")
    size.set_title("measured − fitted, bars ± 2 u", loc="left", fontsize=_SMALLEST, pad=3)


def _dress(axes: "Axes", span: tuple[float, float], *, labelled: bool) -> None:
    axes.set_xscale("log")
    axes.set_xlim(*span)
    ticks(axes, *span)
    axes.grid(True, color="0.9", linewidth=0.6)
    axes.tick_params(labelsize=_SMALLEST, labelbottom=labelled)
    axes.yaxis.label.set_fontsize(_SMALLEST)
    if labelled:
        axes.set_xlabel("frequency / Hz", fontsize=_SMALLEST, labelpad=1)
