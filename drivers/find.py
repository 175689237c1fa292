"""Which instruments VISA can see: their addresses, and what each answers to ``*IDN?``."""

from __future__ import annotations

import contextlib
import io
import warnings
from collections.abc import Iterator

from bandproof.drivers.clock import Clock
from bandproof.drivers.errors import InstrumentProblem
from bandproof.drivers.link import Link
from bandproof.drivers.session import Session, as_text
from bandproof.drivers.visa import listed

__all__ = ["find_instruments"]


def find_instruments(clock: Clock, *, visa_library: str = "@py") -> Iterator[tuple[str, str]]:
    """Yield each address VISA lists with its ``*IDN?``, or with why there was none; nothing else is sent.

    Raw sockets announce themselves to nobody and are never listed.
    """
    with warnings.catch_warnings(), contextlib.redirect_stdout(io.StringIO()):
        warnings.simplefilter("ignore")  # libraries for interfaces that are not installed say so at length
        addresses = listed(visa_library)
    for address in addresses:
        session = Session(Link(address, clock, visa_library=visa_library))
        try:
            yield address, session.ask("*IDN?", as_text)
        except InstrumentProblem as problem:
            yield address, f"no identity: {problem}"
        finally:
            session.link.close()
