"""A twentieth of the hour that `python -m tests.benchmarks overnight` measures; faults come three times as often."""

from tests.benchmarks import overnight

BOARDS = 12


def test_boards_measured_while_instruments_fail_are_complete_or_honestly_cut_short_and_their_figures_true(
    tmp_path, monkeypatch, capsys
):
    monkeypatch.setattr(overnight, "ODDS", 3 * overnight.ODDS)
    # pictures cost three quarters of the time
    monkeypatch.setattr("bandproof.bench.finish._drawn", lambda run, result, *_: result)
    night = overnight.measured(hours=1.0, most_boards=BOARDS, seed=11, folder=tmp_path, bands=1)
    night.show()
    assert night.boards == BOARDS
    assert night.recovered >= 4  # or the faults struck nothing
    assert night.is_good, capsys.readouterr().out
