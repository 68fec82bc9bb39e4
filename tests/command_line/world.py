"""A small world whose answers can be worked out in the head, and ways to ask the command about it.

`alba` turns about the north pole, 1 degree of longitude per Myr eastwards into the past; `bora`
turns on `alba` about the point 0N 0E, half a degree per Myr. `gapa` has no pair between 10 and
20 Ma, the two ways from `twin` to `deep` differ, `NA` is a plate like any other, and `isla` is tied
to `reef` only.
"""

from __future__ import annotations

import csv
import io
import os
import subprocess
import sys
from dataclasses import dataclass
from pathlib import Path

import pytest

ROOT = Path(__file__).parents[2]
DEMO = ROOT / "scenario_files"

HEAD = "plate,relative_to,age_ma,pole_lat_deg,pole_lon_deg,angle_deg"
ROWS = """\
alba,deep,0,,,0
alba,deep,10,90,0,10
alba,deep,40,90,0,40
bora,alba,0,,,0
bora,alba,20,0,0,10
gapa,alba,0,,,0
gapa,alba,10,90,0,5
gapa,deep,20,90,0,25
gapa,deep,30,90,0,35
fara,deep,0,,,0
fara,deep,10,90,0,10
twin,fara,0,,,0
twin,fara,10,0,0,5
twin,deep,0,,,0
twin,deep,10,0,0,10
NA,deep,0,,,0
NA,deep,10,90,0,-20
isla,reef,0,,,0
isla,reef,10,90,0,10
"""
HISTORY = f"{HEAD}\n{ROWS}"

COVARIANCE = "kappa,dof,cov_a,cov_b,cov_c,cov_d,cov_e,cov_f,cov_factor,reference"
KNOWN = f"""\
{HEAD},{COVARIANCE}
alba,deep,0,,,0,,,,,,,,,,
alba,deep,10,90,0,10,2,20,4,0,0,6,0,8,1e-6,Log 7
alba,deep,40,90,0,40,,,4,1,0,6,0,8,1e-6,Log 8
bora,alba,0,,,0,,,,,,,,,,
bora,alba,20,0,0,10,,,2,0,0,2,0,2,1e-6,Log 9
"""

SITES = "site,lat_deg,lon_deg,age_ma,plate\n"


@dataclass(frozen=True)
class Answer:
    """What a command gave."""

    code: int
    out: str
    err: str

    @property
    def rows(self) -> list[dict[str, str]]:
        """Standard output as a CSV table."""
        return rows_of(self.out)

    @property
    def said(self) -> list[str]:
        """The lines on standard error."""
        return self.err.splitlines()


def rows_of(text: str) -> list[dict[str, str]]:
    """A CSV text by row and column name."""
    return list(csv.DictReader(io.StringIO(text, newline="")))


def header_of(text: str) -> list[str]:
    """The column names of a CSV text."""
    return next(csv.reader(io.StringIO(text, newline="")))


def in_order(names: list[str], given: list[str]) -> bool:
    """Whether all names stand in a list, in their order; others may stand between them."""
    rest = iter(given)
    return all(name in rest for name in names)


def in_a_process(*args: str, stdin: bytes = b"", folder: Path | None = None) -> Answer:
    """The command as a process of its own, its streams as pipes."""
    done = subprocess.run(
        [sys.executable, "-m", "restore", *args],
        input=stdin, capture_output=True, timeout=120, cwd=folder or os.getcwd(), check=False,
    )  # fmt: skip
    return Answer(done.returncode, done.stdout.decode(), done.stderr.decode())


def leftovers(folder: Path) -> list[str]:
    """Files that a writer began and did not finish."""
    return sorted(path.name for path in folder.rglob("*.part"))


def deny(path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """Make a file unreadable; for a user whom no permission stops, opening it fails instead."""
    path.chmod(0)
    if not os.access(path, os.R_OK):
        return
    opened = Path.open

    def refusing(self: Path, *args, **options):
        if self.name == path.name:
            raise PermissionError(13, "Permission denied")
        return opened(self, *args, **options)

    monkeypatch.setattr(Path, "open", refusing)
