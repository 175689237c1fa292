"""Hum of one per cent on both taps: fitted away where it is fitted, an error where it is not."""

from dataclasses import replace

import numpy as np
import pytest

from bandproof.analysis.circuits import mfb_design
from bandproof.analysis.planning import plan_record
from bandproof.bench import plan, record
from bandproof.bench.board_file import parse_board
from bandproof.bench.circuit import predict
from bandproof.bench.evaluate import fit_points
from bandproof.bench.rehearsal import DEMO_BOARD, demo_text
from bandproof.simulated_instruments.imperfections import Imperfections

BESIDE = Imperfections(output_resistance=50.0, adc_bits=8, noise=0.5)  # what else is wrong with this bench
LEVEL = 1.4  # V peak at the input of these stages; 10 dB more at the output
HUM = (0.01 * LEVEL, 0.01 * LEVEL * 10 ** (10 / 20))


def band_at(centre):
    """Return the demo board's first stage alone, designed for another centre."""
    parts = mfb_design(centre, 1.5, 10 ** (10 / 20), 33e-9 * 160 / centre)
    text = demo_text(DEMO_BOARD).split("[stages.body]")[0]
    text = text.replace('centre = "160 Hz"', f'centre = "{centre} Hz"')
    drawn = ", ".join(
        f'{name} = "{getattr(parts, name):.6g} {unit}"'
        for name, unit in (("R_in", "Ω"), ("R_shunt", "Ω"), ("R_feedback", "Ω"))
    )
    begin, end = text.index("parts     = {"), text.index("}", text.index("parts     = {"))
    capacitor = f"{parts.C_1 * 1e9:.6g} nF"
    return parse_board(
        text[:begin] + f'parts = {{ {drawn}, C_1 = "{capacitor}", C_2 = "{capacitor}" ' + text[end:], "hum.board.toml"
    )


def worst_error(swept_board, healthy=None):
    """Return the largest |error| / u; u of the healthy sweep where one is given: hum left in a record widens it."""
    stage = swept_board.board.stages[0]
    fit = fit_points(swept_board.journal.points).fit
    true = predict(swept_board.board, stage, swept_board.drawn[stage.name])
    u = fit_points((healthy or swept_board).journal.points).fit
    errors = (
        (fit.f0[0] - true.centre) / u.u_f0[0],
        (fit.q[0] - true.q) / u.u_q[0],
        (abs(fit.gain[0]) - true.gain) / u.u_gain[0],
    )
    return max(map(abs, errors))


def humming(frequency):
    def change(world):
        return replace(world, imperfections=replace(BESIDE, hum=HUM, hum_frequency=frequency))

    return change


def on_mains(frequency):
    def rewire(bench):
        return replace(bench, mains=frequency)

    return rewire


CASES = pytest.mark.parametrize(("mains", "centre"), [(50.0, 63), (50.0, 160), (60.0, 63), (60.0, 160)])


@CASES
@pytest.mark.parametrize("seed", [1, 2])
def test_figures_of_a_band_are_right_beside_one_per_cent_of_hum(swept, mains, centre, seed):
    board = swept(seed, board=band_at(centre), change=humming(mains), rewire=on_mains(mains))
    assert worst_error(board) < 4.0


@pytest.fixture
def odd_durations(monkeypatch):
    """Records 1.45 times as long as planned, as a time base with few steps gives: hum is no whole 1/T away any more."""

    def stretched(*arguments, **options):
        planned = plan_record(*arguments, **options)
        return replace(planned, duration=1.45 * planned.duration)

    monkeypatch.setattr(plan, "plan_record", stretched)


# A 160 Hz band is far enough from 60 Hz for the error to stay below 5 u (3 u measured); nearer ones are not.
@pytest.mark.parametrize(("mains", "centre"), [(50.0, 63), (50.0, 160), (60.0, 63)])
def test_hum_terms_are_what_keeps_the_hum_out(swept, mains, centre, odd_durations, monkeypatch):
    """Each record meets the hum in another phase, so three boards are asked."""
    options = {"board": band_at(centre), "change": humming(mains), "rewire": on_mains(mains), "repeats": 0}
    fitted = [swept(seed, **options) for seed in (1, 2, 3)]
    assert max(map(worst_error, fitted)) < 4.0
    monkeypatch.setattr(record, "hum_frequencies", lambda frequency, duration, at: np.zeros(0))
    assert max(worst_error(swept(seed, **options), fitted[seed - 1]) for seed in (1, 2, 3)) > 5.0
