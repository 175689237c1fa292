"""One stage as a picture: its points on the designed, predicted and fitted curve within the mask, residuals below.

Curves and marks are told apart by line and shape alone. The same picture stands in the report and by itself.
"""

from typing import TYPE_CHECKING, Any

import numpy as np

from bandproof.analysis.mask import magnitude_mask, phase_mask
from bandproof.analysis.models import band_jacobian, band_response
from bandproof.analysis.types import ComplexArray, FloatArray
from bandproof.bench.picture import StageView, ticks
from bandproof.bench.types import QUANTITIES

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

__all__ = ["draw_stage"]

_WIDTH = 6.85  # inches: that of the text on A4, so that letters are as large as they say
_HEIGHT, _TITLE = 3.0, 0.2  # inches
_LEGEND, _FOOT = 0.2, 0.33  # inches above and below the axes
_SMALLEST = 7.0  # points
_MARK: dict[str, Any] = {
    "markersize": 4.0,
    "markerfacecolor": "white",
    "markeredgecolor": "black",
    "markeredgewidth": 0.8,
}
_DESIGNED: dict[str, Any] = {"color": "0.55", "linewidth": 2.0, "linestyle": (0, (4, 2))}  # wide: seen below the others
_PREDICTED: dict[str, Any] = {"color": "black", "linewidth": 1.6, "linestyle": (0, (1, 1.5))}
_FITTED: dict[str, Any] = {"color": "black", "linewidth": 0.6}
_MASK: dict[str, Any] = {"facecolor": "0.88", "edgecolor": "0.6", "linewidth": 0.5}
_BAND: dict[str, Any] = {"facecolor": "0.8", "linewidth": 0.0}


def draw_stage(view: StageView, title: str = "") -> "Figure":
    """Return the figure of one stage: magnitude and phase, below each what the fit leaves along and across it.

    The mask is where a band can run whose figures are all within their limits (`analysis.mask`).
    """
    from matplotlib.figure import Figure

    height = _HEIGHT + (_TITLE if title else 0.0)
    figure = Figure(figsize=(_WIDTH, height))
    top = 1.0 - (_LEGEND + (_TITLE if title else 0.0)) / height
    grid = figure.add_gridspec(
        2, 2, height_ratios=(1.8, 1.0), left=0.088, right=0.99, bottom=_FOOT / height, top=top, hspace=0.24, wspace=0.22
    )
    magnitude, phase = figure.add_subplot(grid[0, 0]), figure.add_subplot(grid[0, 1])
    along, across = figure.add_subplot(grid[1, 0]), figure.add_subplot(grid[1, 1])
    _draw_curves(magnitude, phase, view)
    _draw_residuals(along, across, view)
    for axes in (magnitude, phase, along, across):
        _dress(axes, (float(view.near[0]), float(view.near[-1])), labelled=axes in (along, across))
    handles, labels = magnitude.get_legend_handles_labels()
    figure.legend(
        handles, labels, loc="lower left", bbox_to_anchor=(0.088, top), ncols=len(labels), fontsize=_SMALLEST,
        frameon=False, borderpad=0.2, borderaxespad=0.0, handlelength=2.6, columnspacing=1.6,
    )  # fmt: skip
    if title:
        place = (0.01, 1.0 - 0.5 * _TITLE / height)
        figure.text(*place, title, fontsize=_SMALLEST + 1.0, va="center", parse_math=False)
    return figure


def _dB(ratio: ComplexArray | FloatArray | float) -> Any:
    return 20.0 * np.log10(np.abs(ratio))


def _draw_curves(magnitude: "Axes", phase: "Axes", view: StageView) -> None:
    frequency = view.near
    turned = -1.0 if view.designed[np.argmax(np.abs(view.designed))].real < 0.0 else 1.0
    designed, fitted = _curve(_wanted(view, turned), frequency), _curve(view.result.theta, frequency)
    _draw_masks(magnitude, phase, view)
    told = [("designed", designed, _DESIGNED), ("predicted from the parts", view.predicted, _PREDICTED)]
    for name, curve, style in [*told, ("fitted", fitted, _FITTED)]:
        if curve is not None:
            magnitude.plot(frequency, _dB(curve), label=name, **style)
            phase.plot(frequency, np.degrees(np.angle(turned * curve)), **style)
    degrees = np.degrees(np.angle(turned * view.measured))
    magnitude.plot(view.at, _dB(view.measured), "o", label="measured", **_MARK)
    phase.plot(view.at, degrees, "o", **_MARK)
    highest = _dB(view.result.figures["gain"].upper_limit)
    magnitude.set_ylim(*_room(np.concatenate([_dB(designed), _dB(fitted), _dB(view.measured), [highest]])))
    magnitude.locator_params(axis="y", nbins=6, steps=[1, 2, 5, 10])
    magnitude.set_ylabel("gain / dB")
    phase.set_ylabel("phase − 180° / °" if turned < 0.0 else "phase / °")
    most = max(100.0, 1.05 * float(np.max(np.abs(degrees))))
    phase.set_yticks([-180, -90, -45, 0, 45, 90, 180] if most > 100.0 else [-90, -45, 0, 45, 90])
    phase.set_ylim(-most, most)


def _room(values: FloatArray) -> tuple[float, float]:
    low, high = float(np.min(values)), float(np.max(values))
    return low - 0.05 * (high - low), high + 0.08 * (high - low)


def _draw_masks(magnitude: "Axes", phase: "Axes", view: StageView) -> None:
    limits = {name: (figure.lower_limit, figure.upper_limit) for name, figure in view.result.figures.items()}
    least, greatest = magnitude_mask(view.near, centre=limits["centre"], q=limits["q"], gain=limits["gain"])
    magnitude.fill_between(view.near, _dB(least), _dB(greatest), label="within the limits", **_MASK)
    least, greatest = phase_mask(view.near, centre=limits["centre"], q=limits["q"])
    phase.fill_between(view.near, np.degrees(least), np.degrees(greatest), **_MASK)


def _wanted(view: StageView, turned: float) -> tuple[float, ...]:
    centre, q, gain = (view.result.figures[quantity].designed for quantity in QUANTITIES)
    return (np.log(centre), np.log(q), turned * gain, 0.0, 0.0, 0.0, 0.0)


def _curve(theta: tuple[float, ...], frequency: FloatArray) -> ComplexArray:
    curve: ComplexArray = band_response(np.array([theta]), frequency[None])[0]
    return curve


def _draw_residuals(along: "Axes", across: "Axes", view: StageView) -> None:
    """Draw both parts of what the fit leaves, relative to the gain, and 95 % of each point and of the fitted curve."""
    left = (view.measured - view.fitted) * np.conj(view.fitted) / np.abs(view.fitted)
    is_small = np.max(np.abs(left)) < 2e-4 * view.result.figures["gain"].measured
    scale = (1e6 if is_small else 100.0) / view.result.figures["gain"].measured
    parts = (left.real, left.imag), (view.uncertainty, view.across), _curve_uncertainty(view)
    for axes, part, bars, band in zip((along, across), *parts, strict=True):
        axes.fill_between(view.near, -2.0 * scale * band, 2.0 * scale * band, **_BAND)
        axes.errorbar(
            view.at, scale * part, yerr=2.0 * scale * bars, fmt="o", ecolor="black", elinewidth=0.7, capsize=1.5,
            **_MARK,
        )  # fmt: skip
        axes.axhline(0.0, color="black", linewidth=0.6)
        axes.locator_params(axis="y", nbins=4, steps=[1, 2, 5, 10])
        axes.set_ylabel("ppm of gain" if is_small else "% of gain")
    for axes, words in ((along, "along it; bars: 95 % of a point"), (across, "across it; shaded: 95 % of the fit")):
        axes.set_title(f"measured − fitted, {words}", loc="left", fontsize=_SMALLEST, pad=3)


def _curve_uncertainty(view: StageView) -> tuple[FloatArray, FloatArray]:
    """Return the standard uncertainty (P,) of the fitted curve along and across it, from the noise of the points."""
    curve, slopes = band_jacobian(np.array([view.result.theta]), view.near[None])
    covariance = np.array(view.result.theta_covariance)
    turned = np.array(slopes)[: len(covariance), 0] * np.conj(curve[0]) / np.abs(curve[0])  # (variables, P)
    along, across = (np.einsum("ip,ij,jp->p", part, covariance, part) for part in (turned.real, turned.imag))
    return np.sqrt(along), np.sqrt(across)


def _dress(axes: "Axes", span: tuple[float, float], *, labelled: bool) -> None:
    axes.set_xscale("log")
    axes.set_xlim(*span)
    ticks(axes, *span)
    axes.grid(True, color="0.85", linewidth=0.5)
    axes.set_axisbelow(True)
    axes.tick_params(labelsize=_SMALLEST, labelbottom=labelled)
    axes.yaxis.label.set_fontsize(_SMALLEST)
    axes.yaxis.set_label_coords(-0.168, 0.5)  # of the edge towards the axes
    if labelled:
        axes.set_xlabel("frequency / Hz", fontsize=_SMALLEST, labelpad=1)
