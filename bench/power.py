"""The board's supply: off, then on with its limits, and the current inside its window before any signal."""

from bandproof.bench.errors import BenchFault
from bandproof.bench.quantities import engineering
from bandproof.bench.types import Bench, Power
from bandproof.drivers.clock import Clock
from bandproof.drivers.supply import Supply

__all__ = ["power_up"]

SETTLE = 0.5  # s from switching on until currents and op-amps stand; arbitrary


def power_up(power: Power, bench: Bench, supply: Supply, clock: Clock) -> None:
    """Switch a board's supply off and on, and look at both rails' currents.

    Raises
    ------
    BenchFault
        A rail's current is outside the board's window; the supply is off again. Names rail, current and window.
    InstrumentProblem
        What the drivers met; the supply may be on.
    """
    supply.be_safe()
    rails = dict(zip(("positive", "negative"), bench.rails, strict=True))
    for rail, channel in rails.items():
        supply.set_voltage(channel, power.positive if rail == "positive" else power.negative)
        supply.set_current_limit(channel, power.current_limit)
    supply.output(True)
    clock.wait(SETTLE)
    currents = {rail: supply.read_current(channel) for rail, channel in rails.items()}
    wrong = [rail for rail, found in currents.items() if not power.least_current <= found <= power.most_current]
    if wrong:
        supply.be_safe()
        found = " and ".join(f"{engineering(currents[rail], 'A', 3)} from the {rail} rail" for rail in wrong)
        window = f"{engineering(power.least_current, 'A', 3)} to {engineering(power.most_current, 'A', 3)}"
        raise BenchFault(
            f"the board draws {found}, {window} expected: is it connected, the right way round, the right board, "
            "without a short? The supply is off again, no signal was given"
        )
