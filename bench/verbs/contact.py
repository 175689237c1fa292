"""``bench``: contact every instrument, check its kind, leave it quiet."""

from pathlib import Path

import click

__all__ = ["command"]


@click.command("bench")
@click.argument("bench_path", metavar="[BENCH]", required=False, type=click.Path(path_type=Path))
@click.option("--find", is_flag=True, help="List the addresses VISA sees with their *IDN?; nothing else is sent.")
def command(bench_path: Path | None, find: bool) -> int:
    """Contact every instrument of BENCH, check identity and dialect, leave the generator off.

    \b
    Example:
      bandproof bench my.bench.toml
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
    click.echo(f"bench: {path} ({why})")
    addresses = [instrument.address for instrument in bench.instruments.values()]
    with locked(addresses, who="bandproof bench"), opened(bench, clock_of(bench), None) as devices:
        for role, identity in devices.identities().items():
            click.echo(f"  {role:<10}{bench.instruments[role].address}  {bench.instruments[role].dialect}")
            click.echo(f"  {'':<10}{identity}")
        devices.generator.be_safe()
        click.echo("  the generator's output is off")
    return 0


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
