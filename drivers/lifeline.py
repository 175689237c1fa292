"""A process that switches the generator off when the controller is gone, even by ``kill -9``.

It holds a pipe to the controller. ``done`` in the pipe means that the generator was left off; the pipe's end without
it means that nobody can be asked any more. It loads everything beforehand and opens no connection before it has to:
some instruments accept only one. A dead computer and a cut cable are beyond it.

``python -m bandproof.drivers.lifeline`` reads one line of JSON (see `Lifeline.start`), writes ``ready``, or why not,
and waits. It ends with 0: left safe, or confirmed off; 3: could not be confirmed; 2: it cannot get ready; 1: it hung.
"""

from __future__ import annotations

import contextlib
import faulthandler
import json
import os
import signal
import subprocess
import sys
import threading
from collections.abc import Mapping
from dataclasses import asdict, dataclass
from typing import TYPE_CHECKING, Any

from bandproof.drivers.errors import InstrumentProblem
from bandproof.drivers.serial_line import Serial

if TYPE_CHECKING:
    from bandproof.drivers.generator import Generator

__all__ = ["Lifeline", "LifelineLost"]

LIMIT = 5.0  # s it tries to reach the instrument: a dead controller's connection is closed by then (arbitrary)
PATIENCE = 1.5  # s one answer may take meanwhile (arbitrary, less than LIMIT so that it is asked again)
PAUSE = 0.02  # s between two attempts (arbitrary)
PREPARE = 30.0  # s preparing may take (arbitrary, some hundred times what it takes)
HANGING = 10.0  # s it may go on after LIMIT and three answers, in a library that does not keep its time limits
_OFF, _HUNG, _NOT_READY, _NOT_OFF = 0, 1, 2, 3


class LifelineLost(InstrumentProblem):
    """The generator's lifeline process is not there; nothing was sent to the instrument."""

    def __init__(self, address: str, reason: str) -> None:
        super().__init__(address, reason)
        self.address, self.reason, self.command, self.line = address, reason, "", 0

    def __str__(self) -> str:
        return (
            f"{self.address} has no lifeline, the process that would switch it off if this one died: {self.reason}. "
            "The output stays off; look at memory and process limits, then start again"
        )


@dataclass(slots=True)
class Lifeline:
    """The controller's end: made by `start`, ended by `done`, or by `close` where the generator may still be on.

    As a context manager it is closed at the end, which after `done` does nothing.
    """

    address: str
    process: subprocess.Popen[str]
    limit: float = LIMIT
    _was_ready: bool = False

    @classmethod
    def start(
        cls,
        address: str,
        *,
        dialect_text: str,
        visa_library: str,
        clock_path: str | None,
        popen_options: Mapping[str, Any],
        serial: Serial | None = None,
        limit: float = LIMIT,
    ) -> Lifeline:
        """Start the process and return at once; it gets ready while the controller does.

        Parameters
        ----------
        address : str
            The generator, as PyVISA spells it.
        dialect_text : str
            The text of its dialect.
        visa_library : str
            As PyVISA names it.
        clock_path : str or None
            The clock file of a rehearsal.
        popen_options : mapping
            Keep it out of reach of the terminal's Ctrl-C.
        serial : Serial or None
            How the generator's line is set, where it is a serial one.
        limit : float
            Seconds it tries to reach the instrument.

        Raises
        ------
        OSError
            The process could not be started.
        """
        order = {
            "address": address,
            "dialect": dialect_text,
            "visa_library": visa_library,
            "clock": clock_path,
            "serial": asdict(serial) if serial is not None else None,
            "limit": limit,
        }
        process = subprocess.Popen(
            [sys.executable, "-P", "-m", "bandproof.drivers.lifeline"],  # -P: nothing from the user's folder
            stdin=subprocess.PIPE,
            stdout=subprocess.PIPE,
            stderr=subprocess.DEVNULL,
            encoding="utf-8",
            close_fds=True,
            **popen_options,
        )
        assert process.stdin is not None
        with contextlib.suppress(OSError):  # it died already: await_ready tells
            process.stdin.write(json.dumps(order) + "\n")
            process.stdin.flush()
        return cls(address, process, limit)

    @property
    def is_alive(self) -> bool:
        """Whether the process is there."""
        return self.process.poll() is None

    def await_ready(self, limit: float = PREPARE) -> None:
        """Wait until the lifeline holds; to be called before each time the output is switched on.

        Once it was ready, this only looks whether it is still there.

        Raises
        ------
        LifelineLost
            It did not get ready within `limit` seconds, cannot, or has ended; the process is gone.
        """
        answer = "ready" if self._was_ready else self._answer(limit)
        if answer == "ready" and self.is_alive:
            self._was_ready = True
            return
        self.process.kill()
        self.close()
        raise LifelineLost(self.address, answer if answer not in ("ready", "") else "it has ended")

    def _answer(self, limit: float) -> str:
        stream = self.process.stdout
        assert stream is not None
        told: list[str] = []
        reader = threading.Thread(target=lambda: told.append(stream.read()))  # a pipe has no time limit of its own
        reader.start()
        reader.join(limit)
        if reader.is_alive():
            self.process.kill()  # ends the reading too
            reader.join()
            return f"it was not ready within {limit:g} s"
        return "".join(told).strip()

    def done(self) -> None:
        """Tell that the generator was left off, and see the process end; it opens no connection."""
        self._hang_up("done\n", 2.0)

    def close(self) -> bool:
        """End the process; if `done` was not called, it first switches the generator off: return whether it is.

        The controller's own link must be closed before: some instruments accept only one.
        """
        self._hang_up("", self.limit + 3 * PATIENCE + HANGING + PREPARE)
        return self.process.returncode == _OFF

    def __enter__(self) -> Lifeline:
        return self

    def __exit__(self, *_: object) -> None:
        self.close()

    def _hang_up(self, last: str, patience: float) -> None:
        assert self.process.stdin is not None
        assert self.process.stdout is not None
        if not self.process.stdin.closed:
            with contextlib.suppress(OSError):
                self.process.stdin.write(last)
                self.process.stdin.flush()
            with contextlib.suppress(OSError):
                self.process.stdin.close()
        try:
            self.process.wait(patience)
        except subprocess.TimeoutExpired:
            self.process.kill()
            self.process.wait()
        self.process.stdout.close()


def main() -> int:
    """Be the lifeline; return the exit code."""
    faulthandler.dump_traceback_later(PREPARE, exit=True)  # whatever hangs, this process ends
    _ignore_signals()
    answer = _silence()
    try:
        order = json.loads(sys.stdin.readline())
        generator = _prepared(order)
    except Exception as problem:  # there is only this one place to tell it
        _tell(answer, f"{type(problem).__name__}: {problem}")
        return _NOT_READY
    _tell(answer, "ready")
    faulthandler.cancel_dump_traceback_later()
    if any(line == "done\n" for line in sys.stdin):
        return _OFF
    faulthandler.dump_traceback_later(order["limit"] + 3 * PATIENCE + HANGING, exit=True)
    return _OFF if _switch_off(generator, order["limit"]) else _NOT_OFF


def _ignore_signals() -> None:
    """Ignore what asks processes to stop: this one stops when its work is done, and that is soon."""
    for name in ("SIGINT", "SIGTERM", "SIGHUP", "SIGQUIT", "SIGBREAK"):  # not every system has each
        if hasattr(signal, name):
            signal.signal(getattr(signal, name), signal.SIG_IGN)


def _silence() -> int:
    """Turn standard output into nothing; return a descriptor of what it was. Libraries print where they like."""
    answer, nothing = os.dup(1), os.open(os.devnull, os.O_WRONLY)
    os.dup2(nothing, 1)
    os.dup2(nothing, 2)
    os.close(nothing)
    return answer


def _tell(answer: int, words: str) -> None:
    with contextlib.suppress(OSError):  # the controller may be gone already
        os.write(answer, f"{words}\n".encode())
    os.close(answer)


def _prepared(order: Mapping[str, Any]) -> Generator:
    """Return the generator with everything loaded that it needs, its link not yet open."""
    from bandproof.drivers import visa
    from bandproof.drivers.clock import RealClock, VirtualClock
    from bandproof.drivers.dialect import GeneratorDialect, parse
    from bandproof.drivers.generator import Generator
    from bandproof.drivers.link import Link
    from bandproof.drivers.session import Session

    dialect = parse(order["dialect"], "of the generator")
    if not isinstance(dialect, GeneratorDialect):
        raise ValueError(f"a dialect for a generator is needed, this one is for a {dialect.kind}")
    visa.prepare(order["visa_library"])
    patience, path = min(PATIENCE, order["limit"]), order["clock"]
    clock = RealClock(margin=patience, factor=0.0) if path is None else VirtualClock(path, patience=patience)
    serial = Serial(**order["serial"]) if order["serial"] is not None else None
    link = Link(order["address"], clock, visa_library=order["visa_library"], serial=serial)
    return Generator(Session(link, dialect.habits), dialect)


def _switch_off(generator: Generator, limit: float) -> bool:
    """Switch the output off, again and again until it is confirmed or `limit` seconds of the wall have passed."""
    from bandproof.drivers.clock import RealClock

    wall = RealClock()  # in a rehearsal too: the board would be driven in real time
    end = wall.now() + limit
    while True:
        try:
            generator.be_safe()
            generator.be_safe()  # a last message of the dead controller may be read after the first of ours
            generator.disconnect()
            return True
        except Exception:  # whatever it was, trying again over a new connection is all there is to do
            generator.disconnect()
        if wall.now() >= end:
            return False
        wall.wait(PAUSE)


if __name__ == "__main__":
    os._exit(main())  # nothing is left to write, and taking the interpreter down costs the controller 0.1 s (measured)
