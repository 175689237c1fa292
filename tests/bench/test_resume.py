"""A run that was stopped goes on, and ends as if it had never been stopped."""

import json
import re
import shutil
import signal
import subprocess
import sys
import zlib

import h5py
import pytest

from bandproof.bench.journal import JOURNAL, RAW, Journal
from bandproof.bench.plain import to_json
from bandproof.bench.runfile import digest_of, read_result, read_run
from bandproof.bench.verbs.console import run

PASS, BAD_INPUT, BENCH_FAULT = 0, 2, 3  # as documented in --help
SEED = 7


@pytest.fixture
def console(capsys):
    """Run a command line; return (exit code, all it printed with its folded lines joined)."""

    def call(*arguments):
        capsys.readouterr()
        code = run([str(argument) for argument in arguments])
        out, err = capsys.readouterr()
        assert "Traceback" not in out + err
        assert "mistake of this program" not in err, err
        return code, re.sub(r"\n  +", " ", out + err)

    return call


@pytest.fixture(scope="module")
def unbroken(two_band_path, tmp_path_factory):
    """The attempt's folder of a run that nothing stopped, its records kept."""
    folder = tmp_path_factory.mktemp("unbroken")
    assert run(["rehearse", str(two_band_path), "--seed", str(SEED), "--raw", "--folder", str(folder)]) == PASS
    return folder / f"rehearsal-{SEED}" / "1"


def entries(folder):
    """Return a journal's entries and its lines."""
    lines = (folder / JOURNAL).read_bytes().splitlines(keepends=True)
    return [(json.loads(line[9:]), line) for line in lines]


def line_of(entry):
    text = to_json(entry).encode()
    return b"%08x %s\n" % (zlib.crc32(text), text)


def cut_after(unbroken, target, points, *, upto_next=False):
    """Make a folder as a kill after so many finished points leaves it; `upto_next`: just before the next was kept."""
    shutil.copytree(unbroken, target, ignore=shutil.ignore_patterns("run.h5", "picture.svg"))
    kept, count = b"", 0
    for entry, line in entries(unbroken):
        is_point = entry["kind"] in ("point", "end")
        if is_point and count == points:
            break
        count += entry["kind"] == "point"
        kept += line
        if count == points and not upto_next:
            break
    (target / JOURNAL).write_bytes(kept)
    assert len(Journal.peeked(target).points) == points
    return target


def change_head(folder, **changes):
    """Rewrite what a journal's first line says of how it began."""
    (head, _), *others = entries(folder)
    (folder / JOURNAL).write_bytes(line_of({**head, **changes}) + b"".join(line for _, line in others))


def datasets(path):
    """Return every dataset and attribute of a run file by name."""
    found = {}

    def visit(name, item):
        found.update({f"{name}@{key}": bytes(value) for key, value in item.attrs.items()})
        if isinstance(item, h5py.Dataset):
            found[name] = (item.dtype.str, item.shape, item[()].tobytes())

    with h5py.File(path, "r") as file:
        file.visititems(visit)
    return found


def assert_same_but_history(path, other):
    digest_of(path)
    mine, theirs = datasets(path), datasets(other)
    assert mine.keys() == theirs.keys()
    assert len(mine) > 100
    assert [name for name in mine if mine[name] != theirs[name]] in ([], ["history"])


def borders(folder):
    """Return where the second stage's first point lies in the run, and how many points there are."""
    stages = [point.stage for point in Journal.peeked(folder).points]
    return stages.index(stages[-1]), len(stages)


# Which: (points kept, whether all that came before the next point is kept too).
WHICH = {
    "nothing but the head": lambda border, count: (0, False),
    "first steps planned": lambda border, count: (0, True),
    "first point": lambda border, count: (1, False),
    "curve planned": lambda border, count: (2, True),
    "within the first stage": lambda border, count: (6, False),
    "end of the first stage": lambda border, count: (border, False),
    "second stage wired": lambda border, count: (border, True),
    "first point of the second stage": lambda border, count: (border + 1, False),
    "last": lambda border, count: (count, False),
}


@pytest.mark.parametrize("which", WHICH.values(), ids=WHICH)
def test_a_resumed_run_file_equals_an_unbroken_one_in_all_but_its_history(console, unbroken, tmp_path, which):
    points, upto_next = which(*borders(unbroken))
    place = cut_after(unbroken, tmp_path / "run", points, upto_next=upto_next)
    code, told = console("resume", tmp_path)
    assert code == PASS
    assert f"resuming {place}" in told
    assert_same_but_history(place / "run.h5", unbroken / "run.h5")
    assert not list(place.glob("*.part"))
    history = [entry["event"] for entry in read_run(place / "run.h5").history]
    assert history.count("resumed") == 1
    assert history.count("checked") == (points > 0)


@pytest.mark.parametrize("step", [0, 15])
def test_a_run_whose_disk_was_full_goes_on_and_ends_as_an_unbroken_one(
    console, two_band_path, unbroken, tmp_path, step
):
    begin = ("rehearse", two_band_path, "--seed", SEED, "--raw", "--folder", tmp_path)
    code, told = console(*begin, "--fault", f"disk-full@{step}")
    place = tmp_path / f"rehearsal-{SEED}" / "1"
    assert code == BENCH_FAULT
    assert f"bandproof resume {place}" in told
    assert len(Journal.peeked(place).points) == step
    assert not list(place.glob("*.h5"))
    assert console("resume", place)[0] == PASS
    assert_same_but_history(place / "run.h5", unbroken / "run.h5")


def test_a_run_stopped_again_and_again_still_ends_as_an_unbroken_one(console, unbroken, tmp_path):
    place = cut_after(unbroken, tmp_path / "run", 3)
    for points in (5, 17):
        assert console("resume", place)[0] == PASS
        again = tmp_path / str(points)
        cut_after(place, again, points)
        place = again
    assert console("resume", place)[0] == PASS
    assert_same_but_history(place / "run.h5", unbroken / "run.h5")
    history = [entry["event"] for entry in read_run(place / "run.h5").history]
    assert history.count("resumed") == 3


# --- the last instants ---


def test_a_run_killed_before_its_journals_last_line_keeps_its_run_file_byte_for_byte(console, unbroken, tmp_path):
    place = tmp_path / "run"
    shutil.copytree(unbroken, place)
    (place / JOURNAL).write_bytes(b"".join(line for entry, line in entries(unbroken) if entry["kind"] != "end"))
    before = (place / "run.h5").read_bytes()
    code, told = console("resume", place)
    assert code == PASS
    assert "Board: PASS" in told
    assert (place / "run.h5").read_bytes() == before
    assert Journal.peeked(place).end["digest"] == digest_of(place / "run.h5")
    assert console("resume", place)[0] == BAD_INPUT


def test_a_part_file_left_behind_is_written_over(console, unbroken, tmp_path):
    place = cut_after(unbroken, tmp_path / "run", borders(unbroken)[1])
    (place / "run.h5.part").write_bytes(b"half a run file" * 100_000)
    assert console("resume", place)[0] == PASS
    assert_same_but_history(place / "run.h5", unbroken / "run.h5")
    assert not (place / "run.h5.part").exists()


def test_a_torn_line_is_measured_again(console, unbroken, tmp_path):
    place = cut_after(unbroken, tmp_path / "run", 9)
    content = (place / JOURNAL).read_bytes()
    (place / JOURNAL).write_bytes(content[:-100])
    with (place / RAW).open("ab") as file:
        file.write(b"half a record")
    assert console("resume", place)[0] == PASS
    assert_same_but_history(place / "run.h5", unbroken / "run.h5")


# --- refused ---


def assert_goes_on_afterwards(console, place, unbroken, **head):
    """A refusal spoils nothing: with what it asks for put right the run goes on."""
    change_head(place, **head)
    assert console("resume", place)[0] == PASS
    assert_same_but_history(place / "run.h5", unbroken / "run.h5")


def test_other_instruments_are_refused_by_name(console, unbroken, tmp_path):
    place = cut_after(unbroken, tmp_path / "run", 5)
    identities = Journal.peeked(place).head["identities"]
    change_head(place, identities={**identities, "scope": "ANOTHER,SCOPE,17,1"})
    code, told = console("resume", place)
    assert code == BENCH_FAULT
    assert "other instruments answer than this run began with: scope was 'ANOTHER,SCOPE,17,1'" in told
    assert identities["scope"] in told
    assert not list(place.glob("*.h5"))
    assert_goes_on_afterwards(console, place, unbroken, identities=identities)


def rehearsal_of(place, **changes):
    return {**Journal.peeked(place).head["rehearsal"], **changes}


@pytest.mark.parametrize("points", [3, 15])
def test_another_board_is_refused_by_its_last_point(console, unbroken, tmp_path, points):
    place = cut_after(unbroken, tmp_path / "run", points)
    rehearsal = rehearsal_of(place)
    change_head(place, rehearsal=rehearsal_of(place, defects=["low.C_1=39 nF", "body.C_1=18 nF"]))
    code, told = console("resume", place)
    assert code == BENCH_FAULT
    assert "another board, no supply, another wiring, or it drifted" in told
    assert not list(place.glob("*.h5"))
    assert len(Journal.peeked(place).points) == points
    assert_goes_on_afterwards(console, place, unbroken, rehearsal=rehearsal)


def test_a_board_without_supply_is_refused(console, unbroken, tmp_path):
    place = cut_after(unbroken, tmp_path / "run", 6)
    rehearsal = rehearsal_of(place)
    change_head(place, rehearsal=rehearsal_of(place, faults=["unpowered-board@0"]))
    code, told = console("resume", place)
    assert code == BENCH_FAULT
    assert "no supply" in told
    assert not list(place.glob("*.h5"))
    assert_goes_on_afterwards(console, place, unbroken, rehearsal=rehearsal)


def test_a_run_that_is_going_on_in_another_process_is_refused(console, unbroken, tmp_path):
    place = cut_after(unbroken, tmp_path / "run", 5)
    journal = Journal.opened(place)  # as the process that measures has it
    before = (place / JOURNAL).read_bytes()
    code, told = console("resume", place)
    assert code == BAD_INPUT
    assert "going on in another process" in told
    assert (place / JOURNAL).read_bytes() == before
    journal.close()


# --- which run is meant ---


def test_several_unfinished_runs_are_listed_and_none_is_touched(console, unbroken, tmp_path):
    places = [cut_after(unbroken, tmp_path / name / "1", points) for name, points in (("A", 2), ("B", 5))]
    shutil.copytree(unbroken, tmp_path / "C" / "1")
    before = [(place / JOURNAL).read_bytes() for place in places]
    code, told = console("resume", tmp_path)
    assert code == BAD_INPUT
    assert all(str(place) in told for place in places)
    assert str(tmp_path / "C") not in told
    assert [(place / JOURNAL).read_bytes() for place in places] == before


def test_the_only_unfinished_run_below_a_folder_is_found_among_complete_ones(console, unbroken, tmp_path):
    shutil.copytree(unbroken, tmp_path / "C" / "1")
    place = cut_after(unbroken, tmp_path / "A" / "1", 22)
    (tmp_path / "B" / "1").mkdir(parents=True)
    (tmp_path / "B" / "1" / JOURNAL).write_bytes(b"")  # killed before anything was measured
    code, told = console("resume", tmp_path)
    assert code == PASS
    assert f"resuming {place}" in told


def test_nothing_to_resume_is_exit_2_with_the_reason(console, unbroken, tmp_path):
    code, told = console("resume", tmp_path / "nowhere")
    assert (code, "there is no such folder" in told) == (BAD_INPUT, True)
    code, told = console("resume", tmp_path)
    assert (code, "no run was begun in it" in told) == (BAD_INPUT, True)
    shutil.copytree(unbroken, tmp_path / "C" / "1")
    code, told = console("resume", tmp_path)
    assert (code, "every run in it is complete" in told) == (BAD_INPUT, True)
    code, told = console("resume", tmp_path / "C" / "1")
    assert (code, "this run is complete" in told) == (BAD_INPUT, True)
    (tmp_path / "C" / "1" / JOURNAL).write_bytes(b"nothing")
    code, told = console("resume", tmp_path / "C" / "1")
    assert (code, "no whole first line" in told) == (BAD_INPUT, True)


# --- cut short ---


def test_a_run_cut_short_is_completed_once_the_bench_is_mended(console, two_band_path, unbroken, tmp_path):
    begin = ("rehearse", two_band_path, "--seed", SEED, "--raw", "--folder", tmp_path)
    assert console(*begin, "--fault", "open-output@8")[0] == BENCH_FAULT
    place = tmp_path / f"rehearsal-{SEED}" / "1"
    code, told = console("resume", place)
    assert code == BENCH_FAULT  # nothing was mended
    assert "CUT SHORT" in told
    assert {path.name for path in place.glob("*.h5")} == {"run.cut_short-1.h5", "run.cut_short-2.h5"}
    kept = {path: path.read_bytes() for path in place.glob("*.h5")}
    assert [len(read_run(path).points) for path in sorted(kept)] == [8, 8]
    change_head(place, rehearsal=rehearsal_of(place, faults=[]))
    assert console("resume", place)[0] == PASS
    assert {path: path.read_bytes() for path in kept} == kept
    complete = read_run(place / "run.h5")
    assert complete.ended == "complete"
    assert_same_but_history(place / "run.h5", unbroken / "run.h5")


# --- in real time ---


def test_a_run_on_a_bench_in_real_time_goes_on(console, one_band_text, tmp_path):
    board = tmp_path / "one.board.toml"
    board.write_text(one_band_text)
    command = [sys.executable, "-c", "from bandproof.bench.verbs.console import main; main()"]
    with subprocess.Popen(
        [*command, "rehearse", str(board), "--serve", "--folder", str(tmp_path)], stdout=subprocess.PIPE, text=True
    ) as process:
        try:
            for line in process.stdout:
                if line.startswith("It answers"):
                    break
            sweep = ("sweep", board, "--bench", tmp_path / "served.bench.toml", "--serial", "1", "--folder", tmp_path)
            assert console(*sweep)[0] == PASS
            whole = read_run(tmp_path / "1" / "1" / "run.h5")
            place = cut_after(tmp_path / "1" / "1", tmp_path / "cut", 7)
            assert console("resume", place)[0] == PASS
            resumed = read_run(place / "run.h5")
            process.send_signal(signal.SIGINT)
            process.communicate(timeout=10)
        finally:
            process.kill()
    assert process.returncode == 0
    assert resumed.steps == whole.steps
    assert resumed.points[:7] == whole.points[:7]
    times = [point.time for point in resumed.points]
    assert times == sorted(times)
    assert [entry["event"] for entry in resumed.history][-4:] == ["resumed", "wired", "checked", "wired"]
    assert read_result(place / "run.h5")["verdict"] == "pass"
