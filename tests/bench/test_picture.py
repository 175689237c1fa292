"""The picture of a run: the same bytes for the same run, and drawn whatever was concluded. Warnings are errors here."""

import math
import re
from dataclasses import replace

import numpy as np
import pytest

from bandproof.bench.evaluate import views
from bandproof.bench.picture import draw, save


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


def test_a_png_is_written_by_its_ending(two, tmp_path):
    save(draw(two, "title"), tmp_path / "picture.png")
    assert (tmp_path / "picture.png").read_bytes().startswith(b"\x89PNG\r\n")
