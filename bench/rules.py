"""Decision rules as a board file writes them, for a whole stage or figure by figure, and the spread of a process."""

import re

from bandproof.analysis.decision import SIMPLE, Prior, Rule
from bandproof.bench.quantities import QuantityError, read_quantity, shown
from bandproof.bench.reading import Table
from bandproof.bench.types import QUANTITIES, Quantity

__all__ = ["SIMPLE_TEXT", "priors", "read_rule", "rules"]

SIMPLE_TEXT = "simple"
_ACCEPTED = '"simple", "guarded", "guarded 0.5" (guard band in units of U) or "risk 2 %" (greatest consumer\'s risk)'
_BAND = re.compile(r"[0-9]+(?:\.[0-9]+)?")
_WIDEST = 10.0  # U; arbitrary, a guard band that no measurement asks for


def read_rule(written: object) -> Rule:
    """Return the rule a text names.

    Raises
    ------
    ValueError
        It names none; says what would.

    Examples
    --------
    >>> read_rule("guarded 0.5"), read_rule("risk 2 %")
    (Rule(kind='guarded', size=0.5), Rule(kind='risk', size=0.02))
    """
    word, _, size = written.strip().partition(" ") if isinstance(written, str) else ("", "", "")
    if word == "simple" and not size:
        return SIMPLE
    if word == "guarded" and _BAND.fullmatch(size.strip() or "1") and 0.0 < float(size or 1.0) <= _WIDEST:
        return Rule("guarded", float(size or 1.0))
    if word == "risk":
        try:
            risk = read_quantity(size, "relative")
        except QuantityError:
            risk = 0.0
        if 0.0 < risk < 0.5:
            return Rule("risk", risk)
    raise ValueError(f"found {shown(written)}; expected {_ACCEPTED}; at most {_WIDEST:g} U, below 50 %")


def rules(stage: Table) -> dict[Quantity, tuple[str, Rule]]:
    """Return the rule of each figure, as written and as meant: one for the stage, or a table of them."""
    written = stage.peek("rule")
    if isinstance(written, dict):
        table = stage.table("rule")
        found = {quantity: _taken(table, quantity) for quantity in QUANTITIES}
        table.close()
        return found
    return dict.fromkeys(QUANTITIES, _taken(stage, "rule"))


def _taken(table: Table, key: str) -> tuple[str, Rule]:
    """Return a rule of a table, simple where it has none."""
    written = table.anything(key)
    if written is None:
        return SIMPLE_TEXT, SIMPLE
    try:
        return str(written).strip(), read_rule(written)
    except ValueError as problem:
        table.mistake(key, str(problem))
        return SIMPLE_TEXT, SIMPLE


def priors(stage: Table, designed: dict[Quantity, float]) -> dict[Quantity, Prior]:
    """Return what is known of each figure beforehand: the process, spread around the designed value."""
    if "spread" not in stage:
        return {}
    table, found = stage.table("spread"), dict[Quantity, Prior]()
    for quantity in QUANTITIES:
        if quantity in table:
            lower, upper = table.tolerance(quantity)
            if lower < upper:  # else a mistake, noted
                found[quantity] = Prior(designed[quantity], 0.5 * (upper - lower) * designed[quantity])
        else:
            table.anything(quantity)
    table.close()
    return found
