"""Blank dialects have every slot, explained, and load once they are filled in."""

from __future__ import annotations

import re
import tomllib
from dataclasses import MISSING, fields, is_dataclass
from typing import get_type_hints

import pytest

from bandproof.drivers.dialect import DialectMistakes, blanks, parse, shipped, source
from bandproof.drivers.schema import read_table
from bandproof.drivers.slots import GeneratorDialect, ScopeDialect, SupplyDialect, SwitchDialect

KINDS = {"generator": GeneratorDialect, "scope": ScopeDialect, "switch": SwitchDialect, "supply": SupplyDialect}


def slots(kind, path=()):
    """Return the paths of every slot of a dataclass, those of tables inside included."""
    hints, found = get_type_hints(kind), []
    for slot in fields(kind):
        inner = hints[slot.name]
        found += slots(inner, (*path, slot.name)) if is_dataclass(inner) else [(*path, slot.name)]
    return found


def entries(table, path=()):
    found = []
    for key, value in table.items():
        found += entries(value, (*path, key)) if isinstance(value, dict) and key != "words" else [(*path, key)]
    return found


@pytest.mark.parametrize("kind", KINDS)
def test_a_blank_dialect_has_every_slot_once_and_no_other(kind):
    found = entries(tomllib.loads(source(f"blank-{kind}")))
    assert sorted(found) == sorted(slots(KINDS[kind]))


@pytest.mark.parametrize("kind", KINDS)
def test_every_kind_of_slot_of_a_blank_dialect_is_explained(kind):
    """Each slot has a comment of its own, or the same slot had one before in the file, or its table has one."""
    explained, table = set(), False
    for line in source(f"blank-{kind}").splitlines():
        code, _, comment = line.partition("#")
        if code.startswith("["):
            table = bool(comment.strip())
        elif slot := re.match(r"(\w+) +=|(\w+) =", code):
            name = slot[1] or slot[2]
            if comment.strip():
                explained.add(name)
            assert name in explained or table or name == "kind", line


def written(value):
    """Return a value as TOML."""
    if isinstance(value, bool):
        return str(value).lower()
    if isinstance(value, list):
        return f"[{', '.join(map(written, value))}]"
    if isinstance(value, dict):
        return f"{{ {', '.join(f'{key} = {written(entry)}' for key, entry in value.items())} }}"
    if isinstance(value, str):
        return '"' + value.replace("\\", "\\\\").replace('"', '\\"').replace("\r", "\\r").replace("\n", "\\n") + '"'
    return repr(value)


def filled(blank, table):
    """Return a blank text with the values of a table written into its lines, as a person would."""
    lines, where = [], table
    for line in blank.splitlines():
        if header := re.match(r"\[(\w+)\]", line):
            where = table.get(header[1], {})
        key = re.match(r"\w+", line)
        lines.append(f"{key[0]} = {written(where[key[0]])}" if key and key[0] in where else line)
    return "\n".join(lines)


@pytest.mark.parametrize("language", ["orchard", "harbour", "scpi99"])
@pytest.mark.parametrize("kind", KINDS)
def test_a_blank_dialect_filled_in_line_by_line_loads_with_those_values(kind, language, invented):
    """The tables are those of other dialects; what they leave out keeps the blank's own values."""
    names = {"scope": "digitizer"}
    text = source(f"scpi99-{names.get(kind, kind)}") if language == "scpi99" else invented[language][1][kind]
    table = tomllib.loads(text)
    dialect = parse(filled(source(f"blank-{kind}"), table), "filled")
    for path in entries(table):
        value, expected = dialect, table
        for name in path:
            value, expected = getattr(value, name), expected[name]
        assert value == (tuple(expected) if isinstance(expected, list) else expected), path


@pytest.mark.parametrize("kind", KINDS)
def test_a_line_left_out_has_the_value_that_the_blank_dialect_shows(kind):
    table = tomllib.loads(source(f"blank-{kind}"))
    findings = []
    shown = read_table(KINDS[kind], table, "", findings)
    bare = {name: {} if isinstance(value, dict) else value for name, value in table.items()}
    assert read_table(KINDS[kind], bare, "", findings) == shown
    assert findings == []
    tables = {name for name, value in table.items() if isinstance(value, dict)}
    required = {slot.name for slot in fields(KINDS[kind]) if slot.default is slot.default_factory is MISSING}
    least = {name: value for name, value in bare.items() if name in required}
    assert read_table(KINDS[kind], least, "", findings) == shown  # nor do tables left out, and names of channels
    assert required & tables or kind == "switch"


NEEDED = {
    "generator": {"frequency.set", "amplitude.set", "output.on", "output.off"},
    "scope": {"range.set", "points.query", "interval.query", "acquisition.start", "transfer.read"},
    "switch": {"close", "open_all"},
    "supply": {"voltage.set", "current_limit.set", "current.query", "output.on", "output.off"},
}


@pytest.mark.parametrize("kind", KINDS)
def test_a_blank_dialect_left_blank_names_the_slots_nobody_can_do_without(kind):
    with pytest.raises(DialectMistakes) as caught:
        parse(source(f"blank-{kind}"), "blank")
    assert {finding.path for finding in caught.value.findings} == NEEDED[kind]


def test_blank_dialects_come_with_the_program_and_are_none_of_those_to_be_used_as_they_are():
    assert {f"blank-{kind}" for kind in KINDS} == set(blanks())
    assert set(blanks()).isdisjoint(shipped())


@pytest.mark.parametrize("kind", KINDS)
def test_no_line_of_a_blank_dialect_is_wider_than_120_columns(kind):
    assert max(map(len, source(f"blank-{kind}").splitlines())) <= 120
