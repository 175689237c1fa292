"""The table of faults in DEVELOPERS.md, row by row: what the user reads, the exit code, what was saved."""

import re
import time
from pathlib import Path

import pytest

from bandproof.bench.journal import Journal
from bandproof.bench.mishaps import MISHAPS
from bandproof.bench.runfile import read_run
from bandproof.bench.verbs.console import run
from bandproof.drivers.clock import VirtualClock
from bandproof.simulated_instruments.faults import NAMES

BOUND = 60.0  # s by the wall for any fault, on a loaded machine
STEP = 20  # in the second of three bands: some faults are seen at the first records of the third only


def rows():
    """Return the table's rows: fault, words, exit code, what was saved."""
    text = (Path(__file__).parents[2] / "DEVELOPERS.md").read_text(encoding="utf-8")
    section = text.split("\n## Faults\n")[1].split("\n## ")[0]
    lines = [[cell.strip() for cell in line.strip("| ").split("|")] for line in section.splitlines() if line[:1] == "|"]
    head, rule, *found = lines
    assert head == ["fault", "what the user reads", "exit", "what was saved"]
    assert set("".join(rule)) == {"-"}
    return [(name, words, int(code), saved) for name, words, code, saved in found]


def test_the_table_has_every_fault_that_can_be_rehearsed_once():
    assert sorted(name for name, *_ in rows()) == sorted((*NAMES, *MISHAPS))


@pytest.mark.parametrize(("name", "words", "code", "saved"), rows(), ids=[row[0] for row in rows()])
def test_a_fault_ends_as_its_row_says(name, words, code, saved, three_band_path, tmp_path, capsys, monkeypatch):
    (quoted,) = re.findall(r"`([^`]+)`", words)
    monkeypatch.setattr(VirtualClock, "patience", lambda self, expected: 0.5)  # s by the wall
    begin = time.monotonic()
    found = run(["rehearse", str(three_band_path), "--fault", f"{name}@{STEP}", "--folder", str(tmp_path)])
    assert time.monotonic() - begin < BOUND
    out, err = capsys.readouterr()
    told = re.sub(r"\n *", " ", out + err)  # long sentences are folded
    assert quoted in told
    assert "Traceback" not in told
    assert found == code, told
    folder = tmp_path / "rehearsal-1" / "1"
    assert {"run.h5", "run.cut_short-1.h5"} & {path.name for path in folder.iterdir()} == {saved} - {"journal.txt"}
    assert (folder / saved).exists()
    if saved.endswith(".h5"):
        kept = read_run(folder / saved)
        assert kept.ended == ("complete" if saved == "run.h5" else "cut_short")
        assert len(kept.points) >= STEP
        assert kept.ended == "complete" or quoted in kept.reason
    if name != "folder-gone":  # it took the journal and the log with it
        assert len(Journal.peeked(folder).points) >= STEP
        assert_left_off(folder / "exchange.log")
    assert not list(folder.glob("*.part"))


def assert_left_off(log):
    """The last of all settings told to the generator is that its output be off, and it answers that it is."""
    lines = [line.split(" ", 4) for line in log.read_text().splitlines()]
    switched = [index for index, line in enumerate(lines) if line[2] == ">" and line[4].upper().startswith("OUTP")]
    generator = lines[switched[-1]][1]
    settings = [line[4] for line in lines if line[1:3] == [generator, ">"] and "?" not in line[4]]
    assert re.fullmatch(r"OUTP(ut)?(:STAT(e)?)? (OFF|0)(\\n)?", settings[-1], re.IGNORECASE), settings[-1]
    *_, answer = (line[4] for line in lines if line[1:3] == [generator, "<"])
    assert answer == r"0\n"
