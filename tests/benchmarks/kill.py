"""kill -9 at random instants of a sweep: no finished point lost, no unreadable file, every resume completes.

A simulated bench that outlives its controllers; each controller is a fork of this process that sweeps one band through
the command line, its records kept, and is killed. Then its lifeline, its journal and its files are looked at, and the
run is resumed (every fourth resume is killed too, once). POSIX only, as the forks are.

Bounds: 0 points lost, 0 unreadable files, 0 failed resumes, output off within 1 s each time, no process left.
"""

from __future__ import annotations

import contextlib
import ctypes
import os
import select
import signal
import socket
import tempfile
import time
import warnings
from collections.abc import Callable, Iterator
from dataclasses import dataclass, field, replace
from pathlib import Path
from typing import Any

import numpy as np

from bandproof.bench import finish
from bandproof.bench.board_file import parse_board
from bandproof.bench.circuit import draw_parts
from bandproof.bench.errors import BadInput
from bandproof.bench.finish import RUN
from bandproof.bench.journal import JOURNAL, Journal
from bandproof.bench.rehearsal import DEMO_BOARD, demo_text, rehearsal_bench
from bandproof.bench.runfile import read_run
from bandproof.bench.verbs.console import run
from bandproof.bench.verbs.rehearse import world_of
from bandproof.drivers.clock import create_clock_file
from bandproof.simulated_instruments.bench import Bench, start

COUNT = 300
SEED = 9
OFF_BOUND = 1.0  # s by the wall
PATIENCE = 60.0  # s for anything that should end by itself; a time-out is a failure
PASS = 0
_SUBREAPER = 36  # PR_SET_CHILD_SUBREAPER of linux/prctl.h


class Rig:
    """A simulated bench in virtual time, the files to sweep one band on it, and a look at its generator."""

    def __init__(self, folder: Path) -> None:
        head, first, *_ = demo_text(DEMO_BOARD).split("\n[stages.")
        self.board, self.bench, self.folder = folder / "one.board.toml", folder / "one.bench.toml", folder
        self.board.write_text(f"{head}\n[stages.{first}\n")
        self._serial = 0
        create_clock_file(folder / "bench.time")
        self.server = self._started(folder)
        assert quietly(self.new_run()[0]) == PASS  # loads everything: forks then have it

    def _started(self, folder: Path) -> Bench:
        board = parse_board(self.board.read_text(), "one band")
        bench = rehearsal_bench(board)
        world = world_of(board, bench, draw_parts(board, 1), 1, 1)
        server = start(replace(world, clock=str(folder / "bench.time")))
        text = bench.text.replace("\nmains ", '\nsimulated_clock = "bench.time"\nmains ')
        for role, instrument in bench.instruments.items():
            text = text.replace(instrument.address, f"TCPIP::127.0.0.1::{server.ports[role]}::SOCKET")
        self.bench.write_text(text)
        return server

    def new_run(self) -> tuple[list[str], Path]:
        """Return the command line of another sweep and the folder its attempt will have."""
        self._serial += 1
        serial = str(self._serial)
        command = ["sweep", str(self.board), "--bench", str(self.bench), "--serial", serial, "--raw"]
        return [*command, "--folder", str(self.folder)], self.folder / serial / "1"

    @contextlib.contextmanager
    def look(self) -> Iterator[Callable[[], bool]]:
        """Yield a question over a connection of its own: is the output on?"""
        with socket.create_connection(("127.0.0.1", self.server.ports["generator"]), 5.0) as connection:

            def is_on() -> bool:
                connection.sendall(b"OUTP?\n")
                return connection.recv(100) == b"1\n"

            yield is_on

    def seconds_until_off(self) -> float:
        """Return how long the output stayed on from now, at most PATIENCE."""
        begin = time.monotonic()
        with self.look() as is_on:
            while is_on() and time.monotonic() - begin < PATIENCE:
                pass
        return time.monotonic() - begin

    def is_on(self) -> bool:
        """Whether the output is on."""
        with self.look() as is_on:
            return is_on()


@contextlib.contextmanager
def rig(folder: Path) -> Iterator[Rig]:
    """Yield a rig; orphans of its controllers become children of this process meanwhile, so that their end is seen."""
    prctl = ctypes.CDLL(None).prctl
    made = Rig(folder)
    assert prctl(_SUBREAPER, 1, 0, 0, 0) == 0
    try:
        yield made
    finally:
        made.server.stop()
        assert prctl(_SUBREAPER, 0, 0, 0, 0) == 0


def quietly(arguments: list[str]) -> int:
    """Carry out a command line in this process without a word; return its exit code."""
    with open(os.devnull, "w") as nothing, contextlib.redirect_stdout(nothing), contextlib.redirect_stderr(nothing):
        return run(arguments)


class Controller:
    """A forked process that carries out a command line; `prepare` is called in it first, with itself.

    In the child, `halt` tells the parent and waits for its word; `count` tells of a finished point.
    """

    def __init__(self, arguments: list[str], prepare: Callable[[Controller], None] = lambda controller: None) -> None:
        told, self._tell = os.pipe()
        self._order, give = os.pipe()
        with warnings.catch_warnings():
            warnings.simplefilter("ignore", DeprecationWarning)  # newer interpreters warn of threads: there are none
            self.pid = os.fork()
        if self.pid == 0:
            self._carry_out(arguments, prepare, (told, give))
        for handle in (self._tell, self._order):
            os.close(handle)
        self._told, self._give, self._heard = told, give, b""
        self.code: int | None = None

    def _carry_out(self, arguments: list[str], prepare: Callable[[Controller], None], others: tuple[int, ...]) -> None:
        code = 99
        try:
            for handle in others:
                os.close(handle)
            signal.signal(signal.SIGINT, signal.default_int_handler)
            # The typesetter's threads do not live on in a fork of a process that has used it: a report would never end.
            patch(finish, "_reported", lambda real: lambda run, stages, result, *rest: result)
            patch(Journal, "measured", lambda real: lambda *a, **k: (real(*a, **k), os.write(self._tell, b"."))[0])
            prepare(self)
            code = quietly(arguments)
        finally:
            os._exit(code)

    def halt(self) -> None:
        """Tell the parent that a state is reached and wait until it says go on, or kills."""
        os.write(self._tell, b"h")
        os.read(self._order, 1)

    def go_on(self) -> None:
        """Let a halted controller go on."""
        os.write(self._give, b"g")

    def await_halt(self) -> None:
        """Wait until the controller has halted, once more each time (AssertionError: it ended)."""
        byte = b""
        while byte != b"h":
            ready, _, _ = select.select([self._told], [], [], PATIENCE)
            byte = os.read(self._told, 1) if ready else b""
            assert byte, "the controller ended, or hangs, before the state was reached"
            self._heard += byte

    def kill_after(self, delay: float) -> None:
        """Kill it after so many seconds by the wall, or earlier when it ends."""
        handle = os.pidfd_open(self.pid)
        select.select([handle], [], [], delay)
        os.close(handle)
        os.kill(self.pid, signal.SIGKILL)

    def ended(self) -> int:
        """Wait for its end; return its exit code, minus the signal's number if it was killed."""
        if self.code is None:
            self.code = _ended(self.pid)
            while data := os.read(self._told, 4096):
                self._heard += data
            for handle in (self._told, self._give):
                os.close(handle)
        return self.code

    @property
    def finished(self) -> int:
        """How many points it had finished."""
        return self._heard.count(b".")


def patch(owner: object, name: str, change: Callable[[Callable[..., Any]], Callable[..., Any]]) -> None:
    """Put what `change` makes of an attribute in its place, for the rest of this process: a fork's."""
    setattr(owner, name, change(getattr(owner, name)))


def _ended(pid: int) -> int:
    handle = os.pidfd_open(pid)
    ready, _, _ = select.select([handle], [], [], PATIENCE)
    os.close(handle)
    if not ready:
        os.kill(pid, signal.SIGKILL)
    code = os.waitstatus_to_exitcode(os.waitpid(pid, 0)[1])
    assert ready, f"process {pid} did not end"
    return code


def children() -> set[int]:
    """Return the processes whose parent this one is."""
    text = "".join(path.read_text() for path in Path("/proc/self/task").glob("*/children"))
    return {int(word) for word in text.split()}


@dataclass
class Tally:
    """What a number of kills came to."""

    kills: int = 0
    were_on: int = 0
    points: int = 0
    lost: int = 0
    unreadable: int = 0
    failed_resumes: int = 0
    left_on: int = 0
    processes_left: int = 0
    off: list[float] = field(default_factory=list)
    during: dict[str, int] = field(default_factory=dict)
    problems: list[str] = field(default_factory=list)

    def is_good(self) -> bool:
        """Whether nothing was lost and the output was off in time each time."""
        return not self.problems and max(self.off) < OFF_BOUND

    def blame(self, what: str, words: str) -> None:
        """Count something that must not happen."""
        setattr(self, what, getattr(self, what) + 1)
        self.problems.append(f"{what}: {words}")


class Aftermath:
    """The procedure after a death: look at generator, processes, journal and files, resume, compare."""

    def __init__(self, bench: Rig, tally: Tally) -> None:
        self.bench, self.tally = bench, tally

    def of_kill(self, controller: Controller, folder: Path) -> None:
        """Look at what a killed controller left; `folder` is its attempt's."""
        before = {self.bench.server.process.pid, os.getpid()}
        self.tally.were_on += self.bench.is_on()
        off = self.bench.seconds_until_off()
        self.tally.kills += 1
        self.tally.off.append(off)
        controller.ended()
        for pid in children() - before:
            _ended(pid)  # its lifeline
        if self.bench.is_on():
            self.tally.blame("left_on", f"{folder}: on after its lifeline ended")
        if left := children() - before:
            self.tally.blame("processes_left", f"{folder}: {left}")
        self._files(folder)
        kept = self._points(folder)
        self.tally.points += controller.finished
        if len(kept) < controller.finished:
            self.tally.blame("lost", f"{folder}: {len(kept)} of {controller.finished} points")

    def resume(self, folder: Path) -> None:
        """Resume a run and compare it with its journal before."""
        if not (journal := _journal(folder)):
            self._count("before its journal's head")
            return
        before = list(journal.points)
        if journal.end is not None and journal.end["ended"] == "complete":
            self._count("after its end")
        else:
            self._count("in its sweep" if len(before) < len(journal.steps) or not before else "between sweep and end")
            code = Controller(["resume", str(folder)]).ended()
            if code != PASS:
                self.tally.blame("failed_resumes", f"{folder}: exit code {code}")
                return
        self._files(folder)
        after = read_run(folder / RUN)
        if after.ended != "complete" or len(after.points) != len(after.steps) or len(after.steps) < 10:
            self.tally.blame("failed_resumes", f"{folder}: {len(after.points)} of {len(after.steps)} points")
        if list(after.points[: len(before)]) != before:
            self.tally.blame("lost", f"{folder}: points changed by the resume")
        if self.bench.is_on():
            self.tally.blame("left_on", f"{folder}: on after its resume")

    def _count(self, when: str) -> None:
        self.tally.during[when] = self.tally.during.get(when, 0) + 1

    def _points(self, folder: Path) -> list[object]:
        journal = _journal(folder)
        return list(journal.points) if journal else []

    def _files(self, folder: Path) -> None:
        for path in folder.glob("*.h5"):
            try:
                read_run(path)
            except BadInput as problem:
                self.tally.blame("unreadable", str(problem))


def _journal(folder: Path) -> Journal | None:
    """Return a run's journal, None where not even its head was whole."""
    if not (folder / JOURNAL).exists() or b"\n" not in (folder / JOURNAL).read_bytes():
        return None
    return Journal.peeked(folder)


def kill_at_random(bench: Rig, count: int, seed: int) -> Tally:
    """Kill that many sweeps, each at an instant drawn evenly over what one takes, and resume each."""
    draw, tally = np.random.default_rng(seed), Tally()
    aftermath = Aftermath(bench, tally)
    usual = _usual(bench)
    for number in range(count):
        arguments, folder = bench.new_run()
        controller = Controller(arguments)
        controller.kill_after(draw.uniform(0.0, 1.05 * usual))
        aftermath.of_kill(controller, folder)
        if number % 4 == 3 and _is_unfinished(folder):
            controller = Controller(["resume", str(folder)])
            controller.kill_after(draw.uniform(0.0, usual))
            before = len(Journal.peeked(folder).points)
            aftermath.of_kill(controller, folder)
            if len(Journal.peeked(folder).points) < before:
                tally.blame("lost", f"{folder}: by a killed resume")
        aftermath.resume(folder)
    return tally


def _is_unfinished(folder: Path) -> bool:
    journal = _journal(folder)
    return journal is not None and journal.end is None


def _usual(bench: Rig) -> float:
    """Return the s that a whole run takes (the median of three)."""
    times = []
    for _ in range(3):
        begin = time.monotonic()
        assert Controller(bench.new_run()[0]).ended() == PASS
        times.append(time.monotonic() - begin)
    return sorted(times)[1]


def main(count: int = COUNT) -> bool:
    """Print what the kills came to; return whether nothing was lost and the output was off in time."""
    with tempfile.TemporaryDirectory() as folder, rig(Path(folder)) as bench:
        tally = kill_at_random(bench, count, SEED)
    off = sorted(tally.off)
    print(
        f"{tally.kills} kills of {count} runs: " + ", ".join(f"{n} {when}" for when, n in sorted(tally.during.items()))
    )
    print(f"{tally.points} points finished before a kill, {tally.lost} lost (bound 0)")
    print(f"output still seen on after {tally.were_on} kills")
    print(f"unreadable files {tally.unreadable}, failed resumes {tally.failed_resumes} (bound 0)")
    print(f"generator left on {tally.left_on}, processes left {tally.processes_left} (bound 0)")
    print(
        f"off after {off[len(off) // 2] * 1e3:.0f} ms (median), {off[-1] * 1e3:.0f} ms (slowest; bound {OFF_BOUND:g} s)"
    )
    for problem in tally.problems[:20]:
        print(f"  {problem}")
    return tally.is_good()
