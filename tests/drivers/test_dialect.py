"""Dialect files: shipped ones load, mistakes are all found, and the file alone decides what is sent."""

from __future__ import annotations

import subprocess
import sys

import pytest

from bandproof.drivers import dialect
from bandproof.drivers.dialect import DialectMistakes

GENERATOR = """
title = "mine"
kind = "generator"
[frequency]
set = "F {value}"
query = "F?"
[amplitude]
set = "A {value}"
query = "A?"
[offset]
set = "O {value}"
query = "O?"
[output]
on = "Z1"
off = "Z0"
query = "Z?"
"""
SCOPE = """
title = "mine"
kind = "scope"
[range]
set = "R{channel} {value}"
query = "R{channel}?"
[duration]
set = "T {value}"
query = "T?"
[points]
set = "N {value}"
query = "N?"
[interval]
query = "I?"
[acquisition]
start = "GO"
[transfer]
read = "D{channel}?"
[overload]
"""


def mistakes(text):
    with pytest.raises(DialectMistakes) as caught:
        dialect.parse(text, "mine.toml")
    return caught.value


@pytest.mark.parametrize("name", ["scpi99-generator", "scpi99-digitizer", "scpi99-switch", "scpi99-supply"])
def test_a_shipped_dialect_loads_by_its_name_and_as_a_copy(name, tmp_path):
    copy = tmp_path / "copy.toml"
    copy.write_text(dialect.source(name))
    assert dialect.load(copy) == dialect.load(name)
    assert name in dialect.shipped()


def test_a_generator_is_described_in_some_thirty_lines():
    assert dialect.parse(GENERATOR, "mine.toml").frequency.set == "F {value}"
    assert len(GENERATOR.strip().splitlines()) <= 30


def test_five_mistakes_give_five_findings_with_place_found_accepted_and_nearest_word():
    text = (
        GENERATOR.replace('query = "F?"', 'querry = "F?"')
        .replace('"A {value}"', '"A {valve}"\nmeaning = "pk-to-peak"')
        .replace('query = "O?"', "query = 5")
        .replace('on = "Z1"', 'on = "Z1"\nis_on = true')
    )
    found = mistakes(text)
    words = str(found)
    assert sorted({finding.path for finding in found.findings}) == [
        "amplitude.meaning",
        "amplitude.set",
        "frequency.querry",
        "offset.query",
        "output.is_on",
    ]
    assert "frequency.querry: found 'querry', accepted: one of set, query" in words
    assert "(nearest: query)" in words
    assert "(nearest: peak-to-peak)" in words
    assert "amplitude.set: found {valve}" in words
    assert "{value} and {channel} as placeholders" in words
    assert "mine.toml" in words


ONE_MISTAKE = {
    "a missing table": (GENERATOR.replace("[offset]", "[offsets]"), "offset", "has to be there"),
    "no placeholder": (GENERATOR.replace("F {value}", "F"), "frequency.set", "{value} somewhere in it"),
    "a single brace": (GENERATOR.replace("F {value}", "F {value} {"), "frequency.set", "other braces doubled"),
    "a wrong format": (GENERATOR.replace('"F?"', '"F?"\nformat = "%g"'), "frequency.format", ".9g"),
    "limits crossed": (GENERATOR.replace('"F?"', '"F?"\nlimits = [2, 1]'), "frequency.limits", "the lower first"),
    "one limit": (GENERATOR.replace('"F?"', '"F?"\nlimits = [1]'), "frequency.limits", "two of them"),
    "a word among numbers": (
        GENERATOR.replace("[output]", '[habits]\nharmless = ["-222"]\n[output]'),
        "habits.harmless",
        "a list of whole numbers",
    ),
    "a broken pattern": (
        GENERATOR.replace("[output]", '[identity]\npattern = "("\n[output]'),
        "identity.pattern",
        "regular expression",
    ),
    "no ASCII": (GENERATOR.replace("Z1", "Zµ"), "output.on", "ASCII"),
    "a value for a table": (
        GENERATOR.replace('[offset]\nset = "O {value}"\nquery = "O?"', "").replace("[freq", "offset = 1\n[freq"),
        "offset",
        "a table",
    ),
    "an unknown kind": (GENERATOR.replace('"generator"', '"generater"'), "kind", "(nearest: generator)"),
    "codes without a scale": (
        SCOPE.replace("[overload]", 'encoding = "int16"\n[overload]'),
        "transfer.scaling",
        "query or preamble",
    ),
    "no query of the interval": (SCOPE.replace('query = "I?"', ""), "interval.query", "really used"),
    "text in binary": (
        SCOPE.replace("[overload]", 'framing = "line"\n[overload]'),
        "transfer.framing",
        "block, samples are bytes",
    ),
    "no TOML": ("title = ", "file", "TOML"),
}


@pytest.mark.parametrize(("text", "path", "words"), ONE_MISTAKE.values(), ids=ONE_MISTAKE.keys())
def test_a_mistake_is_named_with_its_place(text, path, words):
    found = mistakes(text)
    assert path in {finding.path for finding in found.findings}
    assert words in str(found)


WAVEFORM = (
    GENERATOR
    + """
[waveform]
upload = "T {block}"
select = ["P"]
"""
)


@pytest.mark.parametrize(
    ("old", "new", "path"),
    [
        ("{block}", "", "waveform.upload"),
        ("{block}", "{block}{values}", "waveform.upload"),
        ("{block}", "{values}", "waveform.encoding"),
        ("T {block}", 'T {block}"\nencoding = "ascii', "waveform.encoding"),
        ("T {block}", 'T {block}"\nencoding = "int16"\nfull = 32768\nquery = "', "waveform.full"),
        ('["P"]', "[]", "waveform.select"),
    ],
)
def test_a_waveform_slot_that_contradicts_itself_is_named(old, new, path):
    assert dialect.parse(WAVEFORM, "mine.toml").waveform.select == ("P",)
    assert path in {finding.path for finding in mistakes(WAVEFORM.replace(old, new)).findings}


def test_the_texts_these_tests_start_from_have_no_mistake():
    assert dialect.parse(SCOPE, "mine.toml").title == "mine"
    assert dialect.parse(GENERATOR, "mine.toml").title == "mine"


def test_a_dialect_that_is_not_there_names_the_shipped_ones(tmp_path):
    with pytest.raises(DialectMistakes, match="scpi99-digitizer"):
        dialect.load(tmp_path / "absent.toml")


def test_importing_the_drivers_imports_neither_numpy_nor_pyvisa():
    modules = ", ".join(f"bandproof.drivers.{name}" for name in ("generator", "scope", "switch", "dialect", "link"))
    code = f"import sys, {modules}; print(sorted({{'numpy', 'pyvisa', 'pyvisa_py'}} & set(sys.modules)))"
    run = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    assert run.stdout.strip() == "[]"


def test_a_scope_that_is_told_its_interval_has_no_duration():
    bare = SCOPE.replace('[duration]\nset = "T {value}"\nquery = "T?"\n', "")
    told = bare.replace('query = "I?"', 'query = "I?"\nset = "I {value}"')
    assert dialect.parse(told, "mine") == dialect.parse(told + "[duration]\n", "mine")
    assert [finding.path for finding in mistakes(bare).findings] == ["duration"]
