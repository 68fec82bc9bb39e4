"""A large history: reading it, deciding its chains, looking one up beside many plates off the chain.

Run it: `python tests/benchmarks/store.py` (under a minute), `--quick` for a check that it runs. 2 000
plates and 50 000 rows, irregular ages, every pair with ends of its own, four plates in ten change
their partner once. Nothing is asserted about time, only that lookups agree with scipy's Slerp.
"""

from __future__ import annotations

import argparse
import os
import sys
import tempfile
import time
from collections.abc import Callable
from itertools import pairwise
from pathlib import Path

os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")

import numpy as np
from scipy.spatial.transform import Rotation, Slerp

from restore.history.audit import audit
from restore.history.circuit import Circuit
from restore.history.store import History

HEADER = "plate,relative_to,age_ma,pole_lat_deg,pole_lon_deg,angle_deg,reference"
OLDEST_MA = 400.0
PROBE = ("probe", "hub3", "hub2", "hub1", "frame")


class World:
    """The lines of a CSV table, and the rows of the probe's chain as they were written."""

    def __init__(self, plates: int, rows: int, seed: int = 1) -> None:
        self.rng = np.random.default_rng(seed)
        self.lines = [HEADER]
        self.written: dict[tuple[str, str], list[tuple[float, ...]]] = {}
        each = rows // plates
        for plate, partner in zip(reversed(PROBE[:-1]), reversed(PROBE[1:]), strict=True):
            self.pair(plate, partner, 0.0, OLDEST_MA, each)
        born = [("hub3", OLDEST_MA)]
        for number in range(plates - len(PROBE) + 1):
            self.plate(f"plate{number}", born, each)

    def plate(self, name: str, born: list[tuple[str, float]], rows: int) -> None:
        """A plate on one or two that are there already, not older than they."""
        rng = self.rng
        nearby = max(1, len(born) // 4)
        partner, oldest = born[int(rng.integers(0, nearby))]
        other, its_oldest = born[int(rng.integers(0, nearby))]
        end = round(float(rng.uniform(0.5, 0.95)) * min(oldest, its_oldest), 3)
        if other != partner and rng.random() < 0.4:
            change = round(float(rng.uniform(0.2, 0.8)) * end, 3)
            self.pair(name, partner, 0.0, change, rows // 2)
            self.pair(name, other, change, end, rows - rows // 2)
        else:
            self.pair(name, partner, 0.0, end, rows)
        born.append((name, end))

    def pair(self, plate: str, partner: str, youngest: float, oldest: float, rows: int) -> None:
        """Rows at irregular ages, at 0.1 to 0.6 degrees per Myr about a wandering pole."""
        rng = self.rng
        inner = rng.uniform(youngest, oldest, rows - 2).round(3)
        lat, lon, rate = rng.uniform(-80, 80), rng.uniform(-170, 170), rng.uniform(0.1, 0.6)
        for age in np.unique([youngest, *inner, oldest]).tolist():
            pole = (round(lat + rng.normal(0, 0.5), 4), round(lon + rng.normal(0, 0.5), 4))
            angle = round(rate * age, 5)
            self.lines.append(f"{plate},{partner},{age},{pole[0]},{pole[1]},{angle},made up")
            self.written.setdefault((plate, partner), []).append((age, *pole, angle))

    def by_hand(self, ages: np.ndarray) -> Rotation:
        """The probe relative to the frame, with scipy, from the numbers that were written."""
        total = Rotation.identity(len(ages))
        for link in pairwise(PROBE):
            age, lat, lon, angle = np.array(self.written[link]).T
            phi, lam = np.deg2rad(lat), np.deg2rad(lon)
            poles = np.stack([np.cos(phi) * np.cos(lam), np.cos(phi) * np.sin(lam), np.sin(phi)], axis=-1)
            turns = Rotation.from_rotvec(poles * np.deg2rad(angle)[:, np.newaxis])
            total = Slerp(age, turns)(ages) * total
        return total


def seconds(work: Callable[[], object]) -> float:
    began = time.perf_counter()
    work()
    return time.perf_counter() - began


def check_agreement(circuit: Circuit, world: World, ages: np.ndarray) -> None:
    found = circuit.rotations("probe", ages).rotations.quaternions
    apart = (world.by_hand(ages).inv() * Rotation.from_quat(found, scalar_first=True)).magnitude()
    assert apart.max() * 6_371_009 < 1e-6, f"by hand and package differ by {apart.max() * 6_371_009} m"


def report(plates: int, rows: int, folder: Path) -> None:
    """What the large history costs."""
    path, packed = folder / f"{plates}.csv", folder / f"{plates}.nc"
    path.write_text("\n".join(World(plates, rows).lines) + "\n", encoding="utf-8")
    began = time.perf_counter()
    history = History.read(path)
    read = time.perf_counter()
    circuit = Circuit(history, "frame")
    built = time.perf_counter()
    pieces = circuit.pieces
    print(f"{len(history.plates())} plates, {len(history)} rows, {len(circuit.pairs)} pairs")
    print(f"  read from CSV                {read - began:8.2f} s")
    print(f"  chains decided               {built - read:8.2f} s   {len(pieces.cuts)} ages at which pairs")
    print(f"                                            begin or end, {len(pieces.chains)} chains")
    print(f"  written to netCDF            {seconds(lambda: history.write(packed)):8.2f} s")
    print(f"  read from netCDF             {seconds(lambda: History.read(packed)):8.2f} s")
    print(f"  audited                      {seconds(lambda: audit(history, 'frame')):8.2f} s")


def lookups(sizes: tuple[int, ...], each: int, count: int, rounds: int) -> None:
    """One chain of four links beside more and more plates off it; interleaved rounds, medians."""
    ages = np.random.default_rng(2).uniform(0.0, OLDEST_MA, count)
    circuits = {}
    with tempfile.TemporaryDirectory() as folder:
        for plates in sizes:
            world = World(plates, plates * each)
            path = Path(folder) / f"{plates}.csv"
            path.write_text("\n".join(world.lines) + "\n", encoding="utf-8")
            circuits[plates] = Circuit(History.read(path), "frame")
            check_agreement(circuits[plates], world, ages[:1000])
    single: dict[int, list[float]] = {plates: [] for plates in sizes}
    many: dict[int, list[float]] = {plates: [] for plates in sizes}
    few = ages[: max(20, count // 100)]
    for _ in range(rounds):
        for plates, circuit in circuits.items():
            one_by_one = seconds(lambda: [circuit.at("probe", age) for age in few])
            single[plates].append(one_by_one / len(few))
            many[plates].append(seconds(lambda: circuit.rotations("probe", ages)) / count)
    print(f"\none chain of four links, {count} ages")
    first = sizes[0]
    for plates in sizes:
        one, all_ = float(np.median(single[plates])), float(np.median(many[plates]))
        ratios = one / float(np.median(single[first])), all_ / float(np.median(many[first]))
        print(
            f"  {plates:6d} plates   one at a time {one * 1e6:7.0f} us (x{ratios[0]:.2f})"
            f"   together {all_ * 1e9:7.0f} ns per age (x{ratios[1]:.2f})"
        )


def main() -> None:
    parser = argparse.ArgumentParser()
    parser.add_argument("--quick", action="store_true", help="small sizes, one round")
    quick = parser.parse_args().quick
    with tempfile.TemporaryDirectory() as folder:
        for plates in (200,) if quick else (200, 2_000):
            report(plates, plates * 25, Path(folder))
    if quick:
        lookups((20, 200), 25, 2_000, 1)
    else:
        lookups((20, 200, 2_000), 25, 100_000, 7)


if __name__ == "__main__":
    sys.exit(main())
