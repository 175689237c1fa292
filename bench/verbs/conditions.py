"""Who measures, in which room, and why: taken from options, or asked for once on a terminal, else not stated."""

import sys
from typing import TYPE_CHECKING

import click

from bandproof.bench.errors import BadInput

if TYPE_CHECKING:
    from bandproof.bench.operator import Operator
    from bandproof.bench.stop import Stop

__all__ = ["ambient_of", "in_words", "person", "stated"]


def in_words(_: click.Context, option: click.Parameter, text: str) -> str:
    """Return a reason given as an option, "" for none; a callback of click (BadInput: it says nothing)."""
    if text and not any(map(str.isalnum, text)):
        raise BadInput(
            f"{option.opts[0]} {text!r} says nothing: it is kept for whoever reads the run, write a few words"
        )
    return text.strip()


def stated(operator: str, ambient: str | None) -> tuple[str, float | None]:
    """Return who measures and the room's temperature in °C; on a terminal what is missing is asked for, once.

    Raises
    ------
    BadInput
        The temperature is none.
    """
    if sys.stdin.isatty():
        operator = operator or _answer("Who measures? [Enter: not stated] ")
        if ambient is None:
            ambient = _answer("Temperature of the room, such as 23 °C? [Enter: not stated] ")
    return operator, ambient_of(ambient)


def ambient_of(text: str | None) -> float | None:
    """Return the temperature in °C of a text; None for none or an empty one (BadInput: it is no temperature)."""
    from bandproof.bench.quantities import QuantityError, read_quantity

    try:
        return read_quantity(text, "temperature") if text else None
    except QuantityError as problem:
        raise BadInput(f"--ambient {text!r}: {problem}") from problem


def person(stop: "Stop", *, there: bool = True) -> "Operator":
    """Return a person to ask where there is a terminal, else nobody."""
    from bandproof.bench.operator import Absent, AtTerminal

    return AtTerminal(_ask, stop) if there and sys.stdin.isatty() else Absent()


def _answer(question: str) -> str:
    try:
        return _ask(question).strip()
    except EOFError:
        return ""


def _ask(request: str) -> str:
    click.echo(request, err=True, nl=False)
    return input()
