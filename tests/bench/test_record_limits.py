"""Records are planned within what the scope's dialect says it can, and what it cannot is told before any signal."""

import re
from dataclasses import replace

import pytest

from bandproof.analysis.planning import RecordPlan
from bandproof.bench.errors import BadInput
from bandproof.bench.plan import Planner, thru_steps
from bandproof.bench.record_limits import RecordLimits, record_limits
from bandproof.bench.rehearsal import rehearsal_bench
from bandproof.bench.thru import thru_stage
from bandproof.drivers.dialect import source


def limited(board, **limits):
    """Return a rehearsal's bench whose scope has a dialect with limits, by slot."""
    text = source("scpi99-digitizer").replace("limits = [2, 100000]\n", "")
    for slot, (low, high) in limits.items():
        text, count = re.subn(rf"^(\[{slot}\].*)$", rf"\1\nlimits = [{low!r}, {high!r}]", text, flags=re.MULTILINE)
        assert count == 1
    bench = rehearsal_bench(board)
    return replace(bench, dialect_texts={**bench.dialect_texts, "scope": text})


def test_records_are_longer_where_the_scope_cannot_be_as_quick(one_band):
    bench = limited(one_band, duration=(0.07, 10.0), points=(4096, 6000))
    planner = Planner(one_band, bench)
    curve = planner._first_curve(one_band.stages[0])
    path = thru_steps(thru_stage(one_band, bench), bench, (1.0, 1.0), 1.0, (100.0, 300.0), first=0)
    steps = [*planner.more(()), *curve, *path]
    assert all(0.07 <= step.duration <= 10.0 and 4096 <= step.samples <= 6000 for step in steps)
    usual = Planner(one_band, rehearsal_bench(one_band))._first_curve(one_band.stages[0])
    assert min(step.duration for step in usual) < 0.07  # it would have been asked for what it cannot


def test_what_no_limits_allow_is_told_of_every_stage_before_anything_is_driven():
    from bandproof.bench.rehearsal import demo_board

    board = demo_board()
    with pytest.raises(BadInput) as caught:
        Planner(board, limited(board, duration=(1e-6, 1e-4)))
    for stage in board.stages:
        assert f"stage {stage.name!r}: a record of" in str(caught.value)
    assert "limits of 0.0001 s" in str(caught.value)


FITTED = {  # limits, what is wanted, the tone, how many times as long, what comes
    "as it is": (RecordLimits(), (0.01, 2048), 1000.0, 1.0, (0.01, 2048)),
    "longer if it can": (RecordLimits(duration=(0.0, 0.03)), (0.01, 2048), 1000.0, 4.0, (0.03, 8192)),
    "longer as far as its points allow": (RecordLimits(points=(2, 1000)), (0.01, 500), 1000.0, 8.0, (0.05, 1000)),
    "as quick as can be": (RecordLimits(interval=(1e-5, 1e-3)), (0.001, 2048), 1000.0, 1.0, (0.02048, 2048)),
    "as slow as can be": (RecordLimits(interval=(0.0, 1e-4)), (0.5, 2048), 20.0, 1.0, (0.5, 5000)),
    "so many points always": (RecordLimits(points=(1024, 1024)), (0.01, 2048), 1000.0, 1.0, (0.01, 1024)),
}  # fmt: skip


@pytest.mark.parametrize(("limits", "wanted", "tone", "longer", "expected"), FITTED.values(), ids=FITTED.keys())
def test_a_record_is_fitted_into_the_limits(limits, wanted, tone, longer, expected):
    record = limits.fitted(RecordPlan(*wanted), tone, longer)
    assert (record.duration, record.points) == (pytest.approx(expected[0]), expected[1])


REFUSED = {
    "too short a record": (RecordLimits(duration=(0.0, 0.001)), "a record of 0.01 s is needed"),
    "too few points": (RecordLimits(points=(2, 100)), "20 samples a period of 1000 Hz are needed"),
    "too slow": (RecordLimits(interval=(1e-3, 1.0)), "20 samples a period of 1000 Hz are needed"),
}


@pytest.mark.parametrize(("limits", "words"), REFUSED.values(), ids=REFUSED.keys())
def test_a_record_beyond_the_limits_is_refused_with_what_is_needed(limits, words):
    with pytest.raises(ValueError, match=words):
        limits.fitted(RecordPlan(0.01, 2048), 1000.0)


def test_limits_are_those_of_what_the_dialect_can_be_told(one_band):
    assert record_limits(limited(one_band, interval=(1.0, 2.0), points=(2, 9))) == RecordLimits(points=(2, 9))
    assert record_limits(replace(rehearsal_bench(one_band), dialect_texts={})) == RecordLimits()
