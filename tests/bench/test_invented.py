"""The same board through dialects that share no word, unit or record with each other gives the same figures.

Measured through plain SCPI-99 and through two invented languages, each with two kinds of record, by the same sweep.
"""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from bandproof.bench.errors import BenchFault
from bandproof.bench.evaluate import fit_points

NAMES = ("orchard", "orchard, text", "harbour", "harbour, reals")
SEED = 11


def spoken(invented, name):
    """Return options of `swept` for a bench that speaks an invented language."""
    language, texts = invented[name]
    return {
        "prepare": True,
        "change": lambda world: replace(world, language=language),
        "rewire": lambda bench: replace(bench, dialect_texts={role: texts[role] for role in bench.instruments}),
    }


def figures(swept_board):
    """Return f0, Q and |gain| and their standard uncertainties."""
    fit = fit_points(swept_board.journal.points).fit
    return np.array([fit.f0[0], fit.q[0], abs(fit.gain[0])]), np.array([fit.u_f0[0], fit.u_q[0], fit.u_gain[0]])


@pytest.fixture(scope="module")
def plain(swept, one_band):
    return swept(SEED, board=one_band, prepare=True)


@pytest.mark.parametrize("name", NAMES)
def test_figures_through_an_invented_dialect_agree_with_those_through_scpi99(swept, one_band, invented, plain, name):
    """Noise is the same draw for the same step; times differ a little, so the records do: 4 u of the difference."""
    board = swept(SEED, board=one_band, **spoken(invented, name))
    (value, u), (expected, u_expected) = figures(board), figures(plain)
    assert np.abs((value - expected) / np.hypot(u, u_expected)).max() < 4.0
    assert len(board.journal.points) == len(plain.journal.points)
    assert board.journal.points[-1].purpose == "thru"


def test_an_invented_dialect_with_the_wrong_meaning_of_amplitude_is_seen(swept, one_band, invented):
    options = spoken(invented, "orchard")
    rewire = options.pop("rewire")

    def wrong(bench):
        bench = rewire(bench)
        texts = dict(bench.dialect_texts)
        texts["generator"] = texts["generator"].replace('meaning = "peak-to-peak"', 'meaning = "peak"')
        return replace(bench, dialect_texts=texts)

    board = swept(SEED, board=one_band, rewire=wrong, raises=BenchFault, **options)
    assert "counts peak to peak" in str(board.problem)
