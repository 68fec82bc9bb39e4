"""Files that are either whole or not there: written beside as `.NAME.part`, then renamed."""

from __future__ import annotations

import os
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path

from restore.errors import InputError


@contextmanager
def whole_file(path: str | os.PathLike[str]) -> Iterator[Path]:
    """Give a path to write to; it becomes `path` when the block ends well, else nothing stays.

    Raises InputError if the folder is missing or cannot be written, naming it.
    """
    target = Path(path)
    if target.is_dir():
        raise InputError(f"{target}: is a folder; give the name of a file to write")
    part = target.with_name(f".{target.name}.part")
    try:
        yield part
        os.replace(part, target)
    except OSError as exc:
        reason = exc.strerror or str(exc)
        raise InputError(f"{target}: cannot be written: {reason}") from exc
    finally:
        part.unlink(missing_ok=True)
