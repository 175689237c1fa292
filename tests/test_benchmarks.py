"""The benchmarks run, small, so that none rots; their figures are ratios, judged when they are run in full."""

import importlib

import pytest

from tests.benchmarks.__main__ import main, names


@pytest.mark.parametrize("name", names())
def test_a_benchmark_says_what_it_measures_and_can_be_run(name):
    module = importlib.import_module(f"tests.benchmarks.{name}")
    assert module.__doc__
    assert callable(module.main)


def test_an_unknown_benchmark_is_refused_with_the_names(capsys):
    assert main(["nothing"]) == 2
    assert "link_speed" in capsys.readouterr().out


def test_link_speed_prints_a_ratio(capsys):
    assert main(["link_speed"]) in (0, 1)
    assert "ratio" in capsys.readouterr().out


def test_start_up_prints_both_ratios(capsys):
    from tests.benchmarks import start_up

    assert isinstance(start_up.main(rounds=1), bool)
    assert capsys.readouterr().out.count("ratio") == 2


def test_a_twentieth_of_the_risk_table_is_within_its_statistical_error(capsys):
    from tests.benchmarks import risk_table

    assert risk_table.main(boards=risk_table.BOARDS // 20, out=risk_table.OUT // 20)
    assert len(capsys.readouterr().out.splitlines()) == 13


def test_a_twentieth_of_the_boards_has_the_right_suspects():
    """The bounds of the benchmark, on its first boards."""
    from tests.benchmarks import suspects

    assert suspects.drawn_boards(suspects.HEALTHY // 20, suspects.WRONG // 20)


def test_a_twentieth_of_the_changed_bits_is_noticed(capsys):
    """The bound of the benchmark: none unnoticed, no other error, whatever was cut off."""
    from tests.benchmarks import bit_flips

    assert bit_flips.main(bit_flips.FLIPS // 20, bit_flips.CUTS // 20)
    assert "one bit changed: 75" in capsys.readouterr().out
