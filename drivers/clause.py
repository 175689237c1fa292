"""How a clause of a contract says that it is broken, or that it was not tried."""

from __future__ import annotations

__all__ = ["Broken", "NotTried", "demand"]


class Broken(Exception):
    """An instrument does not keep a clause."""


class NotTried(Exception):
    """A clause could not be tried; why."""


def demand(kept: bool, found: str) -> None:
    """Raise Broken with what was found unless a demand is kept."""
    if not kept:
        raise Broken(found)
