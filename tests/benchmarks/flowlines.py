"""Flowlines from many start points against what a careful scientist writes by hand with scipy.

Run it: `python tests/benchmarks/flowlines.py` (a minute or two), `--quick` for a check that it runs.
Rounds are interleaved and medians printed; nothing is asserted about time, only that both sides agree.
"""

from __future__ import annotations

import argparse
import os
import time
import tracemalloc
from collections.abc import Callable

os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")

import numpy as np
from scipy.spatial.transform import Rotation, Slerp

from restore.history.rows import Row
from restore.history.store import History
from restore.motion.flowlines import FlowlineMaker, Spreading
from restore.motion.ridge_points import RidgePoints

PLATES = ("first", "second")
OLDEST_MA = 100.0


def history(rows: int = 20, links: int = 1) -> History:
    """Pairs between two plates whose stage poles wander; 5 km errors."""
    rng = np.random.default_rng(4)
    made = []
    labels = ["first", *(f"hub{i}" for i in range(1, links)), "second"]
    for link in range(links):
        turn = Rotation.identity()
        pair = labels[link : link + 2]
        made.append(Row(*pair, 0.0, np.nan, np.nan, 0.0, np.zeros((3, 3))))
        for age in np.linspace(0.0, OLDEST_MA, rows + 1)[1:]:
            axis = np.array([0.3, -0.4, 0.86]) + 0.2 * rng.standard_normal(3)
            axis *= np.deg2rad(0.4 * OLDEST_MA / rows) / np.linalg.norm(axis)
            turn = Rotation.from_rotvec(axis) * turn
            x, y, z = turn.as_rotvec()
            lat, lon = np.rad2deg(np.arctan2(z, np.hypot(x, y))), np.rad2deg(np.arctan2(y, x))
            made.append(
                Row(*pair, age, lat, lon, np.rad2deg(turn.magnitude()), np.eye(3) * (5.0 / 6371.0) ** 2)
            )
    return History.from_rows(made)


def by_hand(record: History, lat: np.ndarray, lon: np.ndarray, ages: np.ndarray) -> np.ndarray:
    """Half stages at the rows' ages, a loop over ages, vectorised over the start points."""
    rows = record.rows
    vectors = Rotation.from_quat(rows.rotations().quaternions, scalar_first=True)
    slerp = Slerp(rows.age_ma, vectors)
    phi, lam = np.deg2rad(lat), np.deg2rad(lon)
    start = np.stack([np.cos(phi) * np.cos(lam), np.cos(phi) * np.sin(lam), np.sin(phi)], axis=-1)
    out = np.empty((2, 2, len(lat), len(ages)))
    for k, age in enumerate(ages):
        stages = [t for t in rows.age_ma if t < age]
        product = Rotation.identity()
        for younger, older in zip(stages, [*stages[1:], age], strict=True):
            step = slerp([older])[0] * slerp([younger])[0].inv()
            product = Rotation.from_rotvec(0.5 * step.as_rotvec()) * product
        for side, turn in enumerate((slerp([age])[0].inv() * product, product)):
            x, y, z = turn.apply(start).T
            out[0, side, :, k] = np.rad2deg(np.arctan2(z, np.hypot(x, y)))
            out[1, side, :, k] = np.rad2deg(np.arctan2(y, x))
    return out


def seconds(work: Callable[[], object]) -> float:
    began = time.perf_counter()
    work()
    return time.perf_counter() - began


def main() -> None:
    parser = argparse.ArgumentParser()
    parser.add_argument("--quick", action="store_true", help="small sizes, one round")
    quick = parser.parse_args().quick
    count, rounds = (2_000, 1) if quick else (100_000, 3)
    rng = np.random.default_rng(1)
    lat, lon = rng.uniform(-40.0, 40.0, count), rng.uniform(-60.0, 60.0, count)
    ages = np.linspace(0.0, OLDEST_MA, 101)[1:]
    starts = RidgePoints.of(lat, lon, PLATES)
    single, composed = history(), history(links=3)
    plain = Spreading.between(single, PLATES, ages, errors=False)
    sure = Spreading.between(single, PLATES, ages)
    chain = Spreading.between(composed, PLATES, ages, errors=False)

    def make(spreading: Spreading) -> object:
        return FlowlineMaker(spreading, starts).make(starts)

    found = make(plain)
    hand = by_hand(single, lat[:200], lon[:200], ages)
    apart = np.abs(hand[0] - np.moveaxis(found.lat_deg[:200], 1, 0)).max() * 111_195.0
    assert apart < 1e-3, f"by hand and package differ by {apart} m"
    variants = {
        "by hand, positions, one pair": lambda: by_hand(single, lat, lon, ages),
        "positions, one pair": lambda: make(plain),
        "positions, three links, 10 m": lambda: make(chain),
        "positions and ellipses, one pair": lambda: make(sure),
    }
    times: dict[str, list[float]] = {name: [] for name in variants}
    for _ in range(rounds):
        for name, work in variants.items():
            times[name].append(seconds(work))
    base = float(np.median(times["by hand, positions, one pair"]))
    print(f"{count} start points, {len(ages)} ages, both arms (they differ by {apart:.1e} m)")
    for name, measured in times.items():
        median = float(np.median(measured))
        print(
            f"  {name:34s} {median:8.2f} s {median / (2 * count * len(ages)) * 1e9:8.0f} ns  x{base / median:5.2f}"
        )
    few = starts.some(slice(0, count // 100))
    tracemalloc.start()
    maker = FlowlineMaker(sure, starts)
    maker.make(few)
    peak = tracemalloc.get_traced_memory()[1]
    print(f"  a part of {len(few)} start points with ellipses: {peak / 1e6:.0f} MB at most")


if __name__ == "__main__":
    main()
