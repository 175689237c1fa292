"""``import``: the analysis on a response measured elsewhere."""

import json
import textwrap
from pathlib import Path
from typing import TYPE_CHECKING

import click

from bandproof.bench.errors import BadInput

if TYPE_CHECKING:
    from bandproof.bench.imported import Imported
    from bandproof.bench.model_choice import Scatter
    from bandproof.bench.types import Board

__all__ = ["command"]

_ONLY_NOISE = (
    "U holds only the noise of the points: nothing is known here of the instruments that measured them, "
    "so add what they contribute."
)
_NAMES = ("band", "band+delay", "band+delay+leakage", "band+leakage")  # of model_choice.MODELS, which is slow to load
_HEAD = 11  # columns of what a line is about


@click.command("import")
@click.argument("csv_path", metavar="CSV", type=click.Path(path_type=Path))
@click.option("--board", "board_path", type=click.Path(path_type=Path), help="Compare with a stage of this board.")
@click.option("--stage", "stage", help="The board's stage that was measured.")
@click.option(
    "--model",
    type=click.Choice(_NAMES),
    help="Model to fit; else band+delay, with leakage where the points ask for it.",
)
@click.option("--json", "as_json", is_flag=True, help="Print the result object and nothing else.")
def command(csv_path: Path, board_path: Path | None, stage: str | None, model: str | None, as_json: bool) -> int:
    """Fit a response measured elsewhere: f0, Q and gain with U; with a board, compared with its design.

    CSV has a header row, frequency_Hz,real,imag or frequency_Hz,gain_dB,phase_deg, and may have a last column
    standard_uncertainty: that of real and imaginary part of the ratio, in V/V. # begins a comment.

    \b
    Example:
      bandproof import resonance.csv
      bandproof import low.csv --board my.board.toml --stage low
    """
    board = _board(board_path, stage)
    from bandproof.bench.imported import imported_object, read_off
    from bandproof.bench.response_file import read_response
    from bandproof.bench.verbs.console import VERDICT_CODES
    from bandproof.bench.verbs.run import wall

    begin = wall()
    found = read_off(read_response(csv_path), model=model, board=board, stage=stage or "")
    if as_json:
        result = {**imported_object(found), "wall_seconds": round(wall() - begin, 3)}
        click.echo(json.dumps(result, indent=1))
    else:
        _show(found, csv_path, board)
    return VERDICT_CODES[found.stage.verdict]


def _board(path: Path | None, stage: str | None) -> "Board | None":
    """Return the board, which has the stage."""
    if path is None and stage is None:
        return None
    if path is None or stage is None:
        there, missing = ("--stage", "--board BOARD") if path is None else ("--board", "--stage NAME")
        raise BadInput(f"{there} without {missing}: name both to compare with a design, or neither")
    from bandproof.bench.board_file import read_board
    from bandproof.bench.reading import nearest

    board = read_board(path)
    names = [known.name for known in board.stages]
    if stage not in names:
        raise BadInput(f"{path} has no stage {stage!r}; it has {', '.join(names)}{nearest(stage, names)}")
    return board


def _show(found: "Imported", path: Path, board: "Board | None") -> None:
    from bandproof.bench.quantities import engineering
    from bandproof.bench.summary import figure_lines, rule_lines, summary_lines

    choice, frequency = found.choice, found.response.frequency
    low, high = (engineering(float(end), "Hz", 7) for end in (frequency[0], frequency[-1]))
    if board is not None:
        click.echo(board.title)
    _fact(str(path), f"{len(frequency)} points, {low} to {high}")
    _fact("model", f"{choice.model}, {choice.why}")
    _fact("noise", _noise(choice.scatter))
    tried = ", ".join(f"{value:.3g} ({name})" for name, value in choice.tried.items())
    _fact("chi-square", f"{tried}; noise alone gives about 1")
    compared = bool(found.stage.figures)
    for line in summary_lines([found.stage]) if compared else figure_lines(found.measured, found.budgets):
        click.echo(line)
    click.echo("")
    for alarm in found.stage.alarms:
        click.echo(_wrapped(f"note: {alarm}", "  "))
    for suspect in found.stage.suspects:
        click.echo(_wrapped(f"suspect: {suspect.text}", "  "))
    click.echo(_wrapped(_ONLY_NOISE, ""))
    if found.stage.verdict is not None:
        click.echo(f"Stage {found.stage.name}: {found.stage.verdict.upper()}")
        for line in rule_lines([found.stage], None):
            click.echo(line)


def _noise(scatter: "Scatter") -> str:
    import numpy as np

    least, most = float(scatter.deviation.min()), float(scatter.deviation.max())
    size = f"{np.median(scatter.deviation):.2g} V/V" if most < 1.01 * least else f"{least:.2g} to {most:.2g} V/V"
    if scatter.is_stated:
        return f"{size} per component, as stated in the file"
    without = f", {scatter.left_out} outliers left out" if scatter.left_out else ""
    return f"{size} per component, estimated ({scatter.dof:.0f} degrees of freedom{without})"


def _fact(name: str, text: str) -> None:
    if len(name) >= _HEAD:
        click.echo(name)
        name = ""
    click.echo(_wrapped(f"{name:<{_HEAD}}{text}", " " * _HEAD))


def _wrapped(text: str, indent: str) -> str:
    return textwrap.fill(
        text, 80, subsequent_indent=indent, break_long_words=False, break_on_hyphens=False, drop_whitespace=True
    )
