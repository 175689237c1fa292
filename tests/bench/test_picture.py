"""The picture of a run: the same bytes for the same run, and drawn whatever was concluded. Warnings are errors here."""

import math
import re
from dataclasses import replace
from itertools import combinations

import numpy as np
import pytest
from matplotlib.backends.backend_agg import FigureCanvasAgg
from matplotlib.colors import to_rgb
from matplotlib.figure import Figure
from matplotlib.text import Text

from bandproof.bench.documents.content import draw_board
from bandproof.bench.documents.stage_picture import draw_stage
from bandproof.bench.evaluate import views
from bandproof.bench.picture import draw, image, of_tolerance, save, ticks
from bandproof.bench.types import PASSIVE


@pytest.fixture
def two(outcome):
    return views(outcome.run, outcome.stages)


def svg(figure, path):
    save(figure, path)
    return path.read_text()


def test_the_same_run_gives_the_same_bytes(outcome, two, tmp_path):
    first = svg(draw(two, "title"), tmp_path / "first.svg")
    again = svg(draw(views(outcome.run, outcome.stages), "title"), tmp_path / "again.svg")
    assert first == again
    assert first == svg(draw(two, "title"), tmp_path / "first.svg")
    assert first != svg(draw(two, "other"), tmp_path / "other.svg")


def test_there_is_no_date_in_the_picture(two, tmp_path):
    text = svg(draw(two, "title"), tmp_path / "picture.svg")
    assert "<dc:date>" not in text
    # A date or a clock in any of the usual spellings; numbers of paths have no dashes or colons between digits.
    assert not re.search(r"20\d\d-\d\d-\d\d|\d\d:\d\d:\d\d", text)


def test_a_job_leaves_the_picture_of_its_run(outcome, two, tmp_path):
    left = (outcome.folder / "picture.svg").read_text()
    run = outcome.run
    title = f"{run.board.title}   serial {run.serial}, attempt {run.attempt}"
    assert left == svg(draw(two, title), tmp_path / "picture.svg")


def many(view, count):
    """Return views as of a board of many bands, an octave apart."""
    found = []
    for number in range(count):
        factor = 2.0**number
        figures = dict(view.result.figures)
        centre = figures["centre"]
        names = ("designed", "predicted", "measured", "lower_limit", "upper_limit", "expanded_uncertainty")
        figures["centre"] = replace(centre, **{name: factor * getattr(centre, name) for name in names})
        result = replace(view.result, name=f"band-{number}", figures=figures)
        found.append(replace(view, result=result, frequency=view.frequency * factor, at=view.at * factor))
    return found


@pytest.mark.parametrize("count", [1, 12])
def test_any_number_of_bands_is_drawn_without_a_warning(two, tmp_path, count):
    figure = draw(many(two[0], count), "title")
    svg(figure, tmp_path / "picture.svg")
    marks = [line for line in figure.axes[0].lines if line.get_marker() not in ("None", "", None)]
    assert len(marks) == count
    labels = [label.get_text() for label in figure.axes[3].get_yticklabels()]
    assert labels[:3] == ["band-0  f0", "band-0  Q", "band-0  gain"]
    assert len(labels) == 3 * count


def test_all_measured_points_are_drawn_and_lie_inside_the_axes(two):
    figure = draw(two, "title")
    magnitude = figure.axes[0]
    marks = [line for line in magnitude.lines if line.get_marker() not in ("None", "", None)]
    assert [len(line.get_xdata()) for line in marks] == [len(view.at) for view in two]
    for line in marks:
        low, high = magnitude.get_ylim()
        assert ((line.get_ydata() > low) & (line.get_ydata() < high)).all()
        left, right = magnitude.get_xlim()
        assert ((line.get_xdata() > left) & (line.get_xdata() < right)).all()


@pytest.mark.parametrize("field", ["measured", "expanded_uncertainty", "predicted"])
def test_figures_that_were_not_found_are_no_obstacle(two, tmp_path, field):
    result = two[0].result
    figures = {name: replace(figure, **{field: math.nan}) for name, figure in result.figures.items()}
    svg(draw([replace(two[0], result=replace(result, figures=figures)), two[1]], "title"), tmp_path / "picture.svg")


def test_points_without_uncertainty_or_signal_are_no_obstacle(two, tmp_path):
    bad = replace(two[0], uncertainty=np.full_like(two[0].uncertainty, math.nan))
    svg(draw([bad, two[1]], "title"), tmp_path / "picture.svg")


def test_a_stage_that_fails_is_drawn_filled(two):
    result = two[0].result
    figures = {**result.figures, "q": replace(result.figures["q"], verdict="fail", measured=2.0)}
    figure = draw([replace(two[0], result=replace(result, figures=figures)), two[1]], "title")
    faces = [c.lines[0].get_markerfacecolor() for c in figure.axes[3].containers]
    assert faces == ["white", "black", *["white"] * 4]


def test_an_undecided_figure_has_a_mark_of_its_own(two):
    result = two[0].result
    figures = {**result.figures, "q": replace(result.figures["q"], verdict="undecided")}
    figure = draw([replace(two[0], result=replace(result, figures=figures)), two[1]], "title")
    marks = [c.lines[0].get_fillstyle() for c in figure.axes[3].containers]
    assert marks == ["full", "bottom", *["full"] * 4]
    assert "half: undecided" in figure.axes[3].get_title()


def test_a_figure_off_the_scale_says_so(two):
    result = two[0].result
    figures = {**result.figures, "q": replace(result.figures["q"], measured=0.85, verdict="fail")}
    figure = draw([replace(two[0], result=replace(result, figures=figures)), two[1]], "title")
    (words,) = figure.axes[3].texts
    assert (words.get_text(), words.xy[1]) == ("← off scale", 1)


def test_gain_is_measured_against_its_tolerance_in_decibels(two):
    # By hand: designed 10 dB, limits 9 and 11 dB.
    gain = two[0].result.figures["gain"]
    for level, wanted in ((10.0, 0.0), (10.5, 0.5), (8.0, -2.0), (-5.13, -15.13)):
        assert np.isclose(of_tolerance(replace(gain, measured=10 ** (level / 20))), wanted, atol=1e-6)
    assert math.isnan(of_tolerance(replace(gain, measured=math.nan)))


def test_limits_are_no_lines_that_look_like_marks(two):
    """They are grey fields behind curves and marks: every line of the picture is a curve or has marks."""
    magnitude = draw(two, "title").axes[0]
    fields = [field for field in magnitude.collections if to_rgb(field.get_facecolor()[0]) == (0.75, 0.75, 0.75)]
    assert len(fields) == len(magnitude.lines) / 2 == len(two)
    for view, field in zip(two, fields, strict=True):
        centre, gain = (view.result.figures[name] for name in ("centre", "gain"))
        corners = field.get_paths()[0].get_extents()
        assert np.allclose([corners.x0, corners.x1], [centre.lower_limit, centre.upper_limit])
        assert np.allclose([corners.y0, corners.y1], dB(np.array([gain.lower_limit, gain.upper_limit])))
        assert field.get_zorder() < min(line.get_zorder() for line in magnitude.lines)


def test_a_png_is_written_by_its_ending(two, tmp_path):
    save(draw(two, "title"), tmp_path / "picture.png")
    assert (tmp_path / "picture.png").read_bytes().startswith(b"\x89PNG\r\n")


# --- one stage ---


def curves(axes):
    return {line.get_label(): line for line in axes.lines if not line.get_label().startswith("_")}


def dB(ratio):
    return 20 * np.log10(np.abs(ratio))


@pytest.fixture
def passive(outcome):
    board = outcome.run.board
    stages = tuple(replace(stage, circuit=PASSIVE) for stage in board.stages)
    return views(replace(outcome.run, board=replace(board, stages=stages)), outcome.stages)[0]


@pytest.fixture
def moved(outcome):
    """A stage whose limits lie far below what was measured."""
    first = outcome.stages[0]
    centre = first.figures["centre"]
    names = ("designed", "lower_limit", "upper_limit")
    far = replace(centre, **{name: getattr(centre, name) / 30 for name in names})
    return views(outcome.run, [replace(first, figures={**first.figures, "centre": far})])[0]


@pytest.fixture(params=["healthy", "passive", "moved"])
def any_view(request, two, passive, moved):
    return {"healthy": two[0], "passive": passive, "moved": moved}[request.param]


def test_the_predicted_curve_has_the_predicted_figures(two):
    line = curves(draw_stage(two[1]).axes[0])["predicted from the parts"]
    figures = two[1].result.figures
    highest = np.argmax(line.get_ydata())
    spacing = two[1].near[1] / two[1].near[0]
    # The greatest of a grid is within its spacing, there less than (Q spacing)^2 / 2 low.
    assert abs(np.log(line.get_xdata()[highest] / figures["centre"].predicted)) < np.log(spacing)
    low = 1 + 0.5 * (2 * figures["q"].predicted * np.log(spacing)) ** 2
    assert 0 <= dB(figures["gain"].predicted) - line.get_ydata()[highest] < dB(low)


def test_nothing_is_predicted_of_a_passive_stage(passive, two):
    assert "predicted from the parts" not in curves(draw_stage(passive).axes[0])
    assert two[0].predicted is not None


def test_lines_are_told_apart_without_colour(two):
    figure = draw_stage(two[0])
    drawn = curves(figure.axes[0])
    styles = {name: (line.get_linestyle(), line.get_marker(), line.get_linewidth()) for name, line in drawn.items()}
    assert len(set(styles.values())) == len(styles) == 4
    for line in drawn.values():
        assert len(set(to_rgb(line.get_color()))) == 1 or line.get_linestyle() == "None"
        assert len(set(to_rgb(line.get_markeredgecolor()))) == 1 or line.get_marker() == "None"
    words = [text.get_text() for text in figure.legends[0].get_texts()]
    assert words == ["within the limits", "designed", "predicted from the parts", "fitted", "measured"]


def test_the_mask_reaches_the_limits_of_gain_and_holds_a_sound_stage(two):
    figures = two[0].result.figures
    magnitude, phase = draw_stage(two[0]).axes[:2]
    corners = magnitude.collections[0].get_paths()[0].vertices
    assert np.isclose(corners[:, 1].max(), dB(figures["gain"].upper_limit), atol=1e-9)
    for axes in (magnitude, phase):
        mask = axes.collections[0].get_paths()[0]
        points = axes.lines[-1].get_xydata()
        assert len(points) == len(two[0].at)
        assert mask.contains_points(points).all()


def test_bars_are_two_standard_uncertainties_of_each_part(two):
    view = two[0]
    scale = 100 / view.result.figures["gain"].measured
    for axes, uncertainty in zip(draw_stage(view).axes[2:], (view.uncertainty, view.across), strict=True):
        assert axes.get_ylabel() == "% of gain"
        bars = axes.containers[0].lines[2][0].get_segments()
        assert np.allclose([bar[1, 1] - bar[0, 1] for bar in bars], 4 * scale * uncertainty, rtol=1e-12)


def test_uncertainty_along_and_across_is_that_of_draws(outcome):
    def stretched(point):
        return replace(point, covariance=(1e-6, 3e-7, 9e-6))

    run = replace(outcome.run, points=tuple(map(stretched, outcome.run.points)))
    view = views(run, outcome.stages)[0]
    point = next(p for p in run.points if p.stage == view.result.name and p.frequency == view.at[0])
    cloud = np.random.default_rng(3).multivariate_normal([0, 0], [[1e-6, 3e-7], [3e-7, 9e-6]], 20_000) @ [1, 1j]
    turned = cloud / (point.response / abs(point.response))
    # 4 standard errors of a standard deviation of 20 000 draws: 4/sqrt(40 000) = 2 %, and 1 % that the path changes
    assert np.isclose(turned.real.std(), view.uncertainty[0], rtol=0.03)
    assert np.isclose(turned.imag.std(), view.across[0], rtol=0.03)


def test_the_shaded_band_at_the_centre_is_that_of_the_gain(two):
    """At the greatest |H| neither f0 nor Q moves it, so its uncertainty is that of the gain by the same noise."""
    gain, centre = two[0].result.figures["gain"], two[0].result.figures["centre"]
    edge = draw_stage(two[0]).axes[2].collections[0].get_paths()[0].vertices
    at = edge[np.abs(np.log(edge[:, 0] / centre.measured)) < np.log(two[0].near[1] / two[0].near[0])]
    assert np.isclose(at[:, 1].max(), 200 * gain.repeatability / gain.measured, rtol=0.02)


def test_all_letters_are_large_enough_inside_and_apart(any_view):
    figure = draw_stage(any_view, "Talkback voice equalizer   serial TB-0001, attempt 1   low")
    renderer = FigureCanvasAgg(figure).get_renderer()
    figure.draw(renderer)
    words = [text for text in figure.findobj(Text) if text.get_visible() and text.get_text()]
    for axes in figure.axes:  # labels of ticks beyond the ends are there but not drawn
        for axis in (axes.xaxis, axes.yaxis):
            low, high = sorted(axis.get_view_interval())
            hidden = [tick for tick in axis.get_major_ticks() if not low <= tick.get_loc() <= high]
            gone = {id(label) for tick in hidden for label in (tick.label1, tick.label2)}
            words = [text for text in words if id(text) not in gone]
    assert min(text.get_fontsize() for text in words) >= 7.0
    boxes = {f"{number} {text.get_text()}": text.get_window_extent(renderer) for number, text in enumerate(words)}
    assert len(boxes) > 25
    (left, bottom), (right, top) = figure.bbox.get_points()
    outside = [name for name, b in boxes.items() if min(b.x0 - left, b.y0 - bottom, right - b.x1, top - b.y1) < 0.0]
    assert outside == []
    assert [pair for pair in combinations(boxes, 2) if boxes[pair[0]].overlaps(boxes[pair[1]])] == []


@pytest.mark.parametrize("count", [2, 12, 40])
def test_the_words_above_the_bands_of_a_report_end_within_its_width(two, count):
    views = [replace(v, result=replace(v.result, name=v.result.name + 20 * "x")) for v in many(two[0], count)]
    figure = draw_board(views)
    renderer = FigureCanvasAgg(figure).get_renderer()
    figure.draw(renderer)
    words = [text for text in figure.axes[0].findobj(Text) if text.get_text().startswith("line:")]
    assert len(words) == 1
    assert words[0].get_window_extent(renderer).x0 >= 0.0
    assert words[0].get_window_extent(renderer).x1 <= figure.bbox.x1


def test_a_stage_far_from_its_limits_shows_both(moved):
    magnitude = draw_stage(moved).axes[0]
    low, high = magnitude.get_xlim()
    assert low < moved.result.figures["centre"].lower_limit < moved.at.min() < moved.at.max() < high
    assert magnitude.get_ylim()[1] > dB(moved.result.figures["gain"].upper_limit)


def test_the_same_stage_gives_the_same_bytes(outcome, two):
    again = views(outcome.run, outcome.stages)[0]
    for kind in ("svg", "png"):
        assert image(draw_stage(two[0]), kind) == image(draw_stage(again), kind)


@pytest.mark.parametrize(
    ("low", "high", "labels"),
    [
        (2.2e3, 2.8e3, ["2.2 k", "2.4 k", "2.6 k", "2.8 k"]),
        (15.0, 1.1e3, ["20", "50", "100", "200", "500", "1 k"]),
        (140.0, 1.08e3, ["150", "200", "300", "400", "600", "800", "1 k"]),
        (0.9, 1.1e6, ["1", "10", "100", "1 k", "10 k", "100 k", "1 M"]),
    ],
)
def test_frequencies_have_round_labels(low, high, labels):
    axes = Figure().add_subplot()
    axes.set_xscale("log")
    ticks(axes, low, high)
    assert [label.get_text() for label in axes.get_xticklabels()] == labels
