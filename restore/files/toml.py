"""TOML with the line and column of every key, and messages that say what was probably meant."""

from __future__ import annotations

import os
import re
import tomllib
from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Any

from restore.errors import InputError
from restore.files.text import read_text
from restore.findings import Place

_KEY = re.compile(r"""\s*(?:"((?:[^"\\]|\\.)*)"|'([^']*)'|([A-Za-z0-9_-]+))\s*""")
_STRING = re.compile(
    r'"""(?:[^\\]|\\.)*?"{3,5}|\'\'\'.*?\'{3,5}|"(?:[^"\\\n]|\\.)*"|\'[^\'\n]*\'', re.DOTALL
)


@dataclass(frozen=True)
class TomlDocument:
    """A TOML file: its values, and where each key stands.

    `places` maps a path of keys and list positions, such as `("task", 0, "kind")`, to (line,
    column), both from 1.
    """

    file: str
    values: dict[str, Any]
    places: Mapping[tuple[str | int, ...], tuple[int, int]] = field(default_factory=dict)

    def place(self, *path: str | int) -> Place:
        """Where a key stands; for one that is missing, the nearest table above it."""
        while path and path not in self.places:
            path = path[:-1]
        line, column = self.places.get(path, (None, None))
        return Place(self.file, line, column)


def read_toml(path: str | os.PathLike[str], kind: type[InputError] = InputError) -> TomlDocument:
    """Read a TOML file (v1.0.0).

    Raises `kind`, in one line with file:line:column, if it cannot be read or is not TOML.
    """
    text = read_text(path, kind)
    name = os.fspath(path)
    try:
        values = tomllib.loads(text)
    except tomllib.TOMLDecodeError as exc:
        message, _, where = str(exc).partition(" (at ")
        found = re.match(r"line (\d+), column (\d+)", where)
        place = Place(name, *(int(g) for g in found.groups())) if found else Place(name)
        raise kind(f"{place}: not valid TOML: {message[:1].lower()}{message[1:]}") from None
    return TomlDocument(name, values, _key_places(text))


def _key_places(text: str) -> dict[tuple[str | int, ...], tuple[int, int]]:
    """Where each key of a valid TOML text stands. Keys of inline tables are included."""
    return _KeyScanner(text).scan()


class _KeyScanner:
    """Walks over a TOML text that is known to be valid; only keys and nesting matter."""

    def __init__(self, text: str) -> None:
        self.text = text
        self.at = 0
        self.places: dict[tuple[str | int, ...], tuple[int, int]] = {}
        self.counts: dict[tuple[str | int, ...], int] = {}

    def scan(self) -> dict[tuple[str | int, ...], tuple[int, int]]:
        table: tuple[str | int, ...] = ()
        while self._skip_blank():
            start = self.at
            if self.text.startswith("[[", self.at):
                self.at += 2
                table = self._resolve(self._keys())
                index = self.counts.get(table, 0)
                self.counts[table] = index + 1
                self._note(table, start)
                table = (*table, index)
                self._note(table, start)
                self.at += 2
            elif self.text[self.at] == "[":
                self.at += 1
                table = self._resolve(self._keys())
                self._note(table, start)
                self.at += 1
            else:
                self._pair(table)
        return self.places

    def _note(self, path: tuple[str | int, ...], offset: int) -> None:
        line = self.text.count("\n", 0, offset) + 1
        column = offset - (self.text.rfind("\n", 0, offset) + 1) + 1
        self.places.setdefault(path, (line, column))

    def _skip_blank(self) -> bool:
        while self.at < len(self.text):
            if self.text[self.at] == "#":
                end = self.text.find("\n", self.at)
                self.at = len(self.text) if end < 0 else end
            elif self.text[self.at] in " \t\r\n,":
                self.at += 1
            else:
                return True
        return False

    def _keys(self) -> tuple[str, ...]:
        keys = []
        while True:
            found = _KEY.match(self.text, self.at)
            assert found is not None
            basic, literal, bare = found.groups()
            if basic is not None:
                basic = tomllib.loads(f'key = "{basic}"')["key"]
            keys.append(next(group for group in (basic, literal, bare) if group is not None))
            self.at = found.end()
            if not self.text.startswith(".", self.at):
                return tuple(keys)
            self.at += 1

    def _resolve(self, keys: tuple[str, ...]) -> tuple[str | int, ...]:
        """A header's keys with the position inside each array of tables above the last key."""
        path: tuple[str | int, ...] = ()
        for i, key in enumerate(keys):
            path = (*path, key)
            if path in self.counts and i < len(keys) - 1:
                path = (*path, self.counts[path] - 1)
        return path

    def _pair(self, table: tuple[str | int, ...]) -> None:
        start = self.at
        path = (*table, *self._keys())
        self._note(path, start)
        self.at += 1  # the equals sign
        self._value(path)

    def _value(self, path: tuple[str | int, ...]) -> None:
        while self.text[self.at] in " \t":
            self.at += 1
        string = _STRING.match(self.text, self.at)
        if string:
            self.at = string.end()
        elif self.text[self.at] == "[":
            self._inside("]", path)
        elif self.text[self.at] == "{":
            self._inside("}", path)
        else:
            bare = re.compile(r"[^,\]\}\n#]*").match(self.text, self.at)
            assert bare is not None
            self.at = bare.end()

    def _inside(self, end: str, path: tuple[str | int, ...]) -> None:
        self.at += 1
        index = 0
        while self._skip_blank() and self.text[self.at] != end:
            if end == "}":
                self._pair(path)
            else:
                self._note((*path, index), self.at)
                self._value((*path, index))
                index += 1
        self.at += 1
