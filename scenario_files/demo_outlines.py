"""Plate outlines of the demo world: a complete tiling of the sphere.

About three hundred uneven cells are given to plates by distance from chosen
seeds; the cells of one plate are dissolved into one anticlockwise ring. The
boundary of the two plates that part is then rebuilt from spreading segments
and transform offsets about their mean pole.
"""

from __future__ import annotations

import numpy as np
from demo_sphere import Array, arc_deg, densify, rounded, to_latlon, to_xyz
from scipy.spatial import SphericalVoronoi

CELLS = 300
STEP_DEG = 2.0

SEEDS: dict[str, list[tuple[float, float]]] = {
    "ovrath": [(28, -58), (0, -50), (-22, -48)],
    "quemmel": [(28, 28), (0, 20), (-22, 18)],
    "pazzel": [(84, 60), (72, -45), (68, 80)],
    "glufta": [(-76, 0), (-62, -30), (-66, 60), (-70, -120)],
    "wirrum": [(12, 168), (-22, 180), (-8, -152), (35, -172), (-42, -150)],
    "zobbet": [(34, 96), (6, 84), (42, 125)],
    "snivar": [(-36, 84), (-34, 122)],
    "ibbun": [(-6, -104), (20, -116), (-30, -98)],
}


def uneven_points(rng: np.random.Generator) -> Array:
    """Return the cell centres: a spiral of even density, shaken a little."""
    index = np.arange(CELLS) + 0.5
    lat = np.degrees(np.arcsin(1 - 2 * index / CELLS))
    lon = np.degrees(np.pi * (1 + 5**0.5) * index)
    points = to_xyz(lat, lon) + rng.normal(0, 0.035, (CELLS, 3))
    return np.asarray(points / np.linalg.norm(points, axis=1)[:, None])


def own_cells(centres: Array, regions: list[list[int]], rng: np.random.Generator) -> list[str]:
    """Give each cell to the plate of the nearest seed, with noise, in one piece."""
    labels = list(SEEDS)
    distance = np.stack(
        [np.min([arc_deg(centres, to_xyz(*seed)) for seed in seeds], axis=0) for seeds in SEEDS.values()]
    )
    owner = np.argmin(distance + rng.normal(0, 3.0, distance.shape), axis=0)
    neighbours = cell_neighbours(regions)
    for _ in range(20):
        stray = stray_cells(owner, neighbours)
        if not stray:
            break
        for cell in stray:
            around = [owner[n] for n in neighbours[cell] if owner[n] != owner[cell]]
            owner[cell] = max(sorted(set(around)), key=around.count)
    return [labels[number] for number in owner]


def cell_neighbours(regions: list[list[int]]) -> list[list[int]]:
    """Return for each cell the cells that share an edge with it."""
    by_edge: dict[frozenset[int], list[int]] = {}
    for cell, region in enumerate(regions):
        for edge in zip(region, region[1:] + region[:1], strict=True):
            by_edge.setdefault(frozenset(edge), []).append(cell)
    neighbours: list[list[int]] = [[] for _ in regions]
    for first, second in by_edge.values():
        neighbours[first].append(second)
        neighbours[second].append(first)
    return neighbours


def stray_cells(owner: np.ndarray, neighbours: list[list[int]]) -> list[int]:
    """Return the cells that are not in the largest piece of their plate."""
    stray: list[int] = []
    for plate in np.unique(owner):
        left = {int(cell) for cell in np.flatnonzero(owner == plate)}
        pieces = []
        while left:
            piece, front = set(), {min(left)}
            while front:
                piece |= front
                front = {n for cell in front for n in neighbours[cell]} & left - piece
            left -= piece
            pieces.append(piece)
        pieces.sort(key=len)
        stray += sorted(cell for piece in pieces[:-1] for cell in piece)
    return stray


def dissolve(regions: list[list[int]], owners: list[str]) -> dict[str, list[int]]:
    """Return for each plate its ring of vertex numbers, anticlockwise, not closed."""
    rings = {}
    for plate in SEEDS:
        edges = {
            edge
            for region, owner in zip(regions, owners, strict=True)
            if owner == plate
            for edge in zip(region, region[1:] + region[:1], strict=True)
        }
        follow = {a: b for a, b in edges if (b, a) not in edges}
        ring = [min(follow)]
        while follow[ring[-1]] != ring[0]:
            ring.append(follow[ring[-1]])
        if len(ring) != len(follow):
            raise ValueError(f"the outline of {plate} is not one ring")
        rings[plate] = ring
    return rings


def shared_path(ring: list[int], other: list[int]) -> list[int]:
    """Return the vertices that two rings share, in the order of the first ring."""
    common = set(other)
    start = next(i for i, vertex in enumerate(ring) if vertex in common and ring[i - 1] not in common)
    turned = ring[start:] + ring[:start]
    count = next((i for i, v in enumerate(turned) if v not in common), len(turned))
    if common & set(turned[count:]):
        raise ValueError("the shared boundary is not in one piece")
    return turned[:count]


def staircase(
    start: Array, end: Array, pole: tuple[float, float], rng: np.random.Generator
) -> tuple[Array, list[Array]]:
    """Return a ridge from ``start`` to ``end`` and its spreading segments.

    In coordinates about the pole of opening the segments are meridians and the
    offsets are parallels, so that the plates slide along the offsets.
    """
    frame = pole_axes(pole)
    (lat0, lat1), (lon0, lon1) = to_latlon(np.stack([start, end]) @ frame.T)
    count = 12
    levels = lat0 + (lat1 - lat0) * (np.arange(count + 1) / count)
    levels[1:-1] += rng.uniform(-1.0, 1.0, count - 1)
    lons = np.linspace(lon0, lon1, count)
    lons[1:-1] += rng.uniform(0.7, 1.7, count - 2) * (-1.0) ** np.arange(count - 2)
    path, segments = [], []
    for number, lon in enumerate(lons):
        low, high = levels[number], levels[number + 1]
        segments.append(to_xyz([low, high], [lon, lon]) @ frame)
        path.append(segments[-1])
        if number + 1 < count:
            steps = int(np.ceil(abs(lons[number + 1] - lon) / 0.8))
            between = np.linspace(lon, lons[number + 1], steps + 1)[1:-1]
            path.append(to_xyz(np.full(len(between), high), between) @ frame)
    whole = np.vstack(path)
    whole[0], whole[-1] = start, end
    return rounded(whole), segments


def pole_axes(pole: tuple[float, float]) -> Array:
    """Return the rows of a frame whose third axis is ``pole`` and whose cut is far away."""
    z = to_xyz(*pole)
    x = to_xyz(0.0, -15.0)
    x = x - (x @ z) * z
    x /= np.linalg.norm(x)
    return np.stack([x, np.cross(z, x), z])


class Outlines:
    """The tiling: cells, their owners, rings of unit vectors, and the ridge.

    ``rings[plate]`` is closed, anticlockwise, with edges of at most two degrees;
    ``corners[plate]`` is the same ring as vertex numbers of the cells.
    """

    def __init__(self, pair: tuple[str, str], pole: tuple[float, float], seed: int) -> None:
        rng = np.random.default_rng(seed)
        cells = SphericalVoronoi(uneven_points(rng))
        cells.sort_vertices_of_regions()
        self.centres = cells.points
        self.vertices = rounded(cells.vertices)
        regions = [self._anticlockwise(i, r) for i, r in enumerate(cells.regions)]
        self.owners = own_cells(self.centres, regions, rng)
        self.corners = dissolve(regions, self.owners)
        first, second = pair
        middle = shared_path(self.corners[first], self.corners[second])
        ends = self.vertices[[middle[0], middle[-1]]]
        self.ridge, self.segments = staircase(ends[0], ends[1], pole, rng)
        self.rings = {plate: self._ring(ring) for plate, ring in self.corners.items()}
        self._swap(first, middle, self.ridge)
        self._swap(second, middle[::-1], self.ridge[::-1])

    def _anticlockwise(self, cell: int, region: list[int]) -> list[int]:
        """Return the corners of a cell in anticlockwise order seen from outside."""
        a, b = self.vertices[region[0]], self.vertices[region[1]]
        ahead = np.dot(np.cross(a, b), self.centres[cell]) > 0
        return [int(v) for v in (region if ahead else region[::-1])]

    def _ring(self, ring: list[int]) -> Array:
        """Return a closed ring of rounded unit vectors with short edges."""
        return rounded(densify(self.vertices[[*ring, ring[0]]], STEP_DEG))

    def _swap(self, plate: str, old: list[int], new: Array) -> None:
        """Replace one stretch of the ring of ``plate`` by the ridge."""
        ring = self.corners[plate]
        at = ring.index(old[-1])
        rest = (ring[at:] + ring[:at])[: len(ring) - len(old) + 2]
        outer = self.vertices[rest]
        self.rings[plate] = rounded(densify(np.vstack([outer, new[1:]]), STEP_DEG))

    def corner_path(self, first: str, second: str) -> Array:
        """Return the shared boundary of two plates, anticlockwise around the first."""
        return self.vertices[shared_path(self.corners[first], self.corners[second])]

    def plate_of_cell(self, xyz: Array) -> list[str]:
        """Return for each place the owner of the nearest cell centre."""
        return [self.owners[i] for i in np.argmax(xyz @ self.centres.T, axis=-1)]
