"""How a simulated bench ends: at once when told to, and by itself when its owner dies, after the outputs are off."""

import json
import os
import select
import subprocess
import sys
import threading
from contextlib import contextmanager

import pytest

from bandproof.simulated_instruments.bench import serve_until_closed, start

PATIENCE = 5.0  # s: an end takes some ms
LOOKS = 0.1  # s: some looks of the server at its outputs
LONG = 60.0  # s: longer than any test


@pytest.fixture
def owned(world):
    """Serve a world from a thread; gives the owner's end of its input, its ports and a way to see it end."""

    @contextmanager
    def make(linger):
        reading, writing = os.pipe()
        answer_reading, answer_writing = os.pipe()
        with (
            open(reading) as source,
            open(writing, "w") as owner,
            open(answer_reading) as answers,
            open(answer_writing, "w") as target,
        ):
            serving = {"target": serve_until_closed, "args": (source, target), "kwargs": {"linger": linger}}
            thread = threading.Thread(**serving, daemon=True)
            owner.write(json.dumps(world().as_plain()) + "\n")
            owner.flush()
            thread.start()

            def ends(patience=PATIENCE):
                thread.join(patience)
                return not thread.is_alive()

            try:
                yield owner, json.loads(answers.readline()), ends
            finally:
                if not owner.closed:
                    owner.write("stop\n")
                    owner.flush()
                assert ends()

    return make


def on(connect, port):
    generator = connect(port)
    assert generator.ask("VOLT 1;:OUTP ON;*OPC?;:OUTP?") == "1;1"
    return generator


def test_told_to_stop_it_ends_at_once_though_the_output_is_on(owned, connect):
    with owned(LONG) as (owner, ports, ends):
        on(connect, ports["generator"])
        owner.write("stop\n")
        owner.flush()
        assert ends()


def test_other_lines_are_no_reason_to_end(owned, connect):
    with owned(LONG) as (owner, ports, ends):
        owner.write("go on\n\n")
        owner.flush()
        assert on(connect, ports["generator"]).ask("OUTP?") == "1"
        assert not ends(LOOKS)


def test_left_alone_it_serves_until_the_output_is_off_and_that_was_answered(owned, connect):
    with owned(LONG) as (owner, ports, ends):
        controller = on(connect, ports["generator"])
        owner.close()
        controller.close()
        assert not ends(LOOKS), "nobody is connected, but the output is on"
        guard = connect(ports["generator"])
        assert guard.ask("OUTP?") == "1"
        assert guard.ask("OUTP OFF;*OPC?") == "1"
        assert guard.ask("OUTP?") == "0", "who switched it off may look"
        assert not ends(LOOKS)
        guard.close()
        assert ends()


def test_left_alone_with_the_output_off_it_ends(owned, connect):
    with owned(LONG) as (owner, ports, ends):
        assert connect(ports["scope"]).ask("*OPC?") == "1"
        owner.close()
        assert ends()


def test_left_alone_with_the_output_on_it_ends_all_the_same(owned, connect):
    with owned(0.2) as (owner, ports, ends):
        on(connect, ports["generator"])
        owner.close()
        assert ends()


def test_handle_stops_its_process_without_lingering_and_may_do_so_twice(bench, connect):
    running = bench()
    on(connect, running.ports["generator"])
    running.stop(patience=1.5)  # less than it lingers when left alone; then it would be killed
    running.stop()
    assert running.process.returncode == 0


def controller(world):
    """A process that starts a bench, switches its output on, tells pid and port, and waits to be killed."""
    program = (
        "import json, socket, sys\n"
        "from bandproof.simulated_instruments.bench import World, start\n"
        "bench = start(World.from_plain(json.loads(sys.argv[1])))\n"
        "generator = socket.create_connection(('127.0.0.1', bench.ports['generator']))\n"
        "generator.sendall(b'VOLT 1;:OUTP ON;*OPC?\\n')\n"
        "assert generator.recv(10) == b'1\\n'\n"
        "print(json.dumps([bench.process.pid, bench.ports['generator']]), flush=True)\n"
        "sys.stdin.read()\n"
    )
    command = [sys.executable, "-c", program, json.dumps(world.as_plain())]
    return subprocess.Popen(command, stdin=subprocess.PIPE, stdout=subprocess.PIPE, text=True)


def test_generator_of_a_killed_controller_can_still_be_switched_off(world, connect):
    with controller(world()) as process:
        pid, port = json.loads(process.stdout.readline())
        watched = os.pidfd_open(pid)
        process.kill()
    guard = connect(port)
    assert guard.ask("OUTP?;:OUTP OFF;*OPC?") == "1;1"
    guard.close()
    poll = select.poll()
    poll.register(watched)
    assert poll.poll(1000 * PATIENCE), "the server outlived its owner"
    os.close(watched)


def test_bench_outlives_a_controller_that_did_not_start_it(bench, connect):
    """Whoever started it holds its standard input: a test can kill a controller and look at the instruments."""
    port = bench().ports["generator"]
    program = (
        "import socket, sys\n"
        "generator = socket.create_connection(('127.0.0.1', int(sys.argv[1])))\n"
        "generator.sendall(b'OUTP ON;*OPC?\\n')\n"
        "print(generator.recv(10), flush=True)\n"
        "sys.stdin.read()\n"
    )
    command = [sys.executable, "-c", program, str(port)]
    with subprocess.Popen(command, stdin=subprocess.PIPE, stdout=subprocess.PIPE, text=True) as process:
        process.stdout.readline()
        process.kill()
    assert connect(port).ask("OUTP?") == "1"


@pytest.mark.parametrize("alone", [True, False])
def test_options_of_the_process_are_the_callers_choice(world, alone):
    with start(world(), process_options={"start_new_session": alone}) as running:
        assert (os.getsid(running.process.pid) != os.getsid(0)) is alone
