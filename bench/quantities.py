"""Quantities as people write them, read into SI by a strict small grammar.

A number, an optional space, a prefix and a unit: ``"4.7 kΩ"``, ``"2.5 kHz"``, ``"12 dB"``, ``"5 %"``; or, for
resistors and capacitors, the code of IEC 60062 (``"4k7"``, ``"33n"``, ``"4R7"``; ``"4.7k"`` too). A decimal comma, an
unknown unit and a missing unit are mistakes: nothing is guessed. Printing goes the other way, with prefixes.
"""

import math
import re
from typing import Literal

__all__ = [
    "Kind",
    "QuantityError",
    "as_written",
    "engineering",
    "read_quantity",
    "read_tolerance",
    "shown",
    "tolerance_text",
    "with_uncertainty",
]

Kind = Literal[
    "frequency",
    "resistance",
    "capacitance",
    "voltage",
    "time",
    "slew",
    "gain",
    "relative",
    "tolerance",
    "steps",
    "current",
    "drift",
    "temperature",
    "number",
]

_MEGA = {"": 1.0, "k": 1e3, "M": 1e6, "G": 1e9}
_MILLI = {"": 1.0, "m": 1e-3, "u": 1e-6, "µ": 1e-6, "μ": 1e-6, "n": 1e-9, "p": 1e-12}
_RESISTANCE = {"m": 1e-3, **_MEGA}


def _spellings(units: tuple[str, ...], prefixes: dict[str, float]) -> dict[str, float]:
    return {prefix + unit: factor for unit in units for prefix, factor in prefixes.items()}


_RELATIVE = {"%": 1e-2, "ppm": 1e-6}
_UNITS: dict[Kind, dict[str, float]] = {
    "frequency": _spellings(("Hz",), {"m": 1e-3, **_MEGA}),
    # The second ohm is the sign U+2126, written so that no editor turns it into the first, the Greek letter.
    "resistance": _spellings(("Ω", "\u2126", "ohm"), _RESISTANCE),
    "capacitance": _spellings(("F",), _MILLI),
    "voltage": _spellings(("V",), {**_MILLI, "k": 1e3}),
    "time": {**_spellings(("s",), _MILLI), "min": 60.0, "h": 3600.0, "d": 86400.0},
    "slew": {"V/s": 1.0, "V/ms": 1e3, "V/us": 1e6, "V/µs": 1e6, "V/μs": 1e6},
    "gain": {"dB": math.nan, "V/V": 1.0},
    "relative": _RELATIVE,
    "tolerance": {"dB": math.nan, **_RELATIVE},
    "current": _spellings(("A",), _MILLI),
    "steps": {"LSB": 1.0},
    "drift": {"%/min": 1e-2 / 60.0, "%/h": 1e-2 / 3600.0, "ppm/min": 1e-6 / 60.0, "ppm/h": 1e-6 / 3600.0},
    "temperature": {"°C": 1.0},
    "number": {"": 1.0},
}
_EXAMPLES: dict[Kind, str] = {
    "frequency": '"2.5 kHz"',
    "resistance": '"4.7 kΩ" or "4k7"',
    "capacitance": '"33 nF" or "33n"',
    "voltage": '"1.5 V"',
    "time": '"10 ms"',
    "slew": '"8 V/us"',
    "gain": '"10 dB" or "3.16 V/V"',
    "relative": '"5 %" or "20 ppm"',
    "tolerance": '"6 %" or "1 dB"',
    "current": '"20 mA"',
    "steps": '"0.5 LSB"',
    "drift": '"0.02 %/min"',
    "temperature": '"23 °C"',
    "number": "1.5",
}
_CODE: dict[Kind, dict[str, float]] = {
    "resistance": {"R": 1.0, "k": 1e3, "K": 1e3, "M": 1e6, "G": 1e9},
    "capacitance": {"p": 1e-12, "n": 1e-9, "u": 1e-6, "µ": 1e-6, "μ": 1e-6},
}
_NUMBER = re.compile(r"([+-]?[0-9]+(?:\.[0-9]+)?(?:[eE][+-]?[0-9]+)?)\s*(\S*)")  # \d would read every script's digits
_CODED = re.compile(r"(?=.*[0-9])([0-9]*)([A-Za-zµμ])([0-9]*)")
_SHOWN = 60  # characters of what was found that a message repeats; arbitrary


_LEAST, _MOST = 1e-30, 1e30  # SI; arbitrary, a slip of the pen beyond any bench, and squares stay finite


class QuantityError(ValueError):
    """A text that is not a quantity of the kind expected; says what would have been."""

    def __init__(self, text: str, kind: Kind, reason: str) -> None:
        super().__init__(text, kind, reason)
        self.text, self.kind, self.reason = text, kind, reason

    def __str__(self) -> str:
        return f"{self.reason}; expected a {self.kind} such as {_EXAMPLES[self.kind]}"


def read_quantity(text: str | float, kind: Kind) -> float:
    """Return the SI value of a quantity as written.

    Parameters
    ----------
    text : str or number
        What stands in the file. A bare number is accepted only where ``kind`` is ``"number"``.
    kind : Kind
        What is expected. ``gain`` gives a ratio, ``relative`` a plain fraction.

    Returns
    -------
    float
        The value in SI units, ratios for gains.

    Raises
    ------
    QuantityError
        The text is not such a quantity; the reason names what is wrong with it.

    Examples
    --------
    >>> read_quantity("4k7", "resistance"), read_quantity("2.5 kHz", "frequency")
    (4700.0, 2500.0)
    """
    if isinstance(text, bool) or not isinstance(text, (str, int, float)):
        raise QuantityError(shown(text), kind, f"found {shown(text)}")
    written = text.strip() if isinstance(text, str) else _printed(text)
    if kind in _CODE and (coded := _CODED.fullmatch(written)) and coded[2] in _CODE[kind]:
        return _times(float(f"{coded[1] or 0}.{coded[3] or 0}"), _CODE[kind][coded[2]], written, kind)
    match = _NUMBER.fullmatch(written)
    if match is None:
        reason = (
            "a decimal comma is not read (write a point)" if re.search(r"\d,\d", written) else f"found {shown(written)}"
        )
        raise QuantityError(written, kind, reason)
    return _scaled(float(match[1]), match[2], written, kind)


def _scaled(number: float, unit: str, written: str, kind: Kind) -> float:
    if not math.isfinite(number):
        raise _out_of_range(written, kind)
    if unit in _CODE.get(kind, {}):
        return _times(number, _CODE[kind][unit], written, kind)
    if unit not in _UNITS[kind]:
        raise QuantityError(
            written, kind, f"unknown unit {shown(unit)} in {shown(written)}" if unit else f"no unit in {shown(written)}"
        )
    if unit == "dB":
        ratio = 10.0 ** (number / 20.0) if abs(number) < 1e3 else math.inf
        if math.isinf(ratio):
            raise _out_of_range(written, kind)
        return ratio
    return _times(number, _UNITS[kind][unit], written, kind)


def _times(number: float, factor: float, written: str, kind: Kind) -> float:
    # Dividing by an exact power of ten keeps 4.7 nF the nearest number to 4.7e-9; multiplying by 1e-9 does not.
    value = number / round(1.0 / factor) if factor < 1.0 else number * factor
    if value != 0.0 and not _LEAST <= abs(value) <= _MOST:
        raise _out_of_range(written, kind)
    return value


def _out_of_range(written: str, kind: Kind) -> QuantityError:
    return QuantityError(written, kind, f"{shown(written)} is out of range")


def shown(found: object) -> str:
    """Return what was found as a message repeats it, cut short; never raises, whatever a file holds."""
    text = _printed(found)
    return text if len(text) <= _SHOWN else text[:_SHOWN] + "..."


def _printed(found: object) -> str:
    try:
        return repr(found)
    except ValueError:  # a whole number of more digits than Python prints
        return "a number of thousands of digits"


def read_tolerance(text: str | float) -> tuple[float, float]:
    """Return the factors on a designed value that a tolerance allows, lower and upper.

    ``"6 %"`` is (0.94, 1.06); ``"1 dB"`` is (10**(-1/20), 10**(1/20)), symmetric in decibels as the trade means it.

    Raises
    ------
    QuantityError
        The text is no tolerance, or it is not between 0 and 100 % (0 and 60 dB).
    """
    width = read_quantity(text, "tolerance")
    if isinstance(text, str) and text.rstrip().endswith("dB"):
        if 1.0 < width <= 1e3:
            return 1.0 / width, width
    elif 0.0 < width < 1.0:
        return 1.0 - width, 1.0 + width
    raise QuantityError(shown(text), "tolerance", f"{shown(text)} is not a usable width")


def tolerance_text(lower: float, upper: float) -> str:
    """Return the tolerance that allows these factors on a designed value, as people write it (see `read_tolerance`).

    Examples
    --------
    >>> tolerance_text(*read_tolerance("6 %")), tolerance_text(*read_tolerance("1 dB"))
    ('±6 %', '±1 dB')
    """
    if abs(lower * upper - 1.0) < 1e-9:
        return f"±{20.0 * math.log10(upper):.4g} dB"
    return f"±{100.0 * (upper - 1.0):.4g} %"


_SHOWN_IN: dict[Kind, str] = {"steps": "LSB", "drift": "%/min"}
_PLAIN: dict[Kind, str] = {"frequency": "Hz", "resistance": "Ω", "capacitance": "F", "time": "s"}


def as_written(value: float, kind: Kind) -> str:
    """Return a value of a bench file's accuracy as the file has it.

    Examples
    --------
    >>> as_written(0.005, "relative"), as_written(2e-5, "relative"), as_written(1e-7, "time")
    ('0.5 %', '20 ppm', '100 ns')
    """
    if kind in _PLAIN:
        return engineering(value, _PLAIN[kind])
    unit = _SHOWN_IN.get(kind) or ("%" if value >= 1e-4 else "ppm")
    return f"{value / _UNITS[kind][unit]:.4g} {unit}"


_PREFIXES = {-12: "p", -9: "n", -6: "µ", -3: "m", 0: "", 3: "k", 6: "M", 9: "G"}


def engineering(value: float, unit: str, digits: int = 4) -> str:
    """Return a value with an engineering prefix, ``digits`` significant digits, trailing zeros dropped.

    Examples
    --------
    >>> engineering(4700.0, "Ω"), engineering(3.3e-8, "F")
    ('4.7 kΩ', '33 nF')
    """
    power = _power(value)
    return f"{value / 10.0**power:.{digits}g} {_PREFIXES[power]}{unit}".rstrip()


def with_uncertainty(value: float, expanded: float, unit: str) -> str:
    """Return ``value ± U``, U with two significant digits and the value to the same place.

    Examples
    --------
    >>> with_uncertainty(2501.234, 0.567, "Hz")
    '2.50123 ± 0.00057 kHz'
    >>> with_uncertainty(1.50423, 0.0123, "")
    '1.504 ± 0.012'
    """
    if not (math.isfinite(value) and math.isfinite(expanded) and expanded > 0.0):
        return f"{engineering(value, unit)} ± unknown" if math.isfinite(value) else "not found"
    power = _power(value) if unit else 0
    scale = 10.0**power
    digits = decimals(expanded / scale)
    places = max(0, digits)
    shown_value, shown_width = (round(number / scale, digits) for number in (value, expanded))
    tail = f" {_PREFIXES[power]}{unit}".rstrip()
    return f"{shown_value:.{places}f} ± {shown_width:.{places}f}{tail}"


def decimals(expanded: float) -> int:
    """Return the decimal places that give an uncertainty two significant digits (0.0996 rounds up to 0.10)."""
    exponent = math.floor(math.log10(expanded))
    if round(expanded / 10.0 ** (exponent - 1)) >= 100:
        exponent += 1
    return 1 - exponent


def _power(value: float) -> int:
    if value == 0.0 or not math.isfinite(value):
        return 0
    return min(9, max(-12, 3 * math.floor(math.log10(abs(value)) / 3.0 + 1e-12)))
