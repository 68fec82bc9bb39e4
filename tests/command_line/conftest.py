"""A folder to work in, with the small world inside, and a way to ask the command in process."""

from pathlib import Path

import pytest
from command_line.world import HISTORY, KNOWN, Answer

from restore.commands import call


@pytest.fixture
def here(tmp_path, monkeypatch) -> Path:
    """A working folder with `history.csv` (no covariances) and `known.csv` (with them)."""
    monkeypatch.chdir(tmp_path)
    (tmp_path / "history.csv").write_text(HISTORY, encoding="utf-8")
    (tmp_path / "known.csv").write_text(KNOWN, encoding="utf-8")
    return tmp_path


@pytest.fixture
def ask(here, capsys):
    """A function that runs the command in the working folder and gives code, output and messages."""

    def asking(*args: str) -> Answer:
        capsys.readouterr()
        code = call([str(arg) for arg in args])
        streams = capsys.readouterr()
        return Answer(code, streams.out, streams.err)

    return asking


@pytest.fixture
def restore(here, ask):
    """A function that writes a table of sites and restores it relative to `deep`."""

    def restoring(table: str | bytes, *options: str, history: str = "history.csv") -> Answer:
        data = table if isinstance(table, bytes) else table.encode("utf-8")
        (here / "sites.csv").write_bytes(data)
        return ask("sites", "sites.csv", "--history", history, "--frame", "deep", *options)

    return restoring
