"""What the commands print: tables on a terminal, plain lines in a pipe, progress on stderr."""

from __future__ import annotations

import sys
from collections.abc import Callable, Iterator, Sequence
from contextlib import contextmanager

__all__ = ["print_pairs", "print_table", "progress"]

Progress = Callable[[str, float | None], None]


def print_table(title: str, header: Sequence[str], rows: Sequence[Sequence[str]]) -> None:
    """A table on a terminal; tab-separated lines with a header in a pipe."""
    if not sys.stdout.isatty():
        for row in (header, *rows):
            print("\t".join(row))
        return
    from rich.box import SIMPLE_HEAD
    from rich.console import Console
    from rich.table import Table
    from rich.text import Text

    table = Table(title=title or None, box=SIMPLE_HEAD, title_justify="left", pad_edge=False)
    for name in header:
        table.add_column(name, overflow="fold")
    for row in rows:
        table.add_row(*(Text(cell) for cell in row))
    Console().print(table)


def print_pairs(pairs: Sequence[tuple[str, str]]) -> None:
    """Lines of name and value."""
    width = max((len(name) for name, _ in pairs), default=0)
    for name, value in pairs:
        print(f"{name:<{width}}  {value}")


@contextmanager
def progress(label: str) -> Iterator[Progress]:
    """A status line on a terminal's stderr while the block runs; silent in a pipe."""
    if not sys.stderr.isatty():

        def silent(text: str, chi2: float | None = None) -> None:
            pass

        yield silent
        return
    from rich.console import Console

    console = Console(stderr=True)
    with console.status(label) as status:

        def tell(text: str, chi2: float | None = None) -> None:
            detail = "" if chi2 is None else f", χ² = {chi2:.2f}"
            status.update(f"{label}: {text}{detail}")

        yield tell
