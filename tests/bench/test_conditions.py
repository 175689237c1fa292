"""Who measured, in which room, and what the room does to a board's figures."""

import io
import sys
from dataclasses import replace
from math import sqrt

import pytest

from bandproof.bench.board_file import parse_board
from bandproof.bench.errors import FileMistakes
from bandproof.bench.evaluate import evaluate
from bandproof.bench.quantities import QuantityError, read_quantity
from bandproof.bench.runfile import read_run
from bandproof.bench.types import Temperature
from bandproof.bench.verbs.conditions import stated
from bandproof.bench.verbs.console import run

TABLE = '\n[temperature]\nreference = "23 °C"\ncoefficient = "100 ppm"\n'


class Keyboard(io.StringIO):
    """What somebody types at a terminal."""

    def isatty(self):
        return True


@pytest.mark.parametrize(
    ("typed", "options", "expected", "questions"),
    [
        ("Ann\n-4.5 °C\n", ("", None), ("Ann", -4.5), 2),
        ("\n\n", ("", None), ("", None), 2),
        ("", ("", None), ("", None), 2),  # the end of input: nobody there
        ("\n", ("Bo", None), ("Bo", None), 1),
        ("", ("Bo", "21 °C"), ("Bo", 21.0), 0),
    ],
)
def test_what_is_missing_is_asked_for_once_on_a_terminal(monkeypatch, capsys, typed, options, expected, questions):
    monkeypatch.setattr(sys, "stdin", Keyboard(typed))
    assert stated(*options) == expected
    out, err = capsys.readouterr()
    assert err.count("[Enter: not stated]") == questions
    assert not out


def test_without_a_terminal_nothing_is_asked(monkeypatch, capsys):
    monkeypatch.setattr(sys, "stdin", io.StringIO("Ann\n20 °C\n"))
    assert stated("", None) == ("", None)
    assert capsys.readouterr() == ("", "")


@pytest.mark.parametrize("ambient", ["23", "23 C", "warm", "23,5 °C", "73 °F"])
def test_a_temperature_that_is_none_is_exit_2(capsys, tmp_path, ambient):
    assert run(["rehearse", "--ambient", ambient, "--folder", str(tmp_path / "r")]) == 2
    assert f"--ambient '{ambient}'" in capsys.readouterr().err
    assert not (tmp_path / "r").exists()


@pytest.mark.parametrize(("text", "celsius"), [("23 °C", 23.0), ("-5.5 °C", -5.5), ("0 °C", 0.0), ("+3°C", 3.0)])
def test_temperatures_have_any_sign(text, celsius):
    assert read_quantity(text, "temperature") == celsius
    with pytest.raises(QuantityError, match="unknown unit 'V'"):
        read_quantity(text.replace("°C", "V"), "temperature")


def test_a_board_file_says_where_its_limits_hold(one_band_text):
    head, stages = one_band_text.split("\n[stages.")
    table = TABLE.replace('"23 °C"', '"-10 °C"')
    board = parse_board(head + table + "\n[stages." + stages, "b")
    assert board.temperature == Temperature(-10.0, 100e-6)
    assert parse_board(one_band_text, "b").temperature is None
    bad = TABLE.replace('"23 °C"', '"23 V"').replace('"100 ppm"', '"-1 %"') + 'coeficient = "1 %"\n'
    with pytest.raises(FileMistakes) as found:
        parse_board(head + bad + "\n[stages." + stages, "b")
    assert [text.split(":")[0] for text in found.value.findings] == [
        "temperature.reference",
        "temperature.coefficient",
        "temperature.coeficient",
    ]


@pytest.fixture(scope="module")
def rehearsed(one_band_text, tmp_path_factory):
    """A run of a board that states its temperature, in a room at 26 °C."""
    folder = tmp_path_factory.mktemp("warm")
    head, stages = one_band_text.split("\n[stages.")
    (folder / "warm.board.toml").write_text(head + TABLE + "\n[stages." + stages)
    arguments = ["rehearse", str(folder / "warm.board.toml"), "--ambient", "26 °C", "--folder", str(folder)]
    assert run(arguments) == 0
    return read_run(folder / "rehearsal-1" / "1" / "run.h5")


def row(kept):
    """Return the row "temperature" of each figure's budget."""
    (stage,) = evaluate(kept)
    return {
        name: next(row for row in budget.rows if row.name == "temperature") for name, budget in stage.budgets.items()
    }


@pytest.mark.parametrize(
    ("ambient", "away"), [(26.0, 4.0), (23.0, 1.0), (-7.0, 31.0), (None, 15.0)]
)  # K: |T - reference| + 1, or 15 where nobody said
def test_the_room_counts_in_f0_as_a_uniform_error(rehearsed, ambient, away):
    """JCGM 100, 4.3.7: a uniform distribution of half-width a has the standard uncertainty a/√3."""
    found = row(replace(rehearsed, ambient=ambient))
    (stage,) = evaluate(rehearsed)
    f0 = stage.figures["centre"].measured
    assert found["centre"].contribution == pytest.approx(100e-6 * away / sqrt(3) * f0, rel=1e-6)
    assert found["centre"].distribution == "uniform"
    assert found["q"].contribution == found["gain"].contribution == 0.0
    assert found["q"].reason.startswith("0, because")
    assert ("not stated" in found["centre"].reason) == (ambient is None)


def test_a_board_without_a_temperature_says_why_the_row_is_zero(rehearsed):
    found = row(replace(rehearsed, board=replace(rehearsed.board, temperature=None)))
    assert found["centre"].contribution == 0.0
    assert found["centre"].reason == "0, because the board file names no temperature that its limits hold at"


def test_a_rehearsal_states_only_what_it_is_told(rehearsed, outcome):
    assert rehearsed.ambient == 26.0
    assert rehearsed.operator == "not stated"
    assert outcome.run.ambient is None
