"""The generator is off when its controller is gone."""

from __future__ import annotations

import contextlib
import ctypes
import fcntl
import os
import pickle
import select
import signal
import socket
import time
import warnings

import pytest

from bandproof.analysis.network import Network, Resistor
from bandproof.bench.system import detached
from bandproof.drivers import visa
from bandproof.drivers.clock import VirtualClock, create_clock_file
from bandproof.drivers.dialect import parse, source
from bandproof.drivers.generator import Generator
from bandproof.drivers.lifeline import Lifeline, LifelineLost
from bandproof.drivers.link import Link
from bandproof.drivers.session import Session
from bandproof.simulated_instruments.bench import World, start

GENERATOR = source("scpi99-generator")
NETWORK = Network(resistors=(Resistor("R1", "in", "0", 1000.0),), capacitors=(), opamps=())
PR_SET_CHILD_SUBREAPER = 36  # linux/prctl.h


def lifeline(address, *, clock=None, limit=5.0, dialect=GENERATOR, **options):
    return Lifeline.start(
        address,
        dialect_text=dialect,
        visa_library="@py",
        clock_path=clock,
        popen_options=detached() | options,
        limit=limit,
    )


@pytest.fixture
def nowhere():
    """An address that refuses: its port is taken and nobody listens."""
    with socket.socket() as taken:
        taken.bind(("127.0.0.1", 0))
        yield f"TCPIP::127.0.0.1::{taken.getsockname()[1]}::SOCKET"


def generator_at(address, clock):
    dialect = parse(GENERATOR, "generator")
    return Generator(Session(Link(address, clock), dialect.habits), dialect)


# --- Against a simulated bench that outlives the controller -----------------------------------------------------------


class Rig:
    """A simulated bench owned by the test, and a look at its generator's output."""

    def __init__(self, folder):
        self.clock_path = str(folder / "clock")
        create_clock_file(self.clock_path)
        self.clock = VirtualClock(self.clock_path)
        self.bench = start(World(network=NETWORK, scope={1: "in", 2: "in"}, clock=self.clock_path))
        self.address = f"TCPIP::127.0.0.1::{self.bench.ports['generator']}::SOCKET"
        self.session = Session(Link(self.address, self.clock))

    def is_on(self):
        return self.session.ask("OUTPut:STATe?", bytes) == b"1"

    def seconds_until_off(self):
        begin = time.monotonic()
        while self.is_on():
            if time.monotonic() - begin > 5.0:
                pytest.fail("the generator is still on")
        return time.monotonic() - begin

    def end(self):
        self.session.link.close()
        self.clock.close()
        self.bench.stop()


@pytest.fixture(scope="module")
def rig(tmp_path_factory):
    visa.prepare("@py")  # forked controllers then have it loaded
    made = Rig(tmp_path_factory.mktemp("rig"))
    yield made
    made.end()


@pytest.fixture
def reaper():
    """Make orphans children of this process, so that their end is seen: a lifeline outlives its controller."""
    prctl = ctypes.CDLL(None).prctl
    assert prctl(PR_SET_CHILD_SUBREAPER, 1, 0, 0, 0) == 0
    yield
    assert prctl(PR_SET_CHILD_SUBREAPER, 0, 0, 0, 0) == 0


class Controller:
    """A forked process that starts a lifeline, says its number, and drives the generator when told to."""

    def __init__(self, rig):
        told, tell = os.pipe()
        self._order, give = os.pipe()
        with warnings.catch_warnings():
            warnings.simplefilter(
                "ignore", DeprecationWarning
            )  # newer interpreters warn of threads, here there are none
            self.pid = os.fork()
        if self.pid == 0:
            try:
                self._drive(rig, tell, self._order, (told, give))
            finally:
                os._exit(99)
        for handle in (tell, self._order):
            os.close(handle)
        self._told, self._give = told, give
        self.lifeline = int(self._line())

    def _drive(self, rig, tell, order, others):
        for handle in others:
            os.close(handle)
        os.setsid()
        signal.signal(signal.SIGINT, signal.default_int_handler)
        held = lifeline(rig.address, clock=rig.clock_path)
        os.write(tell, f"{held.process.pid}\n".encode())
        os.read(order, 1)
        held.await_ready()
        generator_at(rig.address, rig.clock).output(True)
        os.write(tell, b"on\n")
        select.select([], [], [])

    def _line(self):
        line = b""
        while not line.endswith(b"\n"):
            byte = os.read(self._told, 1)
            assert byte, "the controller has ended"
            line += byte
        return line.decode()

    def switch_on(self):
        os.write(self._give, b"1")
        assert self._line() == "on\n"

    def ended(self):
        """Return the exit codes of the controller and then its lifeline, after both have ended."""
        for handle in (self._told, self._give):
            os.close(handle)
        return [os.waitstatus_to_exitcode(os.waitpid(pid, 0)[1]) for pid in (self.pid, self.lifeline)]


@pytest.fixture
def controllers(rig, reaper):
    made = []

    def make():
        made.append(Controller(rig))
        return made[-1]

    yield make
    for one in made:  # those a failed test left behind
        for pid in (one.pid, one.lifeline):
            with contextlib.suppress(ProcessLookupError, ChildProcessError):
                os.kill(pid, signal.SIGKILL)
                os.waitpid(pid, 0)


def test_the_generator_is_off_within_a_second_of_kill_9_twenty_times_of_twenty(rig, controllers):
    times = []
    for _ in range(20):
        controller = controllers()
        controller.switch_on()
        assert rig.is_on()
        os.kill(controller.pid, signal.SIGKILL)
        times.append(rig.seconds_until_off())
        assert controller.ended() == [-signal.SIGKILL, 0]
    ordered = sorted(times)
    print(f"off after {ordered[0] * 1e3:.1f} / {ordered[10] * 1e3:.1f} / {ordered[-1] * 1e3:.1f} ms")
    assert ordered[-1] < 1.0


@pytest.mark.parametrize("number", [signal.SIGINT, signal.SIGTERM, signal.SIGHUP], ids=lambda number: number.name)
def test_a_signal_to_the_controllers_group_and_to_the_lifeline_itself_leaves_it_at_work(rig, controllers, number):
    controller = controllers()
    controller.switch_on()
    for _ in range(3):
        os.kill(controller.lifeline, number)
    assert rig.is_on()
    os.killpg(controller.pid, number)
    assert rig.seconds_until_off() < 1.0
    for _ in range(3):
        with contextlib.suppress(ProcessLookupError):
            os.kill(controller.lifeline, number)
    assert controller.ended()[1] == 0


def test_a_controller_that_dies_before_its_lifeline_is_ready_leaves_it_to_end_by_itself(rig, controllers):
    controller = controllers()
    os.kill(controller.pid, signal.SIGKILL)
    assert controller.ended() == [-signal.SIGKILL, 0]
    assert not rig.is_on()


def test_leaving_by_an_error_switches_off_and_says_so(rig):
    generator = generator_at(rig.address, rig.clock)
    held = lifeline(rig.address, clock=rig.clock_path)

    def drive():
        with held:
            held.await_ready()
            generator.output(True)
            raise ZeroDivisionError

    with pytest.raises(ZeroDivisionError):
        drive()
    generator.disconnect()
    assert not rig.is_on()
    assert held.close()


def test_after_done_it_leaves_the_generator_alone(rig):
    generator = generator_at(rig.address, rig.clock)
    generator.output(True)  # it would see to that
    with lifeline(rig.address, clock=rig.clock_path) as held:
        held.await_ready()
        held.done()
        assert held.process.returncode == 0
    assert rig.is_on()
    generator.be_safe()
    generator.disconnect()


# --- Against instruments that are not there, or not nice --------------------------------------------------------------


def served(registers, *, dropping=0):
    """Return a behaviour that drops its first connections, then keeps registers; and the list of what it was sent."""
    keeps, heard, connections = registers(), [], []

    def behave(connection, stop):
        connections.append(connection)
        if len(connections) <= dropping:
            return
        with connection.makefile("rb") as lines:
            for line in lines:
                heard.append(line.rstrip(b"\n").decode())
                connection.sendall(keeps(line.rstrip(b"\n")))

    return behave, heard, connections


def test_it_tries_again_until_the_instrument_lets_it_in(loopback, registers):
    behave, heard, connections = served(registers, dropping=3)
    with lifeline(loopback(behave)) as held:
        held.await_ready()
        assert held.close()
    assert len(connections) == 4
    assert heard == ["OUTPut:STATe OFF", "*OPC?", "OUTPut:STATe?"] * 2


def test_getting_ready_and_done_open_no_connection(loopback, registers):
    behave, _, connections = served(registers)
    with lifeline(loopback(behave)) as held:
        held.await_ready()
        held.done()
    assert not connections


def silent(connection, stop):
    while connection.recv(100):
        pass


def still_on(connection, stop):
    with connection.makefile("rb") as lines:
        for line in lines:
            if b"?" in line:
                connection.sendall(b"1\n")


@pytest.mark.parametrize("behave", [None, silent, still_on], ids=["refused", "silent", "still on"])
def test_an_instrument_that_confirms_nothing_is_told_and_nothing_waits_for_ever(loopback, behave, nowhere, capfd):
    address = nowhere if behave is None else loopback(behave)
    with lifeline(address, limit=0.2) as held:
        held.await_ready()
        assert not held.close()
        assert held.process.returncode == 3
    assert capfd.readouterr() == ("", "")


@pytest.mark.parametrize(
    ("options", "words"),
    [
        ({"dialect": "kind = 'generator'"}, "this slot has to be there"),
        ({"dialect": source("scpi99-switch")}, "this one is for a switch"),
        ({"clock": "/nowhere/clock"}, "No such file"),
    ],
    ids=["mistakes", "another kind", "no clock"],
)
def test_a_lifeline_that_cannot_get_ready_says_why(nowhere, options, words):
    held = lifeline(nowhere, **options)
    with pytest.raises(LifelineLost, match=words) as caught:
        held.await_ready()
    assert nowhere in str(caught.value)
    assert str(pickle.loads(pickle.dumps(caught.value))) == str(caught.value)
    assert held.process.returncode is not None


def test_a_lifeline_that_is_gone_is_missed_before_and_after_it_was_ready(nowhere):
    for was_ready in (False, True):
        held = lifeline(nowhere)
        if was_ready:
            held.await_ready()
            held.await_ready()
        held.process.kill()
        held.process.wait()
        assert not held.is_alive
        with pytest.raises(LifelineLost, match="it has ended"):
            held.await_ready()


def test_a_lifeline_that_does_not_get_ready_in_time_is_ended(nowhere):
    held = lifeline(nowhere)
    held.process.send_signal(signal.SIGSTOP)
    with pytest.raises(LifelineLost, match="not ready within 0 s"):
        held.await_ready(0.0)
    assert held.process.returncode == -signal.SIGKILL


def test_a_lifeline_holds_no_lock_of_its_controller_and_leads_a_session(nowhere, tmp_path):
    first = os.open(tmp_path / "lock", os.O_RDWR | os.O_CREAT)
    os.set_inheritable(first, True)
    fcntl.flock(first, fcntl.LOCK_EX)
    with lifeline(nowhere) as held:
        held.await_ready()
        os.close(first)
        second = os.open(tmp_path / "lock", os.O_RDWR)
        fcntl.flock(second, fcntl.LOCK_EX | fcntl.LOCK_NB)
        os.close(second)
        assert os.getsid(held.process.pid) == held.process.pid
        held.done()


def test_a_lifeline_loads_nothing_from_the_folder_it_is_started_in(nowhere, tmp_path):
    (tmp_path / "json.py").write_text("raise SystemExit(77)\n")
    with lifeline(nowhere, cwd=tmp_path) as held:
        held.await_ready()
        held.done()
    assert held.process.returncode == 0
