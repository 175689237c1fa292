"""The order in which a sweep does things, read from the exchange log: what a board could be harmed by."""

import re
import socket
from dataclasses import dataclass, replace
from functools import partial

import pytest

from bandproof.bench.circuit import draw_parts
from bandproof.bench.errors import BenchFault, OperatorNeeded, Stopped
from bandproof.bench.instruments import opened
from bandproof.bench.journal import Journal
from bandproof.bench.operator import Absent
from bandproof.bench.plan import Planner
from bandproof.bench.rehearsal import demo_board, rehearsal_bench
from bandproof.bench.stop import Stop
from bandproof.bench.sweep import Sweep
from bandproof.bench.types import Instrument, Wire
from bandproof.bench.verbs.rehearse import world_of
from bandproof.drivers.clock import VirtualClock, create_clock_file
from bandproof.drivers.errors import InstrumentProblem
from bandproof.simulated_instruments.bench import start
from bandproof.simulated_instruments.faults import Fault

CEILING = 0.7  # V; below what the board itself would allow


@dataclass
class Told:
    """One message to an instrument, and what generator and switch were at when it was sent."""

    text: str
    is_on: bool | None  # None: not told yet in this run
    amplitude: float
    confirmed_off: bool


def told(path):
    """Return every message sent, in order, with the state that the messages before it made."""
    found, on, amplitude, confirmed = [], None, 0.0, False
    for line in path.read_text().splitlines():
        _, _, direction, _, text = line.split(" ", 4)
        text = text.removesuffix("\\n")
        if direction == "<":
            confirmed = confirmed or (found[-1].text == "OUTPut:STATe?" and text == "0")
            continue
        found.append(Told(text, on, amplitude, confirmed))
        if state := re.fullmatch(r"OUTPut:STATe (ON|OFF)", text):
            on = state[1] == "ON"
            confirmed = False
        if level := re.fullmatch(r"SOURce:VOLTage:AMPLitude ([\d.e+-]+)", text):
            amplitude = float(level[1])
        if text == "*RST":
            on, confirmed = False, True
    return found


def outputs(messages):
    return [message.text for message in messages if re.fullmatch(r"OUTPut:STATe (ON|OFF)", message.text)]


def levels(messages):
    return [float(m.text.split()[-1]) for m in messages if m.text.startswith("SOURce:VOLTage:AMPLitude ")]


@pytest.fixture(scope="module")
def two_bands():
    board = demo_board()
    return replace(board, stages=board.stages[:2])


@pytest.fixture(scope="module")
def healthy(swept, two_bands, tmp_path_factory):
    path = tmp_path_factory.mktemp("healthy") / "exchange.log"
    board = swept(1, board=two_bands, rewire=lambda bench: replace(bench, ceiling=CEILING), log=path)
    return board, told(path)


def test_the_generator_is_confirmed_off_before_every_wiring(healthy):
    wirings = [message for message in healthy[1] if message.text.startswith("ROUTe:CLOSe (")]
    assert [message.text for message in wirings] == [
        *["ROUTe:CLOSe (@101)", "ROUTe:CLOSe (@102)"] * 2,
        "ROUTe:CLOSe (@100)",
    ]
    assert all(message.is_on is False and message.confirmed_off for message in wirings)


def test_nothing_is_set_or_measured_before_the_generator_was_told_off(healthy):
    before = [m.text for m in healthy[1] if m.is_on is None]
    assert set(before) <= {"*IDN?", "*OPC?", "OUTPut:STATe OFF"}
    assert before[-1] == "OUTPut:STATe OFF"


def test_the_generator_is_told_off_last_and_confirmed(healthy):
    messages = healthy[1]
    assert outputs(messages)[-1] == "OUTPut:STATe OFF"
    assert messages[-1].text == "OUTPut:STATe?"


def test_the_generator_is_on_from_first_to_last_point_of_a_stage_only(healthy):
    """Switching per point would wear the relay (common practice)."""
    states = [state == "OUTPut:STATe ON" for state in outputs(healthy[1])]
    changes = [state for state, before in zip(states, [False, *states[:-1]], strict=True) if state != before]
    assert changes == [True, False] * 3  # two bands and the thru


def test_a_record_without_signal_is_taken_with_the_output_off(healthy):
    board, messages = healthy
    armed = [message for message in messages if message.text == "INITiate:IMMediate"]
    points = [point for point in board.journal.points for _ in range(point.attempt + 1)]
    assert len(armed) == len(points)
    for message, point in zip(armed, points, strict=True):
        assert message.is_on is (point.purpose != "no-signal"), point
        assert point.amplitude == (message.amplitude if message.is_on else 0.0)


def test_each_stage_is_driven_low_before_it_is_driven_in_full(healthy):
    board, _ = healthy
    for stage in board.board.stages:
        driven = [point for point in board.journal.points if point.stage == stage.name and point.amplitude]
        assert driven[0].purpose == "low-level"
        assert driven[0].amplitude <= 0.1 * min(point.amplitude for point in driven[1:]) * (1 + 1e-9)


def test_no_level_is_above_the_ceiling_and_the_sweep_uses_it(healthy):
    """Offset is 0 and stays 0: |offset| + peak is the level."""
    _, messages = healthy
    # The board alone would allow twice as much; a little is given up to use a range of the scope well.
    assert 0.6 * CEILING <= max(levels(messages)) <= CEILING
    offsets = [m.text for m in messages if m.text.startswith("VOLTage:OFFSet ")]
    assert {float(text.split()[-1]) for text in offsets} <= {0.0}


def test_a_step_above_the_ceiling_is_refused_before_it_is_set(swept, one_band, tmp_path):
    class Greedy:
        """A plan that asks for more than the bench allows."""

        def __init__(self, bench):
            self._plan = Planner(one_band, bench)

        def more(self, points):
            steps = self._plan.more(points)
            return tuple(replace(s, tones=tuple(replace(t, amplitude=2.5) for t in s.tones)) for s in steps)

        def seconds_left(self, points):
            return 0.0

    path = tmp_path / "exchange.log"
    greedy = Greedy(rehearsal_bench(one_band))
    found = swept(1, board=one_band, log=path, planner=greedy, raises=BenchFault)
    assert re.search(r"2\.5 V, above the bench's ceiling 2 V", str(found.problem))
    assert not levels(told(path))
    assert outputs(told(path))[-1] == "OUTPut:STATe OFF"


def test_a_stop_leaves_the_generator_off_and_the_points_kept(swept, one_band, tmp_path):
    stop, path = Stop(), tmp_path / "exchange.log"

    def progress(done, planned, left, stage):
        if done == 5:
            stop.request("Ctrl-C")

    found = swept(1, board=one_band, log=path, stop=stop, progress=progress, raises=Stopped)
    assert str(found.problem) == "stopped by Ctrl-C; the generator is off"
    assert len(found.journal.points) == 5
    assert outputs(told(path))[-2:] == ["OUTPut:STATe ON", "OUTPut:STATe OFF"]


def test_a_fault_that_stays_leaves_the_generator_off_and_the_points_kept(swept, one_band, tmp_path):
    path, step = tmp_path / "exchange.log", 6
    fault = Fault("dropped-connection", step, "scope", persistent=True)
    found = swept(
        1, board=one_band, log=path, change=partial(replace, faults=(fault,)), raises=(InstrumentProblem, BenchFault)
    )
    assert found.problem is not None
    assert len(found.journal.points) == step
    messages = told(path)
    assert "OUTPut:STATe ON" in outputs(messages)
    assert outputs(messages)[-1] == "OUTPut:STATe OFF"
    assert messages[-1].text == "OUTPut:STATe?"
    last = path.read_text().splitlines()[-1].split(" ", 4)
    assert last[2:] == ["<", "2", "0\\n"]  # the generator itself says so, over a connection that works


# --- by hand ---


class Hands:
    """An operator who moves the probe: closes the simulated switch that stands for it; notes what was asked."""

    def __init__(self, port, log, routes):
        self.requests, self.states = [], []
        self._port, self._log, self._routes = port, log, routes

    def confirm(self, request):
        self.requests.append(request)
        self.states.append(outputs(told(self._log))[-1])
        tap = re.search(r"test point '(\w+)'", request)[1]
        with socket.create_connection(("127.0.0.1", self._port), 5.0) as connection:
            connection.sendall(f"ROUT:CLOS (@{self._routes[tap]})\n*OPC?\n".encode())
            assert connection.recv(2) == b"1\n"


@pytest.fixture
def hand_wired(two_bands, tmp_path):
    """Return a simulated bench without a switch for the controller: (bench, clock, port that moves the probe)."""
    bench = rehearsal_bench(two_bands)
    world = world_of(two_bands, bench, draw_parts(two_bands, 1), 1, 1)
    path = tmp_path / "bench.time"
    create_clock_file(path)
    with start(replace(world, clock=str(path))) as server:
        roles = ("generator", "scope")
        instruments = {
            role: Instrument(role, f"TCPIP::127.0.0.1::{server.ports[role]}::SOCKET", bench.instruments[role].dialect)
            for role in roles
        }
        wires = {tap: Wire(wire.channel, None, by_hand=bool(wire.route)) for tap, wire in bench.wires.items()}
        clock = VirtualClock(path)
        yield replace(bench, instruments=instruments, wires=wires, clock=str(path)), clock, server.ports["switch"]
        clock.close()


def test_hands_move_the_probe_with_the_generator_off_once_a_tap(hand_wired, two_bands, tmp_path):
    bench, clock, port = hand_wired
    log, journal = tmp_path / "exchange.log", Journal()
    routes = {"low_out": "101", "body_out": "102"}
    with opened(bench, clock, log) as devices:
        assert devices.switch is None
        hands = Hands(port, log, routes)
        Sweep(two_bands, bench, devices, clock, hands, journal).run()
    assert [re.search(r"channel (\d) on test point '(\w+)' \(node (\w+)\)", r).groups() for r in hands.requests] == [
        ("2", "low_out", "low"),
        ("2", "body_out", "body"),
    ]
    assert hands.states == ["OUTPut:STATe OFF"] * 2
    assert not journal.alarms
    assert [point.stage for point in journal.points if point.purpose == "closing"] == ["low", "body"]


def test_nobody_there_ends_the_run_before_anything_is_driven(hand_wired, two_bands, tmp_path):
    bench, clock, _ = hand_wired
    log, journal = tmp_path / "exchange.log", Journal()
    with opened(bench, clock, log) as devices, pytest.raises(OperatorNeeded, match=r"'low_out' .*terminal.*switch"):
        Sweep(two_bands, bench, devices, clock, Absent(), journal).run()
    assert not journal.points
    assert set(outputs(told(log))) == {"OUTPut:STATe OFF"}


class Refuses:
    """An operator who does the first thing asked and then stops."""

    def __init__(self, hands):
        self._hands = hands

    def confirm(self, request):
        if self._hands.requests:
            raise OperatorNeeded(request)
        self._hands.confirm(request)


def test_an_operator_who_stops_leaves_the_generator_off(hand_wired, two_bands, tmp_path):
    bench, clock, port = hand_wired
    log, journal = tmp_path / "exchange.log", Journal()
    hands = Refuses(Hands(port, log, {"low_out": "101"}))
    with opened(bench, clock, log) as devices, pytest.raises(OperatorNeeded):
        Sweep(two_bands, bench, devices, clock, hands, journal).run()
    assert {point.stage for point in journal.points} == {"low"}
    assert outputs(told(log))[-1] == "OUTPut:STATe OFF"


def test_bench_time_goes_on_after_a_resume_as_if_nobody_had_been_away():
    """A real computer's monotonic clock begins anew with each start; what the run counts does not."""

    class Restarted:
        def now(self):
            return 7.0

    sweep = Sweep(None, None, None, Restarted(), None, None, start=5000.0)
    sweep.continue_at(2.5)
    assert sweep.stamp() == 5002.5
