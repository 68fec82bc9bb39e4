"""Points given to plates: CPU seconds and peak memory, on one core.

Run it: `python tests/benchmarks/outlines.py` (about a minute), `--quick` for a check that it runs.
The plates are unions of spherical Voronoi cells whose edges are cut into short pieces, a complete
tiling. Nothing is asserted about time; that every point is on one plate, and on the right one, is.
"""

from __future__ import annotations

import argparse
import os
import resource
import sys
import time
from collections.abc import Callable

os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")

import numpy as np
from scipy.spatial import SphericalVoronoi, cKDTree

from restore.geometry.polygons import Polygon, Ring
from restore.geometry.sphere import lat_lon, unit_vectors
from restore.outlines import Outline, Outlines


def scattered(count: int, seed: int) -> tuple[np.ndarray, np.ndarray]:
    """Latitudes and longitudes (degrees) of points all over the globe."""
    rng = np.random.default_rng(seed)
    return np.rad2deg(np.arcsin(rng.uniform(-1.0, 1.0, count))), rng.uniform(-180.0, 180.0, count)


def tiling(plates: int, vertices: int, seed: int) -> tuple[Outlines, np.ndarray]:
    """A tiling of `plates` outlines with about `vertices` vertices in all, and the cells' centres."""
    centres = unit_vectors(*scattered(plates, seed))
    cells = SphericalVoronoi(np.ascontiguousarray(centres))
    cells.sort_vertices_of_regions()
    edges = sum(len(region) for region in cells.regions)
    pieces = max(1, round(vertices / edges))
    outlines = []
    for number, region in enumerate(cells.regions):
        corners = cells.vertices[region]
        if np.dot(np.cross(corners[0], corners[1]), centres[number]) < 0.0:
            corners = corners[::-1]
        ring = np.concatenate(
            [_cut(a, b, pieces) for a, b in zip(corners, np.roll(corners, -1, axis=0), strict=True)]
        )
        polygon = Polygon.of((Ring.of(*lat_lon(ring)),))
        outlines.append(Outline(f"plate{number}", (polygon,), number=number + 1))
    return Outlines(tuple(outlines)), centres


def _cut(a: np.ndarray, b: np.ndarray, pieces: int) -> np.ndarray:
    """Vertices along an edge, the last left out, the same ones whichever way it is run."""
    forward = tuple(a) < tuple(b)
    share = (
        np.arange(pieces)[:, None] / pieces if forward else (pieces - np.arange(pieces)[:, None]) / pieces
    )
    start, end = (a, b) if forward else (b, a)
    points = (1.0 - share) * start + share * end
    points /= np.linalg.norm(points, axis=1)[:, None]
    points[0] = a
    return points


def spent(work: Callable[[], object]) -> tuple[float, object]:
    """CPU seconds of this process, and what the work gave."""
    began = time.process_time()
    result = work()
    return time.process_time() - began, result


def peak_mb() -> float:
    """The most memory the process has held, MB."""
    most = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss
    return most / (1e6 if sys.platform == "darwin" else 1e3)


def measure(title: str, points: int, plates: int, vertices: int, rounds: int) -> float:
    lat, lon = scattered(points, 1)
    outlines, centres = tiling(plates, vertices, 2)
    held = sum(len(ring) for o in outlines.outlines for p in o.polygons for ring in p.rings)
    before = peak_mb()
    times = []
    for _ in range(rounds):
        seconds, assigned = spent(lambda: outlines.plate_at(lat, lon))
        times.append(seconds)
    after = peak_mb()
    distance, nearest = cKDTree(centres).query(unit_vectors(lat, lon), k=2)
    clear = distance[:, 1] - distance[:, 0] > 1e-9
    assert np.array_equal(assigned.outline[clear], nearest[clear, 0]), "a point is on the wrong plate"
    assert not assigned.overlaps.any(), "a point is on two plates"
    print(
        f"{title}: {points} points, {plates} plates, {held} vertices:"
        f" {min(times):.2f} s of CPU (best of {rounds}), {after - before:.0f} MB above points and outlines"
    )
    return min(times)


def main() -> None:
    parser = argparse.ArgumentParser()
    parser.add_argument("--quick", action="store_true", help="small sizes, one round")
    quick = parser.parse_args().quick
    points, rounds = (50_000, 1) if quick else (1_000_000, 3)
    few = measure("few vertices", points, 50, 4_400, rounds)
    many = measure("many vertices", points, 200, 20_000 if quick else 1_000_000, rounds)
    print(f"ratio {many / few:.1f}; peak of the process {peak_mb():.0f} MB")
    if not quick:
        for name, seconds, target in (("few", few, 1.5), ("many", many, 10.0 * few)):
            print(
                f"{name}: {seconds:.2f} s, target {target:.2f} s: {'met' if seconds <= target else 'missed'}"
            )


if __name__ == "__main__":
    main()
