"""The journal: whatever happens to it, every whole line comes back and nothing else."""

import json
import os
import subprocess
import sys
import zlib
from dataclasses import replace

import numpy as np
import pytest

from bandproof.bench.errors import BadInput
from bandproof.bench.journal import JOURNAL, RAW, Journal
from bandproof.bench.plain import point_plain, to_json
from bandproof.bench.types import Point, Step, Tone
from bandproof.bench.verbs.console import run
from bandproof.drivers.clock import VirtualClock

HEAD = {
    "run_id": "r",
    "serial": "TB-1",
    "attempt": 1,
    "version": "0",
    "started": "2026-01-01T00:00:00+00:00",
    "clock_start": 0.25,
    "operator": "Ann Ω",
    "note": 'two\nlines, \u2028 and "quotes"',
    "ambient": 23.5,
    "thru": None,
    "checks": {"standard": "CS-1 Ω", "checks": []},
    "earlier": [{"attempt": 1, "digest": "d", "verdict": "fail", "pooled": True}],
    "retest": "why Ω",
    "longer": 4.0,
    "identities": {"scope": "X"},
    "board": "b",
    "bench": "b",
    "bench_path": "",
    "dialects": {"scope": "d"},
    "keep_raw": False,
    "rehearsal": None,
}


def step(index, frequency=1000.0):
    tones = (Tone(frequency, 1.0),) if frequency else ()
    return Step(index, "low", "curve" if frequency else "no-signal", tones, 0.01, 0.1, 64, (1.0, 2.0))


def point(index, response=1.5 - 0.1j):
    return Point(
        step=index,
        stage="low",
        purpose="curve",
        attempt=0,
        time=0.1 * index,
        frequency=1000.0,
        amplitude=1.0,
        response=response,
        covariance=(1e-6, 0.0, 1e-6),
        levels=(1.0, 1.5),
        offsets=(0.0, 0.0),
        residuals=(1e-3, 1e-3),
        lsb=(1e-2, 1e-2),
        ranges=(1.0, 2.0),
        sample_interval=1e-5,
        samples=64,
        distortion=0.1 + 0.2,
        settling=0.0,
        flags=("unsettled", "overload"),
    )


def state(journal):
    """Return everything a journal tells."""
    return (
        journal.head,
        journal.steps,
        journal.points,
        journal.began,
        journal.finished,
        journal.raw,
        journal.alarms,
        journal.history,
        journal.end,
    )


def written(folder, count=2):
    """Write a short journal with one entry of every kind and return its states after each line."""
    states = []
    journal = Journal.begin(folder, HEAD)
    for act in (
        lambda: None,
        lambda: journal.planned([step(index) for index in range(count)]),
        lambda: journal.told(0.5, "wired", stage="low"),
        *(lambda i=i: journal.measured(point(i), began=0.1 * i, finished=0.1 * i + 0.05) for i in range(count)),
        lambda: journal.alarm("low: hum"),
        lambda: journal.ended("cut_short", "run.cut_short-1.h5", "00"),
        lambda: journal.resumed("2026-01-01T00:01:00+00:00"),
    ):
        act()
        states.append(json.loads(json.dumps(state(journal), default=repr)))
    journal.close()
    return states


def told(journal):
    return json.loads(json.dumps(state(journal), default=repr))


def line(entry):
    text = entry if isinstance(entry, bytes) else json.dumps(entry, ensure_ascii=False).encode()
    return b"%08x %s\n" % (zlib.crc32(text), text)


# --- there and back ---


def test_what_was_entered_is_read_back_to_the_last_bit(tmp_path):
    states = written(tmp_path)
    journal = Journal.opened(tmp_path)
    assert told(journal) == states[-1]
    assert journal.head == HEAD
    assert journal.points == [point(0), point(1)]
    assert journal.steps == [step(0), step(1)]
    journal.close()


@pytest.mark.parametrize(
    "response", [0j, complex(1e-320, -0.0), complex(0.1, 1e300), complex(2 / 3, np.nextafter(1, 2))]
)
def test_every_float_comes_back_the_same(tmp_path, response):
    journal = Journal.begin(tmp_path, HEAD)
    journal.planned([step(0)])
    journal.measured(point(0, response), began=1 / 3, finished=2 / 3)
    journal.close()
    assert repr(Journal.peeked(tmp_path).points[0]) == repr(point(0, response))


def test_an_existing_journal_is_never_begun_again(tmp_path):
    written(tmp_path)
    before = (tmp_path / JOURNAL).read_bytes()
    with pytest.raises(FileExistsError):
        Journal.begin(tmp_path, HEAD)
    assert (tmp_path / JOURNAL).read_bytes() == before


def test_an_alarm_is_kept_once(tmp_path):
    journal = Journal.begin(tmp_path, HEAD)
    for _ in range(3):
        journal.alarm("hum")
    journal.close()
    assert Journal.peeked(tmp_path).alarms == ["hum"]
    assert (tmp_path / JOURNAL).read_bytes().count(b"\n") == 2


def test_reading_changes_nothing(tmp_path):
    written(tmp_path)
    path = tmp_path / JOURNAL
    path.write_bytes(path.read_bytes() + b"torn")
    Journal.peeked(tmp_path)
    assert path.read_bytes().endswith(b"torn")


HOLD = """
import sys
from pathlib import Path
from bandproof.bench.journal import Journal
journal = Journal.opened(Path(sys.argv[1]))
print("opened", flush=True)
sys.stdin.read()
"""


def test_a_journal_that_another_process_writes_is_refused_and_left_alone(tmp_path):
    written(tmp_path)
    path = tmp_path / JOURNAL
    command = [sys.executable, "-c", HOLD, str(tmp_path)]
    with subprocess.Popen(command, stdin=subprocess.PIPE, stdout=subprocess.PIPE) as process:
        assert process.stdout.readline() == b"opened\n"
        path.write_bytes(path.read_bytes() + b"a line in the making")
        with pytest.raises(BadInput, match="going on in another process"):
            Journal.opened(tmp_path)
        assert path.read_bytes().endswith(b"a line in the making")
        process.kill()
    journal = Journal.opened(tmp_path)  # the lock ended with its holder
    assert not path.read_bytes().endswith(b"a line in the making")
    journal.close()


# --- torn and damaged ---


def test_cut_at_every_byte_it_opens_with_every_whole_line_and_can_be_appended(tmp_path):
    states = written(tmp_path)
    path = tmp_path / JOURNAL
    content = path.read_bytes()
    ends = [i + 1 for i, byte in enumerate(content) if byte == ord("\n")]
    assert len(ends) == len(states)
    for cut in range(len(content) + 1):
        path.write_bytes(content[:cut])
        whole = sum(end <= cut for end in ends)
        if not whole:
            with pytest.raises(BadInput, match="no whole first line"):
                Journal.opened(tmp_path)
            assert path.read_bytes() == content[:cut]
            continue
        journal = Journal.opened(tmp_path)
        assert told(journal) == states[whole - 1], cut
        assert path.stat().st_size == ends[whole - 1]
        journal.alarm("appended")
        journal.close()
        assert Journal.peeked(tmp_path).alarms[-1] == "appended"


def test_one_flipped_bit_anywhere_in_a_line_drops_it_and_all_behind(tmp_path):
    states = written(tmp_path)
    path = tmp_path / JOURNAL
    content = path.read_bytes()
    draw = np.random.default_rng(3)
    starts = [0] + [i + 1 for i, byte in enumerate(content[:-1]) if byte == ord("\n")]
    for place in range(starts[1], len(content)):
        damaged = bytearray(content)
        damaged[place] ^= 1 << int(draw.integers(8))
        path.write_bytes(damaged)
        before = sum(start <= place for start in starts) - 1
        assert told(Journal.peeked(tmp_path)) == states[before - 1], place


def test_a_hole_of_zeros_as_a_power_cut_leaves_it_ends_the_journal(tmp_path):
    states = written(tmp_path)
    path = tmp_path / JOURNAL
    content = path.read_bytes()
    cut = content.rindex(b"\n", 0, -1) + 1
    path.write_bytes(content[:cut] + bytes(8192))
    journal = Journal.opened(tmp_path)
    assert told(journal) == states[-2]
    assert path.stat().st_size == cut
    journal.close()


GOOD = {
    "kind": "point",
    "point": json.loads(to_json(point_plain(point(1)))),
    "began": 0.1,
    "finished": 0.2,
    "raw": None,
}
STEP = {
    "kind": "steps",
    "steps": [
        json.loads(
            to_json(
                {
                    "index": 2,
                    "stage": "low",
                    "purpose": "curve",
                    "tones": [],
                    "dwell": 0.0,
                    "duration": 0.1,
                    "samples": 64,
                    "ranges": [1.0, 2.0],
                }
            )
        )
    ],
}


def changed(entry, **values):
    return {**entry, **values}


def of_point(**values):
    return changed(GOOD, point={**GOOD["point"], **values})


def of_step(**values):
    return changed(STEP, steps=[{**STEP["steps"][0], **values}])


STRANGE = {
    "unknown kind": {"kind": "verdict"},
    "no kind": {"time": 1.0},
    "kind is a list": {"kind": []},
    "no object": [1, 2],
    "a number": b"7",
    "not JSON": b"{",
    "not UTF-8": b'{"kind":"alarm","text":"\xff"}',
    "deep": b"[" * 200_000,
    "deep in an object": b'{"kind":"alarm","text":' + b"[" * 200_000 + b"]" * 200_000 + b"}",
    "many digits": b'{"kind":"alarm","text":' + b"9" * 5000 + b"}",
    "second head": {"kind": "head", **HEAD},
    "alarm is a number": {"kind": "alarm", "text": 3},
    "story without time": {"kind": "story", "event": "failure"},
    "story at no time": {"kind": "story", "event": "failure", "time": "noon"},
    "end without its words": {"kind": "end"},
    "end is a list": {"kind": "end", "ended": [], "run": "r", "digest": ""},
    "point without began": {name: value for name, value in GOOD.items() if name != "began"},
    "point is a list": changed(GOOD, point=[]),
    "point of another step": of_point(step=7),
    "point of another stage": of_point(stage="high"),
    "began is a text": changed(GOOD, began="now"),
    "began is huge": changed(GOOD, began=10**400),
    "raw is huge": changed(GOOD, raw=[0, 10**30]),
    "raw is negative": changed(GOOD, raw=[-8, 4]),
    "raw is one": changed(GOOD, raw=[0]),
    "raw is a text": changed(GOOD, raw="00"),
    "raw of a record that is not there": changed(GOOD, raw=[0, 1024]),
    "response is huge": of_point(response=[10**400, 0]),
    "response is three": of_point(response=[1, 2, 3]),
    "response is a number": of_point(response=1.5),
    "frequency is a text": of_point(frequency="1 kHz"),
    "frequency is huge": of_point(frequency=10**300),
    "levels are three": of_point(levels=[1.0, 2.0, 3.0]),
    "flags are numbers": of_point(flags=[1]),
    "samples is a fraction": of_point(samples=64.5),
    "samples is true": of_point(samples=True),
    "purpose is another": of_point(purpose="guess"),
    "steps is a number": {"kind": "steps", "steps": 3},
    "tones are numbers": of_step(tones=[1, 2]),
    "a tone is a text": of_step(tones=[{"frequency": "x", "amplitude": 1.0}]),
    "ranges are one": of_step(ranges=[1.0]),
    "a step has more": of_step(more=1),
    "a step is null": changed(STEP, steps=[None]),
}


@pytest.mark.parametrize("entry", STRANGE.values(), ids=STRANGE)
def test_an_entry_of_another_make_is_dropped_with_all_behind_it(tmp_path, entry):
    journal = Journal.begin(tmp_path, HEAD)
    journal.planned([step(0), step(1)])
    journal.measured(point(0), began=0.0, finished=0.1)
    journal.close()
    path = tmp_path / JOURNAL
    content = path.read_bytes()
    path.write_bytes(content + line(entry) + line({"kind": "alarm", "text": "behind"}))
    opened = Journal.opened(tmp_path)
    assert told(opened) == told(journal)
    assert path.read_bytes() == content
    opened.close()


def test_the_entry_those_were_made_from_is_taken(tmp_path):
    journal = Journal.begin(tmp_path, HEAD)
    journal.planned([step(0), step(1)])
    journal.measured(point(0), began=0.0, finished=0.1)
    journal.close()
    with (tmp_path / JOURNAL).open("ab") as file:
        file.write(line(GOOD) + line(STEP))
    assert len(Journal.peeked(tmp_path).points) == 2
    assert len(Journal.peeked(tmp_path).steps) == 3


@pytest.mark.parametrize(
    "change",
    [
        {"clock_start": "now"},
        {"board": None},
        {"identities": {"scope": 1}},
        {"rehearsal": {}},
        {"rehearsal": {"seed": 1, "defects": [3], "faults": []}},
        {"rehearsal": "yes"},
        {"attempt": 10**40},
    ],
    ids=str,
)
def test_a_head_of_another_make_is_no_journal(tmp_path, change):
    (tmp_path / JOURNAL).write_bytes(line({"kind": "head", **HEAD, **change}))
    with pytest.raises(BadInput, match="no whole first line"):
        Journal.opened(tmp_path)


@pytest.mark.parametrize(
    "content", [b"", b"\n" * 1000, bytes(100_000), b"x" * 3_000_000, line({"kind": "alarm", "text": ""})]
)
def test_what_is_no_journal_is_told(tmp_path, content):
    (tmp_path / JOURNAL).write_bytes(content)
    with pytest.raises(BadInput, match="no whole first line"):
        Journal.opened(tmp_path)
    assert (tmp_path / JOURNAL).read_bytes() == content


def test_no_file_a_folder_and_an_endless_file_are_told(tmp_path):
    with pytest.raises(BadInput, match="cannot be read: No such file"):
        Journal.opened(tmp_path)
    with (tmp_path / JOURNAL).open("wb") as file:
        file.truncate(10**12)  # a hole: nothing is written
    with pytest.raises(BadInput, match="no run writes that"):
        Journal.opened(tmp_path)
    (tmp_path / JOURNAL).unlink()
    (tmp_path / JOURNAL).mkdir()
    with pytest.raises(BadInput, match="cannot be read"):
        Journal.opened(tmp_path)


# --- raw records, and what is on disk when ---


VOLTS = np.random.default_rng(5).normal(size=(3, 2, 64))


def test_raw_records_come_back_as_32_bit_reals(tmp_path):
    journal = Journal.begin(tmp_path, HEAD)
    journal.planned([step(index) for index in range(3)])
    for index, volts in enumerate(VOLTS):
        journal.measured(point(index), began=0.0, finished=0.1, volts=None if index == 1 else volts)
    journal.close()
    back = Journal.peeked(tmp_path)
    assert back.volts(1) is None
    for index in (0, 2):
        np.testing.assert_array_equal(back.volts(index), VOLTS[index].astype(np.float32))
    assert (tmp_path / RAW).stat().st_size == 2 * 2 * 64 * 4


def test_raw_bytes_that_no_line_names_are_written_over(tmp_path):
    journal = Journal.begin(tmp_path, HEAD)
    journal.planned([step(index) for index in range(3)])
    journal.measured(point(0), began=0.0, finished=0.1, volts=VOLTS[0])
    journal.close()
    with (tmp_path / RAW).open("ab") as file:
        file.write(b"a record whose line never came" * 100)
    journal = Journal.opened(tmp_path)
    journal.measured(point(1), began=0.1, finished=0.2, volts=VOLTS[1])
    journal.close()
    np.testing.assert_array_equal(Journal.peeked(tmp_path).volts(1), VOLTS[1].astype(np.float32))
    assert (tmp_path / RAW).stat().st_size == 2 * 2 * 64 * 4


def test_a_point_whose_raw_record_is_gone_is_measured_again(tmp_path):
    journal = Journal.begin(tmp_path, HEAD)
    journal.planned([step(index) for index in range(3)])
    for index in range(3):
        journal.measured(point(index), began=0.0, finished=0.1, volts=VOLTS[index])
    journal.close()
    os.truncate(tmp_path / RAW, 2 * 2 * 64 * 4 + 100)
    assert len(Journal.peeked(tmp_path).points) == 2


def test_a_folder_deleted_meanwhile_costs_raw_records_and_nothing_else(tmp_path):
    folder = tmp_path / "run"
    folder.mkdir()
    journal = Journal.begin(folder, HEAD)
    journal.planned([step(0), step(1)])
    journal.measured(point(0), began=0.0, finished=0.1, volts=VOLTS[0])
    for path in folder.iterdir():
        path.unlink()
    folder.rmdir()
    journal.measured(point(1), began=0.1, finished=0.2, volts=VOLTS[1])
    assert len(journal.points) == 2
    assert [journal.volts(0), journal.volts(1)] == [None, None]
    journal.close()


@pytest.fixture
def on_disk(monkeypatch):
    """Record what has reached the disk: (name, bytes) at every fsync."""
    synced, real = [], os.fsync

    def fsync(handle):
        real(handle)
        path = os.readlink(f"/proc/self/fd/{handle}")
        synced.append((os.path.basename(path), os.fstat(handle).st_size))

    monkeypatch.setattr(os, "fsync", fsync)
    return synced


def test_a_raw_record_is_on_disk_before_the_line_that_names_it(tmp_path, on_disk):
    journal = Journal.begin(tmp_path, HEAD)
    journal.planned([step(0)])
    on_disk.clear()
    journal.measured(point(0), began=0.0, finished=0.1, volts=VOLTS[0])
    size = (tmp_path / JOURNAL).stat().st_size
    assert on_disk == [(RAW, 512), (JOURNAL, size)]
    journal.close()


def test_a_finished_point_is_on_disk_before_the_next_step_begins(one_band_text, tmp_path, on_disk, monkeypatch):
    """At each mark of a step, which comes before its first exchange, every earlier point is in synced bytes."""
    board = tmp_path / "one.board.toml"
    board.write_text(one_band_text)
    seen, real = [], VirtualClock.mark

    def mark(clock, number, attempt):
        size = max(size for name, size in on_disk if name == JOURNAL)
        (path,) = tmp_path.rglob(JOURNAL)
        seen.append((number, path.read_bytes()[:size].count(b'"kind":"point"')))
        real(clock, number, attempt)

    monkeypatch.setattr(VirtualClock, "mark", mark)
    assert run(["rehearse", str(board), "--folder", str(tmp_path)]) == 0
    assert len(seen) > 8
    assert all(number == points for number, points in seen)


def test_a_write_that_fails_leaves_a_journal_that_opens_with_what_was_whole(tmp_path):
    """A full disk, by the system's own limit on a file's size (RLIMIT_FSIZE, POSIX), in a process of its own."""
    code = (
        "import resource, signal, sys; from pathlib import Path; sys.path[:0] = [sys.argv[2]]\n"
        "signal.signal(signal.SIGXFSZ, signal.SIG_IGN)\n"
        "from dataclasses import replace; from bandproof.bench.journal import Journal\n"
        "folder = Path(sys.argv[1]); journal = Journal.opened(folder)\n"
        "size = (folder / 'journal.txt').stat().st_size\n"
        "resource.setrlimit(resource.RLIMIT_FSIZE, (size + 20, size + 20))\n"
        "try:\n    journal.planned([replace(journal.steps[0], index=2)])\n"
        "except OSError as problem:\n    print('told', problem.errno)\n"
        "journal.close(); print('closed')"
    )
    states = written(tmp_path)
    done = subprocess.run(
        [sys.executable, "-c", code, str(tmp_path), "."], capture_output=True, text=True, timeout=60, check=False
    )
    assert done.stdout == "told 27\nclosed\n", done.stderr  # EFBIG
    assert (tmp_path / JOURNAL).read_bytes()[-1:] != b"\n"
    journal = Journal.opened(tmp_path)
    assert told(journal) == states[-1]
    journal.close()


def test_a_point_is_taken_only_where_it_was_planned():
    journal = Journal()
    journal.planned([step(0)])
    with pytest.raises(ValueError, match="not what was planned next"):
        journal.measured(point(1), began=0.0, finished=0.1)
    with pytest.raises(ValueError, match="frequency"):
        journal.measured(replace(point(0), frequency="1"), began=0.0, finished=0.1)
