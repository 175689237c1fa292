"""How wide a line may be: what is printed for 80 columns is folded between its values where a terminal is narrower."""

import io
import re
import shutil
import sys
import textwrap
from collections.abc import Iterator
from contextlib import contextmanager, redirect_stdout
from typing import TextIO

__all__ = ["COLUMNS", "columns", "folded", "narrow_output"]

COLUMNS = 80  # that everything is printed for
_KEPT = "\0"  # stands for a blank inside a value while a line is folded


def columns() -> int:
    """Return the width of the terminal, at most 80: COLUMNS where it is set, 80 where there is no terminal."""
    return min(COLUMNS, max(20, shutil.get_terminal_size((COLUMNS, 24)).columns))


def folded(line: str, width: int) -> str:
    """Return a line on as many as it needs, the values of a table whole, all but the first indented.

    Examples
    --------
    >>> print(folded("low             160 Hz   162.282 ± 0.033 Hz     pass", 32))
    low  160 Hz  162.282 ± 0.033 Hz
        pass
    """
    if len(line) <= width:
        return line
    head = line[: len(line) - len(line.lstrip())]
    kept = re.sub(r"(?<! ) (?! )", _KEPT, re.sub(r" {2,}", "  ", line.strip()))
    room = width - len(head) - 4
    if max(map(len, kept.split())) > room:  # one of them is too long for any line: break at every blank
        kept = kept.replace(_KEPT, " ")
    text = textwrap.fill(
        kept,
        width,
        initial_indent=head,
        subsequent_indent=f"{head}    ",
        break_long_words=False,
        break_on_hyphens=False,
    )
    return text.replace(_KEPT, " ")


class _Folding(io.TextIOBase):
    """A text stream that folds every line into another one."""

    def __init__(self, stream: TextIO, width: int) -> None:
        self._stream, self._width = stream, width

    def write(self, text: str) -> int:
        """Write a text, each of its lines folded."""
        self._stream.write("\n".join(folded(line, self._width) for line in text.split("\n")))
        return len(text)

    def flush(self) -> None:
        """Hand on what was written."""
        self._stream.flush()


@contextmanager
def narrow_output() -> Iterator[None]:
    """Fold standard output while the terminal is narrower than 80 columns."""
    width = columns()
    if width == COLUMNS:
        yield
        return
    with redirect_stdout(_Folding(sys.stdout, width)):
        yield
