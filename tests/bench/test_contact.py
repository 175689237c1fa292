"""`bandproof bench`: what it prints of a walk and of a contract, and its exit codes."""

from __future__ import annotations

import json
import sys
from dataclasses import replace

import pytest

from bandproof.bench.circuit import draw_parts
from bandproof.bench.rehearsal import rehearsal_bench
from bandproof.bench.verbs.console import run
from bandproof.bench.verbs.rehearse import world_of
from bandproof.drivers.clock import VirtualClock, create_clock_file
from bandproof.drivers.dialect import source
from bandproof.simulated_instruments.bench import start

WORKS, FAULT = 0, 3


@pytest.fixture
def call(capsys, monkeypatch):
    """Run `bandproof bench`; return (exit code, standard output, standard error)."""
    monkeypatch.setattr(VirtualClock, "patience", lambda self, expected: 0.5)

    def make(*arguments):
        capsys.readouterr()
        code = run(["bench", *map(str, arguments)])
        return code, *capsys.readouterr()

    return make


@pytest.fixture
def bench_file(tmp_path, one_band):
    """Return a maker of bench files of a simulated bench: its language, its dialects' texts by role."""
    servers = []

    def make(language="", texts=()):
        bench = rehearsal_bench(one_band)
        create_clock_file(tmp_path / "bench.time")
        world = world_of(one_band, bench, draw_parts(one_band, 1), 1, 1)
        servers.append(start(replace(world, clock=str(tmp_path / "bench.time"), language=language)))
        text = bench.text.replace("\nmains ", '\nsimulated_clock = "bench.time"\nmains ')
        for role, instrument in bench.instruments.items():
            text = text.replace(instrument.address, f"TCPIP::127.0.0.1::{servers[-1].ports[role]}::SOCKET")
            if role in dict(texts):
                (tmp_path / f"{role}.toml").write_text(dict(texts)[role])
                text = text.replace(f'"{instrument.dialect}"', f'"{role}.toml"')
        (tmp_path / "my.bench.toml").write_text(text)
        return tmp_path / "my.bench.toml"

    yield make
    for server in servers:
        server.stop()


@pytest.mark.parametrize("name", ["scpi99", "orchard", "harbour"])
@pytest.mark.parametrize("options", [(), ("--contract",), ("--no-board",)], ids=str)
def test_a_right_dialect_is_exit_0_and_reads_in_80_columns(call, bench_file, invented, name, options):
    language, texts = invented.get(name, ("", {}))
    code, out, err = call(bench_file(language, texts), *options)
    assert (code, err) == (WORKS, "")
    _, *lines = out.splitlines()  # the first names the file, however long its path
    assert max(map(len, (line for line in lines if ".toml" not in line))) <= 80
    assert all(any(line.startswith(role) for line in lines) for role in ("generator", "scope", "switch"))
    if not options:
        by_hand = out.partition("Compare by hand, once:\n")[2].split("\n\n")[0]
        assert [line.split()[0] for line in by_hand.splitlines()] == ["generator", "scope", "switch"]
        assert "nobody said that no board is connected" in out.replace("\n" + " " * 36, " ")


def test_a_slot_that_does_not_work_is_exit_3_and_named_at_the_end(call, bench_file):
    text = source("scpi99-generator").replace("OFFSet {value}", "OFST {value}")
    code, out, _ = call(bench_file(texts={"generator": text}))
    assert code == FAULT
    assert "  generator: offset.set\n" in out
    assert "error -113" in out
    assert "transfer.read 2" in out  # the other instruments were walked all the same


def test_a_slip_is_told_in_a_sentence_that_reads_in_80_columns(call, bench_file):
    text = source("scpi99-digitizer").replace("[interval]", "[interval]\nreciprocal = true", 1)
    code, out, _ = call(bench_file(texts={"scope": text}))
    assert code == FAULT
    assert "  scope: interval.query\n" in out
    told = out.replace("\n" + " " * 36, " ")
    assert "500 points would last 1.25e+07 s, but 0.02 s are set: likely [interval] reciprocal = false" in told
    assert max(len(line) for line in out.splitlines() if ".toml" not in line) <= 80


def test_a_word_that_no_sweep_uses_may_be_refused(call, bench_file):
    text = source("scpi99-digitizer").replace('AC = "AC"', 'AC = "ALT"')
    code, out, _ = call(bench_file(texts={"scope": text}))
    assert code == WORKS
    assert "refused   coupling AC 1" in out


def test_what_is_not_read_back_is_told_with_what_it_costs(call, bench_file):
    text = source("scpi99-generator").replace('query = "SOURce:FREQuency:CW?"', 'query = ""')
    code, out, _ = call(bench_file(texts={"generator": text}))
    assert code == WORKS
    note = "note: the frequency is not read back: a rounded one goes unnoticed, so frequency_accuracy in the bench file"
    assert note in " ".join(out.split())
    assert out.count("note: ") == 1


def test_the_walk_as_json_is_one_object(call, bench_file):
    code, out, _ = call(bench_file(), "--json")
    result = json.loads(out)
    assert (code, result["works"]) == (WORKS, True)
    slots = {line["slot"]: line for line in result["instruments"]["generator"]["slots"]}
    assert slots["frequency.query"] | {"came": ""} == {
        "slot": "frequency.query",
        "verdict": "accepted",
        "sent": "SOURce:FREQuency:CW?",
        "came": "",
        "needed": True,
    }
    assert slots["output.on"]["verdict"] == "skipped"


def test_a_broken_clause_is_exit_3_also_in_json(call, bench_file):
    """A scope that takes an offset and forgets it: nothing shifts its range."""
    text = source("scpi99-digitizer").replace("absolute = 0.01", "absolute = 9.0")
    text = text.replace('OFFSet {value}"', 'OFFSet {value};OFFSet 0"')
    path = bench_file(texts={"scope": text})
    code, out, _ = call(path, "--contract", "--json")
    outcomes = {entry["clause"]: entry["verdict"] for entry in json.loads(out)["instruments"]["scope"]["clauses"]}
    assert code == FAULT
    assert outcomes["tells_an_overload"] == "broken"
    code, out, _ = call(path, "--contract")
    assert code == FAULT
    assert "1 clause(s) broken." in out


@pytest.mark.parametrize(("answer", "verdict"), [("y", "accepted"), ("n", "skipped"), ("", "skipped")])
def test_at_a_terminal_it_asks_whether_a_board_is_connected(call, bench_file, monkeypatch, answer, verdict):
    import io

    class Terminal(io.StringIO):
        def isatty(self):
            return True

    monkeypatch.setattr(sys, "stdin", Terminal(f"{answer}\n"))
    code, out, _ = call(bench_file())
    assert code == WORKS
    assert "Is no board connected" in out
    assert f"  {verdict:<9} output.on" in out
