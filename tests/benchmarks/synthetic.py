"""A synthetic history and sites for the benchmarks: 20 leaf plates, four links to the frame."""

from __future__ import annotations

import numpy as np

from restore.history.rows import Row
from restore.history.store import History

OLDEST_MA = 200.0


def history(leaves: int = 20, nodes: int = 30, errors: bool = True, seed: int = 1) -> History:
    """Each leaf is tied to the frame through three shared hubs; irregular ages, 0.1-0.6 deg/Myr."""
    rng = np.random.default_rng(seed)
    sigma = np.diag([4.0, 5.0, 7.0]) / 6371.0
    rows: list[Row] = []

    def pair(plate: str, partner: str) -> None:
        inner = np.sort(rng.uniform(1.0, OLDEST_MA - 1.0, nodes - 2))
        lat, lon, rate = rng.uniform(-80, 80), rng.uniform(-180, 180), rng.uniform(0.1, 0.6)
        for age in (0.0, *inner.tolist(), OLDEST_MA):
            known = sigma @ sigma if errors and age else None
            lat_, lon_ = lat + rng.normal(0, 0.5), lon + rng.normal(0, 0.5)
            rows.append(Row(plate, partner, age, lat_, lon_, rate * age, known))

    for hub, partner in (("hub1", "frame"), ("hub2", "hub1"), ("hub3", "hub2")):
        pair(hub, partner)
    for leaf in range(leaves):
        pair(f"leaf{leaf}", "hub3")
    return History.from_rows(rows)


def sites(
    count: int, leaves: int = 20, seed: int = 2
) -> tuple[np.ndarray, np.ndarray, np.ndarray, np.ndarray]:
    """Latitudes, longitudes (degrees), leaf numbers and ages (Ma) of sites all over the globe."""
    rng = np.random.default_rng(seed)
    lat = np.rad2deg(np.arcsin(rng.uniform(-1, 1, count)))
    lon = rng.uniform(-180, 180, count)
    return lat, lon, rng.integers(0, leaves, count), rng.uniform(0, OLDEST_MA, count)
