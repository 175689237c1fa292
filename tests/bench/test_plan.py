"""What is planned, and that it is safe; where the parts of a stage go in its network."""

from dataclasses import replace
from itertools import pairwise, product
from math import inf, pi, sqrt

import numpy as np
import pytest

from bandproof.bench.board_file import parse_board
from bandproof.bench.circuit import board_network, draw_parts, predict, predicted_response, taps
from bandproof.bench.errors import BadInput
from bandproof.bench.evaluate import fit_points
from bandproof.bench.level import HEADROOM, greatest_level, well_ranged
from bandproof.bench.plan import Planner
from bandproof.bench.rehearsal import demo_board, rehearsal_bench
from bandproof.bench.types import OpAmpData, Wire

FAST = OpAmpData(gbw=1e13, slew=inf, swing=inf)
LARGE = replace(FAST, slew=1e12, swing=1e3)


def part_values(stage):
    return {part.name: part.value for part in stage.parts}


def with_parts(board, **values):
    """Return the board's first stage alone, with other values and its old tolerances."""
    stage = board.stages[0]
    parts = tuple(replace(part, value=values.get(part.name, part.value)) for part in stage.parts)
    return replace(board, stages=(replace(stage, parts=parts),))


def designed_at(board, centre):
    stage = board.stages[0]
    limits = {**stage.limits, "centre": replace(stage.limits["centre"], designed=centre)}
    return replace(board, stages=(replace(stage, limits=limits),))


# --- circuit ---

# f0, Q and gain of the multiple-feedback stage with any two capacitors and an ideal op-amp, from its nodal equations:
# H = -s C2 R3/R1 / (1/Rp + s (C1 + C2) + s**2 C1 C2 R3), Rp = R1 || R2. With C1 = C2 these are the equations of
# R. Mancini (ed.), Op Amps for Everyone, chapter 16. No two parts may be swapped without a change of the figures.
LOPSIDED = {"R_in": 8.2e3, "R_shunt": 1.5e3, "R_feedback": 120e3, "C_1": 22e-9, "C_2": 6.8e-9}


def textbook(R_in, R_shunt, R_feedback, C_1, C_2):
    parallel = R_in * R_shunt / (R_in + R_shunt)
    w0 = 1.0 / sqrt(parallel * R_feedback * C_1 * C_2)
    return w0 / (2 * pi), w0 * C_1 * C_2 * R_feedback / (C_1 + C_2), C_2 * R_feedback / (R_in * (C_1 + C_2))


def swapped(first, second):
    return {**LOPSIDED, first: LOPSIDED[second], second: LOPSIDED[first]}


@pytest.mark.parametrize("parts", [LOPSIDED, swapped("C_1", "C_2"), swapped("R_in", "R_shunt")])
def test_every_part_of_a_stage_is_where_its_name_says(parts):
    board = replace(demo_board(), op_amp=FAST)
    f0, q, gain = textbook(**parts)
    stage = designed_at(with_parts(board, **parts), f0).stages[0]
    found = predict(board, stage)
    # f0 is off by about Q f0 / GBW = 1e-9; the curve's figures are read to 1e-7.
    assert (found.centre, found.q, found.gain) == pytest.approx((f0, q, gain), rel=1e-6)


def test_values_given_replace_parts_by_name():
    board = replace(demo_board(), op_amp=FAST)
    stage = board.stages[0]
    found = predict(board, stage, {"C_1": 40e-9, "C_2": 30e-9})
    expected = textbook(**{**part_values(stage), "C_1": 40e-9, "C_2": 30e-9})
    assert (found.centre, found.q, found.gain) == pytest.approx(expected, rel=1e-6)


def test_a_slow_op_amp_lowers_the_centre():
    """By about Q f0 / GBW for a multiple-feedback stage (common practice: a slow op-amp lowers it)."""
    board = demo_board()
    stage = board.stages[-1]
    slow, fast = (predict(replace(board, op_amp=op), stage).centre for op in (board.op_amp, FAST))
    assert fast * 0.99 < slow < fast * 0.999


def test_the_whole_board_is_its_stages_side_by_side():
    board = demo_board()
    drawn = draw_parts(board, 5)
    network = board_network(board, drawn)
    assert network.input == "in"
    assert {name: value for stage in board.stages for name, value in named(stage, drawn).items()} == network.parts
    assert {amp.out for amp in network.opamps} == {taps(board, stage)[1] for stage in board.stages}


def named(stage, drawn):
    return {f"{stage.name}.{part}": value for part, value in drawn[stage.name].items()}


def test_drawn_parts_stay_inside_their_tolerances_and_use_them():
    board = demo_board()
    shares = np.array(
        [
            (draw_parts(board, seed)[stage.name][part.name] / part.value - 1.0) / part.tolerance
            for seed in range(40)
            for stage in board.stages
            for part in stage.parts
        ]
    )
    assert np.abs(shares).max() <= 1.0 + 1e-12
    # 1000 uniform shares: mean 0 ± 0.018, rms 0.577 ± 0.008 (one standard error each); 4 of them.
    assert abs(shares.mean()) < 0.073
    assert abs(np.sqrt((shares**2).mean()) - 1 / sqrt(3)) < 0.033


# --- level ---


def level_of(board, **bench):
    stage = board.stages[0]
    return greatest_level(board, replace(rehearsal_bench(board), **bench), stage, predict(board, stage))


def corners(board, stage):
    """Yield (frequency, |H|) of every corner of the tolerances."""
    prediction = predict(board, stage)
    near = prediction.centre * np.geomspace(0.25, 4.0, 4001)
    for signs in product((-1.0, 1.0), repeat=len(stage.parts)):
        values = {p.name: p.value * (1 + s * p.tolerance) for p, s in zip(stage.parts, signs, strict=True)}
        yield near, np.abs(predicted_response(board, stage, near, values))


def test_the_benchs_ceiling_binds(one_band):
    assert level_of(replace(one_band, op_amp=LARGE), ceiling=0.5) == 0.5


def test_the_boards_input_maximum_binds(one_band):
    assert level_of(replace(one_band, op_amp=LARGE, input_maximum=0.25), ceiling=2.0) == 0.25


# A tolerance as drawn, and one so wide that the sum of single effects is no bound any more.
SPREADS = pytest.mark.parametrize("tolerance", [0.01, 0.05, 0.2])


def spread(board, tolerance):
    stage = board.stages[0]
    parts = tuple(replace(part, tolerance=tolerance) for part in stage.parts)
    return replace(board, stages=(replace(stage, parts=parts),))


@SPREADS
def test_half_the_swing_binds_with_the_parts_at_their_worst(one_band, tolerance):
    board = spread(replace(one_band, input_maximum=99.0, op_amp=replace(LARGE, swing=5.0)), tolerance)
    level = level_of(board, ceiling=99.0)
    worst = max(float(gain.max()) for _, gain in corners(board, board.stages[0]))
    # 1e-3: peaks between the plan's frequencies. Not pointlessly low: two digits rounded down, product above corners.
    assert 0.75 * 2.5 < level * worst <= 2.5 * 1.001


@SPREADS
def test_a_quarter_of_the_slew_rate_binds_with_the_parts_at_their_worst(one_band, tolerance):
    board = spread(replace(one_band, input_maximum=99.0, op_amp=replace(LARGE, slew=4000.0)), tolerance)
    level = level_of(board, ceiling=99.0)
    worst = max(float((2 * pi * near * gain).max()) for near, gain in corners(board, board.stages[0]))
    assert 0.7 * 1000.0 < level * worst <= 1000.0 * 1.001


def test_a_level_has_two_digits_rounded_down(one_band):
    board = replace(one_band, op_amp=LARGE)
    assert level_of(board, ceiling=1.2999) == 1.2
    assert level_of(board, ceiling=0.0199999) == 0.019
    assert level_of(board, ceiling=1.3) == 1.3


def test_a_narrow_peak_is_not_missed(one_band):
    """Q = 40: its peak is 2.5 % wide, as far apart as frequencies 121 of which fill four octaves."""
    q, gain, c, f0 = 40.0, 2.0, 33e-9, 163.3
    x = 1 / (2 * pi * f0 * c)
    parts = {"R_in": q * x / gain, "R_shunt": q * x / (2 * q * q - gain), "R_feedback": 2 * q * x, "C_1": c, "C_2": c}
    board = spread(with_parts(replace(one_band, input_maximum=99.0, op_amp=replace(LARGE, swing=5.0)), **parts), 0.2)
    board = designed_at(board, f0)
    stage = board.stages[0]
    level = greatest_level(board, replace(rehearsal_bench(board), ceiling=99.0), stage, predict(board, stage))
    assert level * max(float(gain.max()) for _, gain in corners(board, stage)) <= 2.5 * 1.001


def test_no_safe_level_is_bad_input_that_names_the_stage(one_band):
    with pytest.raises(BadInput, match=r"'low': no level above 1 mV is safe; check the op-amp's swing"):
        level_of(replace(one_band, op_amp=replace(LARGE, swing=1e-3)))


# --- steps ---


def batches(board, bench, points, planner=None):
    """Return the batches of a plan as if every record came out as `points` makes it."""
    planner, had, found = planner or Planner(board, bench), [], []
    while steps := planner.more(tuple(had)):
        found.append(steps)
        had += [points(step) for step in steps]
        assert len(had) < 500, "the plan never ends"
    return found


@pytest.fixture(scope="module")
def healthy(swept, one_band):
    return swept(3, board=one_band)


def test_the_same_points_get_the_same_steps(healthy, one_band):
    bench, points = rehearsal_bench(one_band), tuple(healthy.journal.points)
    used, fresh = Planner(one_band, bench), Planner(one_band, bench)
    for count in (0, 1, 2, len(points)):  # the batches' ends
        first = used.more(points[:count])
        assert first == used.more(points[:count]) == fresh.more(points[:count])
    assert fresh.more(points) == ()


def test_a_stage_is_looked_at_quietly_then_low_then_in_full(healthy):
    steps = [step for step in healthy.journal.steps if step.stage == "low"]
    purposes = [step.purpose for step in steps]
    assert purposes == ["no-signal", "low-level", *["curve"] * (len(purposes) - 3), "closing"]
    quiet, low, *curve = steps
    assert (quiet.tones, quiet.amplitude) == ((), 0.0)
    assert low.amplitude <= 0.1 * curve[0].amplitude * (1 + 1e-9)
    assert curve[-1].frequency == curve[0].frequency
    assert {step.amplitude for step in curve} == {curve[0].amplitude}


def test_step_indices_run_on_over_stages_and_batches(swept):
    board = demo_board()
    board = replace(board, stages=board.stages[:2])
    done = swept(2, board=board, defects={("low", "R_shunt"): 3.4e3})
    assert [step.index for step in done.journal.steps] == list(range(len(done.journal.steps)))
    assert [point.step for point in done.journal.points] == list(range(len(done.journal.steps)))
    stages = [step.stage for step in done.journal.steps]
    assert stages[:2] == ["low", "body"]  # without signal
    assert stages[2:] == sorted(stages[2:], key=["low", "body", "thru"].index)
    assert stages.count("low") > stages.count("body") > 12


@pytest.mark.parametrize("mains", [50.0, 60.0])
@pytest.mark.parametrize("centre", [31.5, 50.0, 60.0, 99.0, 120.0, 160.0, 200.0, 245.0, 300.0, 400.0, 800.0])
def test_no_tone_below_1_khz_is_nearer_to_hum_than_its_record_resolves(healthy, one_band, centre, mains):
    """Two tones are told apart by a record of at least 1 / their distance (common practice; harmonics 1 to 5)."""
    ratio = 160.0 / centre
    parts = {name: ratio * value for name, value in part_values(one_band.stages[0]).items() if name[0] == "C"}
    board = with_parts(one_band, **parts)
    board = designed_at(board, centre)
    planner = Planner(board, replace(rehearsal_bench(board), mains=mains))
    quiet, low = healthy.journal.points[:2]
    steps = (*planner.more(()), *planner.more((quiet,)), *planner.more((quiet, low)))
    tones = [step for step in steps if step.tones]
    assert len(tones) == 13
    for step in tones:
        if step.frequency < 1000.0:
            distance = np.abs(step.frequency - mains * np.arange(1, 6)).min()
            assert distance * step.duration >= 1.0 - 1e-9, step
        assert step.frequency * step.duration >= 3.0 - 1e-9


@pytest.mark.parametrize(
    ("level", "gain", "expected"), [(1.4, 3.16, 1.2), (0.7, 0.1, 0.7), (2.0, 1.0, 1.5), (1.6, 5.0, 1.5)]
)
def test_a_level_just_above_a_range_is_lowered_to_use_it(level, gain, expected):
    """By hand: 1.2 x 1.06 x 1.4 V x 3.16 = 5.63 V needs the 10 V range, 1.2 V the one of 5 V (steps of 1-2-5)."""
    assert well_ranged(level, gain) == expected


def test_no_other_level_leaves_less_noise_on_ranges_of_1_2_5():
    """Exhaustive search as witness: every level of two digits between 0.6 times and the greatest one."""
    rng, steps = np.random.default_rng(5), np.outer(10.0 ** np.arange(-6.0, 4.0), [1.0, 2.0, 5.0]).ravel()

    def noise(level, gain):
        peaks = 1.2 * 1.06 * level * np.array([1.0, gain])
        return sum((steps[steps >= peak * (1 - 1e-9)][0] / peak) ** 2 for peak in peaks)

    for _ in range(200):
        greatest, gain = np.round(10.0 ** rng.uniform(-2.0, 1.0), 3), 10.0 ** rng.uniform(-1.0, 1.5)
        greatest = float(f"{greatest:.2g}")
        unit = 10.0 ** (np.floor(np.log10(greatest)) - 2)
        levels = np.arange(np.ceil(0.6 * greatest / unit), np.round(greatest / unit) + 1) * unit
        found = well_ranged(greatest, gain)
        assert found <= greatest
        # Two digits cost at most a tenth of the level, thus a fifth of the noise's square.
        assert noise(found, gain) <= 1.25 * min(noise(level, gain) for level in levels)


def test_ranges_hold_the_predicted_peak_and_its_headroom(healthy):
    curve = [step for step in healthy.journal.steps if step.purpose == "curve"]
    gain = predict(healthy.board, healthy.board.stages[0]).gain
    assert curve[0].ranges[0] >= HEADROOM * curve[0].amplitude * (1 - 1e-9)
    # The low-level point corrects the gain by what the board's parts make of it, 8 % at most, and channel gains.
    assert curve[0].ranges[1] == pytest.approx(HEADROOM * curve[0].amplitude * gain, rel=0.12)
    assert not any("overload" in point.flags for point in healthy.journal.points)


def test_the_path_is_measured_last_on_every_pair_of_ranges_that_a_curve_used(healthy):
    thru = [step for step in healthy.journal.steps if step.purpose == "thru"]
    curve = [point for point in healthy.journal.points if point.purpose == "curve"]
    assert healthy.journal.steps[-len(thru) :] == thru
    assert {step.ranges for step in thru} == {point.ranges for point in curve}
    assert min(step.frequency for step in thru) < min(point.frequency for point in curve)
    assert max(step.frequency for step in thru) > max(point.frequency for point in curve)
    assert all(step.amplitude <= min(step.ranges) for step in thru)


def test_a_path_known_or_reached_only_by_hand_is_not_measured(healthy, one_band):
    points, bench = tuple(p for p in healthy.journal.points if p.purpose != "thru"), rehearsal_bench(one_band)
    known = {point.ranges for point in points if point.purpose in ("curve", "closing")}
    assert Planner(one_band, bench).more(points)
    assert Planner(one_band, bench, known).more(points) == ()
    by_hand = replace(bench, wires=bench.wires | {"thru": Wire(2, by_hand=True)})
    assert Planner(one_band, by_hand).more(points) == ()
    without = replace(bench, wires={name: wire for name, wire in bench.wires.items() if name != "thru"})
    assert Planner(one_band, without).more(points) == ()


def test_a_centre_that_moved_is_looked_at_again_and_found(swept, one_band):
    board = swept(1, board=one_band, defects={("low", "R_shunt"): 3.4e3})
    true = predict(one_band, one_band.stages[0], board.drawn["low"])
    assert true.centre > 1.5 * 160.0  # a defect that moves it far outside the first look's centre
    points = board.journal.points
    assert sum(point.purpose == "closing" for point in points) >= 2
    again = [point.frequency for point in points if point.purpose == "curve"][-11:]
    assert min(again) < true.centre < max(again)
    fit = fit_points(points).fit
    assert abs(fit.f0[0] - true.centre) < 4 * fit.u_f0[0]
    assert abs(fit.q[0] - true.q) < 4 * fit.u_q[0]


def test_an_overloaded_batch_is_measured_again_on_a_wider_range(healthy, one_band):
    planner = Planner(one_band, rehearsal_bench(one_band))
    first = healthy.journal.points
    loud = [replace(p, flags=("overload",)) if p.purpose in ("curve", "closing") else p for p in first]
    again = planner.more(tuple(loud))
    assert [step.purpose for step in again] == ["curve"] * 11 + ["closing"]
    before = max(step.ranges[1] for step in healthy.journal.steps if step.purpose == "curve")
    assert all(step.ranges[1] >= 2.0 * before for step in again)


def test_longer_records_keep_their_sampling_and_never_wait_longer(healthy, one_band):
    planners = [Planner(one_band, rehearsal_bench(one_band), longer=longer) for longer in (1.0, 4.0)]
    curves = [planner.more(healthy.journal.points[:2]) for planner in planners]
    assert [step.purpose for step in curves[0]] == ["curve"] * 11 + ["closing"]
    for usual, longer in zip(*curves, strict=True):
        assert (longer.duration, longer.samples) == (4.0 * usual.duration, 4 * usual.samples)
        assert (longer.frequency, longer.ranges) == (usual.frequency, usual.ranges)
        assert longer.dwell <= usual.dwell


def test_a_plan_ends_however_bad_the_records_are(healthy, one_band):
    bench = rehearsal_bench(one_band)
    template = {point.purpose: point for point in healthy.journal.points}

    def awful(step):
        return replace(template[step.purpose], step=step.index, frequency=step.frequency, flags=("overload",))

    assert 2 <= len(batches(one_band, bench, awful)) <= 5


def test_a_band_too_low_for_the_longest_record_is_bad_input_that_names_the_stage(one_band_text):
    text = one_band_text.replace("160 Hz", "5 Hz").replace('"33 nF"', '"1056 nF"')
    board = parse_board(text, "low")
    with pytest.raises(BadInput, match=r"'low': .* Hz needs a record of"):
        Planner(board, rehearsal_bench(board))


def test_a_circuit_without_a_band_near_its_design_is_bad_input(one_band):
    board = with_parts(one_band, C_1=1e-15, C_2=1e-15)
    with pytest.raises(BadInput, match="'low': its circuit makes no band"):
        Planner(board, rehearsal_bench(board))


def test_the_time_left_falls_to_nothing(healthy, one_band):
    planner, points = Planner(one_band, rehearsal_bench(one_band)), healthy.journal.points
    left = [planner.seconds_left(points[:count]) for count in range(len(points) + 1)]
    assert all(later <= earlier for earlier, later in pairwise(left))
    assert left[0] > 0.5
    assert left[-1] == 0.0
