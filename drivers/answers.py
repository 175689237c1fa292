"""What an answer says, read by a dialect's template: in ``TONE {value} kHz`` a number stands where ``{value}`` does.

Templates are written like commands. ``{any}`` stands for whatever comes there, blanks may be more or fewer (none is
missing behind ``{any}``), capital and small letters are the same, a word behind ``{any}`` begins a word.
"""

from __future__ import annotations

import re
import string
from functools import lru_cache

__all__ = ["is_like", "is_spelt_otherwise", "number_in"]

_NUMBER = r"\s*((?>[+-]?(?:\d+\.?\d*|\.\d+)(?:E ?[+-]?\d+)?))\s*"  # as `scpi.parse_number` has it, whole or not at all


def number_in(template: str, answer: bytes, **names: str) -> bytes:
    """Return the number's text in an answer; without a template the answer itself.

    Parameters
    ----------
    template : str
        With ``{value}``, perhaps ``{any}`` and the names given.
    answer : bytes
        One line.
    **names : str
        What stands for other placeholders, as ``channel="1"``.

    Raises
    ------
    ValueError
        The answer is not like the template.

    Examples
    --------
    >>> number_in("TONE {value} kHz", b"TONE 1.25000 kHz"), number_in("{any} STEP {value};{any}", b"ZERO 0; STEP -2; X")
    (b'1.25000', b'-2')
    """
    if not template:
        return answer
    found = _pattern(template, tuple(names.items())).fullmatch(answer.decode("latin-1"))
    if found is None:
        raise ValueError(f"an answer like {template!r}")
    return found[1].encode("latin-1")


def is_like(template: str, answer: str, **names: str) -> bool:
    """Return whether an answer is what a template says, quotes round it or not.

    >>> is_like("AT 0{route}", "at 02", route="2"), is_like("AT 0{route}", "AT 00", route="2")
    (True, False)
    """
    return _pattern(template, tuple(names.items())).fullmatch(answer.strip("\"'")) is not None


def is_spelt_otherwise(answer: str, wanted: str) -> bool:
    """Return whether two answers differ by blanks and leading zeros alone.

    >>> is_spelt_otherwise("AT 01", "AT 1"), is_spelt_otherwise("AT 10", "AT 1")
    (True, False)
    """
    first, second = (re.sub(r"\s+|(?<!\d)0+(?=\d)", "", text) for text in (answer, wanted))
    return first == second


@lru_cache(maxsize=256)
def _pattern(template: str, names: tuple[tuple[str, str], ...]) -> re.Pattern[str]:
    known, parts, after_any = dict(names), [r"\s*"], False
    for literal, name, _, _ in string.Formatter().parse(template):
        parts.append(_blanks(literal, after_any=after_any))
        if name is not None:
            parts.append(".*?" if name == "any" else _blanks(known[name]) if name in known else _NUMBER)
        after_any = name == "any"
    return re.compile("".join([*parts, r"\s*"]), re.IGNORECASE | re.DOTALL)


def _blanks(text: str, *, after_any: bool = False) -> str:
    """Return the pattern of a text whose blanks may be more or fewer."""
    pattern = r"\s*".join(map(re.escape, re.split(r"\s+", text)))
    if after_any and text[:1].isspace():
        return r"\s+" + pattern
    return r"(?<!\w)" + pattern if after_any and re.match(r"\w", text) else pattern
