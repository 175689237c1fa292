"""Two runs of one board on a page: every figure with both values, what changed and by how many U, what was repaired.

The text is read back by an independent reader of PDF (pypdf).
"""

import io
import math
import re
from dataclasses import replace

import pypdf
import pytest

from bandproof.bench.attempts import REPAIRS
from bandproof.bench.circuit import draw_parts
from bandproof.bench.documents import cells
from bandproof.bench.documents.side_by_side import (
    change,
    change_in_U,
    draw_both,
    in_order,
    read_side,
    side_by_side_bytes,
)
from bandproof.bench.errors import BadInput
from bandproof.bench.evaluate import views
from bandproof.bench.job import Job
from bandproof.bench.operator import Absent
from bandproof.bench.picture import as_svg
from bandproof.bench.rehearsal import rehearsal_bench
from bandproof.bench.stop import Stop
from bandproof.bench.verbs import console
from bandproof.bench.verbs.rehearse import simulated, world_of

REPAIR = "R_shunt of band low was #[3.4 kΩ], 34 kΩ fitted"


@pytest.fixture(scope="module")
def paths(outcome, tmp_path_factory):
    """Two attempts on one serial number: a wrong part in the first, repaired before the second."""
    place = tmp_path_factory.mktemp("pair") / "TB-0011"
    for number in ("1", "2"):
        (place / number).mkdir(parents=True)
    board = outcome.run.board
    bench = rehearsal_bench(board)
    parts = draw_parts(board, 11)
    parts["low"]["R_shunt"] /= 10.0
    with simulated(world_of(board, bench, parts, 11, 1), bench) as (reachable, clock):
        Job(
            board=board,
            bench=reachable,
            serial="TB-0011",
            attempt=1,
            run_id="ten",
            folder=place / "1",
            clock=clock,
            operator=Absent(),
            stop=Stop(),
            progress=lambda *_: None,
            note="before it was repaired",
        ).carry_out()
    second = read_side(outcome.folder / "run.h5")
    (place / "2" / "run.h5").write_bytes(second.path.read_bytes())
    (place / REPAIRS).write_text(f"2026-01-01T08:00:00+00:00\tafter attempt 1\tA. Example\t{REPAIR}\n")
    return place / "1" / "run.h5", place / "2" / "run.h5"


@pytest.fixture(scope="module")
def pair(paths):
    before, after = (read_side(path) for path in paths)
    return before, replace(after, run=replace(after.run, attempt=2))


@pytest.fixture(scope="module")
def document(pair):
    return side_by_side_bytes(*pair)


def text_of(pdf):
    """Return the text of every page, words apart by one space."""
    reader = pypdf.PdfReader(io.BytesIO(pdf))
    return [" ".join(page.extract_text().replace("\u200b", "").split()) for page in reader.pages]


def test_one_page_has_every_figure_of_both_runs_and_its_change(document, pair):
    (page,) = text_of(document)
    before, after = pair
    for first, second in zip(before.stages, after.stages, strict=True):
        for quantity, figure in first.figures.items():
            last = second.figures[quantity]
            wanted = [cells.designed(last), cells.measured(figure), cells.measured(last), change(figure, last)]
            wanted += [f"{change_in_U(figure, last):+.1f}", cells.WORDS[figure.verdict], cells.WORDS[last.verdict]]
            assert " ".join(wanted) in page
    assert "FAIL pass" in page


def test_the_page_says_of_each_run_when_which_and_why(document, pair):
    (page,) = text_of(document)
    for side in pair:
        assert side.digest in page.replace(" ", "")
    assert "Attempt 1 2" in page
    assert "Measured 2026-01-01 00:00:00 UTC 2026-01-01 00:00:00 UTC" in page  # the fixed epoch of a rehearsal
    assert "Verdict FAIL pass" in page
    assert f"{REPAIR} (2026-01-01, A. Example)" in page
    assert "before it was repaired" in page
    assert "Suspect before: low: R_shunt reads like 3.4 kΩ" in page


def test_change_in_U_is_over_both_added_in_squares(pair):
    # E_n of ISO 13528 and ISO/IEC 17043 (from memory): (x - X) / sqrt(U(x)² + U(X)²)
    figure, last = (side.stages[0].figures["centre"] for side in pair)
    sizes = figure.expanded_uncertainty, last.expanded_uncertainty
    wanted = (last.measured - figure.measured) / math.sqrt(sizes[0] ** 2 + sizes[1] ** 2)
    assert change_in_U(figure, last) == pytest.approx(wanted, rel=1e-12)
    assert wanted < -100.0  # 3.4 kΩ for 34 kΩ: f0 falls by half when it is mended


def test_a_change_is_in_per_cent_and_of_gain_in_decibels(pair):
    q, gain = (pair[1].stages[0].figures[name] for name in ("q", "gain"))
    assert change(q, replace(q, measured=1.02 * q.measured)) == "+2.00 %"
    assert change(gain, replace(gain, measured=1.1 * gain.measured)) == "+0.83 dB"  # 20 lg 1.1 = 0.828 by hand
    assert change(q, replace(q, measured=math.nan)) == "–"


def test_a_retest_is_told_with_its_reason_and_what_both_attempts_give(pair):
    before, after = pair
    known = {"attempt": 1, "digest": before.digest, "verdict": "fail", "pooled": True}
    own = {"attempt": 2, "digest": None, "verdict": "pass", "pooled": True, "reason": "a clip had come off"}
    result = {**after.result, "verdict": "undecided", "attempts": [known, own]}
    (page,) = text_of(side_by_side_bytes(before, replace(after, result=result)))
    assert "pass by itself; attempts 1, 2 together: undecided" in page
    assert "a clip had come off" in page


def test_a_stage_that_one_run_never_reached_is_told(pair):
    before, after = pair
    cut = replace(before, stages=before.stages[:1], run=replace(before.run, ended="cut_short", reason="it rained"))
    (page,) = text_of(side_by_side_bytes(cut, after))
    assert page.count("not measured") == 3
    assert "none, cut short: it rained" in page


def test_the_earlier_run_comes_first_whichever_is_named(pair):
    before, after = pair
    assert in_order(before, after) == in_order(after, before) == (before, after)
    later = replace(before, run=replace(before.run, started="2027-01-01T00:00:00+00:00", attempt=1))
    assert in_order(later, after) == (after, later)


def test_same_runs_same_bytes(document, pair):
    assert side_by_side_bytes(*pair) == document


def test_the_picture_is_without_colour_and_has_two_kinds_of_line(pair):
    drawn = [views(side.run, side.stages) for side in pair]
    picture = as_svg(draw_both(*drawn))
    colours = re.findall(r"#([0-9a-f]{2})([0-9a-f]{2})([0-9a-f]{2})\b", picture)
    assert colours
    assert all(red == green == blue for red, green, blue in colours)
    curves = [path for path in re.findall(r"<path d=[^>]*?/>", picture, re.DOTALL) if "stroke-width" in path]
    assert sum("stroke-dasharray" in path for path in curves) == sum(len(side.stages) for side in pair[:1])


def test_no_letter_is_smaller_than_seven_points(document):
    found = []
    for page in pypdf.PdfReader(io.BytesIO(document)).pages:
        page.extract_text(
            visitor_text=lambda text, now, matrix, font, size: (
                found.append(size * abs(matrix[3] * now[3])) if text.strip() else None
            )
        )
    assert min(found) >= 7.0


def test_the_verb_writes_it_beside_the_later_run(paths, capsys):
    first, second = paths
    assert console.run(["report", str(second), "--with", str(first)]) == 0
    (made,) = first.parents[1].glob("*/attempts*.pdf")
    assert str(made) in capsys.readouterr().out
    content = made.read_bytes()
    made.unlink()
    assert console.run(["report", str(first), "--with", str(second), "--out", str(made)]) == 0
    assert made.read_bytes() == content


@pytest.mark.parametrize(
    ("changed", "words"),
    [
        ({"serial": "TB-0012"}, "is of TB-0011, "),
        ({"board": None}, "not of one board: stages that only one has: body"),
    ],
)
def test_runs_of_different_boards_are_refused(pair, changed, words):
    before, after = pair
    board = replace(after.run.board, stages=after.run.board.stages[:1])
    facts = {name: value or board for name, value in changed.items()}
    with pytest.raises(BadInput, match=re.escape(words)) as refused:
        in_order(before, replace(after, run=replace(after.run, **facts)))
    assert "\n" not in str(refused.value)


def test_a_run_with_itself_is_refused_and_nothing_written(paths, tmp_path, capsys):
    out = tmp_path / "r.pdf"
    assert console.run(["report", str(paths[0]), "--with", str(paths[0]), "--out", str(out)]) == 2
    assert "are the same run" in capsys.readouterr().err
    assert console.run(["report", str(paths[0]), "--with", str(paths[1]), "--data", str(tmp_path / "d")]) == 2
    assert "leave --data and --pictures out" in capsys.readouterr().err
    assert not list(tmp_path.iterdir())


def test_a_damaged_other_run_is_refused(paths, tmp_path, capsys):
    content = bytearray(paths[1].read_bytes())
    content[-1] ^= 1
    (tmp_path / "run.h5").write_bytes(content)
    assert console.run(["report", str(paths[0]), "--with", str(tmp_path / "run.h5")]) == 2
    assert "damaged" in capsys.readouterr().err
