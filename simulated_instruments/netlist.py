"""Networks out of SPICE netlists: a small subset, all mistakes of a file reported together.

Understood: the title (always the first line), comments (`*` at the beginning, `;` anywhere), continuation (`+`),
`.end`, and

    Rname a b value
    Cname a b value
    Vname node 0 [rs=value]
    Xname plus minus out OPAMP gbw=value [offset=value] [swing=value] [slew=value]

Exactly one V line says where the generator drives the network and through which resistance; its own words for levels
(`DC`, `AC`, numbers) are passed over. Names and words know no case; ground is `0` or `gnd`. Numbers may end in f p n u
m k meg g t and then in a unit (`10kohm`); as everywhere in SPICE, m and M are both milli, and f is femto.
"""

import re
from collections.abc import Iterator
from dataclasses import dataclass, field

from bandproof.analysis.network import GROUND, Capacitor, Network, OpAmp, Resistor, state_space

__all__ = ["Mistake", "NetlistMistakes", "parse_netlist", "parse_number"]

_FACTORS = {"f": 1e-15, "p": 1e-12, "n": 1e-9, "u": 1e-6, "m": 1e-3, "k": 1e3, "meg": 1e6, "g": 1e9, "t": 1e12, "": 1.0}
_NUMBER = re.compile(r"([+-]?(?:\d+\.?\d*|\.\d+)(?:e[+-]?\d+)?)(meg|[fpnumkgt]?)(?:ohms?|f|hz|v|v/s)?")
_OPAMP_WORDS = ("gbw", "offset", "swing", "slew")


@dataclass(frozen=True, slots=True)
class Mistake:
    """One mistake: line (from 1; 0 for the file as a whole) and what is wrong there."""

    line: int
    text: str

    def __str__(self) -> str:
        return f"line {self.line}: {self.text}" if self.line else self.text


class NetlistMistakes(ValueError):
    """All that is wrong with a netlist."""

    def __init__(self, mistakes: tuple[Mistake, ...]) -> None:
        super().__init__(mistakes)
        self.mistakes = mistakes

    def __str__(self) -> str:
        return "\n".join(str(mistake) for mistake in self.mistakes)


@dataclass(slots=True)
class _Reader:
    """Elements found so far, and mistakes."""

    resistors: list[Resistor] = field(default_factory=list)
    capacitors: list[Capacitor] = field(default_factory=list)
    opamps: list[OpAmp] = field(default_factory=list)
    sources: list[tuple[str, float]] = field(default_factory=list)
    names: dict[str, int] = field(default_factory=dict)
    mistakes: list[Mistake] = field(default_factory=list)

    def element(self, line: int, words: list[str]) -> None:
        try:
            self._name(line, words[0])
            kinds = {"r": self._part, "c": self._part, "v": self._source, "x": self._opamp}
            if words[0][0] not in kinds:
                raise ValueError(f"{words[0]}: elements begin with R, C, V or X")
            kinds[words[0][0]](words)
        except ValueError as error:
            self.mistakes.append(Mistake(line, str(error)))

    def _name(self, line: int, name: str) -> None:
        if name in self.names:
            raise ValueError(f"{name} is already there in line {self.names[name]}")
        self.names[name] = line

    def _part(self, words: list[str]) -> None:
        if len(words) != 4:
            raise ValueError(f"{words[0]}: expected two nodes and a value, found {len(words) - 1} words")
        name, a, b = words[0], _node(words[1]), _node(words[2])
        value = parse_number(words[3])
        if value <= 0:
            raise ValueError(f"{name}: the value must be positive, found {words[3]}")
        if a == b:
            raise ValueError(f"{name}: both ends are at node {a}")
        if name[0] == "r":
            self.resistors.append(Resistor(name, a, b, value))
        else:
            self.capacitors.append(Capacitor(name, a, b, value))

    def _source(self, words: list[str]) -> None:
        if len(words) < 3 or _node(words[2]) != GROUND or _node(words[1]) == GROUND:
            raise ValueError(f"{words[0]}: expected a node and then ground")
        settings = _settings([word for word in words[3:] if "=" in word], ("rs",), words[0])
        if settings.get("rs", 0.0) < 0:
            raise ValueError(f"{words[0]}: rs must not be negative")
        if self.sources:
            raise ValueError(f"{words[0]}: there is already a source; one generator drives the network")
        self.sources.append((_node(words[1]), settings.get("rs", 0.0)))

    def _opamp(self, words: list[str]) -> None:
        if len(words) < 5 or words[4] != "opamp":
            raise ValueError(f"{words[0]}: expected plus, minus, out and the word OPAMP")
        settings = _settings(words[5:], _OPAMP_WORDS, words[0])
        for word in ("gbw", "swing", "slew"):
            if word in settings and settings[word] <= 0:
                raise ValueError(f"{words[0]}: {word} must be positive")
        if "gbw" not in settings:
            raise ValueError(f"{words[0]}: gbw=... in Hz is missing")
        plus, minus, out = (_node(word) for word in words[1:4])
        self.opamps.append(OpAmp(words[0], plus, minus, out, **settings))


def parse_number(text: str) -> float:
    """Return a SPICE number.

    Raises
    ------
    ValueError
        It is none; names the text.

    Examples
    --------
    >>> parse_number("4.7k"), parse_number("2meg"), parse_number("33nF")
    (4700.0, 2000000.0, 3.3e-08)
    """
    found = _NUMBER.fullmatch(text.lower())
    if found is None:
        raise ValueError(f"{text!r} is not a number with a SPICE suffix (f p n u m k meg g t)")
    return float(f"{float(found[1]) * _FACTORS[found[2]]:.15g}")


def parse_netlist(text: str) -> Network:
    """Return the network of a netlist.

    Raises
    ------
    NetlistMistakes
        With every mistake found and its line.
    """
    reader = _Reader()
    for line, words in _statements(text, reader.mistakes):
        reader.element(line, words)
    if not reader.sources and not any(name[0] == "v" for name in reader.names):
        reader.mistakes.append(Mistake(0, "there is no V line: it says where the generator drives the network"))
    if reader.mistakes:
        raise NetlistMistakes(tuple(sorted(reader.mistakes, key=lambda mistake: mistake.line)))
    node, resistance = reader.sources[0]
    try:
        network = Network(
            tuple(reader.resistors), tuple(reader.capacitors), tuple(reader.opamps), node, source_resistance=resistance
        )
        state_space(network, [node])
    except ValueError as error:
        raise NetlistMistakes((Mistake(0, str(error)),)) from error
    return network


def _statements(text: str, mistakes: list[Mistake]) -> Iterator[tuple[int, list[str]]]:
    """Yield line number and lower-case words of each statement, continuations joined."""
    held: tuple[int, list[str]] | None = None
    for number, line in enumerate(text.splitlines(), 1):
        words = line.split(";")[0].lower().split()
        if number == 1:
            if re.match(r"[rcvx]\w*\s+\S+\s+\S+\s+\S", line, re.IGNORECASE):
                mistakes.append(Mistake(1, "this is the title line in SPICE but looks like an element: add a title"))
            continue
        if not words or words[0].startswith("*"):
            continue
        if words[0].startswith("+") and held is not None:
            held[1].extend(" ".join(words)[1:].split())
            continue
        if held is not None:
            yield held
        held = None
        if words[0] == ".end":
            return
        if words[0][0] in ".+":
            mistakes.append(Mistake(number, f"{words[0]} is not understood here"))
        else:
            held = (number, words)
    if held is not None:
        yield held


def _node(word: str) -> str:
    return GROUND if word in ("0", "gnd") else word


def _settings(words: list[str], known: tuple[str, ...], name: str) -> dict[str, float]:
    found: dict[str, float] = {}
    for word in words:
        key, equals, value = word.partition("=")
        if not equals or key not in known:
            raise ValueError(f"{name}: {word!r} is not understood; there are {', '.join(k + '=' for k in known)}")
        found[key] = parse_number(value)
    return found
