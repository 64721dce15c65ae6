"""What the commands share: progress on the terminal, tables a person can read."""

import re
from collections.abc import Callable, Iterable, Iterator, Sequence
from typing import TypeVar

from cameras.faults import printable

T = TypeVar("T")
NUMBER = re.compile(r"(- ?$|[+-]?\d)")  # how a cell begins that holds a figure


def progress(items: Iterable[T], total: int, label: str) -> Iterator[T]:
    """The items, with a progress bar on stderr where it is a terminal."""
    from rich.console import Console
    from rich.progress import BarColumn, MofNCompleteColumn, Progress, TextColumn, TimeRemainingColumn

    console = Console(stderr=True)
    columns = (TextColumn("{task.description}"), BarColumn(), MofNCompleteColumn(), TimeRemainingColumn())
    with Progress(*columns, console=console, transient=True, disable=not console.is_terminal) as bar:
        task = bar.add_task(label, total=total)
        for item in items:
            yield item
            bar.advance(task)


def show_table(title: str, header: Sequence[str], rows: Iterable[Sequence[object]]) -> None:
    """Print a table, columns of numbers to the right; text from files is cleaned and never read as markup."""
    from rich import box
    from rich.console import Console
    from rich.table import Table
    from rich.text import Text

    table = Table(title=Text(title), title_justify="left", header_style="bold", box=box.SIMPLE_HEAD,
                  show_header=any(header))
    texts = [[printable(value) for value in row] for row in rows]
    for k, name in enumerate(header):
        numbers = k > 0 and all(not row[k] or NUMBER.match(row[k]) for row in texts)
        table.add_column(name, justify="right" if numbers else "left")
    for row in texts:
        table.add_row(*map(Text, row))
    Console(highlight=False).print(table)


def advancing(start: float, end: float, label: str) -> Callable[[float], None]:
    """A function that moves a progress bar on stderr to a value between start and end, and ends it there."""
    from rich.console import Console
    from rich.progress import BarColumn, Progress, TextColumn, TimeRemainingColumn

    console = Console(stderr=True)
    if not console.is_terminal:
        return lambda value: None
    columns = (TextColumn("{task.description}"), BarColumn(), TimeRemainingColumn())
    bar = Progress(*columns, console=console, transient=True)
    task = bar.add_task(label, total=end - start)
    bar.start()

    def moved(value: float) -> None:
        bar.update(task, completed=min(value, end) - start)
        if value >= end:
            bar.stop()

    return moved
