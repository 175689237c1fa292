"""The report: what a reader must find is in the text of its pages, as written, and the same run gives the same bytes.

The text is read back by an independent reader of PDF (pypdf).
"""

import builtins
import hashlib
import io
import json
import math
import re
from dataclasses import replace
from importlib import resources

import pypdf
import pytest
from matplotlib.text import Text

from bandproof.bench.documents import cells
from bandproof.bench.documents.bench_content import bench_content
from bandproof.bench.documents.content import content, draw_board, worst_figure
from bandproof.bench.documents.report import NoReport, report_bytes
from bandproof.bench.documents.side_by_side import draw_both
from bandproof.bench.documents.stage_picture import draw_stage
from bandproof.bench.documents.stored import read_stored
from bandproof.bench.evaluate import views
from bandproof.bench.runfile import digest_of
from bandproof.bench.types import Suspect
from bandproof.bench.verbs import console

EVIL = '#[evil] $x$ "quoted" \\ *bold* _it_ -- <label> @ref // ~ `raw` #sys.version'


@pytest.fixture(scope="module")
def stored(outcome):
    return read_stored(outcome.folder / "run.h5")


def document(stored, *, run=None, stages=None, result=None, drawn=()):
    """Return a report, without pictures unless there are some to draw: most tests read words."""
    run, stages = run or stored.run, stored.stages if stages is None else stages
    return report_bytes(run, stages, result or stored.result, stored.digest, drawn, stored.link)


def pages(pdf):
    """Return the text of every page, words apart by one space."""
    reader = pypdf.PdfReader(io.BytesIO(pdf))
    return [" ".join(page.extract_text().split()) for page in reader.pages]


@pytest.fixture(scope="module")
def whole(stored):
    return document(stored, drawn=views(stored.run, stored.stages))


@pytest.fixture(scope="module")
def text(whole):
    return pages(whole)


def test_page_one_says_what_the_hurried_need(text, stored):
    first, run = text[0], stored.run
    assert "PASS" in first
    for wanted in (run.board.title, run.board.drawing, f"revision {run.board.revision}", run.serial, run.bench.title):
        assert wanted in first
    assert "attempt 1" in first
    assert "2026-01-01 00:00:00 UTC" in first  # the fixed epoch of a rehearsal
    assert "ambient temperature not stated" in first
    assert "'quoted' \"twice\"" in first


def test_page_one_has_every_figure_with_its_limits_and_rule(text, stored):
    for stage in stored.stages:
        for figure in stage.figures.values():
            wanted = [cells.measured(figure), cells.deviation(figure), cells.limits(figure), figure.rule, "pass"]
            assert " ".join(wanted) in text[0]


def test_worst_figure_and_its_uncertainty_are_told(text, stored):
    # Recomputed here from the definition: the share of the room between design and limit that the deviation uses.
    # Gain is compared in decibels, as its limits are written (20 lg of a ratio of voltages, IEC 60027-3).
    def share(figure):
        scale = (lambda ratio: 20 * math.log10(ratio)) if figure.quantity == "gain" else float
        edge = scale(figure.upper_limit if figure.measured > figure.designed else figure.lower_limit)
        return (scale(figure.measured) - scale(figure.designed)) / (edge - scale(figure.designed))

    named = [(share(f), stage.name, f) for stage in stored.stages for f in stage.figures.values()]
    most, band, figure = max(named, key=lambda entry: entry[0])
    assert worst_figure(stored.stages) == (band, figure)
    assert f"Worst figure: {band} {cells.SYMBOLS[figure.quantity]}, {cells.measured(figure)}" in text[0]
    assert f"closest to a limit, uses {100 * most:.0f} % of its tolerance" in text[0]
    assert f"(limits {cells.limits(figure)}, rule {figure.rule})" in text[0]


def test_a_figure_outside_its_limits_is_told_by_how_much(stored):
    low = stored.stages[0]
    q = replace(low.figures["q"], measured=1.5 + 3.5 * 0.09, verdict="fail")  # designed 1.5, tolerance 6 %: 0.09
    said = pages(document(stored, stages=[replace(low, figures=low.figures | {"q": q}, verdict="fail")]))
    assert f"low Q, {cells.measured(q)}, farthest outside its limits, 3.5 times its tolerance from design" in said[0]


def test_place_and_calibration_are_told_as_the_bench_file_states_them(stored):
    bench = stored.run.bench
    scope = replace(bench.instruments["scope"], calibrated="2026-05-01")
    bench = replace(bench, place="test room 2", instruments={**bench.instruments, "scope": scope})
    said = pages(document(stored, run=replace(stored.run, bench=bench)))
    assert "Where test room 2; Simulated bench; ambient temperature not stated" in said[0]
    identities = stored.run.identities
    assert f"scope {identities['scope']} 2026-05-01" in said[-1]
    assert f"generator {identities['generator']} not stated" in said[-1]


def test_a_page_for_each_band_with_its_whole_budget(text, stored):
    for stage, page in zip(stored.stages, text[1:], strict=False):
        assert f"Band {stage.name}: pass" in page
        for row in stage.budgets["q"].rows:
            assert row.name in page
        assert f"{100 * stage.budgets['q'].expanded / stage.figures['q'].measured:.4f}" in page


def test_budget_begins_with_what_dominates(stored):
    told = content(stored.run, stored.stages, stored.result, stored.digest, stored.views)
    for stage, said in zip(stored.stages, told["stages"], strict=True):
        shares = {
            row["name"]: max(
                next(r.contribution for r in budget.rows if r.name == row["name"]) / budget.u
                for budget in stage.budgets.values()
            )
            for row in said["budget"]["rows"]
        }
        assert list(shares.values()) == sorted(shares.values(), reverse=True)
        assert len(shares) == len(stage.budgets["q"].rows)


def test_last_page_has_instruments_digest_and_words(text, stored):
    last = text[-1]
    for role, identity in stored.run.identities.items():
        assert identity in last
        assert stored.run.bench.instruments[role].dialect in last
    assert digest_of(stored.path) in last
    assert stored.link == (stored.path.parents[2] / "chain.txt").read_text().split()[-1]
    assert f"link after this run {stored.link}" in last
    assert f"bandproof {stored.run.version}" in last
    assert "measured in this run" in last
    assert "95.45 %" in last
    assert cells.rule_meaning("simple") in last
    assert "20 ppm declared" in last  # simulated.bench.toml: frequency_accuracy


def test_every_page_is_numbered_and_names_the_serial(text, stored):
    for number, page in enumerate(text, 1):
        assert f"serial {stored.run.serial}" in page
        assert f"page {number} of {len(text)}" in page


def test_what_a_person_wrote_comes_out_as_written(stored):
    run = stored.run
    board = replace(run.board, title=EVIL, drawing=EVIL)
    said = pages(document(stored, run=replace(run, board=board, note=EVIL, operator=EVIL, alarms=(EVIL,))))
    assert said[0].count(EVIL) == 5  # title, drawing, operator, note, caution


def test_a_long_word_stays_on_the_page(stored):
    word = "W" * 300
    said = document(stored, run=replace(stored.run, note=word))
    page = pypdf.PdfReader(io.BytesIO(said)).pages[0]
    lines = page.extract_text().splitlines()
    lengths = [line.count("W") for line in lines if "WWW" in line]
    assert sum(lengths) == 300
    # A4 less both margins is 174 mm = 493 pt; a W of a serif type takes about its size, 9.5 pt, and no less than half
    assert max(lengths) < 493 / (9.5 / 2)


def test_same_run_same_bytes_and_from_the_file_too(whole, stored, outcome):
    assert document(stored, drawn=stored.views) == whole
    assert (outcome.folder / "report.pdf").read_bytes() == whole


def test_dates_inside_are_the_run_s_own(stored):
    about = pypdf.PdfReader(io.BytesIO(document(stored))).metadata
    assert about.creation_date.isoformat() == stored.run.started
    assert about.modification_date.isoformat() == stored.run.started


def test_only_fonts_that_come_along_and_all_embedded(stored):
    reader = pypdf.PdfReader(io.BytesIO(document(stored)))
    names = set()
    for page in reader.pages:
        for font in page["/Resources"]["/Font"].values():
            inner = font.get_object()["/DescendantFonts"][0].get_object()
            assert set(inner["/FontDescriptor"].get_object()) & {"/FontFile2", "/FontFile3"}
            names.add(re.sub(r"^/[A-Z]{6}\+|-.*", "", inner["/BaseFont"]))
    assert names <= {"LibertinusSerif", "DejaVuSansMono"}


def test_no_letter_is_smaller_than_seven_points(whole):
    """ISO 32000-1, 9.3: the size of a letter is that of its font times the text matrix's scale."""
    template = (resources.files("bandproof.bench.documents") / "style.typ").read_text()
    sizes = [float(size) for size in re.findall(r"(?:size:|small =|body =|table-size =) ?([\d.]+)pt", template)]
    assert min(sizes) >= 7.0
    found = []
    for page in pypdf.PdfReader(io.BytesIO(whole)).pages:
        page.extract_text(
            visitor_text=lambda text, now, matrix, font, size: (
                found.append(size * abs(matrix[3] * now[3])) if text.strip() else None
            )
        )
    assert min(found) >= 7.0


def test_no_letter_in_a_picture_is_smaller_than_seven_points(stored):
    """Pictures are as wide as the text, 174 mm of an A4 page, or narrower: they are not shown smaller than drawn."""
    _, _, drawn = many(stored, 30)
    for figure in (
        draw_stage(drawn[0]),
        draw_board(stored.views),
        draw_board(drawn),
        draw_both(stored.views, stored.views),
        draw_both(drawn, drawn[1:]),
    ):
        assert figure.get_figwidth() * 25.4 == pytest.approx(174.0, abs=0.1)
        figure.draw_without_rendering()
        sizes = [text.get_fontsize() for text in figure.findobj(Text) if text.get_visible() and text.get_text()]
        assert len(sizes) > 10
        assert min(sizes) >= 7.0


def test_a_letter_that_no_font_has_is_no_obstacle(stored):
    said = pages(document(stored, run=replace(stored.run, note="雷 after")))
    assert "after" in said[0]
    assert "shown as boxes" in said[0]


def test_failing_and_lost_figures_come_out(stored):
    low, other = stored.stages
    figures = {name: replace(figure, measured=math.nan) for name, figure in other.figures.items()}
    lost = replace(other, figures=figures, verdict="undecided", theta=(), budgets={}, status="only 1 usable points")
    wrong = {**low.figures, "q": replace(low.figures["q"], measured=3.0, verdict="fail")}
    hint = Suspect("low: R_shunt reads like 3.4 kΩ", "part", ("R_shunt",), 3.4e3, 20.0)
    failed = replace(low, figures=wrong, verdict="fail", suspects=(hint,))
    said = pages(document(stored, stages=[failed, lost]))
    assert said[0].count("FAIL") == 2  # the board's word and the figure's
    assert f"Not found: {lost.name} f0, {lost.name} Q, {lost.name} gain." in said[0]
    assert hint.text in said[0]
    assert hint.text in said[1]
    assert "No fit: only 1 usable points" in said[2]
    assert "The run file says pass" in said[0]


def test_a_run_that_was_cut_short_has_no_verdict(stored):
    cut = replace(stored.run, ended="cut_short", reason="the scope fell silent")
    said = pages(document(stored, run=cut, stages=stored.stages[:1]))
    assert f"Not measured: {stored.stages[1].name}." in said[0]
    assert "NO VERDICT" in said[0]
    assert "PASS" not in said[0]
    assert "cut short: the scope fell silent. Not measured:" in said[0]
    assert "Worst figure of those measured:" in said[0]
    assert said[0].count("not measured – ") == 3  # figures of the band that was not reached, with their limits
    for figure in stored.stages[1].figures.values():
        assert f"not measured – {cells.limits(figure)} {figure.rule} none" in said[0]
    assert "none, NO VERDICT" in said[-1]


def many(stored, count):
    """Return a run of a board of many bands, an octave's tenth apart, made of the first one."""
    first, view, board = stored.stages[0], stored.views[0], stored.run.board
    asked, stages, drawn = [], [], []
    for number in range(count):
        factor, name = 1.07**number, f"a band with a long name, number {number}"
        figures = dict(first.figures)
        names = ("designed", "predicted", "measured", "lower_limit", "upper_limit", "expanded_uncertainty")
        figures["centre"] = replace(
            figures["centre"], **{key: factor * getattr(figures["centre"], key) for key in names}
        )
        theta = (first.theta[0] + math.log(factor), *first.theta[1:])
        stages.append(replace(first, name=name, figures=figures, theta=theta))
        drawn.append(replace(view, result=stages[-1], frequency=view.frequency * factor, at=view.at * factor))
        asked.append(replace(board.stages[0], name=name))
    return replace(stored.run, board=replace(board, stages=tuple(asked))), stages, drawn


def test_a_board_of_twelve_bands(stored):
    run, stages, drawn = many(stored, 12)
    said = pages(document(stored, run=run, stages=stages, drawn=drawn))
    assert sum(" ".join(f"Band {stage.name}: pass".split()) in page for stage in stages for page in said) == 12
    table = " ".join(said)
    for stage in stages:
        assert cells.measured(stage.figures["centre"]) in table


def test_a_table_over_two_pages_repeats_its_heading(stored):
    run, stages, _ = many(stored, 30)
    said = pages(document(stored, run=run, stages=stages))
    first_band = next(number for number, page in enumerate(said) if "Band a band" in page)
    assert first_band >= 2
    for page in said[:first_band]:
        assert "band figure designed measured ± U deviation limits rule verdict" in page


def test_a_band_s_rows_are_on_one_page(stored):
    run, stages, _ = many(stored, 30)
    for lines in range(3):  # three rows a band: one of these would end the page within a band
        said = pages(document(stored, run=replace(run, alarms=("told",) * lines), stages=stages))
        assert "Band a band" not in said[1]
        assert said[1].partition("rule verdict ")[2].startswith("f0 ")


def test_a_name_of_sixty_letters_is_on_the_page_whole(stored):
    name = "low_side_of_the_speech_band_as_drawn_on_sheet_4_revision_C_x"
    assert len(name) == 60
    board = replace(stored.run.board, stages=(replace(stored.run.board.stages[0], name=name),))
    run, stage = replace(stored.run, board=board), replace(stored.stages[0], name=name)
    said = pages(document(stored, run=run, stages=[stage], drawn=[replace(stored.views[0], result=stage)]))
    assert name in said[0].replace(" ", "")
    assert f"Band{name}:pass" in said[1].replace(" ", "")


def test_typst_missing_is_told_and_the_run_is_kept(stored, monkeypatch, tmp_path, capsys):
    known = builtins.__import__

    def without(name, *rest, **more):
        if name == "typst":
            raise ImportError("no typst here")
        return known(name, *rest, **more)

    monkeypatch.setattr(builtins, "__import__", without)
    with pytest.raises(NoReport, match="pip install typst"):
        document(stored)
    assert console.run(["report", str(stored.path), "--out", str(tmp_path / "r.pdf")]) == 2
    assert "no report was written" in capsys.readouterr().err
    assert not list(tmp_path.iterdir())


@pytest.fixture(scope="module")
def two_bands(two_band_path):
    return str(two_band_path)


def test_rehearse_without_typst_keeps_run_and_exit_code(two_bands, monkeypatch, tmp_path, capsys):
    known = builtins.__import__

    def without(name, *rest, **more):
        if name == "typst":
            raise ImportError("no typst here")
        return known(name, *rest, **more)

    monkeypatch.setattr(builtins, "__import__", without)
    assert console.run(["rehearse", two_bands, "--folder", str(tmp_path), "--json"]) == 0
    result = json.loads(capsys.readouterr().out)
    assert result["files"]["report"] is None
    assert any("no report.pdf" in alarm and "pip install typst" in alarm for alarm in result["alarms"])
    assert read_stored(tmp_path / "rehearsal-1" / "1" / "run.h5").run.ended == "complete"


def test_the_verb_writes_what_the_job_wrote(stored, outcome, tmp_path, capsys):
    path = tmp_path / "other.pdf"
    assert console.run(["report", str(stored.path), "--out", str(path)]) == 0
    assert str(path) in capsys.readouterr().out
    assert path.read_bytes() == (outcome.folder / "report.pdf").read_bytes()


def test_a_damaged_run_has_no_report(stored, tmp_path, capsys):
    content = bytearray(stored.path.read_bytes())
    content[-1] ^= 1
    (tmp_path / "run.h5").write_bytes(content)
    assert console.run(["report", str(tmp_path / "run.h5")]) == 2
    assert "damaged" in capsys.readouterr().err
    assert not (tmp_path / "report.pdf").exists()


@pytest.mark.parametrize(
    ("rule", "words"),
    [
        ("guarded 0.5", "drawn in by 0.5 U"),
        ("risk 2 %", "outside the limits is 2 % at most"),
        ("simple", "U does not shift the limits"),
    ],
)
def test_a_rule_is_explained(rule, words):
    assert words in cells.rule_meaning(rule)


def test_gain_is_in_decibels(stored):
    # 20 lg by definition (IEC 60027-3); the numbers by hand: 20 lg 3.1623 = 10.000, 20 lg 1.01 = 0.0864
    gain = replace(stored.stages[0].figures["gain"], measured=3.16228, expanded_uncertainty=0.0316228)
    assert cells.measured(gain) == "10.000 ± 0.087 dB"


def test_the_worst_figure_s_share_follows_from_what_the_page_shows(stored):
    # By hand: -15.13 dB of deviation over a tolerance of 1 dB are 15.1; as ratios they would be 0.83 of 0.11: 7.6.
    low = stored.stages[0]
    gain = replace(low.figures["gain"], measured=low.figures["gain"].designed * 10 ** (-15.13 / 20), verdict="fail")
    failed = replace(low, figures={**low.figures, "gain": gain}, verdict="fail")
    said = pages(document(stored, stages=[failed, stored.stages[1]]))[0]
    assert "-15.13 dB 9 to 11 dB" in said
    assert "Worst figure: low gain" in said
    assert "15.1 times its tolerance from design" in said


def guarded(stored, quantity, **values):
    """Return the first stage with one figure undecided under a guard band of 1 U."""
    low = stored.stages[0]
    figure = replace(low.figures[quantity], rule="guarded 1", verdict="undecided", **values)
    return replace(low, figures={**low.figures, quantity: figure}, verdict="undecided")


def test_an_undecided_figure_says_where_it_would_pass_and_fail(stored):
    # By hand: limit 1.41, U 0.02, so 1.43 and 1.39 (ISO 14253-1: limits drawn in and widened by U).
    stage = guarded(stored, "q", measured=1.42, expanded_uncertainty=0.02, conformance_probability=0.84)
    said = pages(document(stored, stages=[stage, stored.stages[1]]))
    told = "low Q 1.420 ± 0.020 is within 1 U of its limit 1.41: passes from 1.430, fails below 1.390."
    assert f"Undecided: {told}" in said[0]
    assert f"Undecided: {told}" in said[1]
    high = guarded(stored, "q", measured=1.58, expanded_uncertainty=0.02, conformance_probability=0.84)
    assert cells.why_undecided(high.figures["q"]).endswith("1.59: passes up to 1.570, fails above 1.610")
    wide = guarded(stored, "q", measured=1.5, expanded_uncertainty=0.1, conformance_probability=0.84)
    assert "passes nowhere" in cells.why_undecided(wide.figures["q"])


def test_an_undecided_gain_is_told_in_decibels(stored):
    # By hand: 10^(9/20) = 2.81838; U of 1 % of 2.83 is 0.0283: 20 lg 2.84668 = 9.087, 20 lg 2.79008 = 8.912.
    stage = guarded(stored, "gain", measured=2.83, expanded_uncertainty=0.0283, conformance_probability=0.8)
    why = cells.why_undecided(stage.figures["gain"])
    assert why == "is within 1 U of its limit 9 dB: passes from 9.087 dB, fails below 8.912 dB"


def test_an_undecided_figure_by_risk_or_doubt_is_told(stored):
    figure = replace(stored.stages[0].figures["q"], verdict="undecided", rule="risk 2 %", conformance_probability=0.9)
    assert cells.why_undecided(figure).endswith("probability of 90 %: passes from 98 %, fails up to 2 %")
    assert "doubted" in cells.why_undecided(replace(figure, conformance_probability=math.nan))


def test_digests_and_addresses_are_in_the_text_layer_as_a_tool_prints_them(stored):
    """A copied digest must equal what sha256sum prints: no invisible letters, no line broken within it."""
    run = stored.run
    address = "TCPIP::bench-scope-2.laboratory.example.org::5025::SOCKET"
    scope = replace(run.bench.instruments["scope"], address=address)
    moved = replace(run, bench=replace(run.bench, instruments={**run.bench.instruments, "scope": scope}))
    attempts = [{"attempt": 1, "verdict": "fail", "pooled": False, "digest": "0123456789abcdef" * 4}]
    for whose, result in ((run, stored.result), (moved, {**stored.result, "attempts": attempts})):
        reader = pypdf.PdfReader(io.BytesIO(document(stored, run=whose, result=result)))
        last = "\n".join(page.extract_text() for page in reader.pages)
        assert not re.search("[\u00ad\u200b-\u200f\u2060\ufeff]", last)
        wanted = [stored.digest, stored.link, *(text for _, text in bench_content(whose)["texts"])]
        wanted += [entry["digest"] for entry in result["attempts"] or () if entry["digest"]]
        assert all(len(text) == 64 for text in wanted)
        assert len(wanted) >= 5
        assert [text for text in wanted if text not in last] == []
        addresses = [instrument.address for instrument in whose.bench.instruments.values()]
        assert [text for text in addresses if text not in last.replace("\n", "")] == []
        assert run.bench.instruments["generator"].address in last


def test_every_head_has_the_first_eight_digits_of_the_run_file(text, stored):
    for page in text:
        assert f"run file {stored.digest[:8]}…" in page


def test_the_last_page_says_how_to_check_and_it_is_true(text, stored):
    """`tail -c +513` prints from the 513th byte on (POSIX tail)."""
    assert "tail -c +513 run.h5 | sha256sum" in text[-1]
    content = stored.path.read_bytes()
    assert hashlib.sha256(content[512:]).hexdigest() == stored.digest
    assert stored.digest.encode() in content[:512]


def test_a_rehearsal_is_told_on_page_one(stored):
    assert "Simulated instruments: this was a rehearsal" in pages(document(stored))[0]
    real = replace(stored.run, identities=dict.fromkeys(stored.run.identities, "MAKER,G1,17,2.0"))
    assert "Simulated instruments" not in pages(document(stored, run=real))[0]


def test_cautions_come_by_their_weight_once_and_with_their_band(stored):
    low, other = stored.stages
    figures = {name: replace(figure, measured=math.nan, verdict=None) for name, figure in other.figures.items()}
    lost = replace(
        other, figures=figures, theta=(), status="no usable points", alarms=(f"{other.name}: no usable points",)
    )
    alarms = ("low: the record at 150 Hz had not settled", "low: a wrong tap", "low: a wrong tap")
    said = pages(document(stored, run=replace(stored.run, alarms=alarms), stages=[low, lost]))
    places = [
        said[0].index(text) for text in (f"{other.name}: no usable points", "low: a wrong tap", "had not settled")
    ]
    assert places == sorted(places)
    assert said[0].count("low: a wrong tap") == 1
    assert "the record at 150 Hz had not settled • a wrong tap" in said[1]
    assert said[2].count("no usable points") == 1
