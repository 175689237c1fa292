"""The invented language "orchard": sentences of small words, all answers words or numbers with many decimals.

Completion is asked again and again, errors have positive numbers and words, records are numbers as text or unsigned
codes whose scale stands in a label, an overload is told on request, the scope knows its probes, the generator its load.
"""

import math
from typing import Any

from bandproof.simulated_instruments.device import Device
from bandproof.simulated_instruments.generator import Generator
from bandproof.simulated_instruments.parameters import definite_block
from bandproof.simulated_instruments.scope import Scope
from bandproof.simulated_instruments.speech import HALF, NUMBER, Phrase, Speech, codes_of, number_of, volts_of
from bandproof.simulated_instruments.switch_supply import Supply, Switch
from bandproof.simulated_instruments.syntax import ScpiError

__all__ = ["SPEECHES"]

RESISTANCE = 50.0  # ohm, that the generator believes it has
_TREES = {"east": 1, "west": 2}
_TREE = "(east|west)"
_TROUBLES = {0: "none", -113: "no such words", -222: "more than it bears", -221: "one too many", -213: "busy picking"}


class _Orchard(Speech[Device]):
    name = ""

    def common(self) -> list[Phrase]:
        return [
            ("whose orchard is this", lambda: f"orchard of nobody, {self.name}".encode("ascii")),
            ("plough it under", self.start_over),
            ("forget the troubles", lambda: self.do("*CLS")),
            ("ripe yet", self._ripe),
            ("what trouble", self._trouble),
        ]

    def start_over(self) -> None:
        self.do("*RST")

    def _ripe(self) -> bytes:
        return b"ripe"

    def _trouble(self) -> bytes:
        number = self.oldest_error()
        return f'{abs(number)},"{_TROUBLES.get(number, "something else")}"'.encode("ascii")


class _Generator(_Orchard):
    """Amplitudes are volts from tip to tip at the load told, 50 ohm from the start."""

    name = "swing"

    def __init__(self, device: Generator) -> None:
        self._load = RESISTANCE
        super().__init__(device)

    def phrases(self) -> list[Phrase]:
        value = self.device.value
        return [
            *self.common(),
            ("sway evenly", lambda: self.do("FUNC SIN")),
            ("sway how", lambda: b"evenly"),
            (f"sway {NUMBER} thousand times", lambda x: self.do(f"FREQ {float(x) * 1e3!r}")),
            ("sway how often", lambda: b"thousands, " + number_of(value("frequency") / 1e3, ".12f")),
            (f"swing {NUMBER} tip to tip", lambda x: self.do(f"VOLT {float(x) / 2 / self._divided()!r}")),
            ("swing how far", lambda: number_of(2 * value("amplitude") * self._divided(), ".9f")),
            (f"lean {NUMBER}", lambda x: self.do(f"VOLT:OFFS {float(x) / 1e3 / self._divided()!r}")),
            ("lean how much", lambda: number_of(value("offset") * 1e3 * self._divided(), "+.6f")),
            (f"ground of (air|{NUMBER})", self._ground),
            ("ground of what", lambda: b"air" if math.isinf(self._load) else number_of(self._load)),
            ("shake", lambda: self.do("OUTP ON")),
            ("stand still", lambda: self.do("OUTP OFF")),
            ("shaking or still", lambda: b"shaking" if value("output") else b"still"),
        ]

    def start_over(self) -> None:
        self._load = RESISTANCE
        super().start_over()

    def _ground(self, word: str, number: str | None) -> None:
        load = math.inf if word == "air" else float(word)
        if load <= 0:
            raise ScpiError(-222)
        self._load = load
        self.device.at += self.device.timing.setting

    def _divided(self) -> float:
        """Return the volts shown over those of the open output."""
        return 1.0 if math.isinf(self._load) else self._load / (self._load + RESISTANCE)


class _Scope(_Orchard):
    """Ranges are volts a rail, eight rails high, at the end of the ladder (the probe)."""

    name = "rows"
    device: Scope

    def __init__(self, device: Scope) -> None:
        self._ladder = dict.fromkeys(_TREES, 1.0)
        self._basket, self._by_eye = "east", False
        super().__init__(device)

    def phrases(self) -> list[Phrase]:
        value = self.device.value
        return [
            *self.common(),
            (f"fence {_TREE} {NUMBER} a rail", lambda t, x: self._set("SENS{}:VOLT:RANG", t, 4 * float(x))),
            (f"fence {_TREE} how high", lambda t: self._told(t, value("range", _TREES[t]) / 4)),
            (f"lift {_TREE} {NUMBER}", lambda t, x: self._set("SENS{}:VOLT:RANG:OFFS", t, float(x) / 1e3)),
            (f"lift {_TREE} how far", lambda t: self._told(t, 1e3 * value("offset", _TREES[t]))),
            (f"gate {_TREE} (open|barred)", self._gate),
            (f"gate {_TREE} how", lambda t: b"open" if value("coupling", _TREES[t]) == "DC" else b"barred"),
            (f"hedge {_TREE}", lambda t: self.do(f"INP{_TREES[t]}:FILT ON")),
            (f"no hedge {_TREE}", lambda t: self.do(f"INP{_TREES[t]}:FILT OFF")),
            (f"hedge {_TREE} or not", lambda t: b"hedge" if value("filter", _TREES[t]) else b"bare"),
            (f"ladder {_TREE} {NUMBER}", self._set_ladder),
            (f"ladder {_TREE} how long", lambda t: number_of(self._ladder[t])),
            (f"season {NUMBER}", lambda x: self.do(f"SENS:SWE:TIME {float(x) / 1e3!r}")),
            ("season how long", lambda: number_of(1e3 * value("time"))),
            (r"trees (\d+)", lambda x: self.do(f"SENS:SWE:POIN {x}")),
            ("trees how many", lambda: number_of(value("points"))),
            ("picks a second", lambda: number_of(1 / self.device.sample_interval, ".15g")),
            ("weigh (by eye|in full)", self._weigh),
            ("pick", lambda: self.do("INIT")),
            ("basket full", lambda: b"filling" if self.is_busy() else b"full"),
            ("stop picking", lambda: self.do("ABOR")),
            (f"fetch basket {_TREE}", self._fetch),
            ("label", self._label),
            ("hand over", self._hand_over),
            (f"bruised {_TREE}", self._bruised),
        ]

    def start_over(self) -> None:
        self._ladder = dict.fromkeys(_TREES, 1.0)
        self._by_eye = False
        super().start_over()

    def _set(self, header: str, tree: str, number: float) -> None:
        self.do(f"{header.format(_TREES[tree])} {number / self._ladder[tree]!r}")

    def _told(self, tree: str, number: float) -> bytes:
        return number_of(number * self._ladder[tree])

    def _gate(self, tree: str, word: str) -> None:
        self.do(f"INP{_TREES[tree]}:COUP {'DC' if word == 'open' else 'AC'}")

    def _set_ladder(self, tree: str, length: str) -> None:
        self._ladder[tree] = float(length)
        self.device.at += self.device.timing.setting

    def _weigh(self, word: str) -> None:
        self._by_eye = word == "by eye"

    def _fetch(self, tree: str) -> None:
        self._basket = tree

    def _step(self) -> float:
        return float(self.device.value("range", _TREES[self._basket])) / HALF * self._ladder[self._basket]

    def _label(self) -> bytes:
        """Origin, whose, points, offset in V, volts of one code."""
        offset = self.device.value("offset", _TREES[self._basket]) * self._ladder[self._basket]
        points = self.device.value("points")
        return f'{HALF}; "{self._basket}; ripe"; {points}; {offset!r}; {self._step():.9E}'.encode("ascii")

    def _hand_over(self) -> bytes:
        channel = _TREES[self._basket] - 1
        if self._by_eye:
            reply = definite_block((codes_of(self.device, channel) + HALF).astype("u1").tobytes())
        else:
            volts = volts_of(self.device, channel) * self._ladder[self._basket]
            reply = b",".join(b"%+.7e" % volt for volt in volts.tolist())
        self.device.at += len(reply) / self.device.timing.transfer
        return reply

    def _bruised(self, tree: str) -> bytes:
        codes = codes_of(self.device, _TREES[tree] - 1)
        return b"bruised" if ((codes <= -HALF) | (codes >= HALF - 1)).any() else b"sound"


class _Switch(_Orchard):
    name = "grafts"
    device: Switch

    def phrases(self) -> list[Phrase]:
        return [
            *self.common(),
            (r"graft (\d+)", lambda route: self.do(f"ROUT:CLOS (@{route})")),
            (r"grafted (\d+) or not", lambda route: b"grafted" if self.device.closed == route else b"not"),
            ("prune all", lambda: self.do("ROUT:OPEN:ALL")),
        ]


class _Supply(_Orchard):
    """One command lets all wells run; buckets (current limits) and flows are told in thousandths."""

    name = "wells"
    device: Supply

    def phrases(self) -> list[Phrase]:
        value = self.device.value
        return [
            *self.common(),
            (f"well {_TREE} {NUMBER} deep", lambda t, x: self.do(f"SOUR{_TREES[t]}:VOLT {x}")),
            (f"well {_TREE} how deep", lambda t: number_of(value("voltage", _TREES[t]))),
            (f"bucket {_TREE} {NUMBER}", lambda t, x: self.do(f"SOUR{_TREES[t]}:CURR {float(x) / 1e3!r}")),
            (f"bucket {_TREE} how big", lambda t: number_of(1e3 * value("limit", _TREES[t]))),
            (f"flow {_TREE}", lambda t: number_of(1e3 * self.device.current(_TREES[t]))),
            ("open the wells", lambda: self.do("OUTP1 ON;:OUTP2 ON")),
            ("cover the wells", lambda: self.do("OUTP1 OFF;:OUTP2 OFF")),
            ("wells open or covered", lambda: b"open" if value("output", 1) and value("output", 2) else b"covered"),
        ]


SPEECHES: dict[str, type[Speech[Any]]] = {
    "generator": _Generator,
    "scope": _Scope,
    "switch": _Switch,
    "supply": _Supply,
}
