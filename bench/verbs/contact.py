"""``bench``: walk every instrument's dialect, slot by slot, or try a contract; leave the bench quiet."""

import json
import sys
import textwrap
from collections import Counter
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import asdict
from pathlib import Path
from typing import TYPE_CHECKING, Any

import click

if TYPE_CHECKING:
    from bandproof.bench.types import Bench
    from bandproof.drivers.contract import Outcome
    from bandproof.drivers.instrument import Instrument
    from bandproof.drivers.walk import Line

__all__ = ["command"]

_WORKS, _FAULT = 0, 3
_WIDTH, _SLOT = 80, 36  # columns of a line, and where what was sent begins
_BY_HAND = {  # what reads back as it was set although the dialect is wrong
    "generator": "frequency, amplitude, offset: unit, peak for peak to peak",
    "scope": "a known voltage at each input: its size, its sign, which input it is",
    "switch": "which test point each route reaches",
    "supply": "the voltage of each output: a unit, which output it is",
}
_UNASKED = {  # what it costs that a slot is empty
    "habits.errors": "no error query: what it refuses goes unnoticed where it is not read back",
    "frequency.query": "the frequency is not read back: a rounded one goes unnoticed, so frequency_accuracy in the "
    "bench file must include the rounding",
    "amplitude.query": "the amplitude is not read back: one that is off shows only in the first records",
    "output.query": "the output is not read back: that it is off is not known, only told",
    "range.query": "the range is not read back: records cannot be compared with it",
    "query": "no route is read back: one that did not close shows only in the first records",
}


@click.command("bench")
@click.argument("bench_path", metavar="[BENCH]", required=False, type=click.Path(path_type=Path))
@click.option("--find", is_flag=True, help="List the addresses VISA sees with their *IDN?; nothing else is sent.")
@click.option("--no-board", is_flag=True, help="No board is connected: outputs may be switched on, briefly.")
@click.option("--contract", is_flag=True, help="Try what any instrument of its kind must do; settings are changed.")
@click.option("--json", "as_json", is_flag=True, help="Print the result object and nothing else.")
def command(bench_path: Path | None, find: bool, no_board: bool, contract: bool, as_json: bool) -> int:
    """Try every slot of the dialects of BENCH on its instruments; say what was sent and what came back.

    Outputs go off first and stay off; settings are changed and set back. Exit 0: every slot that a sweep needs works.

    \b
    Example:
      bandproof bench my.bench.toml
      bandproof bench my.bench.toml --no-board --contract
      bandproof bench --find
    """
    if find:
        return _find()
    from bandproof.bench.bench_file import find_bench, read_bench
    from bandproof.bench.instruments import opened
    from bandproof.bench.locks import locked
    from bandproof.bench.verbs.run import clock_of

    path, why = find_bench(str(bench_path) if bench_path else None)
    bench = read_bench(path)
    if not as_json:
        click.echo(f"bench: {path} ({why})")
    no_board = no_board or (not as_json and sys.stdin.isatty() and _says_no_board())
    addresses = [instrument.address for instrument in bench.instruments.values()]
    with locked(addresses, who="bandproof bench"), opened(bench, clock_of(bench), None) as devices:
        instruments = {devices.role_of(instrument.address): instrument for instrument in devices.all()}
        if contract:
            return _contract(bench, instruments, no_board, as_json)
        return _walk(bench, instruments, no_board, as_json)


def _says_no_board() -> bool:
    return click.confirm("Is no board connected, so that outputs may be switched on?", default=False)


def _routes(bench: "Bench") -> list[str]:
    return list(dict.fromkeys(wire.route for wire in bench.wires.values() if wire.route))


def _walk(bench: "Bench", instruments: "Mapping[str, Instrument]", no_board: bool, as_json: bool) -> int:
    from bandproof.drivers.walks import walk

    found: dict[str, Sequence[Line]] = {}
    for role, instrument in instruments.items():
        found[role] = walk(instrument, no_board=no_board, routes=_routes(bench))
        if not as_json:
            _echo_walk(bench, role, found[role])
    wrong = [f"{role}: {line.slot}" for role, lines in found.items() for line in lines if not line.works]
    if as_json:
        rows = {role: [asdict(line) for line in lines] for role, lines in found.items()}
        return _as_json(bench, "slots", rows, works=not wrong)
    _echo_by_hand(found)
    if wrong:
        click.echo(f"{len(wrong)} slot(s) that a sweep needs do not work:")
        click.echo("\n".join(f"  {entry}" for entry in wrong))
        return _FAULT
    click.echo("Every slot that a sweep needs works; the generator's output is off.")
    return _WORKS


def _echo_by_hand(roles: Iterable[str]) -> None:
    """Say what no walk can notice."""
    click.echo("A wrong slot that reads back as right is not seen here. Compare by hand, once:")
    for role in roles:
        click.echo(f"  {role:<9} {_BY_HAND[role]}")
    click.echo("")


def _echo_walk(bench: "Bench", role: str, lines: "Sequence[Line]") -> None:
    _echo_head(bench, role)
    for line in lines:
        head = f"  {line.verdict:<9} {line.slot:<{_SLOT - 13}} "
        came = f"({line.came})" if line.verdict == "skipped" else f"> {line.came}" if line.came else ""
        for text in _fitted(line.sent, came):
            click.echo((head + text).rstrip())
            head = " " * _SLOT
    counts = Counter(line.verdict for line in lines)
    click.echo("  " + ", ".join(f"{count} {verdict}" for verdict, count in sorted(counts.items())))
    missing = dict.fromkeys(line.slot.split()[0] for line in lines if line.verdict == "missing")
    for words in (_UNASKED[slot] for slot in missing if slot in _UNASKED):
        click.echo(textwrap.fill(words, _WIDTH, initial_indent="  note: ", subsequent_indent="    "))
    click.echo("")


def _echo_head(bench: "Bench", role: str) -> None:
    instrument = bench.instruments[role]
    line = f"{role:<10} {instrument.address}  {instrument.dialect}"
    click.echo(line if len(line) <= _WIDTH else f"{role:<10} {instrument.address}\n{'':<11}{instrument.dialect}")


def _fitted(sent: str, came: str) -> list[str]:
    """Return what was sent and what came back in as many lines as they need beside the slot's name."""
    room = _WIDTH - _SLOT
    both = f"{sent} {came}"
    if len(both) <= room:
        return [both]
    return [sent[start : start + room] for start in range(0, len(sent), room)] + textwrap.wrap(came, room)


def _contract(bench: "Bench", instruments: "Mapping[str, Instrument]", no_board: bool, as_json: bool) -> int:
    from bandproof.drivers.contract import check

    found: dict[str, Sequence[Outcome]] = {}
    for role, instrument in instruments.items():
        found[role] = check(instrument, no_board=no_board, routes=_routes(bench))
        if not as_json:
            _echo_contract(bench, role, found[role])
    broken = sum(outcome.verdict == "broken" for outcomes in found.values() for outcome in outcomes)
    if as_json:
        rows = {role: [asdict(outcome) for outcome in outcomes] for role, outcomes in found.items()}
        return _as_json(bench, "clauses", rows, works=not broken)
    click.echo(f"{broken} clause(s) broken." if broken else "Every clause that was tried is kept.")
    return _FAULT if broken else _WORKS


def _echo_contract(bench: "Bench", role: str, outcomes: "Sequence[Outcome]") -> None:
    _echo_head(bench, role)
    for outcome in outcomes:
        words = outcome.demand + (f" ({outcome.found})" if outcome.found else "")
        click.echo(textwrap.fill(words, _WIDTH, initial_indent=f"  {outcome.verdict:<10}", subsequent_indent=" " * 12))
    click.echo("")


def _as_json(bench: "Bench", what: str, rows: Mapping[str, Sequence[Mapping[str, Any]]], *, works: bool) -> int:
    instruments = {
        role: {"address": bench.instruments[role].address, "dialect": bench.instruments[role].dialect, what: entries}
        for role, entries in rows.items()
    }
    click.echo(json.dumps({"works": works, "instruments": instruments}, indent=1))
    return _WORKS if works else _FAULT


def _find() -> int:
    from bandproof.drivers.clock import RealClock
    from bandproof.drivers.find import find_instruments

    found = list(find_instruments(RealClock()))
    for address, identity in found:
        click.echo(f"{address}  {identity}")
    if not found:
        click.echo(
            "VISA sees no instrument. LAN sockets cannot be discovered: write their address "
            "(TCPIP::host::port::SOCKET) into the bench file"
        )
    return 0
