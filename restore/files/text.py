"""Text files read with the reasons for a failure in plain words."""

from __future__ import annotations

import os
from pathlib import Path

from restore.errors import InputError


def why_unreadable(exc: OSError) -> str:
    """Why a file could not be read, in plain words."""
    if isinstance(exc, FileNotFoundError):
        return "no such file"
    if isinstance(exc, IsADirectoryError):
        return "is a folder, not a file"
    return f"cannot be read: {exc.strerror or exc}"


def read_text(
    path: str | os.PathLike[str], kind: type[InputError] = InputError, encoding: str = "utf-8-sig"
) -> str:
    """The whole of a text file, a byte order mark taken off, line ends as they are.

    Raises `kind`, in one line, if the file is missing, a folder, unreadable or in another encoding.
    """
    name = os.fspath(path)
    try:
        data = Path(path).read_bytes()
    except OSError as exc:
        raise kind(f"{name}: {why_unreadable(exc)}") from None
    if data[:2] in (b"\xff\xfe", b"\xfe\xff") and encoding == "utf-8-sig":
        encoding = "utf-16"
    try:
        text = data.decode(encoding)
    except UnicodeDecodeError as exc:
        line = data.count(b"\n", 0, exc.start) + 1
        raise kind(
            f"{name}:{line}: byte 0x{data[exc.start]:02x} is not {encoding.removesuffix('-sig')}"
            " text; save the file as UTF-8 or state its encoding"
        ) from None
    except LookupError:
        raise kind(f"{name}: encoding {encoding!r} is not known; for example utf-8, latin-1") from None
    if "\x00" in text:
        line = text.count("\n", 0, text.index("\x00")) + 1
        raise kind(f"{name}:{line}: holds a zero byte: not a text file")
    return text
