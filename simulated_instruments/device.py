"""An instrument as a message sees it: settings, common commands, execution of one message after the other.

Time is a number handed in. An instrument works through its messages in order: `at` is the instant up to which it is
busy, each message begins at the later of its receipt and `at`, and the reply is ready when the last unit is done.
"""

import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from typing import Any

from bandproof.simulated_instruments.commands import Command, CommandTree
from bandproof.simulated_instruments.parameters import Decimal, Extreme, Integer, Parameter
from bandproof.simulated_instruments.status import Register, Status
from bandproof.simulated_instruments.syntax import ScpiError, Unit, units

__all__ = ["Answer", "Device", "Setting", "Timing"]

REPLY_LIMIT = 4_000_000  # bytes of replies to one message, arbitrary: ten of the longest records


@dataclass(frozen=True, slots=True)
class Timing:
    """How long instruments take: s, and B/s for `transfer` and `upload`."""

    message: float = 0.2e-3
    setting: float = 5e-3
    arming: float = 10e-3
    switching: float = 20e-3
    transfer: float = 4e6
    upload_delay: float = 0.1
    upload: float = 1e6

    def __post_init__(self) -> None:
        if not (self.message > 0 and self.transfer > 0 and self.upload > 0):
            raise ValueError("message, transfer and upload must be positive: every message costs more than 0 s")
        if min(self.setting, self.arming, self.switching, self.upload_delay) < 0:
            raise ValueError("setting, arming, switching and upload_delay must not be negative")


@dataclass(frozen=True, slots=True)
class Answer:
    """Reply to one message (None: nothing to say) and when it is ready, in s; inf: never."""

    reply: bytes | None
    ready_at: float


def _as_sent(value: Any) -> Any:
    return value


@dataclass(frozen=True, slots=True)
class Setting:
    """A value that can be set and queried under one header; `rounded` is the silent rounding of the instrument."""

    header: str
    name: str
    parameter: Parameter
    rounded: Callable[[Any], Any] = _as_sent


class Device:
    """An instrument that understands IEEE 488.2 common commands, SYSTem and STATus, and what is declared.

    Parameters
    ----------
    identity : str
        The four fields of *IDN?.
    settings, commands : sequences
        What it understands besides.
    timing : Timing
    """

    def __init__(
        self, identity: str, *, settings: Sequence[Setting], commands: Sequence[Command] = (), timing: Timing
    ) -> None:
        self.identity, self.timing, self.status = identity, timing, Status()
        self.at = -math.inf  # time may have begun anywhere
        self.message_length = 0  # bytes of the message being executed
        self._settings = {setting.name: setting for setting in settings}
        self._values: dict[tuple[str, tuple[int, ...]], Any] = {}
        declared = [command for setting in settings for command in self._access(setting)]
        self.interpret: Callable[[bytes, list[bytes]], None] = self.run_units  # another language may take their place
        self.finish: Callable[[list[bytes]], bytes] = lambda replies: b";".join(replies) + b"\n"
        self._tree = CommandTree([*self._common(), *self._system(), *self._registers(), *declared, *commands])

    def value(self, name: str, *suffixes: int) -> Any:
        """Return a setting as it stands."""
        return self._values.get((name, suffixes), self._settings[name].parameter.default)

    def changed(self, name: str, suffixes: tuple[int, ...]) -> None:
        """Take note that a setting took effect at `self.at`, or raise ScpiError; for the instrument to override."""

    def reset(self) -> None:
        """*RST: settings to their defaults, operations dropped; status and queue stay."""
        self._values.clear()
        self.status.abort()

    def message(self, message: bytes, received: float) -> Answer:
        """Execute one program message.

        Parameters
        ----------
        message : bytes
            Without its terminator; anything at all.
        received : float
            s, when it came.

        Returns
        -------
        Answer
            Mistakes are in the error queue; a command error drops the rest of the message.
        """
        self.at = max(self.at, received) + self.timing.message
        self.message_length = len(message)
        replies: list[bytes] = []
        try:
            self.interpret(message, replies)
        except ScpiError as error:
            self.status.report(error)
        ready_at = self.at
        if not math.isfinite(ready_at):  # waits for what never completes; another message breaks the wait
            self.at = received + self.timing.message
            return Answer(None, math.inf)
        return Answer(self.finish(replies) if replies else None, ready_at)

    def refuse(self, number: int, detail: str = "") -> None:
        """Put an error found outside a message's text into the queue."""
        self.status.report(ScpiError(number, detail))

    def wait(self) -> None:
        """Hold what follows until pending operations are finished."""
        self.at = max(self.at, self.status.pending_until)

    def run_units(self, message: bytes, replies: list[bytes]) -> None:
        """Execute the units of a message in SCPI-99 and add their replies, or raise ScpiError for a command error."""
        path, indefinite = self._tree.root, False
        for unit in units(message):
            command, suffixes, path = self._tree.find(unit, path)
            if unit.query and indefinite:
                raise ScpiError(-440)
            try:
                reply = self._execute(command, suffixes, unit)
            except ScpiError as error:
                if -200 < error.number <= -100:
                    raise
                self.status.report(error)
                continue
            if not math.isfinite(self.at):
                return
            if reply is not None:
                replies.append(reply)
            if sum(map(len, replies)) > REPLY_LIMIT:
                replies.clear()
                raise ScpiError(-430)
            indefinite = indefinite or command.indefinite

    def _execute(self, command: Command, suffixes: tuple[int, ...], unit: Unit) -> bytes | None:
        values = command.values(unit.elements)
        self.at += command.duration
        return command.action(suffixes, *values)

    def _access(self, setting: Setting) -> list[Command]:
        def store(suffixes: tuple[int, ...], value: Any) -> None:
            key, before = (setting.name, suffixes), self.value(setting.name, *suffixes)
            self._values[key] = setting.rounded(value)
            try:
                self.changed(setting.name, suffixes)
            except ScpiError:
                self._values[key] = before
                raise

        def show(suffixes: tuple[int, ...], extreme: float | None = None) -> bytes:
            return setting.parameter.show(self.value(setting.name, *suffixes) if extreme is None else extreme)

        limits = (Extreme(setting.parameter),) if isinstance(setting.parameter, Decimal | Integer) else ()
        return [
            Command(setting.header, store, (setting.parameter,), 1, self.timing.setting),
            Command(setting.header + "?", show, limits),
        ]

    def _common(self) -> list[Command]:
        status, byte = self.status, Integer(0, 255)

        def on_completion(suffixes: tuple[int, ...]) -> None:
            status.completion_asked = True
            status.look(self.at)

        def completed(suffixes: tuple[int, ...]) -> bytes:
            self.wait()
            return b"1"

        def enable_events(suffixes: tuple[int, ...], value: int) -> None:
            status.standard_enable = value

        def enable_service(suffixes: tuple[int, ...], value: int) -> None:
            status.service_enable = value & ~0x40  # bit 6 cannot be set

        return [
            Command("*CLS", lambda _: status.clear()),
            Command("*ESE", enable_events, (byte,), 1),
            Command("*ESE?", lambda _: b"%d" % status.standard_enable),
            Command("*ESR?", lambda _: b"%d" % status.read_standard_event(self.at)),
            Command("*IDN?", lambda _: self.identity.encode("ascii"), indefinite=True),
            Command("*OPC", on_completion),
            Command("*OPC?", completed),
            Command("*RST", lambda _: self.reset(), duration=self.timing.setting),
            Command("*SRE", enable_service, (byte,), 1),
            Command("*SRE?", lambda _: b"%d" % status.service_enable),
            Command("*STB?", lambda _: b"%d" % status.byte(self.at)),
            Command("*TST?", lambda _: b"0"),
            Command("*WAI", lambda _: self.wait()),
        ]

    def _system(self) -> list[Command]:
        errors = self.status.errors
        return [
            Command("SYSTem:ERRor[:NEXT]?", lambda _: errors.pop()),
            Command("SYSTem:ERRor:COUNt?", lambda _: b"%d" % len(errors)),
            Command("SYSTem:VERSion?", lambda _: b"1999.0"),
            Command("STATus:PRESet", lambda _: self.status.preset()),
        ]

    def _registers(self) -> list[Command]:
        return [
            *self._register("STATus:OPERation", self.status.operation),
            *self._register("STATus:QUEStionable", self.status.questionable),
        ]

    def _register(self, header: str, register: Register) -> list[Command]:
        def look(what: Callable[[], int]) -> Callable[..., bytes]:
            def action(suffixes: tuple[int, ...]) -> bytes:
                self.status.look(self.at)
                return b"%d" % what()

            return action

        def enable(suffixes: tuple[int, ...], value: int) -> None:
            register.enable = value

        return [
            Command(header + "[:EVENt]?", look(register.read_event)),
            Command(header + ":CONDition?", look(lambda: register.condition)),
            Command(header + ":ENABle", enable, (Integer(0, 32767),), 1),
            Command(header + ":ENABle?", look(lambda: register.enable)),
        ]
