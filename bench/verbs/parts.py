"""``parts``: standard-value parts for a wanted band."""

import json
import math
from typing import TYPE_CHECKING, Any

import click

from bandproof.bench.errors import BadInput, FileMistakes
from bandproof.bench.quantities import Kind, QuantityError, engineering, read_quantity

if TYPE_CHECKING:
    from bandproof.analysis.circuits import MfbFigures
    from bandproof.bench.standard_parts import PartsRequest

__all__ = ["command"]

# What an option may be, in SI, and how that is said. Arbitrary: far beyond bands that resistors and capacitors make.
_LIMITS = {
    "--centre": (1e-3, 1e9, "between 1 mHz and 1 GHz"),
    "--q": (1e-2, 1e3, "between 0.01 and 1000"),
    "--gain": (1e-3, 1e3, "between -60 dB and 60 dB (0.001 and 1000 V/V; the circuit inverts, write it without sign)"),
    "--capacitor": (1e-15, 1.0, "between 0.001 pF and 1 F"),
    "--gbw": (1.0, 1e15, "between 1 Hz and 1000000 GHz"),
    "--tolerance-resistors": (0.0, 0.5, "between 0 % and 50 %"),  # to first order nothing can be said beyond
    "--tolerance-capacitors": (0.0, 0.5, "between 0 % and 50 %"),
}


@click.command("parts")
@click.option("--centre", required=True, help='Centre frequency f0: "1 kHz".')
@click.option("--q", required=True, help="Q = f0 / (-3 dB bandwidth): 1.5.")
@click.option("--gain", required=True, help='Gain at f0: "10 dB" or "3.16 V/V".')
@click.option(
    "--resistors",
    type=click.Choice(["E12", "E24", "E48", "E96", "E192"]),
    default="E96",
    show_default=True,
    help="Series of the resistors.",
)
@click.option("--capacitors", type=click.Choice(["E3", "E6", "E12", "E24"]), help="Series of C_1 = C_2; else E12.")
@click.option("--capacitor", help='This capacitance instead of a series: "10 nF".')
@click.option("--gbw", help='Gain-bandwidth product of the op-amp, "4 MHz"; else it is ideal.')
@click.option("--tolerance-resistors", default="1 %", show_default=True, help="For the spread.")
@click.option("--tolerance-capacitors", default="5 %", show_default=True, help="For the spread.")
@click.option("--count", type=click.IntRange(1, 100), default=5, show_default=True, help="How many choices to show.")
@click.option("--json", "as_json", is_flag=True, help="Print the choices as one object and nothing else.")
def command(count: int, as_json: bool, **options: Any) -> int:
    """Choose standard-value parts of a multiple-feedback band-pass for a wanted centre frequency, Q and gain.

    For each capacitor the three resistors are chosen together so that the largest of the relative errors of f0, Q and
    gain is the least that the series allows, resistors from 1 kΩ to 1 MΩ, capacitors from 100 pF to 1 µF. With --gbw
    the response with the real op-amp is the one that is brought nearest.

    \b
    Example:
      bandproof parts --centre "1 kHz" --q 1.5 --gain "10 dB" --gbw "4 MHz"
      bandproof parts --centre 160Hz --q 1.5 --gain 10dB --capacitor 33n --json
    """
    request = _read(**options)
    from bandproof.analysis.standard_parts import TooSlow, standard_parts
    from bandproof.bench.standard_parts import described, parts_lines, parts_object

    try:
        choices = standard_parts(request.wanted, request.capacitances, resistors=request.resistors, gbw=request.gbw)
    except TooSlow as slow:
        raise BadInput(
            f"--gbw: with {engineering(slow.gbw, 'Hz')} no parts were found for {described(request.wanted)}; "
            f"an op-amp of {engineering(slow.least, 'Hz')} would do, or a band of lower centre or gain"
        ) from None
    if as_json:
        click.echo(json.dumps(parts_object(request, choices[:count]), indent=1, allow_nan=False))
    else:
        for line in parts_lines(request, choices[:count]):
            click.echo(line)
    return 0


def _read(
    centre: str,
    q: str,
    gain: str,
    resistors: str,
    capacitors: str | None,
    capacitor: str | None,
    gbw: str | None,
    tolerance_resistors: str,
    tolerance_capacitors: str,
) -> "PartsRequest":
    """Read all quantities; every mistake is told at once."""
    mistakes: list[str] = []

    def read(option: str, text: str, kind: Kind) -> float:
        low, high, rule = _LIMITS[option]
        try:
            value = read_quantity(text, kind)
        except QuantityError as mistake:
            mistakes.append(f"{option}: {mistake}")
            return math.nan
        if not low <= value <= high:
            mistakes.append(f"{option}: {text!r} is not {rule}")
        return value

    figures = (read("--centre", centre, "frequency"), read("--q", q, "number"), read("--gain", gain, "gain"))
    one = None if capacitor is None else read("--capacitor", capacitor, "capacitance")
    bandwidth = math.inf if gbw is None else read("--gbw", gbw, "frequency")
    tolerances = (
        read("--tolerance-resistors", tolerance_resistors, "relative"),
        read("--tolerance-capacitors", tolerance_capacitors, "relative"),
    )
    if one is not None and capacitors is not None:
        mistakes.append("--capacitors and --capacitor: name a series or one capacitance, not both")
    if mistakes:
        raise FileMistakes("the command line", tuple(mistakes))
    from bandproof.analysis.circuits import MfbFigures
    from bandproof.analysis.e_series import preferred_values
    from bandproof.analysis.standard_parts import CAPACITANCE
    from bandproof.bench.standard_parts import PartsRequest

    wanted = MfbFigures(*figures)
    _refuse_unrealizable(wanted)
    series = None if one is not None else capacitors or "E12"
    capacitances = (one,) if one is not None else preferred_values(series or "", *CAPACITANCE)
    return PartsRequest(wanted, resistors, series, capacitances, bandwidth, tolerances)


def _refuse_unrealizable(wanted: "MfbFigures") -> None:
    from bandproof.analysis.standard_parts import is_realizable
    from bandproof.bench.standard_parts import in_decibels

    if is_realizable(wanted):
        return
    limit, most = math.sqrt(wanted.gain / 2.0), 2.0 * wanted.q**2
    raise BadInput(
        f"--q {wanted.q:.4g} with --gain {wanted.gain:.4g} V/V: this circuit needs Q > √(gain/2) = {limit:.4g}, "
        f"below that R_shunt would be negative. Raise Q above {limit:.4g}, or lower the gain below "
        f"2Q² = {most:.4g} V/V ({in_decibels(most):.2f} dB) and make the rest up in another stage"
    )
