"""The page of the run file's schema: what the generator writes, and exactly what is in real run files."""

import ast
import json
import re
from pathlib import Path

import h5py
import numpy as np
import pytest

from bandproof.bench.run_schema import EVENTS
from bandproof.bench.runfile import write_run
from tests.schema_page import PAGE, page

ROOT = Path(__file__).parents[2]
TYPES = {"int64": "int64", "float64": "float64", "float32": "float32", "uint8": "uint8", "bytes": "S"}


@pytest.fixture(scope="module")
def files(outcome, tmp_path_factory):
    """Run files that have all there can be: references, a rehearsed one, and one with records kept."""
    raw = tmp_path_factory.mktemp("raw") / "run.h5"
    write_run(raw, outcome.run, outcome.result, raw=lambda index: np.zeros((2, 4)) if index == 3 else None)
    return [outcome.folder / "run.h5", raw, *sorted((ROOT / "tests/reference_runs/v1").rglob("*.h5"))]


def rows(heading, columns):
    """Return the rows of the table below a heading, backquotes taken off."""
    section = PAGE.read_text(encoding="utf-8").split(f"\n## {heading}\n")[1].split("\n## ")[0]
    cells = [line[2:-2].split(" | ") for line in section.splitlines() if line.startswith("| `")]
    assert all(len(row) == columns for row in cells)
    return {row[0].strip("`"): row[1:] for row in cells}


def test_the_page_is_what_the_generator_writes():
    assert PAGE.read_text(encoding="utf-8") == page(), "run: python -m tests.schema_page"


def general(name):
    name = re.sub(r"^points/[^/]+", "points/STAGE", name)
    return re.sub(r"dialect_\w+", "dialect_ROLE", re.sub(r"^raw/\d{6}", "raw/STEP", name))


def found_in(path):
    """Return every group and dataset with its type, dimensions and attributes, as the page writes them."""
    found = {}

    def visit(name, item):
        attributes = ", ".join(f"`{key}`: {value.decode()}" for key, value in item.attrs.items())
        kind = item.dtype.str.lstrip("<|") if isinstance(item, h5py.Dataset) else "group"
        kind = "S" if kind[0] == "S" else np.dtype(kind).name if kind != "group" else kind
        assert kind == "group" or item.ndim == 1
        found.setdefault(general(name or "/"), set()).add((kind, attributes))

    with h5py.File(path) as file:
        visit("", file)
        file.visititems(visit)
    return found


def test_every_object_of_real_files_is_on_the_page_and_none_else(files):
    told = {
        name: (TYPES.get(kind, kind), attribute)
        for name, (kind, _, attribute, _) in rows("Groups, datasets, attributes", 5).items()
    }
    found = {}
    for path in files:
        for name, kinds in found_in(path).items():
            found.setdefault(name, set()).update(kinds)
    assert {name: {(kind, attribute.strip())} for name, (kind, attribute) in told.items()} == {
        name: {(kind, attribute.strip()) for kind, attribute in kinds} for name, kinds in found.items()
    }


def test_every_object_of_the_page_has_a_meaning():
    for name in ("Groups, datasets, attributes", *(f"`{name}`" for name in JSON_TEXTS)):
        for row, cells in rows(name, 5 if name[0] == "G" else 4).items():
            assert cells[-1].strip(), row


JSON_TEXTS = ("about", "steps", "result", "budget", "history", "texts/thru", "texts/checks")
KINDS = {
    str: "text",
    bool: "boolean",
    int: "integer",
    float: "number",
    list: "list",
    dict: "object",
    type(None): "null",
}


def values(value, way=""):
    """Yield the way to every value in a JSON value, and the value."""
    if isinstance(value, dict):
        for key, inner in value.items():
            here = f"{way}.{key}" if way else key
            yield here, inner
            yield from values(inner, here)
    elif isinstance(value, list):
        for inner in value:
            yield from values(inner, f"{way}[]")


def row_of(way, told):
    """Return the page's row for a way: the row itself, or the one that has * for names."""
    if way in told:
        return way
    fitting = [row for row in told if re.fullmatch(re.escape(row).replace(r"\*", r"[^.\[]+"), way)]
    assert len(fitting) == 1, f"{way}: {fitting}"
    return fitting[0]


@pytest.mark.parametrize("name", JSON_TEXTS)
def test_every_key_of_a_text_is_on_the_page_with_its_kind_and_none_else(files, name):
    told, seen = rows(f"`{name}`", 4), set()
    for path in files:
        with h5py.File(path) as file:
            text = bytes(file[name][()]).decode() if name in file else ""
        for line in text.splitlines():
            for way, value in values(json.loads(line)):
                row = row_of(way, told)
                seen.add(row)
                kinds = told[row][0].split(" or ")
                assert KINDS[type(value)] in [*kinds, *(["integer"] if "number" in kinds else [])], way
    assert seen == set(told) or name == "history"


def events_of_the_code():
    """Return the events that the code tells a journal of, with their keys."""
    found = {"resumed": {("utc",)}}  # Journal.resumed has an entry of its own
    for path in (ROOT / "bench").glob("*.py"):
        for call in ast.walk(ast.parse(path.read_text(encoding="utf-8"))):
            if isinstance(call, ast.Call) and isinstance(call.func, ast.Attribute) and call.func.attr == "told":
                keys = tuple(sorted(word.arg for word in call.keywords))
                found.setdefault(call.args[1].value, set()).add(keys)
    return found


def test_the_events_of_the_page_are_those_of_the_code():
    assert {event: {keys} for event, (keys, _) in EVENTS.items()} == events_of_the_code()
    section = PAGE.read_text(encoding="utf-8").split("| event of `history`")[1]
    assert [line.split(" | ")[0][2:] for line in section.splitlines()[2:]] == list(EVENTS)
    keys = {key for keys, _ in EVENTS.values() for key in keys}
    assert set(rows("`history`", 4)) == {"time", "event", *keys}
