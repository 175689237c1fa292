"""What an instrument does without a word: fewer samples than asked, an entry in its error queue that means nothing."""

from dataclasses import replace

from bandproof.bench.circuit import predict
from bandproof.bench.evaluate import fit_points
from bandproof.drivers.dialect import source
from bandproof.drivers.errors import InstrumentError, SettingRefused
from bandproof.simulated_instruments.imperfections import Imperfections, Sizes


def other(**sizes):
    """Return a change of a world: the same board behind a bench of other sizes."""

    def change(world):
        quiet = {"range_gain": 0, "probe_compensation": 0, "ac_corner": 0, "nonlinearity": 0, "hum": 0, "drift": 0}
        drawn = Imperfections.draw(world.seed, Sizes(**quiet, reseating=0, **sizes))
        return replace(world, imperfections=drawn)

    return change


def worst_error(board):
    stage = board.board.stages[0]
    fit = fit_points(board.journal.points).fit
    true = predict(board.board, stage, board.drawn[stage.name])
    return max(abs(fit.f0[0] - true.centre) / fit.u_f0[0], abs(fit.q[0] - true.q) / fit.u_q[0])


def test_a_decimated_record_is_taken_for_what_it_is(swept, one_band):
    board = swept(1, board=one_band, change=other(decimation=2))
    assert {point.samples for point in board.journal.points if point.purpose != "thru"} == {1024}
    assert worst_error(board) < 4.0


def test_fewer_samples_than_the_dialect_accepts_are_refused(swept, one_band):
    board = swept(1, board=one_band, change=other(decimation=8), raises=SettingRefused)
    assert board.problem.found == "256"


def test_entries_the_dialect_calls_harmless_cost_nothing(swept, one_band):
    def forgiving(bench):
        text = source("scpi99-digitizer").replace("harmless = []", "harmless = [101]")
        return replace(bench, dialect_texts={"scope": text})

    board = swept(1, board=one_band, change=other(rounded_entries=1), rewire=forgiving)
    assert [point.purpose for point in board.journal.points].count("closing") == 1
    assert worst_error(board) < 4.0
    assert not board.journal.alarms


def test_an_entry_nobody_calls_harmless_ends_the_sweep_by_its_number(swept, one_band):
    board = swept(1, board=one_band, change=other(rounded_entries=1), raises=InstrumentError)
    assert board.problem.number == 101
