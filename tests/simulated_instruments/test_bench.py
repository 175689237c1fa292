"""The bench as a process: what comes over TCP, time, records, broken clients, its end."""

import contextlib
import json
import os
import select
import signal
import socket
import subprocess
import sys

import numpy as np
import pytest

from bandproof.analysis.network import response
from bandproof.simulated_instruments.bench import BenchNotStarted, World, instruments, start
from bandproof.simulated_instruments.faults import Fault, FaultPlan
from bandproof.simulated_instruments.imperfections import RANGES, Imperfections, Sizes
from bandproof.simulated_instruments.timebase import RealTimebase, VirtualTimebase

QUIET_NOISE = Imperfections(adc_bits=8, noise=0.5)


def prepare(clients, frequency=480.0, points=4096):
    """Set everything to a sweep's first point."""
    clients["generator"].send(f"*RST;FREQ {frequency};VOLT 1;:OUTP ON")
    assert clients["generator"].ask("SYST:ERR?") == '0,"No error"'
    clients["switch"].send("ROUT:CLOS (@101)")
    assert clients["switch"].ask("SYST:ERR?") == '0,"No error"'
    clients["scope"].send(f"*RST;:SENS1:VOLT:RANG 2;:SENS2:VOLT:RANG 10;:SENS:SWE:POIN {points};TIME {points * 1e-5}")
    assert clients["scope"].ask("SYST:ERR?") == '0,"No error"'


@pytest.fixture
def clients(bench, connect):
    def make(**changes):
        return {name: connect(port) for name, port in bench(**changes).ports.items()}

    return make


def test_records_are_the_networks_response(clients, clock, record, band):
    bench = clients()
    prepare(bench)
    clock.wait(1.0)
    one, two = record(bench["scope"])
    angle = 2 * np.pi * 480.0 * 1e-5 * np.arange(4096)
    phasors = []
    basis = np.stack([np.cos(angle), np.sin(angle), np.ones_like(angle)], axis=1)
    for channel in (one, two):
        a, b, _ = np.linalg.lstsq(basis, channel.astype(float), rcond=None)[0]
        phasors.append(a - 1j * b)
    expected = response(band, [480.0], ["in", "out"])[:, 0]
    # an ideal bench: what is left is the rounding of 32-bit volts
    assert phasors[1] / phasors[0] == pytest.approx(expected[1] / expected[0], rel=1e-6)
    assert abs(phasors[0]) == pytest.approx(1.0, rel=1e-6)


def test_integer_and_text_records_agree_with_real_ones(clients, clock, record):
    bench = clients(imperfections=QUIET_NOISE)
    prepare(bench, points=100)
    clock.wait(1.0)
    _, volts = record(bench["scope"])
    bench["scope"].send("FORM INT,16;:FORM:BORD SWAP")
    codes = np.frombuffer(bench["scope"].block("TRAC? CH2"), "<i2")
    assert codes * (10 / 32768) == pytest.approx(volts, abs=1e-6)
    bench["scope"].send("FORM ASC")
    texts = [float(text) for text in bench["scope"].ask("TRAC? CH2").split(",")]
    assert texts == pytest.approx(volts, abs=1e-6)
    assert bench["scope"].ask("SYST:ERR?;:FORM?") == '0,"No error";ASC,0'


def test_codes_are_steps_of_the_range_and_end_codes_read_exactly(clients, clock, record):
    bench = clients(imperfections=QUIET_NOISE)
    prepare(bench)
    bench["scope"].send("SENS1:VOLT:RANG 0.5;RANG:OFFS 0.1")
    assert bench["scope"].ask("SENS1:VOLT:RANG?;:SYST:ERR?") == '0.5;0,"No error"'
    clock.wait(1.0)
    one, _ = record(bench["scope"])
    steps = (one.astype(float) - 0.1) / (0.5 / 128)
    assert steps == pytest.approx(np.rint(steps), abs=1e-4)
    assert one.min() == np.float32(-0.5 + 0.1)
    assert one.max() == np.float32(0.5 * (1 - 1 / 128) + 0.1)


@pytest.mark.parametrize(
    ("asked", "given"), [(0.001, None), (0.01, 0.01), (0.011, 0.02), (1.0, 1.0), (3.1, 5.0), (50, 50)]
)
def test_range_rounds_up_to_steps_of_1_2_5(clients, asked, given):
    scope = clients()["scope"]
    scope.send(f"SENS1:VOLT:RANG {asked}")
    reply, number = scope.ask("SENS1:VOLT:RANG?;:SYST:ERR?").split(";", 1)
    assert float(reply) == (10.0 if given is None else given)
    assert number.startswith("-222" if given is None else "0,")


def test_generator_rounds_silently_and_refuses_more_than_it_has(clients):
    generator = clients(imperfections=Imperfections.reference(3))["generator"]
    assert generator.ask("VOLT 0.12345;VOLT?;:FREQ 1000.12345678;FREQ?;:SYST:ERR?") == '0.123;1000.123457;0,"No error"'
    generator.send("VOLT 8;VOLT:OFFS 3")
    assert generator.ask("VOLT:OFFS?;:SYST:ERR?").startswith("0;-221,")


def test_scope_refuses_what_it_does_not_model(clients):
    scope = clients()["scope"]
    scope.send("TRIG:SOUR EXT")
    scope.send("CALC:MATH?")
    scope.send("TRAC? CH1")
    assert [scope.ask("SYST:ERR?").split(",")[0] for _ in range(4)] == ["-141", "-113", "-230", "0"]


def test_arming_twice_is_refused_and_abort_frees(clients):
    scope = clients()["scope"]
    scope.send("SENS:SWE:TIME 10;:INIT;INIT")
    assert scope.ask("SYST:ERR?").startswith("-213")
    scope.send("ABOR;INIT")
    assert scope.ask("SYST:ERR?").startswith("0,")


def test_switch_closes_one_route_at_a_time(clients):
    switch = clients()["switch"]
    switch.send("ROUT:CLOS (@101)")
    switch.send("ROUT:CLOS (@102)")
    assert switch.ask("ROUT:CLOS? (@101,102);:ROUT:CLOS:STAT?") == "0,1;(@102)"
    switch.send("ROUT:CLOS (@101,102);:ROUT:CLOS (@7)")
    assert switch.ask("SYST:ERR?;ERR?").count("-224") == 2
    assert switch.ask("ROUT:OPEN:ALL;:ROUT:CLOS? (@101,102)") == "0,0"


def test_instruments_take_the_time_they_are_said_to_take(clients, clock):
    bench = clients()
    start_time = clock.now()
    bench["generator"].send("FREQ 480")
    bench["generator"].ask("*OPC?")
    assert clock.now() - start_time == pytest.approx(0.2e-3 + 5e-3 + 0.2e-3)
    start_time = clock.now()
    bench["switch"].send("ROUT:CLOS (@101)")
    bench["switch"].ask("*OPC?")
    assert clock.now() - start_time == pytest.approx(0.2e-3 + 20e-3 + 0.2e-3)
    bench["scope"].send("SENS:SWE:POIN 1000;TIME 0.25")
    bench["scope"].ask("*OPC?")
    start_time = clock.now()
    bench["scope"].send("INIT")
    bench["scope"].ask("*OPC?")
    assert clock.now() - start_time == pytest.approx(0.2e-3 + 10e-3 + 0.25)
    start_time = clock.now()
    assert len(bench["scope"].block("TRAC? CH1")) == 4000
    assert clock.now() - start_time == pytest.approx(0.2e-3 + 4006 / 4e6)


def test_virtual_time_never_moves_backwards(clients, clock):
    bench, seen = clients(), [0.0]
    for turn in range(60):
        name = ("generator", "scope", "switch")[turn % 3]
        bench[name].ask("*RST;*OPC?" if turn % 2 else "*IDN?")
        seen.append(clock.now())
        if turn % 4 == 0:
            clock.wait(0.7)
            seen.append(clock.now())
    assert seen == sorted(seen)
    assert len(set(seen)) == len(seen)


def test_virtual_time_base_does_not_go_back_and_ignores_never(tmp_path):
    base = VirtualTimebase(tmp_path / "time")
    base.reach(5.0)
    base.reach(3.0)
    base.reach(float("inf"))
    assert base.now() == 5.0


def test_file_too_short_for_time_is_refused(tmp_path):
    (tmp_path / "time").write_bytes(b"short")
    with pytest.raises(ValueError, match="no time file: it has 5 bytes"):
        VirtualTimebase(tmp_path / "time")


def bench_records(clients, clock, record, marks, **changes):
    bench, found = clients(imperfections=Imperfections.reference(4), **changes), []
    for step, attempt in marks:
        clock.mark(step, attempt)
        prepare(bench)
        clock.wait(0.5)
        found.append(record(bench["scope"]))
        assert np.array_equal(found[-1][1], np.frombuffer(bench["scope"].block("TRAC? CH2"), ">f4"))
    return found


def test_same_seed_step_and_attempt_give_the_same_record_and_others_do_not(clients, clock, record):
    marks = [(1, 1), (1, 1), (1, 2), (2, 1)]
    hum_free = Imperfections.draw(4, Sizes(drift=0.0))
    bench = clients(imperfections=hum_free)
    found = []
    for step, attempt in marks:
        clock.mark(step, attempt)
        prepare(bench)
        clock.wait(0.5)
        found.append(record(bench["scope"]))
    assert np.array_equal(found[0], found[1])
    assert not np.array_equal(found[0][0], found[2][0])
    assert not np.array_equal(found[0][0], found[3][0])
    assert not np.array_equal(found[2][0], found[3][0])


def test_two_processes_of_one_seed_give_identical_records(clients, clock, record):
    marks = [(1, 1), (2, 1)]
    first = bench_records(clients, clock, record, marks)
    clock.path.unlink()
    assert np.array_equal(first, bench_records(clients, clock, record, marks))


def test_another_run_has_other_noise_on_the_same_bench(clients, clock, record):
    first = bench_records(clients, clock, record, [(1, 1)])
    clock.path.unlink()
    second = bench_records(clients, clock, record, [(1, 1)], run=1)
    assert not np.array_equal(first[0][0], second[0][0])
    assert (
        np.abs(first[0][0].astype(float) - second[0][0]).max() < 2 / 128 * 6
    )  # codes of a 2 V range, noise of 0.5 LSB


def test_noise_has_the_declared_size(clients, clock, record):
    bench = clients(imperfections=Imperfections(adc_bits=8, noise=2.0))
    bench["scope"].send("SENS:SWE:POIN 100000;TIME 0.1;:SENS1:VOLT:RANG 1")
    bench["scope"].ask("*OPC?")
    one, _ = record(bench["scope"])
    # 2 LSB rms and the rounding's 1/12 LSB^2; 100000 samples: 4 standard errors of a standard deviation
    assert one.std() * 128 == pytest.approx(np.sqrt(4 + 1 / 12), rel=4 / np.sqrt(2e5))


BROKEN = [
    pytest.param(b"", id="says nothing"),
    pytest.param(b"*IDN?", id="no newline"),
    pytest.param(b"\x00\xff\n\n\n;;:::\n", id="junk"),
    pytest.param(b"DATA:BLOC #9999999999", id="endless block announced"),
    pytest.param(b"TRAC? CH1\n" * 2000, id="asks without reading"),
    pytest.param(b"*IDN?\n" * 50000, id="asks very much without reading"),
    pytest.param(b"A" * 3_000_000, id="3 MB without newline"),
]


@pytest.mark.parametrize("sent", BROKEN)
@pytest.mark.parametrize("reset", [False, True], ids=["closes", "resets"])
def test_server_survives_a_client_that(world, served, connect, sent, reset):
    timebase = RealTimebase()
    scope = instruments(world(), timebase, FaultPlan((), timebase))["scope"]
    with served(scope) as port:
        for _ in range(3):
            broken = socket.create_connection(("127.0.0.1", port), 5.0)
            broken.setblocking(False)
            with contextlib.suppress(BlockingIOError):
                broken.send(sent)
            if reset:
                broken.setsockopt(socket.SOL_SOCKET, socket.SO_LINGER, b"\x01\x00\x00\x00\x00\x00\x00\x00")
            broken.close()
        assert connect(port).ask("*CLS;*IDN?").startswith("BANDPROOF,")


def test_other_clients_are_answered_while_one_does_not_read(bench, connect):
    port = bench().ports["scope"]
    connect(port).send(b"*IDN?\n" * 200_000)
    assert connect(port).ask("*OPC?") == "1"


def test_message_over_1_MB_becomes_an_error_entry(bench, connect):
    scope = connect(bench().ports["scope"])
    scope.send(b"A" * 1_100_000 + b"\n")
    assert scope.ask("SYST:ERR?") == '-363,"Input buffer overrun"'


def test_process_ends_when_its_standard_input_closes(bench):
    running = bench()
    running.process.stdin.close()
    assert running.process.wait(5.0) == 0


def test_process_ends_when_its_parent_is_killed(world):
    child = (
        "import json, os, sys\n"
        "from bandproof.simulated_instruments.bench import World, start\n"
        "bench = start(World.from_plain(json.loads(sys.argv[1])))\n"
        "print(bench.process.pid, flush=True)\n"
        "sys.stdin.read()\n"
    )
    command = [sys.executable, "-c", child, json.dumps(world().as_plain())]
    with subprocess.Popen(command, stdin=subprocess.PIPE, stdout=subprocess.PIPE, text=True) as parent:
        pid = int(parent.stdout.readline())
        watched = os.pidfd_open(pid)
        parent.kill()
    poll = select.poll()
    poll.register(watched)
    assert poll.poll(5000), "the server outlived its parent by 5 s"
    os.close(watched)


def test_interrupt_from_the_terminal_does_not_reach_the_server(bench, connect):
    running = bench()
    assert os.getsid(running.process.pid) != os.getsid(0)
    assert connect(running.ports["scope"]).ask("*OPC?") == "1"


def test_netlist_is_served_in_real_time_until_ctrl_c(tmp_path, connect):
    path = tmp_path / "board.cir"
    path.write_text("title\nV1 in 0 rs=50\nR1 in out 1k\nC1 out 0 100n\n")
    command = [sys.executable, "-m", "bandproof.simulated_instruments", str(path), "--ideal"]
    with subprocess.Popen(command, stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True) as process:
        addresses = dict(process.stdout.readline().split() for _ in range(3))
        assert set(addresses) == {"generator", "scope", "switch"}
        kind, host, port, end = addresses["generator"].split("::")
        assert (kind, host, end) == ("TCPIP", "127.0.0.1", "SOCKET")
        generator = connect(int(port))
        generator.send("FREQ 480;VOLT 1;:OUTP ON")
        assert generator.ask("*OPC?;:OUTP?") == "1;1"
        process.send_signal(signal.SIGINT)
        assert process.wait(5.0) == 0
        assert process.stderr.read() == ""


def test_world_survives_json(world):
    given = world(imperfections=Imperfections.reference(9), faults=(Fault("late-answer", 3, "generator"),), seed=5)
    assert World.from_plain(json.loads(json.dumps(given.as_plain()))) == given


def test_world_with_an_unknown_node_says_so_when_it_is_started(world):
    with pytest.raises(BenchNotStarted, match="no node 'elsewhere'"):
        start(world(scope={1: "in", 2: "elsewhere"}))


def test_imperfections_are_within_their_sizes_and_differ_between_seeds():
    sizes = Sizes()
    drawn = [Imperfections.draw(seed, sizes) for seed in range(200)]
    gains = np.array([one.channel_gain for one in drawn])
    assert np.abs(gains).max() <= sizes.channel_gain
    assert np.abs(gains).max() > 0.95 * sizes.channel_gain  # 400 uniform draws: missed with probability 1e-9
    assert np.abs(np.array([one.range_gain for one in drawn])).max() <= sizes.range_gain
    assert len({one.frequency_error for one in drawn}) == 200
    assert len(drawn[0].range_gain[0]) == len(RANGES)


@pytest.mark.parametrize(
    "name", ["flatness", "channel_gain", "range_gain", "skew", "hum", "drift", "probe_compensation"]
)
def test_switching_one_imperfection_off_leaves_the_others_as_drawn(name):
    drawn, without = Imperfections.reference(7).as_plain(), Imperfections.draw(7, Sizes(**{name: 0.0})).as_plain()
    assert not np.any(without.pop(name))
    assert np.any(drawn.pop(name))
    assert without == drawn


def test_negative_size_is_refused():
    with pytest.raises(ValueError, match="skew must not be negative"):
        Sizes(skew=-1e-9)
