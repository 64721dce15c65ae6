"""What the commands share: progress on the terminal, tables a person can read, files written whole or not at all."""

import os
import tempfile
from collections.abc import Iterable, Iterator, Sequence
from contextlib import contextmanager
from pathlib import Path
from typing import TypeVar

from cameras.faults import InputFault, printable

T = TypeVar("T")


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
    """Print a table; text from files is cleaned for the terminal and is never read as markup."""
    from rich.console import Console
    from rich.table import Table
    from rich.text import Text

    table = Table(title=Text(title), title_justify="left", header_style="bold")
    for k, name in enumerate(header):
        table.add_column(name, justify="left" if k == 0 else "right")
    for row in rows:
        table.add_row(*(Text(printable(value)) for value in row))
    Console(highlight=False).print(table)


@contextmanager
def written_whole(path: str | Path) -> Iterator[Path]:
    """A path to write to, moved to `path` when the block ends well and removed when it does not."""
    path = Path(path)
    try:
        path.parent.mkdir(parents=True, exist_ok=True)
        handle, name = tempfile.mkstemp(prefix=f".{path.name}.", suffix=path.suffix, dir=path.parent)
    except OSError as error:
        raise InputFault(path, "", f"cannot be written ({error.strerror})", "choose another place") from None
    os.close(handle)
    part = Path(name)
    try:
        yield part
        part.chmod(0o644)
        os.replace(part, path)
    finally:
        part.unlink(missing_ok=True)
