"""What is printed is plain text: no colour anywhere, nothing rewritten in a pipe, values whole on a narrow terminal."""

import fcntl
import os
import re
import struct
import subprocess
import sys
import termios

import pytest

from bandproof.bench.summary import summary_lines
from bandproof.bench.verbs import console
from bandproof.bench.verbs.screen import columns, folded

PROGRAM = "import sys; from bandproof.bench.verbs import console; sys.exit(console.run(sys.argv[1:]))"
ESCAPE = b"\x1b"  # ECMA-48 (ISO/IEC 6429): every control sequence, colours too, begins with it


def environment(**more):
    return {**{name: value for name, value in os.environ.items() if name != "COLUMNS"}, **more}


@pytest.fixture(scope="module", params=[40, 80])
def on_a_terminal(request, two_band_path, tmp_path_factory):
    """Run a rehearsal on a pseudo-terminal of so many columns; return its width and the bytes it got."""
    ours, theirs = os.openpty()
    fcntl.ioctl(theirs, termios.TIOCSWINSZ, struct.pack("HHHH", 24, request.param, 0, 0))
    command = [sys.executable, "-c", PROGRAM, "rehearse", str(two_band_path), "--folder"]
    folder = tmp_path_factory.mktemp("terminal")
    streams = {"stdin": subprocess.DEVNULL, "stdout": theirs, "stderr": theirs}
    with subprocess.Popen([*command, str(folder)], env=environment(), **streams) as running:
        os.close(theirs)
        found = bytearray()
        try:
            while data := os.read(ours, 65536):
                found += data
        except OSError:  # Linux: the other end is closed
            pass
        os.close(ours)
    assert running.returncode == 0
    return request.param, bytes(found)


def test_a_terminal_gets_no_escape_bytes(on_a_terminal):
    _, found = on_a_terminal
    assert b"\r" in found.replace(b"\r\n", b"")  # it was a terminal: progress is rewritten there
    assert ESCAPE not in found


def test_progress_is_rewritten_within_the_terminal_s_width(on_a_terminal):
    width, found = on_a_terminal
    lines = [part for part in re.split("\r|\n", found.decode()) if "record" in part]
    assert lines
    assert max(map(len, lines)) < width


def test_a_pipe_gets_plain_lines(two_band_path, tmp_path):
    command = [sys.executable, "-c", PROGRAM, "rehearse", str(two_band_path), "--folder", str(tmp_path)]
    done = subprocess.run(command, capture_output=True, check=True, env=environment())
    assert b"measuring low" in done.stderr
    for stream in (done.stdout, done.stderr):
        assert b"\r" not in stream
        assert ESCAPE not in stream


@pytest.fixture
def fitted(outcome, tmp_path, capsys):
    """Fit a copy of the run anew; return what was printed, without what differs from time to time."""

    def fit(*options):
        run = tmp_path / "run.h5"
        run.write_bytes((outcome.folder / "run.h5").read_bytes())
        assert console.run(["fit", str(run), *options]) == 0
        (tmp_path / "run.refit-1.json").unlink()
        return re.sub(r"[\d.]+(\s+s\s+by|,\n \"points)", r"0\1", capsys.readouterr().out), str(tmp_path)

    return fit


@pytest.mark.parametrize("width", [40, 60])
def test_a_narrow_terminal_gets_short_lines_and_whole_values(outcome, fitted, width, monkeypatch):
    wide, _ = fitted("--budget")
    monkeypatch.setenv("COLUMNS", str(width))
    narrow, folder = fitted("--budget")
    assert all(len(line) <= width or folder in line for line in narrow.splitlines())  # a path is to be copied
    assert narrow.split() == wide.split()
    values = re.findall(r"\S+ ± \S+ (?:k?Hz|dB)", "\n".join(summary_lines(outcome.stages)))
    assert len(values) == 4
    for value in values:
        assert any(value in line for line in narrow.splitlines())


def test_json_is_never_folded(fitted, monkeypatch):
    wide, _ = fitted("--json")
    monkeypatch.setenv("COLUMNS", "40")
    assert fitted("--json")[0] == wide


def test_a_line_that_fits_is_left_as_it_is():
    assert folded("a   b", 5) == "a   b"


def test_a_value_longer_than_a_line_breaks_at_its_blanks():
    assert folded("  " + "word " * 12, 40).split() == ["word"] * 12
    assert max(map(len, folded("  " + "word " * 12, 40).splitlines())) <= 40


@pytest.mark.parametrize(("stated", "width"), [("132", 80), ("60", 60), ("3", 20), ("none", 80)])
def test_width_is_that_of_the_terminal_up_to_80(monkeypatch, stated, width):
    monkeypatch.setenv("COLUMNS", stated)
    monkeypatch.setattr("sys.__stdout__", None)  # no terminal to ask
    assert columns() == width
