"""``rehearse``: the whole job on simulated instruments, over real TCP."""

import tempfile
from collections.abc import Iterator
from contextlib import closing, contextmanager
from dataclasses import asdict, dataclass, fields, replace
from pathlib import Path
from typing import TYPE_CHECKING, Any

import click

from bandproof.bench.errors import BadInput
from bandproof.bench.reading import nearest
from bandproof.bench.types import Bench, Board, Instrument
from bandproof.bench.verbs.conditions import ambient_of
from bandproof.bench.verbs.run import carried_out, job_of, of_head

if TYPE_CHECKING:
    from bandproof.bench.journal import Journal
    from bandproof.drivers.clock import RealClock, VirtualClock
    from bandproof.simulated_instruments.bench import World
    from bandproof.simulated_instruments.faults import Fault

__all__ = ["Rehearsal", "command", "resume_rehearsal", "simulated", "world_of"]

_WHOLE = ("adc_bits", "decimation", "rounded_entries")  # imperfections that are counted
_DEFAULT_STEP = 5  # where a fault strikes when no step is named: inside the first curve; arbitrary

Drawn = dict[str, dict[str, float]]


@click.command("rehearse")
@click.argument("board_path", metavar="[BOARD]", required=False, type=click.Path(path_type=Path))
@click.option("--seed", default=1, show_default=True, help="Draws the board's parts and the bench's imperfections.")
@click.option("--defect", "defects", multiple=True, metavar="STAGE.PART=VALUE", help="Build in a wrong part.")
@click.option("--fault", "faults", multiple=True, metavar="NAME[@STEP]", help="Let something go wrong, at a record.")
@click.option(
    "--imperfection",
    "imperfections",
    multiple=True,
    metavar="NAME=SIZE",
    help="Another size of one of the bench's imperfections (truth.json has their names; SI, 0: none).",
)
@click.option(
    "--pace",
    type=click.Choice(["virtual", "real"]),
    default="virtual",
    show_default=True,
    help="Virtual: bench time passes at once. Real: it is waited for.",
)
@click.option("--ambient", help='Temperature of the room, such as "23 °C"; not stated without.')
@click.option("--raw", is_flag=True, help="Keep every record in the run file.")
@click.option("--folder", type=click.Path(path_type=Path), default=Path("rehearsals"), show_default=True)
@click.option("--serve", is_flag=True, help="Only run the simulated bench, in real time, until Ctrl-C.")
@click.option("--json", "as_json", is_flag=True, help="Print the result object and nothing else.")
def command(
    board_path: Path | None,
    seed: int,
    defects: tuple[str, ...],
    faults: tuple[str, ...],
    imperfections: tuple[str, ...],
    pace: str,
    ambient: str | None,
    raw: bool,
    folder: Path,
    serve: bool,
    as_json: bool,
) -> int:
    """Do the whole job on simulated instruments; without BOARD on the demo board, an invented talkback equalizer.

    The board's parts are drawn within their tolerances, its bench has the errors real benches have; what they truly
    were is written to truth.json beside the run file.

    \b
    Example:
      bandproof rehearse --seed 7
      bandproof rehearse --defect low.R_shunt=3k4
      bandproof rehearse --fault late-answer@20
    """
    from bandproof.bench.board_file import read_board
    from bandproof.bench.rehearsal import demo_board, rehearsal_bench

    if seed < 0:
        raise BadInput(f"--seed {seed}: a seed is 0 or more")
    board = read_board(board_path) if board_path else demo_board()
    rehearsal = Rehearsal(seed, defects, faults, imperfections, pace)
    rehearsal.check(board)
    bench = rehearsal_bench(board)
    if serve:
        return _serve(rehearsal, board, bench, folder)
    facts = {"ambient": ambient_of(ambient), "keep_raw": raw}
    return _rehearse(rehearsal, board, bench, folder, facts, as_json)


@dataclass(frozen=True)
class Rehearsal:
    """What a rehearsal was asked for; with a board, a bench and a run number it makes the simulated world."""

    seed: int
    defects: tuple[str, ...] = ()
    faults: tuple[str, ...] = ()
    imperfections: tuple[str, ...] = ()
    pace: str = "virtual"

    def check(self, board: Board) -> None:
        """Refuse a part, a fault or an imperfection that does not exist (BadInput)."""
        self.drawn(board)
        self.split_faults()
        self.sizes()

    def drawn(self, board: Board) -> Drawn:
        """Return the board's parts as drawn, defects built in (BadInput for one that names no part)."""
        from bandproof.bench.board_file import parse_defect
        from bandproof.bench.circuit import draw_parts

        drawn = draw_parts(board, self.seed)
        for text in self.defects:
            try:
                stage, part, value = parse_defect(text, board)
            except ValueError as problem:
                raise BadInput(f"--defect {problem}") from problem
            drawn[stage][part] = value
        return drawn

    def world(self, board: Board, bench: Bench, run: int) -> "World":
        """Return the simulated world in real time."""
        world = world_of(board, bench, self.drawn(board), self.seed, run, **self.sizes())
        return replace(world, faults=self.split_faults()[1])

    def sizes(self) -> dict[str, float]:
        """Return the sizes asked for by name (BadInput)."""
        from bandproof.simulated_instruments.imperfections import Sizes

        known = [field.name for field in fields(Sizes)]
        found: dict[str, float] = {}
        for text in self.imperfections:
            name, _, value = text.partition("=")
            try:
                found[name] = int(value) if name in _WHOLE else float(value)
                Sizes(**{name: found[name]})  # type: ignore[arg-type]
            except (ValueError, TypeError) as problem:
                raise BadInput(
                    f"--imperfection {text}: write NAME=SIZE, a number of 0 or more; names: {', '.join(known)}"
                    f"{nearest(name, known)}"
                ) from problem
        return found

    def split_faults(self) -> "tuple[dict[str, int], tuple[Fault, ...]]":
        """Return what befalls the controller (name to step), and what the simulated bench does (BadInput)."""
        from bandproof.bench.mishaps import MISHAPS
        from bandproof.simulated_instruments.faults import NAMES, Fault

        mishaps, faults = dict[str, int](), list[Fault]()
        for text in self.faults:
            name, _, step = text.partition("@")
            if name not in (*MISHAPS, *NAMES) or not (step or "0").isdigit():
                known = sorted((*MISHAPS, *NAMES))
                raise BadInput(
                    f"--fault {text}: write NAME or NAME@STEP; faults known: {', '.join(known)}{nearest(name, known)}"
                )
            if name in MISHAPS:
                mishaps[name] = int(step or _DEFAULT_STEP)
            else:
                faults.append(Fault(name, int(step or _DEFAULT_STEP)))
        return mishaps, tuple(faults)


def world_of(board: Board, bench: Bench, drawn: Drawn, seed: int, run: int, **sizes: float) -> "World":
    """Return the world of a rehearsal in real time: the drawn board behind a reference bench, or one of other sizes."""
    from bandproof.bench.circuit import board_network
    from bandproof.bench.thru import THRU
    from bandproof.simulated_instruments.bench import World
    from bandproof.simulated_instruments.imperfections import Imperfections, Sizes

    wanted: dict[str, Any] = dict(sizes)
    first = board.points[board.stages[0].tap_in].node  # where the thru looks at
    nodes = {THRU: first} | {tap: point.node for tap, point in board.points.items()}
    routes = {wire.route: nodes[tap] for tap, wire in bench.wires.items() if wire.route}
    fixed = next(board.points[tap].node for tap, wire in bench.wires.items() if not wire.route)
    return World(
        network=board_network(board, drawn),
        scope={1: fixed, 2: "switch"},
        routes=routes,
        seed=seed,
        run=run,
        supply=_quiescent(board),
        imperfections=Imperfections.draw(seed, Sizes(**wanted)),
    )


def _quiescent(board: Board) -> float | None:
    """Return what each op-amp draws: the middle of the board's window; None for a board with a supply of its own."""
    if board.power is None:
        return None
    return 0.5 * (board.power.least_current + board.power.most_current) / len(board.stages)


def _at(bench: Bench, ports: dict[str, int], clock: str | None) -> Bench:
    """Return the bench at the ports a simulated bench listens on."""
    instruments = {
        role: Instrument(instrument.role, f"TCPIP::127.0.0.1::{ports[role]}::SOCKET", instrument.dialect)
        for role, instrument in bench.instruments.items()
    }
    return replace(bench, instruments=instruments, clock=clock)


@contextmanager
def simulated(
    world: "World", bench: Bench, *, t: float = 0.0, pace: str = "virtual"
) -> "Iterator[tuple[Bench, VirtualClock | RealClock]]":
    """Run a world as a process of its own in virtual time from t or in real time; yield the bench and its clock."""
    from bandproof.drivers.clock import RealClock, VirtualClock, create_clock_file
    from bandproof.simulated_instruments.bench import start

    if pace == "real":
        with start(world) as server:
            yield _at(bench, server.ports, None), RealClock()
        return
    with tempfile.TemporaryDirectory(prefix="bandproof-") as temporary:
        time_file = str(Path(temporary) / "bench.time")
        create_clock_file(time_file, t)
        with start(replace(world, clock=time_file)) as server, closing(VirtualClock(time_file)) as clock:
            yield _at(bench, server.ports, time_file), clock


def _rehearse(
    rehearsal: Rehearsal, board: Board, bench: Bench, folder: Path, facts: dict[str, Any], as_json: bool
) -> int:
    from bandproof.bench.job import new_attempt
    from bandproof.bench.mishaps import struck
    from bandproof.bench.rehearsal import write_truth

    serial = f"rehearsal-{rehearsal.seed}"
    place, attempt = new_attempt(folder, serial)
    world = rehearsal.world(board, bench, attempt)
    facts_of_world = {"imperfections": world.imperfections.as_plain(), "seed": world.seed, "run": world.run}
    write_truth(place / "truth.json", board, rehearsal.drawn(board), facts_of_world)
    with simulated(world, bench, pace=rehearsal.pace) as (reachable, clock):
        job = job_of(
            board=board,
            bench=reachable,
            serial=serial,
            attempt=attempt,
            run_id=f"rehearsal-{rehearsal.seed}-{attempt}",
            folder=place,
            clock=clock,
            rehearsal=asdict(rehearsal),
            begin_journal=struck(rehearsal.split_faults()[0], clock),
            **facts,
        )
        return carried_out(job, as_json=as_json)


def resume_rehearsal(journal: "Journal", folder: Path, *, as_json: bool) -> int:
    """Go on with a rehearsal on a simulated bench started again, its clock a little before where it stopped."""
    from bandproof.bench.finish import board_and_bench
    from bandproof.bench.resumption import EARLIER

    head = journal.head
    asked = head["rehearsal"]
    rehearsal = Rehearsal(
        asked["seed"],
        defects=tuple(asked["defects"]),
        faults=tuple(asked["faults"]),
        imperfections=tuple(asked["imperfections"]),
        pace=asked["pace"],
    )
    board, bench = board_and_bench(journal)
    t = (journal.began[-1] if journal.began else head["clock_start"]) - EARLIER
    world = rehearsal.world(board, bench, head["attempt"])
    with simulated(world, bench, t=t, pace=rehearsal.pace) as (reachable, clock):
        job = job_of(board=board, bench=reachable, folder=folder, clock=clock, **of_head(head))
        return carried_out(job, journal=journal, as_json=as_json)


def _serve(rehearsal: Rehearsal, board: Board, bench: Bench, folder: Path) -> int:
    from bandproof.bench.system import wait_for_stop
    from bandproof.simulated_instruments.bench import start

    folder.mkdir(parents=True, exist_ok=True)
    with start(rehearsal.world(board, bench, 1)) as server:
        served = _at(bench, server.ports, None)
        path = folder / "served.bench.toml"
        text = bench.text
        for role, instrument in bench.instruments.items():
            text = text.replace(instrument.address, served.instruments[role].address)
        path.write_text(text, encoding="utf-8")
        for role, instrument in served.instruments.items():
            click.echo(f"{role:<10}{instrument.address}")
        click.echo(f"bench file: {path}\nIt answers until Ctrl-C. Try, in another terminal:  bandproof bench {path}")
        wait_for_stop()
        click.echo("")
    return 0
