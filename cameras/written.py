"""Files written whole or not at all."""

import os
import tempfile
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path

from cameras.faults import InputFault


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
