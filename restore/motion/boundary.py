"""Whether start points lie on the boundary that two plates share, by their outlines."""

from __future__ import annotations

import numpy as np

from restore.findings import Finding, Place
from restore.geometry.arcs import nearest_on_edges
from restore.geometry.sphere import Floats, unit_vectors
from restore.motion.flowlines import Spreading
from restore.motion.ridge_points import RidgePoints
from restore.outlines import Outlines

NEAR_KM = 50.0
"""A start point as near as this to the outlines of both plates counts as on their boundary."""


def boundary_distance_km(starts: RidgePoints, spreading: Spreading, outlines: Outlines) -> Floats:
    """Distance in km `(n,)` from the farther of the two plates' outlines; NaN if one has none.

    A point on the boundary that the two share is at no distance from either.
    """
    points = unit_vectors(spreading.latitudes.inward(starts.lat_deg), starts.lon_deg)
    farther = np.zeros(len(points))
    for plate in spreading.plates:
        rings = [
            ring.vectors()
            for outline in outlines.outlines
            if outline.plate == plate
            for polygon in outline.polygons
            for ring in polygon.rings
        ]
        nearest = np.full(len(points), np.nan)
        for ring in rings:
            nearest = np.fmin(nearest, nearest_on_edges(points, ring, closed=True))
        farther = np.maximum(farther, nearest)
    return farther * spreading.radius_km


def off_boundary(
    starts: RidgePoints, spreading: Spreading, outlines: Outlines, file: str = ""
) -> list[Finding]:
    """A note for each start point of age 0 that lies off the boundary of the pair."""
    distance = boundary_distance_km(starts, spreading, outlines)
    one, other = spreading.plates
    findings = []
    for row in np.flatnonzero((starts.age_ma == 0.0) & ~(distance <= NEAR_KM)):
        km = float(distance[row])
        what = f"start {starts.start[row]!r} lies off the boundary of {one} and {other}"
        known = None if np.isnan(km) else km
        remedy = (
            "its flowline is that of a ridge there" if known else f"{outlines.file} lacks one of the two"
        )
        findings.append(Finding("note", "off the boundary", Place(file), what, known, remedy))
    return findings
