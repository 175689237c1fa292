"""The order of a run with a supply: off, on, current in its window, then and only then a signal; off at the end."""

from dataclasses import replace

import pytest

from bandproof.bench.board_file import parse_board
from bandproof.bench.errors import BenchFault, FileMistakes
from bandproof.bench.rehearsal import DEMO_BOARD, demo_text
from bandproof.bench.verbs.console import run

SUPPLY = """
[supply]
positive = "12 V"
negative = "12 V"
current_limit = "60 mA"
least_current = "3 mA"
most_current = "9 mA"
"""


def text(supply=SUPPLY):
    return demo_text(DEMO_BOARD).split("[stages.body]")[0] + supply


@pytest.fixture(scope="module")
def powered():
    """The demo board's lowest stage on the bench's supply."""
    return parse_board(text(), "powered.board.toml")


def messages(path):
    return [line.split(" ", 4)[-1] for line in path.read_text().splitlines() if " > " in line]


def test_the_supply_is_switched_before_any_signal_and_off_after_the_generator(swept, powered, tmp_path):
    board = swept(1, board=powered, log=tmp_path / "log", prepare=True)
    assert board.problem is None
    assert [p.purpose for p in board.journal.points].count("closing") == 1
    sent = [message for message in messages(tmp_path / "log") if "STATe O" in message]
    order = [message.removesuffix("\\n") for message in sent]
    first_signal = order.index("OUTPut:STATe ON")
    assert order.index("OUTPut1:STATe OFF") < order.index("OUTPut1:STATe ON") < first_signal
    assert order.index("OUTPut2:STATe ON") < first_signal
    assert order[-3:] == ["OUTPut:STATe OFF", "OUTPut1:STATe OFF", "OUTPut2:STATe OFF"]


@pytest.mark.parametrize("ampere", [0.0, 1e-3, 15e-3], ids=["unplugged", "too little", "too much"])
def test_a_current_outside_its_window_ends_the_run_before_any_signal(swept, powered, tmp_path, ampere):
    def drawing(world):
        return replace(world, supply=ampere)

    board = swept(1, board=powered, log=tmp_path / "log", prepare=True, change=drawing, raises=BenchFault)
    assert "3 mA to 9 mA expected" in str(board.problem)
    assert "positive rail" in str(board.problem)
    sent = " ".join(messages(tmp_path / "log"))
    assert "OUTPut:STATe ON" not in sent
    assert sent.rindex("OUTPut1:STATe OFF") > sent.index("OUTPut1:STATe ON")


def test_a_rehearsal_of_a_board_with_a_supply_passes(tmp_path, capsys):
    (tmp_path / "my.board.toml").write_text(text())
    assert run(["rehearse", str(tmp_path / "my.board.toml"), "--folder", str(tmp_path / "runs")]) == 0
    assert "PASS" in capsys.readouterr().out


def test_a_window_that_is_none_is_a_mistake_of_the_file():
    with pytest.raises(FileMistakes, match=r"supply\.most_current: must be above"):
        parse_board(text(SUPPLY.replace('"9 mA"', '"2 mA"')), "x")
