"""Rows that lie far off their neighbours' path, whatever the reason, and what would bring them near.

Slips that the sign or the unit of the angle explains are errors by themselves (see `pairs`); here a
row is only doubtful, and the slips of the pole that would bring it near are tried.
"""

from __future__ import annotations

from collections.abc import Iterator, Sequence

import numpy as np

from restore.findings import Finding
from restore.geometry import so3
from restore.geometry.rotations import Rotations
from restore.geometry.sphere import EARTH_RADIUS_KM, Floats
from restore.history.audit.pairs import BETTER_BY, Track
from restore.history.audit.places import place_of_row
from restore.history.store import History

FAR_KM = 150.0
JOLT_MM_YR = 70.0
"""A change of velocity between two stages that is larger than this is doubtful (common practice)."""

TIMES_THE_OTHERS = 6.0
FEWEST = 5
"""Rows of a track, the present among them, below which no row stands out from the others."""


def rows_off_their_path(history: History, tracks: Sequence[Track]) -> Iterator[Finding]:
    """Rows far off where their neighbours put the plate at that age, far against the pair's other rows.

    The worst is taken out and the rest looked at again, since a row that is off misleads its neighbours.
    """
    for track in tracks:
        track = track.corrected
        found = []
        while len(track.ages) >= FEWEST:
            at = _worst(track)
            if at is None:
                break
            found.append((int(track.rows[at]), *_judged(history, track, at)))
            track = _without(track, at)
        for row, km, others, remedy in sorted(found):
            what = (
                f"{track.name} at {history.rows.age_ma[row]:g} Ma lies off its neighbours' path; the pair's"
                f" other rows do so by {others:.0f} km"
            )
            yield Finding("warning", "off the path", place_of_row(history, row), what, km, remedy)


def _worst(track: Track) -> int | None:
    """Of the rows that stand out against the others, by a change of velocity that no plate makes, the one
    without which the others fit best: a row that is off carries its neighbours along.
    """
    misfits = track.misfits_km()
    steps = np.diff(track.ages)
    # off by m between neighbours dt1 and dt2 away, the velocity changes by m (1 / dt1 + 1 / dt2)
    jolts = misfits * (1.0 / steps + np.append(1.0 / steps[1:], 0.0))
    suspects = (misfits > FAR_KM) & (jolts > JOLT_MM_YR) & (track.rows[1:] >= 0)
    left = {}
    for at in np.flatnonzero(suspects).tolist():
        rest = _without(track, at + 1).misfits_km()
        if len(rest) >= 2 and misfits[at] > TIMES_THE_OTHERS * float(np.median(rest)):
            left[at + 1] = float(rest.sum())
    return min(left, key=left.__getitem__) if left else None


def _without(track: Track, at: int) -> Track:
    keep = np.arange(len(track.ages)) != at
    return Track(track.name, track.ages[keep], track.turns[keep], track.rows[keep], track.first)


def _judged(history: History, track: Track, at: int) -> tuple[float, float, str]:
    """How far the row is off, how far the others usually are, and a remedy."""
    km = float(track.misfits_km()[at - 1])
    others = float(np.median(_without(track, at).misfits_km()))
    row = int(track.rows[at])
    lat, lon, angle = (
        float(column[row])
        for column in (history.rows.pole_lat_deg, history.rows.pole_lon_deg, history.rows.angle_deg)
    )
    tries = {
        "the latitude's sign": (-lat, lon),
        "the longitude's sign": (lat, -lon),
        "the longitude turned by 180 degrees": (lat, lon + 180.0),
    }
    if abs(lon) <= 90.0:
        tries["latitude and longitude swapped"] = (lon, lat)
    left = {
        said: track.misfit_km(at, Rotations.from_poles(*pole, angle).quaternions)
        for said, pole in tries.items()
    }
    best = min(left, key=left.__getitem__)
    if left[best] * BETTER_BY < km:
        return (
            km,
            others,
            f"with {best} changed it would be {left[best]:.0f} km off; compare with the paper",
        )
    return km, others, f"{_angle_hint(track, at)}compare pole, angle and age with the paper"


def _angle_hint(track: Track, at: int) -> str:
    """What the neighbours would have the angle be, if the pole is near theirs."""
    expected = track.expected[at - 1]
    own, theirs = (so3.logarithm(q) for q in (track.turns[at], expected))
    sizes = [float(np.linalg.norm(v)) for v in (own, theirs)]
    if min(sizes) == 0.0:
        return ""
    apart = _between(own / sizes[0], theirs / sizes[1]) * EARTH_RADIUS_KM
    if apart * sizes[1] > FAR_KM:
        return ""
    return f"its neighbours would have an angle of {np.rad2deg(sizes[1]):.1f} degrees; "


def _between(one: Floats, other: Floats) -> float:
    return float(np.arctan2(np.linalg.norm(np.cross(one, other)), one @ other))
