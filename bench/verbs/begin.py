"""``begin``: commented files to start one's own from."""

from pathlib import Path

import click

from bandproof.bench.errors import BadInput

__all__ = ["command"]


@click.command("begin")
@click.argument("folder", type=click.Path(path_type=Path, file_okay=False))
def command(folder: Path) -> int:
    """Write a commented board, bench and dialect file of each kind into FOLDER; nothing there is overwritten.

    \b
    Example:
      bandproof begin my-board
      bandproof rehearse my-board/talkback.board.toml
    """
    from bandproof.bench.rehearsal import DEMO_BENCH, DEMO_BOARD, demo_text
    from bandproof.drivers.dialect import blanks, shipped, source

    texts = {name: demo_text(name) for name in (DEMO_BOARD, DEMO_BENCH)}
    texts |= {f"{name}.toml": source(name) for name in (*shipped(), *blanks())}
    there = [name for name in texts if (folder / name).exists()]
    if there:
        raise BadInput(f"{folder} already has {', '.join(there)}: nothing was written; name another folder")
    folder.mkdir(parents=True, exist_ok=True)
    for name, text in texts.items():
        with (folder / name).open("x", encoding="utf-8") as file:
            file.write(text)
        click.echo(folder / name)
    click.echo(f"\nTry them:  bandproof rehearse {folder / DEMO_BOARD}")
    return 0
