"""README is true: its output is what comes out, its dialect is one, its files and keys exist."""

import re
from pathlib import Path

import pytest

from bandproof.bench.verbs import console
from bandproof.drivers.dialect import parse

ROOT = Path(__file__).parent.parent
README = (ROOT / "README.md").read_text(encoding="utf-8")


def blocks(language):
    return re.findall(rf"^```{language}\n(.*?)^```$", README, re.MULTILINE | re.DOTALL)


def without_wall_time(text):
    return re.sub(r"\([\d.]+ s by the wall\)", "(by the wall)", text).strip()


@pytest.fixture
def printed(tmp_path, monkeypatch, capsys):
    monkeypatch.chdir(tmp_path)

    def run(*arguments):
        code = console.run(arguments)
        return code, capsys.readouterr().out

    return run


def test_first_command_prints_what_readme_shows(printed):
    code, out = printed("rehearse")
    assert code == 0
    assert without_wall_time(out) == without_wall_time(blocks("text")[0])


def test_defect_prints_what_readme_shows(printed):
    code, out = printed("rehearse", "--defect", "low.R_shunt=3k4")
    assert code == 1
    shown = [line for line in blocks("text")[1].splitlines() if line != "..."]
    assert [line for line in shown if line not in out.splitlines()] == []


def test_parts_print_what_readme_shows(printed):
    code, out = printed("parts", "--centre", "1 kHz", "--q", "1.5", "--gain", "10 dB", "--gbw", "4 MHz")
    assert code == 0
    assert out.strip() in [block.strip() for block in blocks("text")]


def test_prediction_prints_what_readme_shows(printed):
    printed("begin", "my-board")
    code, out = printed("predict", "my-board/talkback.board.toml", "--bench", "my-board/simulated.bench.toml")
    assert code == 0
    shown = next(block for block in blocks("text") if "boards drawn" in block).splitlines()
    assert [line for line in shown if line != "..." and line not in out.splitlines()] == []


def test_dialect_of_readme_is_a_dialect():
    text = next(block for block in blocks("toml") if 'kind = "generator"' in block)
    dialect = parse(text, "README.md")
    assert dialect.frequency.unit == 1000.0
    assert dialect.amplitude.meaning == "peak-to-peak"


def test_bench_of_readme_is_read_without_a_mistake():
    from bandproof.bench.bench_file import parse_bench

    text = next(block for block in blocks("toml") if "[wiring]" in block)
    assert parse_bench(text, "README.md").wires["low_out"].by_hand


def test_run_file_lines_of_readme_run(printed, monkeypatch):
    printed("rehearse")
    monkeypatch.chdir("rehearsals/rehearsal-1/1")
    code = blocks("python")[0]
    exec(compile(code, "README.md", "exec"), {})


@pytest.mark.parametrize("name", re.findall(r"\]\(([^)#]+)\)", README))
def test_linked_file_exists(name):
    assert (ROOT / name).exists()
