"""Restoring sites against what a careful scientist writes by hand with scipy, in one process.

Run it: `python tests/benchmarks/sites.py` (a few minutes), `--quick` for a check that it runs.
Rounds are interleaved and medians printed; nothing is asserted about time, only that both sides
agree in position.
"""

from __future__ import annotations

import argparse
import os
import subprocess
import sys
import tempfile
import time
from collections.abc import Callable
from pathlib import Path

os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")

import numpy as np
from scipy.spatial.transform import Rotation, Slerp

sys.path.insert(0, str(Path(__file__).parent))
import synthetic

from restore.history.circuit import Circuit
from restore.history.store import History
from restore.motion.points import Points, move_common, move_own


class ByHand:
    """Slerp per link and plate, vectorised over the sites of a plate; a loop over common ages."""

    def __init__(self, history: History, leaves: int) -> None:
        rows = history.rows
        turns = rows.rotations().quaternions
        slerps = {}
        for pair in {(p, r) for p, r in zip(rows.plate, rows.relative_to, strict=True)}:
            own = np.flatnonzero((rows.plate == pair[0]) & (rows.relative_to == pair[1]))
            slerps[pair[0]] = Slerp(rows.age_ma[own], Rotation.from_quat(turns[own], scalar_first=True))
        self.links = [slerps["hub3"], slerps["hub2"], slerps["hub1"]]
        self.slerps = [slerps[f"leaf{leaf}"] for leaf in range(leaves)]

    def turn(self, leaf: int, ages: np.ndarray) -> Rotation:
        total = self.slerps[leaf](ages)
        for link in self.links:
            total = link(ages) * total
        return total

    @staticmethod
    def place(xyz: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        level = np.hypot(xyz[:, 0], xyz[:, 1])
        return np.rad2deg(np.arctan2(xyz[:, 2], level)), np.rad2deg(np.arctan2(xyz[:, 1], xyz[:, 0]))

    @staticmethod
    def vectors(lat: np.ndarray, lon: np.ndarray) -> np.ndarray:
        phi, lam = np.deg2rad(lat), np.deg2rad(lon)
        return np.stack([np.cos(phi) * np.cos(lam), np.cos(phi) * np.sin(lam), np.sin(phi)], axis=-1)

    def own(self, lat, lon, leaf, ages):
        out = np.empty((2, len(lat)))
        xyz = self.vectors(lat, lon)
        for number in range(len(self.slerps)):
            items = leaf == number
            out[:, items] = self.place(self.turn(number, ages[items]).apply(xyz[items]))
        return out

    def common(self, lat, lon, leaf, ages):
        out = np.empty((2, len(lat), len(ages)))
        xyz = self.vectors(lat, lon)
        for k, age in enumerate(ages):
            for number in range(len(self.slerps)):
                items = leaf == number
                turn = self.turn(number, np.array([age]))[0]
                out[0, items, k], out[1, items, k] = self.place(turn.apply(xyz[items]))
        return out


def seconds(work: Callable[[], object]) -> float:
    began = time.perf_counter()
    work()
    return time.perf_counter() - began


def compare(title: str, variants: dict[str, Callable[[], object]], per: float, rounds: int) -> None:
    """Interleaved rounds; medians in ns per point(-age) and ratios to the first variant."""
    times: dict[str, list[float]] = {name: [] for name in variants}
    for _ in range(rounds):
        for name, work in variants.items():
            times[name].append(seconds(work))
    base = float(np.median(next(iter(times.values()))))
    print(f"\n{title}")
    for name, measured in times.items():
        median = float(np.median(measured))
        print(f"  {name:34s} {median / per * 1e9:10.0f} ns   x{base / median:6.2f}")


def check_agreement(hand: np.ndarray, lat: np.ndarray, lon: np.ndarray) -> None:
    apart = np.hypot(hand[0] - lat, (np.mod(hand[1] - lon + 180, 360) - 180) * np.cos(np.deg2rad(lat)))
    assert apart.max() * 111_195 < 1e-3, f"by hand and package differ by {apart.max() * 111_195} m"


def command_line(count: int) -> float:
    """Wall seconds of the whole command for `count` sites, start to end."""
    lat, lon, leaf, ages = synthetic.sites(count)
    with tempfile.TemporaryDirectory() as folder:
        table, file = Path(folder) / "sites.csv", Path(folder) / "history.csv"
        lines = [f"s{i},{a:.6f},{b:.6f},{t:.3f},leaf{p}" for i, (a, b, p, t) in enumerate(
            zip(lat, lon, leaf, ages, strict=True))]  # fmt: skip
        table.write_text("site,lat_deg,lon_deg,age_ma,plate\n" + "\n".join(lines) + "\n")
        rows = synthetic.history().rows
        said = [
            f"{rows.plate[i]},{rows.relative_to[i]},{rows.age_ma[i]},{rows.pole_lat_deg[i]},"
            f"{rows.pole_lon_deg[i]},{rows.angle_deg[i]}".replace("nan", "")
            for i in range(len(rows))
        ]
        header = "plate,relative_to,age_ma,pole_lat_deg,pole_lon_deg,angle_deg\n"
        file.write_text(header + "\n".join(said) + "\n")
        command = [sys.executable, "-m", "restore", "sites", str(table), "--history", str(file)]
        command += ["--frame", "frame", "--out", str(Path(folder) / "out.csv")]
        return seconds(lambda: subprocess.run(command, check=True, capture_output=True))


def main() -> None:
    parser = argparse.ArgumentParser()
    parser.add_argument("--quick", action="store_true", help="small sizes, one round")
    quick = parser.parse_args().quick
    size, hand_size, rounds = (20_000, 5_000, 1) if quick else (1_000_000, 200_000, 3)
    history = synthetic.history()
    circuit, hand = Circuit(history, "frame"), ByHand(history, 20)
    lat, lon, leaf, ages = synthetic.sites(size)
    points = Points(lat, lon, circuit.codes([f"leaf{i}" for i in range(20)])[leaf])
    moved = move_own(circuit, points, ages)
    few = slice(0, hand_size)
    check_agreement(
        hand.own(lat[few], lon[few], leaf[few], ages[few]), moved.lat_deg[few], moved.lon_deg[few]
    )
    compare(
        f"{size} sites, own ages, 4 links",
        {
            "by hand": lambda: hand.own(lat, lon, leaf, ages),
            "1 thread": lambda: move_own(circuit, points, ages),
            "2 threads": lambda: move_own(circuit, points, ages, threads=2),
            "1 thread, with errors": lambda: move_own(circuit, points, ages, errors=True),
        },
        size,
        rounds,
    )
    stops = np.linspace(0.0, synthetic.OLDEST_MA, 50)
    compare(
        f"{size} sites, 50 common ages, 4 links",
        {
            "by hand": lambda: hand.common(lat, lon, leaf, stops),
            "1 thread": lambda: move_common(circuit, points, stops),
            "2 threads": lambda: move_common(circuit, points, stops, threads=2),
        },
        size * 50,
        1 if quick else 2,
    )
    print("\ngrowth, own ages, 1 thread")
    for count in (10_000,) if quick else (100_000, 1_000_000, 10_000_000):
        a, b, p, t = synthetic.sites(count)
        many = Points(a, b, circuit.codes([f"leaf{i}" for i in range(20)])[p])
        print(f"  {count:10d} {seconds(lambda: move_own(circuit, many, t)) / count * 1e9:8.0f} ns per site")
    count = 1_000 if quick else 10_000
    print(f"\ncommand line, {count} sites: {min(command_line(count) for _ in range(rounds)):.2f} s")


if __name__ == "__main__":
    main()
