"""Files that are either whole or not there: written beside as `.NAME.part`, then renamed."""

from __future__ import annotations

import os
from collections.abc import Iterable, Iterator
from contextlib import contextmanager
from pathlib import Path

from restore.errors import InputError


def check_target(path: str | os.PathLike[str]) -> Path:
    """A path to write to; raises InputError if it is a folder or its folder is missing."""
    target = Path(path)
    if target.is_dir():
        raise InputError(f"{target}: is a folder; give the name of a file to write")
    if not target.parent.is_dir():
        raise InputError(f"{target}: cannot be written: there is no folder {os.fspath(target.parent)!r}")
    return target


def refuse_input(path: str | os.PathLike[str], inputs: Iterable[str | os.PathLike[str]]) -> None:
    """Raise InputError if a file to write is one of the files that were read."""
    target = Path(path)
    for other in inputs:
        if target.exists() and Path(other).exists() and target.samefile(other):
            raise InputError(f"{target}: is a file that was read; give another name to write to")


@contextmanager
def whole_file(path: str | os.PathLike[str]) -> Iterator[Path]:
    """Give a path to write to; it becomes `path` when the block ends well, else nothing stays.

    Raises InputError if the folder is missing or cannot be written, naming it.
    """
    target = check_target(path)
    part = target.with_name(f".{target.name}.part")
    try:
        yield part
        os.replace(part, target)
    except OSError as exc:
        reason = exc.strerror or str(exc)
        raise InputError(f"{target}: cannot be written: {reason}") from exc
    finally:
        part.unlink(missing_ok=True)
