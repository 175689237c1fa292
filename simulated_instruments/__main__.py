"""`python -m bandproof.simulated_instruments`: a simulated bench as a process of its own."""

import argparse
import asyncio
import contextlib
import sys
from pathlib import Path

from bandproof.analysis.network import Network
from bandproof.simulated_instruments.bench import World, run, serve_until_closed
from bandproof.simulated_instruments.imperfections import Imperfections, Sizes
from bandproof.simulated_instruments.netlist import NetlistMistakes, parse_netlist
from bandproof.simulated_instruments.wiring import SWITCH

_EXAMPLE = """\
example: python -m bandproof.simulated_instruments band.cir --scope2 out

The generator drives the netlist's V node; its output resistance is that line's rs. Without options channel 1 sees the
driven node and channel 2 the switch, which reaches every node.
"""


def main(arguments: list[str]) -> int:
    """Run the command and return its exit code: 0, or 2 for bad input."""
    options = _parser().parse_args(arguments)
    if options.world:
        return _serve_world()
    try:
        network = parse_netlist(Path(options.netlist).read_text(encoding="utf-8"))
        world = _world(network, options)
        with contextlib.suppress(KeyboardInterrupt):
            asyncio.run(_serve(world))
    except NetlistMistakes as mistakes:
        return _refuse("\n".join(f"{options.netlist}: {mistake}" for mistake in mistakes.mistakes))
    except (OSError, UnicodeDecodeError, ValueError) as error:
        return _refuse(f"{options.netlist}: {error}")
    return 0


def _serve_world() -> int:
    try:
        serve_until_closed(sys.stdin, sys.stdout)
    except (OSError, ValueError) as error:
        return _refuse(f"world: {error}")
    return 0


def _parser() -> argparse.ArgumentParser:
    parser = argparse.ArgumentParser(
        prog="python -m bandproof.simulated_instruments",
        description="Serve a simulated generator, scope and switch in front of a network, in real time until Ctrl-C.",
        epilog=_EXAMPLE,
        formatter_class=argparse.RawDescriptionHelpFormatter,
    )
    what = parser.add_mutually_exclusive_group(required=True)
    what.add_argument("netlist", nargs="?", help="SPICE netlist: R, C, V and X...OPAMP lines")
    what.add_argument("--world", action="store_true", help="take a world as a line of JSON on standard input instead")
    parser.add_argument("--scope1", metavar="NODE", help='node channel 1 sees, or "switch" (default: the driven node)')
    parser.add_argument("--scope2", metavar="NODE", default=SWITCH, help="the same for channel 2 (default: switch)")
    parser.add_argument("--route", metavar="CHANNEL=NODE", action="append", default=[], help="route of the switch")
    parser.add_argument("--seed", type=int, default=0, help="seed of noise and imperfections (default 0)")
    parser.add_argument("--ideal", action="store_true", help="instruments without imperfections and without noise")
    return parser


def _world(network: Network, options: argparse.Namespace) -> World:
    imperfections = Imperfections() if options.ideal else Imperfections.draw(options.seed, Sizes(output_resistance=0.0))
    return World(
        network=network,
        scope={1: (options.scope1 or network.input).lower(), 2: options.scope2.lower()},
        routes=_routes(network, options.route),
        seed=options.seed,
        imperfections=imperfections,
    )


def _routes(network: Network, asked: list[str]) -> dict[str, str]:
    if not asked:
        return {str(101 + index): node for index, node in enumerate(network.nodes)}
    routes = {}
    for text in asked:
        channel, equals, node = text.partition("=")
        if not (equals and node and channel.isdecimal() and channel.isascii()):
            raise ValueError(f"--route {text!r}: expected a number, =, and a node, as in 101=out")
        routes[channel] = node.lower()
    return routes


async def _serve(world: World) -> None:
    def announce(ports: dict[str, int], hislip_ports: dict[str, int]) -> None:
        for name, port in ports.items():
            sys.stdout.write(f"{name:<10} TCPIP::127.0.0.1::{port}::SOCKET\n")
        for name, port in hislip_ports.items():
            sys.stdout.write(f"{name:<10} TCPIP::127.0.0.1::hislip0,{port}::INSTR\n")
        for channel, node in world.scope.items():
            sys.stdout.write(f"scope channel {channel} sees {node}\n")
        for route, node in world.routes.items():
            sys.stdout.write(f"route (@{route}) leads to {node}\n")
        sys.stdout.write("Ctrl-C ends\n")
        sys.stdout.flush()

    await run(world, announce, asyncio.get_running_loop().create_future())


def _refuse(words: str) -> int:
    sys.stderr.write(words + "\n")
    return 2


if __name__ == "__main__":
    sys.exit(main(sys.argv[1:]))
