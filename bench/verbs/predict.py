"""``predict``: what boards will be, and what a bench will say of them, before the first is built."""

import json
from pathlib import Path

import click

__all__ = ["command"]


@click.command("predict")
@click.argument("board_path", metavar="BOARD", type=click.Path(path_type=Path))
@click.option("--bench", "bench_path", type=click.Path(path_type=Path), help="Bench file: U, verdicts, both risks.")
@click.option("--draws", type=click.IntRange(100, 1_000_000), default=10_000, show_default=True, help="Boards drawn.")
@click.option("--seed", type=click.IntRange(0, 2**32 - 1), default=1, show_default=True, help="Of the draws.")
@click.option("--json", "as_json", is_flag=True, help="Print the prediction as one object and nothing else.")
def command(board_path: Path, bench_path: Path | None, draws: int, seed: int, as_json: bool) -> int:
    """Predict what BOARD's parts make of its figures, and with a bench what measuring will make of the boards.

    Figures as designed, by the textbook (ideal op-amp) and by nodal analysis with the board's op-amp; their spread and
    the yield over boards with parts drawn within tolerance; which tolerances cost most. With --bench also the tolerance
    over U, how many boards will pass, be undecided and fail under the board's rules, and how many of them wrongly. No
    instrument is contacted.

    \b
    Example:
      bandproof predict my.board.toml
      bandproof predict my.board.toml --bench my.bench.toml
    """
    from bandproof.bench.bench_file import check_wiring, read_bench
    from bandproof.bench.board_file import read_board

    board = read_board(board_path)
    bench = read_bench(bench_path) if bench_path else None
    if bench is not None:
        check_wiring(board, bench, str(bench_path))
    from bandproof.bench.expectation import expected
    from bandproof.bench.prediction import predicted_boards
    from bandproof.bench.prediction_text import prediction_lines, prediction_object

    boards = predicted_boards(board, draws=draws, seed=seed)
    found = expected(board, bench, boards) if bench is not None else None
    if as_json:
        click.echo(json.dumps(prediction_object(board, boards, bench, found), indent=1, allow_nan=False))
    else:
        for line in prediction_lines(board, boards, bench, found):
            click.echo(line)
    return 0
