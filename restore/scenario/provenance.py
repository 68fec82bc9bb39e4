"""Where a result comes from: versions, the command, the inputs and their hashes, the settings."""

from __future__ import annotations

import hashlib
import os
import platform
import shlex
import sys
from collections.abc import Iterable, Mapping
from importlib.metadata import PackageNotFoundError, version
from pathlib import Path
from typing import Any

from restore.errors import InputError
from restore.files.text import why_unreadable

CAUTION = (
    "Not for navigation or safety decisions; check against the primary sources and licensed practice."
    " Errors are those of the rotations' rows (and of sites where said); the model's own error is not"
    " in them."
)


def package_version() -> str:
    """The version of this package as installed."""
    try:
        return version("oncewhere")
    except PackageNotFoundError:
        return "not installed"


def versions() -> dict[str, str]:
    """Versions of what computed the numbers."""
    import numpy

    return {
        "oncewhere": package_version(),
        "python": platform.python_version(),
        "numpy": numpy.__version__,
    }


def sha256_of(path: str | os.PathLike[str]) -> str:
    """SHA-256 of a file's bytes, as hexadecimal text; raises InputError if it cannot be read."""
    digest = hashlib.sha256()
    try:
        with Path(path).open("rb") as stream:
            while block := stream.read(1 << 20):
                digest.update(block)
    except OSError as exc:
        raise InputError(f"{os.fspath(path)}: {why_unreadable(exc)}") from None
    return digest.hexdigest()


def input_records(paths: Iterable[str | os.PathLike[str]]) -> list[dict[str, str]]:
    """Each input with its hash, in the order of first use."""
    return [{"file": p, "sha256": sha256_of(p)} for p in dict.fromkeys(os.fspath(path) for path in paths)]


def command_line() -> str:
    """The command as it was typed."""
    return shlex.join(["oncewhere", *sys.argv[1:]])


def provenance(
    inputs: Iterable[str | os.PathLike[str]], settings: Mapping[str, Any], command: str | None = None
) -> dict[str, Any]:
    """The provenance of one result."""
    return {
        "made_by": versions(),
        "command": command_line() if command is None else command,
        "inputs": input_records(inputs),
        "settings": dict(settings),
        "caution": CAUTION,
    }
