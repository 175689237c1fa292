"""``python -m tests.schema_page`` writes bench/RUN_FILE.md from the tables that the run file is written by."""

from collections.abc import Iterator
from pathlib import Path

from bandproof.bench.run_schema import COLUMNS, EVENTS, JSON, RAW, SCHEMA, TEXTS, USER_BLOCK, Keys

PAGE = Path(__file__).parents[1] / "bench" / "RUN_FILE.md"
_TYPES = {"integer": "int64", "number": "float64", "text": "bytes"}  # fixed length, ASCII
_GROUPS = {
    "/": ("`schema`: " + SCHEMA, "the file"),
    "points": ("", "what was measured; absent where nothing was"),
    "points/STAGE": ("", "records of a stage in the order taken, all columns of one length; thru: of the path itself"),
    "raw": ("", "records as the scope gave them; only where they were asked for (`--raw`)"),
    "raw/STEP": ("", "of one record, `step` with six digits"),
    "texts": ("", "the files that the run was made with"),
}


def page() -> str:
    """Return the page."""
    return "\n".join(_lines()) + "\n"


def _lines() -> Iterator[str]:
    yield f"# The run file, {SCHEMA}"
    yield ""
    yield "Written by `python -m tests.schema_page` from `bench/run_schema.py`, which the run file is written by, too."
    yield ""
    yield f"The first {USER_BLOCK} bytes say `{SCHEMA} sha256=` and 64 hexadecimal digits, a newline, then zeros: the"
    yield "SHA-256 of all bytes behind them. These are HDF5, readable from version 1.10 of its library on."
    yield "Texts are one-dimensional datasets of UTF-8 bytes. A run that lacks a dataset had nothing to put into it."
    yield ""
    yield "## Groups, datasets, attributes"
    yield ""
    yield from _table("name", "type", "shape", "attribute", "meaning")
    for name, (attribute, meaning) in _GROUPS.items():
        yield _row(f"`{name}`", "group", "", attribute, meaning)
    for name, (form, meaning) in TEXTS.items():
        yield _row(f"`{name}`", "uint8", "bytes", "`encoding`: utf-8", f"{form}: {meaning}")
    for name, one in COLUMNS.items():
        yield _row(f"`points/STAGE/{name}`", _TYPES[one.kind], "records", f"`units`: {one.unit}", one.meaning)
    for name, meaning in RAW.items():
        yield _row(f"`raw/STEP/{name}`", "float32", "samples", "`units`: V", meaning)
    for name, keys in JSON.items():
        yield ""
        yield f"## `{name}`"
        yield ""
        yield from _keys(keys)
    yield ""
    yield from _table("event of `history`", "its keys besides time and event", "meaning")
    for event, (told, meaning) in EVENTS.items():
        yield _row(event, ", ".join(told), meaning)


def _keys(keys: Keys) -> Iterator[str]:
    yield "`[]`: in each of a list; `*`: any name."
    yield ""
    yield from _table("key", "kind", "unit", "meaning")
    for key, (kind, unit, meaning) in keys.items():
        yield _row(f"`{key}`", kind, unit, meaning)


def _table(*heads: str) -> list[str]:
    return [_row(*heads), _row(*("---" for _ in heads))]


def _row(*cells: str) -> str:
    return f"| {' | '.join(cells)} |"


if __name__ == "__main__":
    PAGE.write_text(page(), encoding="utf-8")
