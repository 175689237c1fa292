"""The chain of a folder's runs: each run once, no line changed, lost or moved unnoticed, no run lost by it."""

import hashlib
import json
from concurrent.futures import ThreadPoolExecutor

import pytest

from bandproof.bench import chain
from bandproof.bench.chain import CHAIN, ChainBroken, add_to_chain, chain_of, link_of
from bandproof.bench.journal import JOURNAL, Journal
from bandproof.bench.runfile import digest_of
from bandproof.bench.verbs import console

UTC = "2026-01-01T00:00:00+00:00"


def run_of(number):
    return UTC, f"TB-{number}/1/run.h5", hashlib.sha256(str(number).encode()).hexdigest()


def read(folder):
    """Return the chain of a folder, by way of a run file that may lie in it."""
    return chain_of(folder / "any" / "1" / "run.h5")


def test_a_link_is_the_digest_of_the_link_before_and_the_line(tmp_path):
    """By hashlib, from the definition in the module's first lines."""
    add_to_chain(tmp_path, [run_of(1)])
    add_to_chain(tmp_path, [run_of(2)])
    first, second = (tmp_path / CHAIN).read_text().splitlines()
    line, link = first.rsplit(" ", 1)
    assert line == f"1 {UTC} TB-1/1/run.h5 {run_of(1)[2]}"
    assert link == hashlib.sha256(line.encode()).hexdigest()
    line, after = second.rsplit(" ", 1)
    assert after == hashlib.sha256((link + line).encode()).hexdigest()
    assert link_of(tmp_path / "TB-2" / "1" / "run.h5", run_of(2)[2]) == after
    assert link_of(tmp_path / "TB-2" / "1" / "run.h5", run_of(1)[2]) == ""


def test_a_run_is_added_once(tmp_path):
    for _ in range(3):
        add_to_chain(tmp_path, [run_of(1), run_of(2)])
    assert [entry.path for entry in read(tmp_path).entries] == ["TB-1/1/run.h5", "TB-2/1/run.h5"]


def test_half_a_line_of_a_killed_process_is_written_anew(tmp_path):
    add_to_chain(tmp_path, [run_of(1)])
    add_to_chain(tmp_path, [run_of(2)])
    content = (tmp_path / CHAIN).read_bytes()
    for size in (len(content) - 2, len(content) - 100, content.index(b"\n") + 2):
        (tmp_path / CHAIN).write_bytes(content[:size])
        assert (read(tmp_path).problem, len(read(tmp_path).entries)) == ("", 1)
        told = add_to_chain(tmp_path, [run_of(2)])
        assert told.endswith(f"was cut off: '{content[len(content) // 2 : size].decode()}'")
        assert (tmp_path / CHAIN).read_bytes() == content


def test_a_last_line_that_lacks_only_its_newline_is_kept_and_gets_it(tmp_path):
    for number in (1, 2, 3):
        add_to_chain(tmp_path, [run_of(number)])
    content = (tmp_path / CHAIN).read_bytes()
    second = content.index(b"\n", content.index(b"\n") + 1)
    (tmp_path / CHAIN).write_bytes(content[:second])
    assert [entry.path for entry in read(tmp_path).entries] == ["TB-1/1/run.h5", "TB-2/1/run.h5"]
    assert add_to_chain(tmp_path, [run_of(3)]) == ""
    assert (tmp_path / CHAIN).read_bytes() == content
    (tmp_path / CHAIN).write_bytes(content[: second - 1] + b"x")
    assert "cut off" in add_to_chain(tmp_path, [])
    (tmp_path / CHAIN).write_bytes(content[: second - 64] + b"0" * 64)  # whole, and yet another: no process writes it
    with pytest.raises(ChainBroken, match="line 2 does not follow"):
        add_to_chain(tmp_path, [run_of(3)])


def test_a_run_that_is_made_again_after_another_stood_there_has_a_line_again(tmp_path):
    first, other = run_of(1), (*run_of(1)[:2], run_of(2)[2])
    for made in (first, other, first, first):
        add_to_chain(tmp_path, [made])
    path = tmp_path / first[1]
    assert [entry.digest for entry in read(tmp_path).of(path)] == [first[2], other[2], first[2]]
    assert link_of(path, first[2]) == read(tmp_path).entries[-1].link


def changed(lines):
    return [lines[0], lines[1].replace(b"2026", b"2025"), *lines[2:]]


DAMAGE = {
    "a time changed": (changed, "line 2 does not follow"),
    "a digest changed": (lambda lines: [lines[0].replace(lines[0][-140:-130], b"0" * 10), *lines[1:]], "line 1"),
    "a line taken out": (lambda lines: [lines[0], *lines[2:]], "line 2 does not follow"),
    "the first line taken out": (lambda lines: lines[1:], "line 1 does not follow"),
    "two lines changed places": (lambda lines: [lines[0], lines[2], lines[1], lines[3]], "line 2 does not follow"),
    "a line twice": (lambda lines: [lines[0], lines[0], *lines[1:]], "line 2 does not follow"),
    "an empty line": (lambda lines: [lines[0], b"\n", *lines[1:]], "line 2 is no line of a chain"),
    "not text": (lambda lines: [b"\xff\xfe\n", *lines], "line 1 is no line of a chain"),
    "letters beyond ASCII": (
        lambda lines: [lines[0], lines[1].replace(b"TB-2", "TB-é".encode()), *lines[2:]],
        "line 2 is no line of a chain",
    ),
}


@pytest.mark.parametrize(("damage", "words"), DAMAGE.values(), ids=DAMAGE)
def test_a_change_of_the_chain_is_told_with_its_line_and_nothing_is_added_behind_it(tmp_path, damage, words):
    add_to_chain(tmp_path, [run_of(number) for number in range(1, 5)])
    lines = (tmp_path / CHAIN).read_bytes().splitlines(keepends=True)
    spoilt = b"".join(damage(lines))
    (tmp_path / CHAIN).write_bytes(spoilt)
    assert words in read(tmp_path).problem
    with pytest.raises(ChainBroken, match=f"{CHAIN} is broken: {words}.*Move it away"):
        add_to_chain(tmp_path, [run_of(5)])
    assert (tmp_path / CHAIN).read_bytes() == spoilt


def test_benches_that_write_into_one_folder_at_once_make_one_chain(tmp_path):
    def bench(number):
        for board in range(5):
            add_to_chain(tmp_path, [run_of(100 * number + board)])

    with ThreadPoolExecutor(8) as pool:
        list(pool.map(bench, range(8)))
    found = read(tmp_path)
    assert found.problem == ""
    assert sorted(entry.path for entry in found.entries) == sorted(
        run_of(100 * number + board)[1] for number in range(8) for board in range(5)
    )


def test_a_chain_that_another_process_holds_is_not_waited_for_for_ever(tmp_path, monkeypatch):
    monkeypatch.setattr(chain, "_PATIENCE", 0.05)
    add_to_chain(tmp_path, [run_of(1)])
    with (tmp_path / CHAIN).open("r+b") as file:
        assert chain.try_lock(file.fileno())
        with pytest.raises(OSError, match="another process holds it"):
            add_to_chain(tmp_path, [run_of(2)])
    assert len(read(tmp_path).entries) == 1


# --- at the end of a run ---


def rehearse(board, folder, *more):
    return console.run(["rehearse", str(board), "--folder", str(folder), *more])


@pytest.fixture(scope="module")
def board(one_band_text, tmp_path_factory):
    path = tmp_path_factory.mktemp("board") / "one.board.toml"
    path.write_text(one_band_text)
    return path


def test_every_run_adds_its_line_and_a_resume_what_is_missing_once(board, tmp_path, capsys):
    assert rehearse(board, tmp_path) == 0
    assert rehearse(board, tmp_path, "--fault", "open-output@8") == 3
    places = [tmp_path / "rehearsal-1" / number for number in "12"]
    whole = (tmp_path / CHAIN).read_bytes()
    told = [(entry.path, entry.digest) for entry in read(tmp_path).entries]
    assert told == [
        ("rehearsal-1/1/run.h5", digest_of(places[0] / "run.h5")),
        ("rehearsal-1/2/run.cut_short-1.h5", digest_of(places[1] / "run.cut_short-1.h5")),
    ]
    # As a kill leaves it between the run file and its line, and again between the line and the journal's last:
    content = (places[0] / JOURNAL).read_bytes()
    (places[0] / JOURNAL).write_bytes(content[: content.rstrip(b"\n").rindex(b"\n") + 1])
    assert Journal.peeked(places[0]).end is None
    for before in (b"", whole):
        (tmp_path / CHAIN).write_bytes(before)
        (places[0] / JOURNAL).write_bytes(content[: content.rstrip(b"\n").rindex(b"\n") + 1])
        assert console.run(["resume", str(places[0])]) == 0
        assert read(tmp_path).problem == ""
        assert [(entry.path, entry.digest) for entry in read(tmp_path).entries] == told[: 2 if before else 1]
    # The line of a file that was cut short is made up for, too:
    (tmp_path / CHAIN).write_bytes(whole.splitlines(keepends=True)[0])
    assert console.run(["resume", str(places[1])]) == 3
    assert [entry.path for entry in read(tmp_path).entries][1:] == [
        f"rehearsal-1/2/run.cut_short-{number}.h5" for number in "12"
    ]
    assert (tmp_path / CHAIN).read_bytes().startswith(whole)


SPOILT = {
    "a folder in its place": (lambda path: path.mkdir(), "Is a directory"),
    "a broken chain": (lambda path: path.write_text("mine\n"), "line 1 is no line of a chain"),
}


@pytest.mark.parametrize(("spoil", "words"), SPOILT.values(), ids=SPOILT)
def test_where_the_chain_cannot_be_written_the_run_is_kept_and_it_is_told(board, tmp_path, capsys, spoil, words):
    spoil(tmp_path / CHAIN)
    assert rehearse(board, tmp_path, "--json") == 0
    (told,) = [alarm for alarm in json.loads(capsys.readouterr().out)["alarms"] if CHAIN in alarm]
    assert told.startswith(f"the run is not in {tmp_path / CHAIN}: ")
    assert words in told
    place = tmp_path / "rehearsal-1" / "1"
    assert digest_of(place / "run.h5")
    assert Journal.peeked(place).end["ended"] == "complete"


def test_one_seed_in_two_folders_gives_the_same_run_file_chain_and_report_and_a_later_run_changes_none(board, tmp_path):
    for name in "ab":
        assert rehearse(board, tmp_path / name) == 0
    for path in ("chain.txt", "rehearsal-1/1/run.h5", "rehearsal-1/1/report.pdf"):
        assert (tmp_path / "a" / path).read_bytes() == (tmp_path / "b" / path).read_bytes()
    report = tmp_path / "a" / "rehearsal-1" / "1" / "report.pdf"
    before = report.read_bytes()
    assert rehearse(board, tmp_path / "a") == 0
    assert console.run(["report", str(report.with_name("run.h5"))]) == 0
    assert report.read_bytes() == before
