"""A whole simulated bench: the world it stands for, its serving loop, and the handle on a process that runs it."""

import asyncio
import contextlib
import json
import os
import subprocess
import sys
import tempfile
import threading
from collections.abc import Awaitable, Callable, Mapping
from dataclasses import asdict, dataclass, field
from pathlib import Path
from types import MappingProxyType
from typing import IO, Any

from bandproof.analysis.network import Network, from_plain, to_plain
from bandproof.simulated_instruments.device import Device, Timing
from bandproof.simulated_instruments.faults import UNFINISHED, Fault, FaultPlan
from bandproof.simulated_instruments.generator import Generator
from bandproof.simulated_instruments.hislip import serve_hislip
from bandproof.simulated_instruments.imperfections import Imperfections
from bandproof.simulated_instruments.languages import NAMES, teach
from bandproof.simulated_instruments.scope import Scope
from bandproof.simulated_instruments.switch_supply import Supply, Switch
from bandproof.simulated_instruments.timebase import Timebase, open_timebase
from bandproof.simulated_instruments.transport import Server, serve
from bandproof.simulated_instruments.wiring import Wiring

__all__ = ["Bench", "BenchNotStarted", "World", "instruments", "run", "serve_until_closed", "start"]


# The matrices are small: threads of a linear algebra library would only wait for each other.
_ONE_THREAD = {"OPENBLAS_NUM_THREADS": "1", "OMP_NUM_THREADS": "1", "MKL_NUM_THREADS": "1"}
LINGER = 2.0  # s by the wall that outputs may stay on without an owner, arbitrary: a guard takes well under 1 s
_POLL = 0.02  # s between looks at them
_STOP = "stop"  # the line that ends a server process at once
Ports = dict[str, int]  # by instrument
POSIX_PROCESS: Mapping[str, Any] = MappingProxyType({"start_new_session": True})


class BenchNotStarted(Exception):
    """The server process ended before it named its ports."""

    def __init__(self, code: int | None, words: str) -> None:
        super().__init__(code, words)
        self.code, self.words = code, words

    def __str__(self) -> str:
        return f"the simulated bench ended with code {self.code} before it listened: {self.words.strip()[-2000:]}"


@dataclass(frozen=True, slots=True)
class World:
    """Everything a simulated bench is.

    Attributes
    ----------
    network : Network
        As drawn, without the generator's output resistance.
    scope : mapping
        Channels 1 and 2 to a node, or to "switch".
    routes : mapping
        Channels of the switch to nodes.
    seed, run : int
        With step and attempt they seed the noise.
    imperfections : Imperfections
    timing : Timing
    faults : tuple of Fault
    clock : str or None
        Path of the time file; None: real time.
    supply : float or None
        A that one op-amp draws from each output of the bench's supply; None: the board has a supply of its own.
    language : str
        What the instruments speak: "" for SCPI-99, or one of `languages.NAMES`.
    """

    network: Network
    scope: Mapping[int, str]
    routes: Mapping[str, str] = field(default_factory=dict)
    seed: int = 0
    run: int = 0
    imperfections: Imperfections = field(default_factory=Imperfections)
    timing: Timing = field(default_factory=Timing)
    faults: tuple[Fault, ...] = ()
    clock: str | None = None
    supply: float | None = None
    language: str = ""

    def __post_init__(self) -> None:
        if self.seed < 0 or self.run < 0:
            raise ValueError(f"seed and run must not be negative, found {self.seed!r} and {self.run!r}")
        if set(self.scope) != {1, 2}:
            raise ValueError(f"scope must name what channels 1 and 2 see, found {dict(self.scope)!r}")
        if self.language and self.language not in NAMES:
            raise ValueError(f"language must be one of {', '.join(NAMES)} or empty, found {self.language!r}")
        if self.supply is not None and not self.supply >= 0:
            raise ValueError(f"supply is a current in A, found {self.supply!r}")

    def as_plain(self) -> dict[str, Any]:
        """Return a dictionary for JSON."""
        return {
            "network": to_plain(self.network),
            "scope": {str(channel): node for channel, node in self.scope.items()},
            "routes": dict(self.routes),
            "seed": self.seed,
            "run": self.run,
            "imperfections": self.imperfections.as_plain(),
            "timing": asdict(self.timing),
            "faults": [fault.as_plain() for fault in self.faults],
            "clock": None if self.clock is None else str(self.clock),
            "supply": self.supply,
            "language": self.language,
        }

    @classmethod
    def from_plain(cls, plain: Mapping[str, Any]) -> "World":
        """Return what `as_plain` gave, before or after JSON."""
        return cls(
            network=from_plain(plain["network"]),
            scope={int(channel): node for channel, node in plain["scope"].items()},
            routes=dict(plain["routes"]),
            seed=plain["seed"],
            run=plain["run"],
            imperfections=Imperfections.from_plain(plain["imperfections"]),
            timing=Timing(**plain["timing"]),
            faults=tuple(Fault.from_plain(fault) for fault in plain["faults"]),
            clock=plain["clock"],
            supply=plain.get("supply"),
            language=plain.get("language", ""),
        )


def instruments(world: World, timebase: Timebase, plan: FaultPlan) -> dict[str, Device]:
    """Return the instruments of a world, by name, in front of one board."""
    wiring = Wiring(
        world.network,
        scope=world.scope,
        routes=world.routes,
        imperfections=world.imperfections,
        seed=world.seed,
        run=world.run,
        conditions=plan.conditions,
        powered=world.supply is None,
    )

    def never_completes(at: float) -> bool:
        plan.count_record(at)
        return plan.due("scope", (UNFINISHED,)) is not None

    scope = Scope(
        wiring,
        imperfections=world.imperfections,
        timing=world.timing,
        seed=world.seed,
        run=world.run,
        mark=timebase.mark,
        never_completes=never_completes,
        conditions=plan.conditions,
    )
    generator = Generator(
        wiring.board, imperfections=world.imperfections, timing=world.timing, conditions=plan.conditions
    )
    plan.follow(generator.disturbed)
    plan.follow(wiring.disturbed)
    found: dict[str, Device] = {"generator": generator, "scope": scope, "switch": Switch(wiring, timing=world.timing)}
    if world.supply is not None:
        found["supply"] = Supply(
            wiring,
            opamps=len(world.network.opamps),
            quiescent=world.supply,
            timing=world.timing,
            conditions=plan.conditions,
        )
    for name, device in found.items():
        teach(world.language, name, device)
    return found


async def run(world: World, announce: Callable[[Ports, Ports], None], end: Awaitable[float]) -> None:
    """Serve a world until `end` is done; `announce` is handed the ports of raw sockets and of HiSLIP.

    The result of `end` is how long, in s by the wall, somebody may still need to switch the generator off.
    """
    timebase = open_timebase(None if world.clock is None else Path(world.clock))
    plan = FaultPlan(world.faults, timebase)
    devices = instruments(world, timebase, plan)
    raw = {name: await serve(name, device, timebase, plan) for name, device in devices.items()}
    hislip = {name: await serve_hislip(name, device, timebase, plan) for name, device in devices.items()}
    announce(*({name: server.port for name, server in servers.items()} for servers in (raw, hislip)))
    await _quiet(devices["generator"], (raw["generator"], hislip["generator"]), await end)
    for server in (*raw.values(), *hislip.values()):
        await server.close()


async def _quiet(generator: Device, servers: tuple[Server, ...], limit: float) -> None:
    """Wait until the output is off and nobody is connected who may wait for the answer, at most `limit` s."""
    loop = asyncio.get_running_loop()
    last = loop.time() + limit
    while loop.time() < last and (generator.value("output") or any(server.clients for server in servers)):
        await asyncio.sleep(_POLL)


def serve_until_closed(source: IO[str], target: IO[str], *, linger: float = LINGER) -> None:
    """Read a world as one line of JSON, write the ports as one line of JSON, serve until told to stop.

    A line "stop" ends the serving at once. A source that ends without it belonged to an owner that died: the serving
    goes on until the generator's output is off and its clients are gone, at most `linger` s by the wall.
    """
    world = World.from_plain(json.loads(source.readline()))

    def announce(ports: Ports, hislip_ports: Ports) -> None:
        target.write(json.dumps(ports | {"hislip": hislip_ports}) + "\n")
        target.flush()

    async def main() -> None:
        loop = asyncio.get_running_loop()
        end: asyncio.Future[float] = loop.create_future()

        def watch() -> None:
            while (line := source.readline(4096)) and line.strip() != _STOP:
                pass
            loop.call_soon_threadsafe(end.set_result, 0.0 if line else linger)

        threading.Thread(target=watch, daemon=True).start()
        await run(world, announce, end)

    asyncio.run(main())


@dataclass(slots=True)
class Bench:
    """A running simulated bench; a context manager that stops it.

    `ports` are TCP ports on 127.0.0.1 of generator, scope, switch and, where there is one, supply.
    At `hislip_ports` the same instruments speak HiSLIP.
    """

    ports: Ports
    process: subprocess.Popen[str]
    hislip_ports: Ports = field(default_factory=dict)

    def stop(self, patience: float = 5.0) -> None:
        """End the server process, kill it if it does not end within `patience` s. May be called twice."""
        self._tell()
        try:
            self.process.wait(patience)
        except subprocess.TimeoutExpired:
            self.process.kill()
            self.process.wait()
        if self.process.stdout is not None:
            self.process.stdout.close()

    def _tell(self) -> None:
        """Send the line that ends the process, if it still listens, and close its standard input."""
        pipe = self.process.stdin
        if pipe is None or pipe.closed:
            return
        with contextlib.suppress(OSError):
            pipe.write(_STOP + "\n")
            pipe.flush()
        with contextlib.suppress(OSError):
            pipe.close()

    def __enter__(self) -> "Bench":
        return self

    def __exit__(self, *_: object) -> None:
        self.stop()


def start(world: World, *, process_options: Mapping[str, Any] = POSIX_PROCESS) -> Bench:
    """Start a server process for a world and wait until it listens.

    The process ends by itself after this one does, however it ends, because its standard input closes: within `LINGER`
    s, earlier when somebody switches the generator off.

    Parameters
    ----------
    world : World
    process_options : mapping
        Keyword options of `subprocess.Popen` that keep the process out of reach of the terminal's Ctrl-C, so that the
        controller can still switch its generator off. The default is for POSIX.

    Raises
    ------
    BenchNotStarted
        The process ended before it listened; its last words are in the text.
    """
    command = [sys.executable, "-m", "bandproof.simulated_instruments", "--world"]
    with tempfile.TemporaryFile("w+") as errors:  # a pipe that nobody reads could fill and block the server
        process = subprocess.Popen(
            command,
            stdin=subprocess.PIPE,
            stdout=subprocess.PIPE,
            stderr=errors,
            text=True,
            env=os.environ | _ONE_THREAD,
            **process_options,
        )
        line = _introduce(process, world)
        if line:
            ports = json.loads(line)
            hislip_ports = ports.pop("hislip")
            return Bench(ports, process, hislip_ports)
        Bench({}, process).stop()
        errors.seek(0)
        raise BenchNotStarted(process.returncode, errors.read())


def _introduce(process: subprocess.Popen[str], world: World) -> str:
    """Hand the world over and return the line of ports, empty if the process ended."""
    assert process.stdin is not None
    assert process.stdout is not None
    try:
        process.stdin.write(json.dumps(world.as_plain()) + "\n")
        process.stdin.flush()
    except BrokenPipeError:
        return ""
    return process.stdout.readline()
