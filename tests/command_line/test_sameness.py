"""The same input gives the same bytes, whatever the chunks, the order of rows and the threads."""

import os
import pty
import random
import subprocess
import sys

import pytest
from command_line.world import DEMO, in_a_process

PLATES = ["glufta", "ibbun", "ovrath", "quemmel", "wirrum", "deep", "nowhere", ""]
HEADER = "site,lat_deg,lon_deg,age_ma,age_sigma_myr,age_young_ma,age_old_ma,host_age_ma,plate"
SITES = ("sites", "many.csv", "--history", str(DEMO / "history.toml"), "--frame", "deep")


def site(number: int, pick: random.Random) -> str:
    """A site of some kind: dated, ranged, with a sigma, with a host, or at fault."""
    lat, lon = round(pick.uniform(-90, 90), 4), round(pick.uniform(-180, 180), 4)
    age, plate = round(pick.uniform(0, 130), 1), pick.choice(PLATES)
    kinds = [
        f"{number},{lat},{lon},{age},,,,,{plate}",
        f"{number},{lat},{lon},{age},2.5,,,,{plate}",
        f"{number},{lat},{lon},,,{age},{age + 5},,{plate}",
        f"{number},{lat},{lon},{age},,,,{pick.uniform(0, 130):.1f},{plate}",
        f"{number},{lat * 3},{lon},{age},,,,,{plate}",
        f"{number},{lat},east,{age},,,,,{plate}",
        f"{number},{lat},{lon},{age},,,,,{plate},surplus",
        f"{number},{lat}",
    ]
    return pick.choices(kinds, weights=[4, 4, 4, 4, 1, 1, 1, 1])[0]


@pytest.fixture
def many(here) -> list[str]:
    """The lines of `many.csv`: 400 sites of all kinds."""
    pick = random.Random(11)
    lines = [site(number, pick) for number in range(400)]
    (here / "many.csv").write_text("\n".join([HEADER, *lines]) + "\n", encoding="utf-8")
    return lines


@pytest.mark.parametrize("ages", ["own", "0:120:30"])
def test_any_size_of_chunks(many, ask, monkeypatch, ages):
    """Chunks of 1, 7, 64 or all rows give the same table, byte for byte, and the same counts."""
    answers = []
    for size in (50_000, 1, 7, 64):
        monkeypatch.setattr("restore.motion.site_files.CHUNK", size)
        answers.append(ask(*SITES, "--ages", ages))
    assert len(answers[0].rows) == 400 * (1 if ages == "own" else 5)
    assert len({row["status"] for row in answers[0].rows}) >= 5
    assert {answer.out for answer in answers} == {answers[0].out}
    assert {answer.said[-1] for answer in answers} == {answers[0].said[-1]}


def test_any_size_of_chunks_with_draws(many, ask, monkeypatch):
    """Drawn answers do not depend on the chunks either."""
    whole = ask(*SITES, "--draws", "5")
    monkeypatch.setattr("restore.motion.site_files.CHUNK", 33)
    assert ask(*SITES, "--draws", "5").out == whole.out
    assert "draws_mean_lat_deg" in whole.rows[0]


@pytest.mark.parametrize("kind", ["json", "geojson", "parquet"])
def test_any_size_of_chunks_in_other_forms(here, many, ask, monkeypatch, kind):
    """Files of other kinds are the same too."""
    made = []
    for size in (50_000, 19):
        monkeypatch.setattr("restore.motion.site_files.CHUNK", size)
        assert ask(*SITES, "--out", f"out.{kind}").code == 1
        made.append((here / f"out.{kind}").read_bytes())
    assert made[0] == made[1]


@pytest.mark.parametrize("ages", ["own", "0:120:30"])
def test_any_order_of_rows(here, many, ask, ages):
    """Shuffled rows give the same lines; only their order is that of the input."""
    whole = ask(*SITES, "--ages", ages).out.splitlines()
    shuffled = random.Random(3).sample(many, len(many))
    (here / "many.csv").write_text("\n".join([HEADER, *shuffled]) + "\n", encoding="utf-8")
    other = ask(*SITES, "--ages", ages).out.splitlines()
    assert other != whole
    assert other[0] == whole[0]
    assert sorted(other) == sorted(whole)
    order = [line.partition(",")[0] for line in other[1:]]
    copies = 1 if ages == "own" else 5
    assert order[::copies] == [line.partition(",")[0] for line in shuffled]


@pytest.mark.parametrize("ages", ["own", "0:120:30"])
def test_any_number_of_threads(many, ask, monkeypatch, ages):
    """One thread and several give the same table."""
    answers = []
    monkeypatch.setattr("restore.motion.sites.BLOCK", 16)
    monkeypatch.setattr("restore.motion.points.BLOCK", 16)
    for threads in (1, 3):
        monkeypatch.setattr("restore.commands.sites.default_threads", lambda count=threads: count)
        answers.append(ask(*SITES, "--ages", ages).out)
    assert answers[0] == answers[1]


def test_two_processes_write_the_same_bytes(here, many):
    """Nothing of a process (hash seeds, memory) leaks into a table or its ledger."""
    made = []
    for name in ("one", "two"):
        answer = in_a_process(*SITES, "--out", f"{name}.csv", "--ledger", f"{name}-ledger.csv")
        assert answer.code == 1
        made.append([(here / f"{name}{end}.csv").read_bytes() for end in ("", "-ledger")])
    assert made[0] == made[1]


def test_a_reader_that_has_seen_enough(here, many):
    """A pipe that closes early ends the command quietly."""
    repeated = "\n".join([HEADER, *(many * 20)]) + "\n"
    (here / "many.csv").write_text(repeated, encoding="utf-8")
    process = subprocess.Popen(
        [sys.executable, "-m", "restore", *SITES], stdout=subprocess.PIPE, stderr=subprocess.PIPE
    )
    assert process.stdout is not None
    assert process.stderr is not None
    assert process.stdout.readline().startswith(b"site,")
    process.stdout.close()
    messages = process.stderr.read().decode()
    assert process.wait(60) == 0
    assert "Traceback" not in messages
    assert "BrokenPipe" not in messages
    process.stderr.close()


@pytest.mark.parametrize(("chunk", "long"), [(5, True), (50_000, False)])
def test_a_bar_on_a_terminal(here, many, chunk, long):
    """On a terminal long work shows how far it is; a table on its way to a file is not touched by it."""
    script = (
        f"import restore.motion.site_files as files; files.CHUNK = {chunk}; import sys;"
        "from restore.commands import call; sys.exit(call(sys.argv[1:]))"
    )
    ours, theirs = pty.openpty()
    with (here / "table.csv").open("wb") as table:
        process = subprocess.Popen(
            [sys.executable, "-c", script, *SITES], stdout=table, stderr=theirs,
            env={**os.environ, "TERM": "xterm", "COLUMNS": "100"},
        )  # fmt: skip
    os.close(theirs)
    shown = drained(ours)
    assert process.wait(60) == 1
    assert (b"%" in shown) is long
    text = (here / "table.csv").read_text(encoding="utf-8")
    assert "\x1b" not in text
    assert len(text.splitlines()) == 401


def drained(terminal: int) -> bytes:
    """All that was written to a terminal; reading fails once the writer is gone."""
    shown = b""
    try:
        while block := os.read(terminal, 65536):
            shown += block
    except OSError:
        return shown
    finally:
        os.close(terminal)
    return shown
