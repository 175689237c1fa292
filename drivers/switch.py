"""A switch: one route closed at a time, confirmed."""

from __future__ import annotations

from functools import partial

from bandproof.drivers.answers import is_like
from bandproof.drivers.instrument import Instrument
from bandproof.drivers.session import Session, as_text
from bandproof.drivers.slots import SwitchDialect

__all__ = ["Switch"]


class Switch(Instrument):
    """A switch as its dialect describes it.

    Parameters
    ----------
    session : Session
        The conversation.
    dialect : SwitchDialect
        What it understands.

    Notes
    -----
    Every method may raise the errors of `Session.command` and `SettingRefused`: it is then unknown which routes are
    closed.
    """

    def __init__(self, session: Session, dialect: SwitchDialect) -> None:
        super().__init__(session, dialect.identity)
        self.dialect = dialect

    def be_safe(self) -> None:
        """Open every route."""
        self._forget("route")
        self.open_all()

    def close(self, route: str) -> None:
        """Close one route and see it confirmed; every other route is open afterwards."""
        self._journal.clear()
        self._remember("route", "", partial(self.close, route))
        if not self.dialect.exclusive and self._made.get("route", ("", None))[0] != route:
            self.session.command(self.dialect.open_all)
        self._once("route", route, partial(self._close_and_compare, route))

    def open_all(self) -> None:
        """Open every route."""
        self._journal.clear()
        self._remember("route", "", self.open_all)
        self._once("route", "", partial(self._command_and_compare, self.dialect.open_all, "", ""))

    def is_closed(self, route: str) -> bool:
        """Return whether the instrument answers that a route is closed; the dialect has a query."""
        answer = self.session.ask(self.dialect.query.format(route=route), as_text)
        return is_like(self.dialect.is_closed, answer, route=route)

    def _close_and_compare(self, route: str) -> None:
        dialect = self.dialect
        query = dialect.query.format(route=route)
        self._command_and_compare(dialect.close.format(route=route), query, dialect.is_closed, route=route)
