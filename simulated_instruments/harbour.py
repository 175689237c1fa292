"""The invented language "harbour": one word and angle brackets, filled to set, empty to ask.

Nothing confirms a setting but the query of leaks (errors), a bare number; the switch has not even that. The generator
is told its period. Completion is awaited. Records are reals or signed codes, scaled by numbers asked for one by one.
"""

import math
from typing import Any

from bandproof.simulated_instruments.device import Device
from bandproof.simulated_instruments.parameters import definite_block
from bandproof.simulated_instruments.scope import Scope
from bandproof.simulated_instruments.speech import HALF, NUMBER, Phrase, Speech, codes_of, number_of, volts_of
from bandproof.simulated_instruments.switch_supply import Supply, Switch
from bandproof.simulated_instruments.syntax import ScpiError

__all__ = ["SPEECHES"]

SIDES = {"P": 1, "S": 2}
_LEAKS = {0: 0, -113: 40, -222: 41, -221: 42, -213: 43}
_ROUNDED = 9  # a leak that is none: a value was rounded
RMS = 1 / math.sqrt(2)  # of a sine's peak


class _Harbour(Speech[Device]):
    def __init__(self, device: Device) -> None:
        self._notes: list[int] = []
        super().__init__(device)

    def common(self) -> list[Phrase]:
        return [("leak<>", self._leak), ("bilge<>", self._pump_out), ("moored<>", self._moored)]

    def _leak(self) -> bytes:
        if self._notes:
            return b"%d" % self._notes.pop()
        return b"%d" % _LEAKS.get(self.oldest_error(), 99)

    def _pump_out(self) -> None:
        self._notes.clear()
        self.do("*CLS")

    def _moored(self) -> bytes:
        self.device.wait()
        return b"fast"


class _Generator(_Harbour):
    """The tide is a period in microseconds, the swell thousandths of a volt rms, the open output's."""

    def phrases(self) -> list[Phrase]:
        value = self.device.value
        return [
            *self.common(),
            ("swell<round>", lambda: self.do("FUNC SIN")),
            ("wind<none>", lambda: None),
            (f"tide<{NUMBER}>", lambda x: self.do(f"FREQ {1e6 / float(x)!r}")),
            ("tide<>", lambda: number_of(1e6 / value("frequency"), ".15e")),
            (f"swell<{NUMBER}>", lambda x: self.do(f"VOLT {float(x) / RMS / 1e3!r}")),
            ("swell<>", lambda: number_of(1e3 * RMS * value("amplitude"), ".9e")),
            (f"ballast<{NUMBER}>", lambda x: self.do(f"VOLT:OFFS {x}")),
            ("ballast<>", lambda: number_of(value("offset"))),
            ("sail<(up|down)>", lambda word: self.do(f"OUTP {'ON' if word == 'up' else 'OFF'}")),
            ("sail<>", lambda: b"UP" if value("output") else b"DOWN"),
        ]


class _Scope(_Harbour):
    """Draught is thousandths of a volt from keel to deck; trim is the offset with the other sign."""

    device: Scope

    def __init__(self, device: Scope) -> None:
        self._codes = False
        super().__init__(device)

    def phrases(self) -> list[Phrase]:
        value = self.device.value
        return [
            *self.common(),
            (rf"draught<([PS])\|{NUMBER}>", self._draught),
            (r"draught<([PS])\|>", lambda s: number_of(2e3 * value("range", SIDES[s]))),
            (rf"trim<([PS])\|{NUMBER}>", lambda s, x: self.do(f"SENS{SIDES[s]}:VOLT:RANG:OFFS {-float(x)!r}")),
            (r"trim<([PS])\|>", lambda s: number_of(-value("offset", SIDES[s]))),
            (r"lock<([PS])\|([12])>", lambda s, x: self.do(f"INP{SIDES[s]}:COUP {'DC' if x == '1' else 'AC'}")),
            (r"lock<([PS])\|>", lambda s: b"1" if value("coupling", SIDES[s]) == "DC" else b"2"),
            (f"watch<{NUMBER}>", lambda x: self.do(f"SENS:SWE:TIME {x}")),
            ("watch<>", lambda: number_of(value("time"))),
            (r"knots<(\d+)>", lambda x: self.do(f"SENS:SWE:POIN {x}")),
            ("knots<>", lambda: number_of(value("points"))),
            ("stroke<>", lambda: b"ns," + number_of(1e9 * self.device.sample_interval)),
            ("cargo<(codes|reals)>", self._cargo),
            ("cast<>", lambda: self.do("INIT")),
            ("cut<>", lambda: self.do("ABOR")),
            ("grain<([PS])>", lambda s: number_of(value("range", SIDES[s]) / HALF / 256)),
            ("bias<([PS])>", lambda s: number_of(-value("offset", SIDES[s]))),
            ("keel<([PS])>", lambda s: b"-3"),
            ("haul<([PS])>", self._haul),
        ]

    def finish(self, replies: list[bytes]) -> bytes:
        """End a line, but leave a block without an end."""
        return replies[0] if replies[0][:1] == b"#" else replies[0] + b"\n"

    def _draught(self, side: str, deck: str) -> None:
        asked = float(deck) / 2e3
        self.do(f"SENS{SIDES[side]}:VOLT:RANG {asked!r}")
        if self.device.value("range", SIDES[side]) > asked:
            self._notes.append(_ROUNDED)

    def _cargo(self, word: str) -> None:
        self._codes = word == "codes"

    def _haul(self, side: str) -> bytes:
        channel = SIDES[side] - 1
        if self._codes:  # in the upper eight of sixteen bits, three too low
            data = (codes_of(self.device, channel) * 256 - 3).clip(-32768, 32767).astype(">i2").tobytes()
        else:
            data = volts_of(self.device, channel).astype("<f4").tobytes()
        self.device.at += len(data) / self.device.timing.transfer
        return definite_block(data)


class _Switch(Speech[Switch]):
    """Bridges stay down until they are lifted; two at a time would join two test points and are refused, silently."""

    def phrases(self) -> list[Phrase]:
        return [
            (r"bridge<(\d+)\|down>", self._down),
            (r"bridge<(\d+)\|>", lambda route: b"down" if self.device.closed == route else b"up"),
            ("bridges<up>", lambda: self.do("ROUT:OPEN:ALL")),
        ]

    def _down(self, route: str) -> None:
        if self.device.closed:
            raise ScpiError(-221)
        self.do(f"ROUT:CLOS (@{route})")


class _Supply(_Harbour):
    """Outputs are switched one by one; the gauge tells its unit before the number."""

    device: Supply

    def phrases(self) -> list[Phrase]:
        value = self.device.value
        return [
            *self.common(),
            (rf"pump<([PS])\|{NUMBER}>", lambda s, x: self.do(f"SOUR{SIDES[s]}:VOLT {float(x) / 1e3!r}")),
            (r"pump<([PS])\|>", lambda s: number_of(1e3 * value("voltage", SIDES[s]))),
            (rf"valve<([PS])\|{NUMBER}>", lambda s, x: self.do(f"SOUR{SIDES[s]}:CURR {x}")),
            (r"valve<([PS])\|>", lambda s: number_of(value("limit", SIDES[s]))),
            ("gauge<([PS])>", lambda s: b"uA," + number_of(1e6 * self.device.current(SIDES[s]))),
            (r"cock<([PS])\|(open|shut)>", lambda s, x: self.do(f"OUTP{SIDES[s]} {'ON' if x == 'open' else 'OFF'}")),
            (r"cock<([PS])\|>", lambda s: b"open" if value("output", SIDES[s]) else b"shut"),
        ]


SPEECHES: dict[str, type[Speech[Any]]] = {
    "generator": _Generator,
    "scope": _Scope,
    "switch": _Switch,
    "supply": _Supply,
}
