"""The audit of outlines: rings that cross themselves, gaps, overlaps, labels, the sum of areas."""

from __future__ import annotations

import math
from collections.abc import Iterator

import numpy as np

from restore.findings import Finding, Place
from restore.geometry.polygons import Ring, SortedPoints
from restore.geometry.sphere import EARTH_RADIUS_KM, Floats, cross, dot, lat_lon
from restore.history.store import History
from restore.outlines import Outline, Outlines

SAMPLES = 400_000
SPHERE_KM2 = 4.0 * math.pi * EARTH_RADIUS_KM**2
CLOSE_KM2 = 1.0
TOUCHING = 1e-13


def audit_outlines(outlines: Outlines, history: History | None = None) -> list[Finding]:
    """All findings of outlines, and of their labels against a history if one is given."""
    findings = [finding for outline in outlines.outlines for finding in _of_one(outlines.file, outline)]
    findings += _coverage(outlines)
    findings += _total(outlines)
    if history is not None:
        findings += _labels(outlines, history)
    return findings


def _place(file: str, outline: Outline) -> Place:
    return Place(f"{file}: feature {outline.number}")


def _of_one(file: str, outline: Outline) -> Iterator[Finding]:
    place = _place(file, outline)
    if outline.repeated > 0:
        some = "vertex repeats its" if outline.repeated == 1 else "vertices repeat their"
        what = f"{outline.plate}: {outline.repeated} {some} neighbour"
        yield Finding("note", "repeated vertices", place, what, remedy="they are passed over")
    for number, polygon in enumerate(outline.polygons, start=1):
        part = f"{outline.plate}, part {number}" if len(outline.polygons) > 1 else outline.plate
        if polygon.rings[0].area_sr() > 2.0 * math.pi:
            km2 = polygon.rings[0].area_sr() * EARTH_RADIUS_KM**2
            what = f"{part}: the ring holds {km2 / 1e6:.2f}e6 km2 on its left, more than half the globe"
            remedy = "if the other side is meant, the ring runs the wrong way (RFC 7946: anticlockwise)"
            yield Finding("warning", "orientation", place, what, remedy=remedy)
        for ring in polygon.rings[1:]:
            if ring.reversed().area_sr() > 2.0 * math.pi:
                what = f"{part}: a hole runs anticlockwise"
                yield Finding(
                    "warning", "orientation", place, what, remedy="holes run clockwise (RFC 7946)"
                )
        for ring in polygon.rings:
            crossings = self_crossings(ring)
            if len(crossings):
                lat, lon = crossings[0]
                times = "once" if len(crossings) == 1 else f"{len(crossings)} times, first"
                what = f"{part}: the ring crosses itself {times} near {lat:.4f}, {lon:.4f}"
                yield Finding("error", "self-crossing", place, what, remedy="mend the ring")


def self_crossings(ring: Ring) -> list[tuple[float, float]]:
    """Latitude and longitude (degrees) of every place where two edges of a ring cross.

    Edges are swept along x with their boxes; two cross where each has the other's ends on both
    sides. Edges that only touch at a vertex do not count.
    """
    a = ring.vectors()
    b = np.roll(a, -1, axis=0)
    low, high = np.minimum(a, b), np.maximum(a, b)
    # an arc bulges beyond the box of its ends by at most its sagitta
    bulge = (1.0 - np.sqrt(np.clip(0.5 * (1.0 + dot(a, b)), 0.0, 1.0)))[:, np.newaxis] + 1e-15
    low, high = low - bulge, high + bulge
    order = np.argsort(low[:, 0])
    places = []
    reach = np.searchsorted(low[order, 0], high[order, 0], side="right")
    for at, i in enumerate(order):
        others = order[at + 1 : reach[at]]
        near = np.all((low[others, 1:] <= high[i, 1:]) & (high[others, 1:] >= low[i, 1:]), axis=1)
        others = others[near]
        others = others[(others != (i + 1) % len(a)) & (others != (i - 1) % len(a))]
        if len(others):
            places += _crossings(a[i], b[i], a[others], b[others])
    return places


def _crossings(a: Floats, b: Floats, c: Floats, d: Floats) -> list[tuple[float, float]]:
    """Where the edge a-b crosses edges c-d (n, 3)."""
    own, others = np.cross(a, b), cross(c, d)
    across = np.stack([c @ own, d @ own, others @ a, others @ b])
    # within a micrometre an end touches the other edge and does not cross it
    sides = (across[0] * across[1] < 0.0) & (across[2] * across[3] < 0.0)
    sides &= np.all(np.abs(across) > TOUCHING, axis=0)
    found = []
    for normal, ends in zip(others[sides], (c + d)[sides], strict=True):
        place = np.cross(own, normal)
        place *= np.sign(place @ (a + b))
        if place @ ends > 0.0:  # the arcs may also be at the two places opposite where their circles cross
            lat, lon = lat_lon(place)
            found.append((float(lat), float(lon)))
    return found


def _lattice(count: int) -> tuple[Floats, Floats]:
    """Latitudes and longitudes of a lattice of equal areas (Gonzalez 2010, Math. Geosci. 42, 49-64)."""
    number = np.arange(count) + 0.5
    lat = np.rad2deg(np.arcsin(1.0 - 2.0 * number / count))
    golden = 0.5 * (1.0 + math.sqrt(5.0))
    return lat, np.mod(number * 360.0 / golden, 360.0) - 180.0


def _coverage(outlines: Outlines) -> Iterator[Finding]:
    """Gaps and overlaps by counting on a lattice of equal areas."""
    lat, lon = _lattice(SAMPLES)
    points = SortedPoints(lat, lon)
    holders = np.zeros(SAMPLES, dtype=np.int32)
    first = np.full(SAMPLES, -1)
    second = np.full(SAMPLES, -1)
    for number, outline in enumerate(outlines.outlines):
        held = np.zeros(SAMPLES, dtype=bool)
        for polygon in outline.polygons:
            held |= points.inside(polygon)
        second[held & (holders == 1)] = number
        first[held & (holders == 0)] = number
        holders += held
    each = SPHERE_KM2 / SAMPLES
    lat, lon = lat[points.order], lon[points.order]
    gaps = np.flatnonzero(holders == 0)
    if len(gaps):
        where = f"such as {lat[gaps[0]]:.2f}, {lon[gaps[0]]:.2f}"
        what = f"{len(gaps) * each:.3g} km2 lie on no outline, {where} (counted in steps of {each:.0f} km2)"
        yield Finding("note", "gap", Place(outlines.file), what, remedy="sites there have no plate")
    pairs, counts = np.unique(np.stack([first, second])[:, holders > 1], axis=1, return_counts=True)
    for (one, other), count in zip(pairs.T, counts, strict=True):
        names = [outlines.outlines[int(n)] for n in (one, other)]
        ranked = names[0].rank != names[1].rank
        at = np.flatnonzero((first == one) & (second == other))[0]
        what = (
            f"{names[0].plate} and {names[1].plate} overlap by {count * each:.3g} km2, such as"
            f" {lat[at]:.2f}, {lon[at]:.2f} (counted in steps of {each:.0f} km2)"
        )
        remedy = "the lower rank is taken" if ranked else "rank them; the first in the file is taken"
        severity = "note" if ranked else "warning"
        yield Finding(severity, "overlap", _place(outlines.file, names[1]), what, remedy=remedy)


def _total(outlines: Outlines) -> Iterator[Finding]:
    """The areas' sum against the sphere; a tiling's is equal to it."""
    total = sum(outline.area_sr() for outline in outlines.outlines) * EARTH_RADIUS_KM**2
    apart = total - SPHERE_KM2
    if abs(apart) > CLOSE_KM2:
        what = (
            f"the outlines' areas sum to {total / 1e6:.4f}e6 km2, the sphere's is {SPHERE_KM2 / 1e6:.4f}e6"
            f" ({apart:+.4g} km2)"
        )
        remedy = "more means overlaps, less means gaps"
        yield Finding("note", "total area", Place(outlines.file), what, remedy=remedy)


def _labels(outlines: Outlines, history: History) -> Iterator[Finding]:
    known = set(history.plates())
    for outline in outlines.outlines:
        if outline.plate not in known:
            what = f"plate {outline.plate!r} has an outline and no rows in the history"
            yield Finding("warning", "plate without rows", _place(outlines.file, outline), what)
    drawn = set(outlines.plates())
    bare = [
        p for p in sorted(known - drawn) if history.kind_of(p) == "plate" and p in set(history.rows.plate)
    ]
    if bare:
        what = "plates of the history without an outline: " + ", ".join(bare)
        yield Finding("note", "plate without outline", Place(outlines.file), what)
