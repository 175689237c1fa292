"""Whatever ends a sweep, the generator is off, what was measured is kept, and the run can go on.

The procedure and its bounds are those of ``python -m tests.benchmarks kill``, which kills 300 sweeps.
"""

import os
import signal
from pathlib import Path

import pytest

from bandproof.bench import finish, journal
from bandproof.bench.chain import chain_of
from bandproof.bench.finish import RUN
from bandproof.bench.job import Job
from bandproof.bench.journal import JOURNAL, RAW, Journal
from bandproof.bench.runfile import digest_of, read_run
from bandproof.drivers.generator import Generator
from bandproof.drivers.scope import Scope
from tests.benchmarks.kill import PASS, Aftermath, Controller, Tally, kill_at_random, patch, quietly, rig

INTERRUPTED, OUR_MISTAKE = 5, 70  # as documented in --help; sysexits.h


@pytest.fixture(scope="module")
def bench(tmp_path_factory):
    with rig(tmp_path_factory.mktemp("rig")) as made:
        yield made


def halting(owner, name, *, before=False, nth=1, when=lambda *arguments: True):
    """Return what makes a controller halt at the nth call of a function, before or behind it."""

    def prepare(controller):
        calls = []

        def change(real):
            def call(*arguments, **options):
                calls.extend([1] * bool(when(*arguments)))
                here = len(calls) == nth and when(*arguments)
                if here and before:
                    controller.halt()
                result = real(*arguments, **options)
                if here and not before:
                    controller.halt()
                return result

            return call

        patch(owner, name, change)

    return prepare


def is_point(entry):
    return entry["kind"] == "point"


def is_journal(handle):
    return os.readlink(f"/proc/self/fd/{handle}").endswith(JOURNAL)


def half_a_line(controller):
    """Halt with the first half of the sixth point's line written."""
    lines = []

    def change(real):
        def line(entry):
            lines.extend([1] * is_point(entry))
            return real(entry)[:200] if is_point(entry) and len(lines) == 6 else real(entry)

        return line

    patch(journal, "_line", change)
    halting(os, "fsync", before=True, when=lambda handle: is_journal(handle) and len(lines) == 6)(controller)


# State: (how to halt there, points that must be in the journal).
STATES = {
    "before the journal": (halting(Job, "_head", before=True), 0),
    "journal without its head": (halting(Journal, "_enter", before=True), 0),
    "after the head": (halting(Journal, "_enter"), 0),
    "after the steps": (halting(Journal, "planned"), 0),
    "output just on": (halting(Generator, "output", when=lambda generator, on: on), 1),
    "record taken": (halting(Scope, "acquire", nth=6), 5),
    "between raw record and line": (halting(Journal, "_keep_raw", nth=6), 5),
    "half a line": (half_a_line, 5),
    "line not yet synced": (halting(os, "fsync", before=True, nth=10, when=is_journal), 6),
    "after a point": (halting(Journal, "measured", nth=7), 7),
    "sweep done, no file yet": (halting(finish, "run_of", before=True), 25),
    "part file written": (halting(Path, "rename", before=True), 25),
    "renamed": (halting(Path, "rename"), 25),
    "before the chain's line": (halting(finish, "_chained", before=True), 25),
    "after the chain's line": (halting(finish, "_chained"), 25),
    "before the end line": (halting(Journal, "ended", before=True), 25),
    "after the end line": (halting(Journal, "ended"), 25),
}


# What shows that a state lies where its name says.
SIGNS = {
    "before the journal": lambda folder: not (folder / JOURNAL).exists(),
    "journal without its head": lambda folder: not (folder / JOURNAL).read_bytes(),
    "between raw record and line": lambda folder: raw_size(folder) > sum(Journal.peeked(folder).raw[-1]),
    "half a line": lambda folder: not (folder / JOURNAL).read_bytes().endswith(b"\n"),
    "sweep done, no file yet": lambda folder: not list(folder.glob("*.h5*")),
    "part file written": lambda folder: [path.name for path in folder.glob("*.h5*")] == ["run.h5.part"],
    "renamed": lambda folder: [path.name for path in folder.glob("*.h5*")] == ["run.h5"],
    "before the chain's line": lambda folder: (folder / RUN).exists() and not lines_of_chain(folder),
    "after the chain's line": lambda folder: Journal.peeked(folder).end is None and len(lines_of_chain(folder)) == 1,
    "before the end line": lambda folder: Journal.peeked(folder).end is None and (folder / "picture.svg").exists(),
    "after the end line": lambda folder: Journal.peeked(folder).end is not None,
}


def lines_of_chain(folder):
    return [entry for entry in chain_of(folder / RUN).of(folder / RUN) if entry.digest == digest_of(folder / RUN)]


def raw_size(folder):
    return (folder / RAW).stat().st_size


@pytest.mark.parametrize("name", STATES)
def test_a_kill_at_any_state_of_the_journal_loses_nothing(bench, name):
    (prepare, points), tally = STATES[name], Tally()
    arguments, folder = bench.new_run()
    controller = Controller(arguments, prepare)
    controller.await_halt()
    os.kill(controller.pid, signal.SIGKILL)
    after = Aftermath(bench, tally)
    after.of_kill(controller, folder)
    assert controller.code == -signal.SIGKILL
    assert SIGNS.get(name, lambda folder: True)(folder)
    if (folder / JOURNAL).exists() and (folder / JOURNAL).stat().st_size:
        assert len(Journal.peeked(folder).points) == points
    else:
        assert points == 0
    after.resume(folder)
    assert tally.is_good(), tally.problems
    assert not list(folder.glob("*.part")) or not points
    if (folder / RUN).exists():
        assert len(lines_of_chain(folder)) == 1
        assert chain_of(folder / RUN).problem == ""


def test_kills_at_random_instants_lose_nothing(bench):
    tally = kill_at_random(bench, 15, seed=2)
    assert tally.kills >= 15
    assert tally.points > 0
    assert tally.is_good(), tally.problems


@pytest.mark.parametrize(
    "numbers",
    [[signal.SIGTERM], [signal.SIGINT], [signal.SIGINT, signal.SIGINT], [signal.SIGHUP]],
    ids=["SIGTERM", "Ctrl-C", "Ctrl-C twice", "SIGHUP"],
)
def test_a_request_to_stop_in_a_sweep_keeps_it_and_it_can_go_on(bench, numbers):
    """The first comes within the sweep, the others while its end is written."""
    first, *others = numbers

    def prepare(controller):
        halting(Journal, "measured", nth=6)(controller)
        halting(finish, "run_of", before=True)(controller)

    arguments, folder = bench.new_run()
    controller = Controller(arguments, prepare)
    controller.await_halt()
    assert bench.is_on()
    os.kill(controller.pid, first)
    controller.go_on()
    controller.await_halt()
    assert not bench.is_on()
    for number in others:
        os.kill(controller.pid, number)
    controller.go_on()
    assert controller.ended() == INTERRUPTED
    assert not bench.is_on()
    kept = read_run(folder / "run.cut_short-1.h5")
    assert (kept.ended, kept.stopped, len(kept.points)) == ("cut_short", True, 6)
    assert kept.reason.startswith(f"stopped by {'Ctrl-C' if first == signal.SIGINT else first.name}")
    assert quietly(["resume", str(folder)]) == PASS
    assert read_run(folder / RUN).points[:6] == kept.points


def test_an_error_of_ours_in_a_sweep_leaves_the_generator_off_and_the_journal_whole(bench):
    def prepare(controller):
        def fail(*arguments, **options):
            controller.halt()
            raise ZeroDivisionError

        patch(Journal, "measured", lambda real: lambda *a, **o: fail() if len(a[0].points) == 6 else real(*a, **o))

    arguments, folder = bench.new_run()
    controller = Controller(arguments, prepare)
    controller.await_halt()
    assert bench.is_on()
    controller.go_on()
    assert controller.ended() == OUR_MISTAKE
    assert not bench.is_on()
    assert len(Journal.peeked(folder).points) == 6
    assert quietly(["resume", str(folder)]) == PASS
