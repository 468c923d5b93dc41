"""The console that cards and tables are printed on."""

from __future__ import annotations

import os
import sys
from typing import NoReturn

from rich.console import Console

_COLUMNS = 80


class PlainConsole(Console):
    """Console that leaves it to the command what happens when the reader of a pipe goes away."""

    def on_broken_pipe(self) -> NoReturn:
        """Say so, in place of leaving with a status of its own."""
        raise BrokenPipeError


def console_on(stderr: bool = False) -> Console:
    """Console whose colours and width suit where it writes: 80 columns (or ``COLUMNS``) where that is no terminal."""
    stream = sys.stderr if stderr else sys.stdout
    width = None if stream.isatty() else _columns()
    return PlainConsole(file=stream, width=width, highlight=False, soft_wrap=False)


def _columns() -> int:
    told = os.environ.get("COLUMNS", "")
    return int(told) if told.isascii() and told.isdecimal() and int(told) > 0 else _COLUMNS
