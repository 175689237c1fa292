"""What a wait too short does to the figures, and that the record's own check sees it.

The bench of these tests arms at once and sets in 0.1 ms: the 10 ms the reference bench takes to arm are a wait of their
own and would hide a dwell that is too short.
"""

from dataclasses import replace

import numpy as np
import pytest

from bandproof.bench.circuit import predict
from bandproof.bench.evaluate import fit_points
from bandproof.drivers.dialect import source
from bandproof.drivers.visa import VisaPort
from bandproof.simulated_instruments.device import Timing
from bandproof.simulated_instruments.imperfections import Imperfections


def at_once(world):
    """Noise and a converter of 8 bits are all that is wrong with this bench: u is that of the records."""
    quiet = Imperfections(output_resistance=50.0, adc_bits=8, noise=0.5)
    return replace(world, timing=Timing(message=1e-4, setting=1e-4, arming=0.0), imperfections=quiet)


def worst_error(swept_board, healthy=None):
    """Return the largest |error| / u of f0 and Q of the only stage.

    u is that of the healthy sweep where one is given: a transient in a record looks like noise and widens its own u.
    """
    stage = swept_board.board.stages[0]
    fit = fit_points(swept_board.journal.points).fit
    u = fit_points((healthy or swept_board).journal.points).fit
    true = predict(swept_board.board, stage, swept_board.drawn[stage.name])
    return max(abs(fit.f0[0] - true.centre) / u.u_f0[0], abs(fit.q[0] - true.q) / u.u_q[0])


def unsettled(swept_board):
    return [point for point in swept_board.journal.points if "unsettled" in point.flags]


SEEDS = pytest.mark.parametrize("seed", [1, 2, 3])


@SEEDS
def test_planned_dwell_at_160_hz_leaves_nothing_to_see(swept, one_band, seed):
    board = swept(seed, board=one_band, change=at_once)
    assert worst_error(board) < 4.0
    assert not unsettled(board)


@SEEDS
def test_a_third_of_the_dwell_at_160_hz_is_wrong_and_seen(swept, one_band, seed):
    board = swept(seed, board=one_band, change=at_once, dwell_factor=1 / 3, repeats=0)
    assert worst_error(board) > 5.0
    assert len(unsettled(board)) >= 6
    assert any("had not settled" in alarm for alarm in board.journal.alarms)


@SEEDS
def test_repeating_an_unsettled_record_mends_it(swept, one_band, seed):
    board = swept(seed, board=one_band, change=at_once, dwell_factor=1 / 3)
    assert worst_error(board) < 4.0
    assert not unsettled(board)
    again = [point for point in board.journal.points if point.attempt > 0]
    told = [entry for entry in board.journal.history if entry["event"] == "taken again"]
    assert again
    assert len(told) == sum(point.attempt for point in again)
    assert {entry["step"] for entry in told} == {point.step for point in again}
    assert {entry["words"] for entry in told} == {"the record had not settled"}


@pytest.fixture
def slow_wire(monkeypatch):
    """Let every message leave only when somebody waits for a reply, as a network may; nothing is reordered."""
    held = []
    write, read = VisaPort.write, VisaPort.read

    def hold(port, data, limit):
        held.append((port, bytes(data)))
        return len(data)

    def deliver(port, count, limit, *, line):
        while held:
            late, data = held.pop(0)
            sent = 0
            while sent < len(data):
                sent += write(late, data[sent:], limit)
            if late is not port:  # arrived, and before what was sent after it to somebody else
                write(late, b"*OPC?\n", limit)
                assert read(late, 10, limit, line=True) == b"1\n"
        return read(port, count, limit, line=line)

    monkeypatch.setattr(VisaPort, "write", hold)
    monkeypatch.setattr(VisaPort, "read", deliver)


def unawaited(bench):
    """Return the bench with a generator whose frequency is set, not confirmed and not read back."""
    text = source("scpi99-generator")
    for found in ('query = "SOURce:FREQuency:CW?"\n', 'confirm = "*OPC?"', 'errors = "SYSTem:ERRor?"'):
        assert found in text
    text = text.replace('query = "SOURce:FREQuency:CW?"\n', "")
    text = text.replace('confirm = "*OPC?"', 'confirm = ""').replace('errors = "SYSTem:ERRor?"', 'errors = ""')
    return replace(bench, dialect_texts={"generator": text})


@SEEDS
def test_a_setting_whose_reply_is_not_awaited_is_wrong_and_seen(swept, one_band, seed, slow_wire):
    healthy = swept(seed, board=one_band, change=at_once)
    assert worst_error(healthy) < 4.0  # awaited, the same slow wire does no harm
    board = swept(seed, board=one_band, change=at_once, rewire=unawaited, repeats=0)
    assert worst_error(board, healthy) > 5.0
    assert len(unsettled(board)) >= 6


def test_noise_alone_asks_for_few_repeats(swept):
    """Threshold: noise exceeds it once in 8000 records; 70 records of a healthy board may have one at most."""
    assert sum(point.attempt > 0 for point in swept(4).journal.points) <= 1


def test_points_of_one_run_are_the_same_for_the_same_seed(swept, one_band):
    first, second = (swept(5, board=one_band).journal.points for _ in range(2))
    assert first == second
    assert not np.allclose([p.response for p in first], [p.response for p in swept(6, board=one_band).journal.points])
