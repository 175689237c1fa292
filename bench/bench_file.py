"""The bench file: instruments, wiring, ceilings and declared accuracy, every mistake reported at once."""

import os
import re
from dataclasses import fields, replace
from datetime import date
from pathlib import Path
from typing import Any, Literal, cast, get_args

from bandproof.bench.errors import FileMistakes
from bandproof.bench.quantities import Kind, shown
from bandproof.bench.reading import Mistakes, Table, nearest, parse_toml, read_text
from bandproof.bench.types import Accuracy, Bench, Board, CheckPlan, Instrument, Wire
from bandproof.drivers.dialect import load
from bandproof.drivers.schema import DialectMistakes
from bandproof.drivers.serial_line import Flow, Parity, Serial

__all__ = ["STATED", "check_wiring", "find_bench", "parse_bench", "read_bench"]

Role = Literal["generator", "scope", "switch", "supply"]
BY_HAND = "by hand"
_ADDRESS = re.compile(r"(TCPIP|USB|GPIB|ASRL|PXI|VXI)[^:\s]*(::[^:\s]+)+", re.IGNORECASE)  # interfaces of VPP-4.3
_EXAMPLE = '"TCPIP::192.0.2.10::5025::SOCKET"'
_BAUD = 50, 4_000_000  # what operating systems name (POSIX from 50)
# Loads of usual probes by factor, Ω and F (common practice): a 10:1 probe; a 1:1 probe or a metre of cable.
_LOADS = {10.0: (10e6, 15e-12), 1.0: (1e6, 100e-12)}
# What the file may say about errors: name of Accuracy, table, key, kind.
STATED: dict[str, tuple[str, str, Kind]] = {
    "channel_skew": ("scope", "channel_skew", "time"),
    "linearity": ("scope", "linearity", "steps"),
    "range_gain": ("scope", "range_accuracy", "relative"),
    "drift": ("scope", "drift", "drift"),
    "reseating": ("probes", "reseating", "relative"),
    "probe_compensation": ("probes", "compensation", "relative"),
    "probe_corner": ("probes", "corner", "frequency"),
    "probe_resistance": ("probes", "resistance", "resistance"),
    "probe_capacitance": ("probes", "capacitance", "capacitance"),
}


def find_bench(named: str | None, folder: Path = Path(".")) -> tuple[Path, str]:
    """Return the bench file to use and why it was chosen: named, else the environment, else the only one in the folder.

    Raises
    ------
    FileMistakes
        None is named and the folder holds none, or several.
    """
    if named:
        return Path(named), "named on the command line"
    if from_environment := os.environ.get("BANDPROOF_BENCH"):
        return Path(from_environment), "named by BANDPROOF_BENCH"
    found = sorted(folder.glob("*.bench.toml"))
    if len(found) == 1:
        return found[0], "the only one in this folder"
    which = ", ".join(path.name for path in found) or "none here"
    raise FileMistakes(
        str(folder), (f"which bench? {which}: name one with --bench or BANDPROOF_BENCH (`bandproof begin` writes one)",)
    )


def read_bench(path: Path) -> Bench:
    """Return the bench a file describes; a dialect path is taken from the file's folder.

    Raises
    ------
    FileMistakes
        All mistakes found in the file, each with its key path.
    """
    mistakes = Mistakes(str(path))
    bench = _parsed(read_text(path), mistakes)
    _check_dialects(bench, mistakes)
    mistakes.stop_if_any()
    return bench


def parse_bench(text: str, path: str) -> Bench:
    """Return the bench a text describes, as if it stood at ``path``; dialects are not looked at (FileMistakes)."""
    mistakes = Mistakes(path)
    bench = _parsed(text, mistakes)
    mistakes.stop_if_any()
    return bench


def _parsed(text: str, mistakes: Mistakes) -> Bench:
    top = Table(parse_toml(text, mistakes.path), "", mistakes)
    bench = _bench(top, text, Path(mistakes.path).parent)
    top.close()
    return bench


def _check_dialects(bench: Bench, mistakes: Mistakes) -> None:
    """Note every dialect that is missing, wrong, or for another kind of instrument."""
    for role, instrument in bench.instruments.items():
        if not instrument.dialect:
            continue
        try:
            kind = load(instrument.dialect).kind
        except DialectMistakes as problem:
            for finding in problem.findings:
                mistakes.add(f"{role}.dialect", f"{instrument.dialect}: {finding}")
            continue
        if kind != role:
            mistakes.add(f"{role}.dialect", f"{instrument.dialect!r} is for a {kind}; name one for a {role}")


def _bench(top: Table, text: str, folder: Path) -> Bench:
    title, mains = top.text("title", "bench"), top.quantity("mains", "frequency")
    place = top.text("place", "")
    ceiling, visa_library = top.quantity("ceiling", "voltage"), top.text("visa_library", "@py")
    clock = top.text("simulated_clock", "")
    generator, scope = top.table("generator"), top.table("scope")
    probes = top.table("probes")
    accuracy = _accuracy(generator, scope, probes)
    instruments = {
        "generator": _instrument("generator", generator, folder),
        "scope": _instrument("scope", scope, folder),
    }
    if "switch" in top:
        instruments["switch"] = _instrument("switch", top.table("switch"), folder)
    rails = (1, 2)
    if "supply" in top:
        supply = top.table("supply")
        rails = (supply.whole("positive", 1, 9, 1), supply.whole("negative", 1, 9, 2))
        instruments["supply"] = _instrument("supply", supply, folder)
    return Bench(
        rails=rails,
        title=title,
        place=place,
        mains=mains,
        ceiling=ceiling,
        instruments=instruments,
        wires=_wires(top.table("wiring"), "switch" in instruments),
        probe_factors=_probes(probes),
        accuracy=accuracy,
        thru_valid=top.quantity("thru_valid", "time", 12.0 * 3600.0),
        check=_check(top.table("check"), folder) if "check" in top else None,
        visa_library=visa_library,
        clock=str(folder / clock) if clock else None,
        text=text,
    )


def _check(table: Table, folder: Path) -> CheckPlan:
    board, every = table.text("board"), table.whole("every", 1, 100_000, 20)
    plan = CheckPlan(str(folder / board), every, table.quantity("longest_age", "time", 12.0 * 3600.0))
    table.close()
    return plan


def _accuracy(generator: Table, scope: Table, probes: Table) -> Accuracy:
    """Return what the file says about errors; what it leaves out has the careful defaults of `Accuracy`."""
    usual = Accuracy(
        generator_frequency=generator.quantity("frequency_accuracy", "relative"),
        channel_gain=scope.quantity("channel_gain_accuracy", "relative"),
    )
    factors = [probes.peek(f"channel_{channel}") for channel in (1, 2)]
    loads = [_LOADS[factor] for factor in factors if isinstance(factor, int | float) and factor in _LOADS]
    if loads:
        resistance, capacitance = min(loads)
        usual = replace(usual, probe_resistance=resistance, probe_capacitance=capacitance)
    tables = {"scope": scope, "probes": probes}
    stated: dict[str, Any] = {
        name: tables[table].quantity(key, kind, getattr(usual, name), positive=False)
        for name, (table, key, kind) in STATED.items()
    }
    declared = {name for name, (table, key, _) in STATED.items() if key in tables[table]}
    return replace(usual, **stated, declared=frozenset({"channel_gain", "generator_frequency", *declared}))


def _instrument(role: Role, table: Table, folder: Path) -> Instrument:
    address, dialect = table.text("address"), table.text("dialect")
    if address and not _ADDRESS.fullmatch(address):
        table.mistake("address", f"found {address!r}; expected an address as VISA spells it, such as {_EXAMPLE}")
    if dialect.endswith(".toml"):
        dialect = str(folder / dialect)
    serial, calibrated = _serial(table, address), _calibrated(table)
    table.close()
    return Instrument(role, address, dialect, serial, calibrated)


def _calibrated(table: Table) -> str:
    """Return the day an instrument was calibrated last, as TOML or ISO 8601 write it; "" where it is not stated."""
    found = table.anything("calibrated")
    if found is None:
        return ""
    try:
        return (found if type(found) is date else date.fromisoformat(found)).isoformat()
    except (TypeError, ValueError):
        table.mistake("calibrated", f"found {shown(found)}; expected a date such as 2026-05-01")
        return ""


def _serial(table: Table, address: str) -> Serial | None:
    """Return how a serial line is set, None for another address, where every such key is a mistake."""
    usual = Serial()
    serial = Serial(
        baud=table.whole("baud", *_BAUD, usual.baud),
        data_bits=table.whole("data_bits", 7, 8, usual.data_bits),
        parity=cast(Parity, table.choice("parity", get_args(Parity), usual.parity)),
        stop_bits=table.whole("stop_bits", 1, 2, usual.stop_bits),
        flow=cast(Flow, table.choice("flow", get_args(Flow), usual.flow)),
    )
    if address[:4].upper() == "ASRL":
        return serial
    for key in (field.name for field in fields(Serial)):
        if address and key in table:
            table.mistake(key, f"is for a serial line (ASRL...), and {address!r} is none")
    return None


def _probes(table: Table) -> dict[int, float]:
    factors = {channel: table.quantity(f"channel_{channel}", "number") for channel in (1, 2)}
    table.close()
    return factors


def _wires(table: Table, has_switch: bool) -> dict[str, Wire]:
    wires = {}
    for name in table.names():
        entry = table.table(name)
        channel, route = entry.whole("channel", 1, 2), entry.text("route", "")
        if route and route != BY_HAND and not has_switch:
            entry.mistake("route", f'is a switch route, but there is no [switch]; write "{BY_HAND}" or add the table')
        by_hand = route == BY_HAND
        wires[name] = Wire(channel, None if by_hand or not route else route, by_hand)
        entry.close()
    return wires


def check_wiring(board: Board, bench: Bench, path: str) -> None:
    """Refuse a bench whose wiring does not reach the board's taps on two different channels.

    Raises
    ------
    FileMistakes
        Every tap that is not wired, or shares its channel with the other tap of its stage.
    """
    mistakes = Mistakes(path)
    for stage in board.stages:
        taps = (stage.tap_in, stage.tap_out)
        for tap in taps:
            if tap not in bench.wires:
                mistakes.add(
                    f"wiring.{tap}", f"missing; stage {stage.name!r} is measured there{nearest(tap, bench.wires)}"
                )
        channels = [bench.wires[tap].channel for tap in taps if tap in bench.wires]
        if len(channels) == 2 and channels[0] == channels[1]:
            mistakes.add(
                f"wiring.{taps[1]}", f"is on channel {channels[0]} like {taps[0]!r}; a ratio needs both channels"
            )
    mistakes.findings[:] = dict.fromkeys(mistakes.findings)
    mistakes.stop_if_any()
