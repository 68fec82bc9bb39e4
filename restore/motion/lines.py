"""Lines and polygons restored: coasts, outlines, fracture zones as vectors at past ages.

Each feature, or piece of one cut along outlines, moves with its plate. Long edges are densified
before they are turned, so that the drawn line stays true, and what comes out is cut at the 180th
meridian as RFC 7946 asks.
"""

from __future__ import annotations

import math
import os
from collections import Counter
from collections.abc import Iterable, Iterator, Mapping, Sequence
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from restore.errors import InputError, raise_faults
from restore.files.vectors import Feature, read_features
from restore.findings import Finding, Place, did_you_mean
from restore.geometry.arcs import densified_arcs
from restore.geometry.clipping import DECIMALS, cut_line, cut_rings
from restore.geometry.latitudes import Latitudes
from restore.geometry.sphere import Floats, angular_distance, lat_lon, wrap_longitude
from restore.history.circuit import NO_PLATE, REACHED, Circuit
from restore.history.store import History
from restore.motion.ages import parse_ages
from restore.motion.line_cuts import Cut, Cutter, Path, Shape, shape_of
from restore.motion.points import Points, move_common
from restore.motion.sites import BAD_COORDINATE, NOT_FORMED, STATUSES
from restore.outlines import EDGES, Outlines

LONGEST_DEG = 0.5
INTERIORS = ("left", "smaller")
AT_ONCE = 1_000_000
"""Vertices times ages that are turned and drawn together."""
LARGE_SR = 1e-6
"""Steradians: a polygon below this is too small to hold the whole 180th meridian."""
RESULTS = (
    "plate_from",
    "restored_age_ma",
    "status",
    "frame",
    "frame_kind",
    "latitudes",
    "edges",
    "feature",
    "piece",
)

Geometry = Mapping[str, Any]


@dataclass(frozen=True)
class LineJob:
    """What to do with features: the Circuit, the ages (Ma) and the conventions.

    `edges`: `great-circle`, or `straight` in longitude and latitude (RFC 7946). `interior`: which side
    of an outer ring is inside: the `left` (RFC 7946), or the `smaller` whichever way it runs.
    `longest_deg`: edges are densified until none is longer.
    """

    circuit: Circuit
    ages: tuple[float, ...]
    outlines: Outlines | None = None
    plate_property: str = "plate"
    edges: str = "great-circle"
    interior: str = "left"
    longest_deg: float = LONGEST_DEG
    latitudes: Latitudes = Latitudes()
    frame_kind: str = "plate"

    def __post_init__(self) -> None:
        for name, known in (("edges", EDGES), ("interior", INTERIORS)):
            if getattr(self, name) not in known:
                raise InputError(f"{name} = {getattr(self, name)!r}: must be one of {', '.join(known)}")
        if not 1e-3 <= self.longest_deg <= 90.0:
            raise InputError(f"longest_deg = {self.longest_deg:g}: must lie in 0.001..90 degrees")


@dataclass(frozen=True, eq=False)
class Piece:
    """A feature, or what of it is on one outline: `number` counts a feature's pieces from 1.

    `plate`: None where there is none. `oldest_ma`: when the crust formed, infinite if not known.
    `shape`: None where the feature has no geometry or no plate.
    """

    feature: Feature
    number: int
    plate: str | None
    plate_from: str
    oldest_ma: float
    shape: Shape | None

    @property
    def fault(self) -> int:
        """The status that the piece has at every age, REACHED if that depends on the age."""
        if self.plate is None:
            return NO_PLATE
        return REACHED if self.shape is not None else BAD_COORDINATE


@dataclass(frozen=True, eq=False)
class RestoredLines:
    """Restored features in long form: by feature, then by piece, then by age.

    `status` (pieces, ages): numbers into `STATUSES`. `findings`: labels that the history lacks and
    rings that may run the wrong way. Geometries are made when `features` is gone through.
    """

    pieces: Sequence[Piece]
    status: NDArray[np.int8]
    findings: list[Finding]
    job: LineJob

    def __len__(self) -> int:
        return self.status.size

    def counts(self) -> Counter[str]:
        """How many of the features given have each status."""
        return Counter(STATUSES[code] for code in self.status.ravel().tolist())

    def features(self) -> Iterator[tuple[Geometry | None, dict[str, Any]]]:
        """(geometry, properties) of each piece at each age; no geometry where it is not restored."""
        at = 0
        for block in _blocks(self.pieces, len(self.job.ages)):
            drawing = _Drawing(block, self.job)
            for number, piece in enumerate(block):
                for k in range(len(self.job.ages)):
                    reached = self.status[at, k] == REACHED
                    yield drawing.geometry(number, k) if reached else None, self._properties(at, k, piece)
                at += 1

    def _properties(self, at: int, k: int, piece: Piece) -> dict[str, Any]:
        job = self.job
        return {
            **piece.feature.properties,
            "plate": piece.plate,
            "plate_from": piece.plate_from,
            "restored_age_ma": job.ages[k],
            "status": STATUSES[self.status[at, k]],
            "frame": job.circuit.frame,
            "frame_kind": job.frame_kind,
            "latitudes": job.latitudes.kind,
            "edges": job.edges,
            "feature": piece.feature.number,
            "piece": piece.number,
        }


def restore_lines(
    lines: str | os.PathLike[str] | Sequence[Feature],
    history: History,
    frame: str,
    ages: str | float | Iterable[float],
    *,
    outlines: str | os.PathLike[str] | Outlines | None = None,
    plate_property: str = "plate",
    edges: str = "great-circle",
    interior: str = "left",
    longest_deg: float = LONGEST_DEG,
    latitudes: str = "as-given",
    beyond: str = "refuse",
) -> RestoredLines:
    """Restore points, lines and polygons to given ages (Ma), relative to a frame.

    `lines`: a vector file or its features. A feature moves whole with the plate that its property
    `plate_property` names; one without is cut along `outlines`, each piece moving with its plate. At
    0 Ma vertices keep their digits to the tenth decimal. `edges`, `interior` and `longest_deg`
    (degrees) as in `LineJob`. No feature is dropped. Raises InputError for a file or an argument at
    fault, UnknownPlateError for an unknown frame.
    """
    asked = parse_ages(ages)
    if asked is None:
        raise InputError(f"ages {ages!r} has no meaning for lines; give ages in Ma")
    kind = Latitudes(latitudes)
    if isinstance(outlines, (str, os.PathLike)):
        outlines = Outlines.read(outlines, edges=edges, latitudes=latitudes)
    job = LineJob(
        Circuit(history, frame, beyond), asked, outlines, plate_property, edges, interior, longest_deg,
        kind, history.kind_of(frame),
    )  # fmt: skip
    features = read_features(lines) if isinstance(lines, (str, os.PathLike)) else list(lines)
    if not features:
        what = os.fspath(lines) if isinstance(lines, (str, os.PathLike)) else "lines"
        raise InputError(f"{what}: holds no feature; at least one is needed")
    return restore_features(features, job)


def restore_features(features: Sequence[Feature], job: LineJob) -> RestoredLines:
    """As `restore_lines`, of features and what to do with them."""
    _refuse_result_names(features, job.plate_property)
    findings: list[Finding] = []
    shapes = [_facing(feature, _shape(feature, job), job, findings) for feature in features]
    labels = [_label(feature, job.plate_property) for feature in features]
    lost = [
        at
        for at, label in enumerate(labels)
        if label is None and shapes[at] is not None and job.outlines is not None
    ]
    cuts: dict[int, Cut] = {}
    if job.outlines is not None and lost:
        cutter = Cutter(job.outlines, job.latitudes)
        cuts = dict(zip(lost, cutter.cut([s for at in lost if (s := shapes[at])]), strict=True))
    pieces: list[Piece] = []
    for at, (feature, shape, label) in enumerate(zip(features, shapes, labels, strict=True)):
        if at in cuts:
            pieces += _cut_pieces(feature, cuts[at], job.outlines)
        else:
            oldest = _oldest(feature)
            pieces.append(Piece(feature, 1, label, "given" if label else "", oldest, shape))
    findings += _unknown_plates(pieces, job.circuit)
    return RestoredLines(pieces, _statuses(pieces, job), findings, job)


# ---- from features to pieces ----


def _refuse_result_names(features: Sequence[Feature], plate_property: str) -> None:
    """Raise InputError if a property has the name of a result, one line for each name."""
    taken = {*RESULTS, *(() if plate_property == "plate" else ("plate",))}
    first: dict[str, Feature] = {}
    for feature in features:
        for name in feature.properties:
            if name in taken:
                first.setdefault(name, feature)
    findings = [
        Finding("error", "taken name", Place(str(feature)), f"property {name!r} has the name of a result",
                remedy="give it another name")
        for name, feature in first.items()
    ]  # fmt: skip
    raise_faults(InputError, findings)


def _shape(feature: Feature, job: LineJob) -> Shape | None:
    return shape_of(feature, job.latitudes, job.edges, job.longest_deg)


def _facing(feature: Feature, shape: Shape | None, job: LineJob, findings: list[Finding]) -> Shape | None:
    """A shape whose polygons have their insides where the job says; large ones are remarked on."""
    if shape is None or shape.dimension < 2:
        return shape
    half = 2.0 * np.pi * (1.0 + 1e-12)
    parts = list(shape.parts)
    for number, rings in enumerate(parts):
        area = rings[0].ring(job.latitudes).area_sr()
        if area <= half:
            continue
        if job.interior == "smaller":
            parts[number] = (rings[0].reversed(), *rings[1:])
            continue
        share = 100.0 * area / (4.0 * np.pi)
        findings.append(
            Finding(
                "warning", "large polygon", Place(str(feature)),
                f"the left of its outer ring is {share:.4g} % of the sphere",
                remedy="if the ring runs the wrong way, ask for the smaller interior",
            )
        )  # fmt: skip
    return replace(shape, parts=tuple(parts))


def _label(feature: Feature, plate_property: str) -> str | None:
    label = feature.properties.get(plate_property)
    return None if label is None or str(label) == "" else str(label)


def _oldest(feature: Feature) -> float:
    value = feature.properties.get("oldest_ma")
    if value is None or value == "":
        return math.inf
    try:
        age = float(value)
    except (TypeError, ValueError):
        raise InputError(f"{feature}: oldest_ma = {value!r} is not a number") from None
    if not age >= 0.0:
        raise InputError(f"{feature}: oldest_ma = {value!r}: an age is in Ma, positive into the past")
    return age


def _cut_pieces(feature: Feature, cut: Cut, outlines: Outlines | None) -> Iterator[Piece]:
    assert outlines is not None
    own = _oldest(feature)
    for number, (outline, shape) in enumerate(cut, start=1):
        if outline < 0:
            yield Piece(feature, number, None, "", own, shape)
        else:
            its = outlines.outlines[outline]
            yield Piece(feature, number, its.plate, "outlines", min(own, its.oldest_ma), shape)


def _unknown_plates(pieces: Sequence[Piece], circuit: Circuit) -> Iterator[Finding]:
    known = set(circuit.plates)
    lost: dict[str, list[Piece]] = {}
    for piece in pieces:
        if piece.plate is not None and piece.plate not in known:
            lost.setdefault(piece.plate, []).append(piece)
    for label, its in lost.items():
        more = f" ({len(its)} features)" if len(its) > 1 else ""
        what = f"plate {label!r} is not in the history{more}"
        place = Place(str(its[0].feature))
        yield Finding("warning", "unknown plate", place, what, remedy=did_you_mean(label, known))


def _statuses(pieces: Sequence[Piece], job: LineJob) -> NDArray[np.int8]:
    ages = np.array(job.ages)
    codes = job.circuit.codes([piece.plate or "" for piece in pieces])
    shape = (len(pieces), len(ages))
    _, status, _ = job.circuit.find(np.repeat(codes, len(ages)), np.tile(ages, len(pieces)))
    fault = np.array([piece.fault for piece in pieces], dtype=np.int8)[:, np.newaxis]
    oldest = np.array([piece.oldest_ma for piece in pieces])[:, np.newaxis]
    fault = np.where((fault == REACHED) & (ages > oldest), NOT_FORMED, fault)
    return np.where(fault != REACHED, fault, status.reshape(shape)).astype(np.int8)


# ---- from pieces to geometries ----


def _blocks(pieces: Sequence[Piece], ages: int) -> Iterator[Sequence[Piece]]:
    block: list[Piece] = []
    size = 0
    for piece in pieces:
        block.append(piece)
        size += ages * sum(len(path) for path in piece.shape.paths()) if piece.shape else 0
        if size > AT_ONCE or len(block) >= AT_ONCE:
            yield block
            block, size = [], 0
    if block:
        yield block


def _densified(path: Path, closed: bool, longest: float, latitudes: Latitudes) -> Path:
    """Vertices along great circles so that no edge is longer than `longest`, radians."""
    places = path.vectors(latitudes)
    if closed:
        places = np.concatenate([places, places[:1]])
    if not len(places) or float(angular_distance(places[:-1], places[1:]).max(initial=0.0)) <= longest:
        return path
    dense, owner = densified_arcs(places, longest)
    lat, lon = lat_lon(dense)
    lat = np.array(latitudes.outward(lat))
    first = np.searchsorted(owner, np.arange(len(path)))
    lat[first], lon[first] = path.lat_deg, path.lon_deg
    end = -1 if closed else None
    return Path(lat[:end], lon[:end])


class _Drawing:
    """Some pieces at all ages: their vertices moved at once, and from them one geometry at a time."""

    def __init__(self, pieces: Sequence[Piece], job: LineJob) -> None:
        self.latitudes = job.latitudes
        self.shapes: list[Shape | None] = []
        self.paths: list[list[list[int]]] = []
        longest = np.deg2rad(job.longest_deg)
        paths: list[Path] = []
        closed: list[bool] = []
        codes = job.circuit.codes([piece.plate or "" for piece in pieces]).tolist()
        code_of: list[int] = []
        for piece, code in zip(pieces, codes, strict=True):
            shape = piece.shape if piece.fault == REACHED else None
            self.shapes.append(shape)
            numbers: list[list[int]] = []
            for part in shape.parts if shape is not None else ():
                numbers.append(list(range(len(paths), len(paths) + len(part))))
                ring = shape is not None and shape.dimension == 2
                drawn = shape is not None and shape.dimension > 0
                paths += [_densified(p, ring, longest, job.latitudes) if drawn else p for p in part]
                closed += [ring] * len(part)
                code_of += [code] * len(part)
            self.paths.append(numbers)
        self.ends = np.cumsum([0, *(len(path) for path in paths)])
        self.large: dict[int, bool] = {}
        self.whole = paths
        if paths:
            self._move(paths, closed, code_of, job)

    def _move(self, paths: list[Path], closed: list[bool], codes: list[int], job: LineJob) -> None:
        """Places (ages, vertices, 2), longitude first, and what each path needs at each age."""
        lat = np.concatenate([path.lat_deg for path in paths])
        lon = np.concatenate([path.lon_deg for path in paths])
        per_vertex = np.repeat(np.array(codes), [len(path) for path in paths])
        moved = move_common(job.circuit, Points(lat, lon, per_vertex, job.latitudes), np.array(job.ages))
        self.places = np.stack([moved.lon_deg.T, moved.lat_deg.T], axis=-1).round(DECIMALS) + 0.0
        self.places[..., 0] = wrap_longitude(self.places[..., 0])
        after = np.arange(1, len(lat) + 1)
        last = self.ends[1:] - 1
        after[last] = np.where(closed, self.ends[:-1], last)
        x, y = self.places[..., 0], self.places[..., 1]
        with np.errstate(invalid="ignore"):
            odd = (np.abs(x[:, after] - x) >= 180.0) | (np.abs(y) == 90.0)
        starts = self.ends[:-1]
        self.to_cut = np.logical_or.reduceat(odd, starts, axis=1)
        first = np.repeat(starts, np.diff(self.ends))
        across, beyond = x - x[:, first], x[:, after] - x[:, first]
        twice = across * (y[:, after] - y[:, first]) - beyond * (y - y[:, first])
        self.clockwise = np.add.reduceat(twice, starts, axis=1) <= 0.0

    def geometry(self, number: int, k: int) -> Geometry:
        """The geometry of a piece at the age with number k."""
        shape = self.shapes[number]
        assert shape is not None
        parts = self.paths[number]
        if shape.dimension == 0:
            points = self._places(parts[0][0], k).tolist()
            return _geometry("Point", points, shape.many)
        if shape.dimension == 1:
            lines = [line for (path,) in parts for line in self._lines(path, k)]
            return _geometry("LineString", lines, shape.many)
        polygons = [polygon for part in parts for polygon in self._polygons(part, k)]
        return _geometry("Polygon", polygons, shape.many)

    def _places(self, path: int, k: int) -> Floats:
        places: Floats = self.places[k, self.ends[path] : self.ends[path + 1]]
        return places

    def _lines(self, path: int, k: int) -> list[Any]:
        places = self._places(path, k)
        if not self.to_cut[k, path]:
            return [places.tolist()]
        return [line.tolist() for line in cut_line(places, self.latitudes)]

    def _polygons(self, part: list[int], k: int) -> list[Any]:
        rings = [self._places(path, k) for path in part]
        outer = part[0]
        fits = not self.clockwise[k, outer] and all(self.clockwise[k, hole] for hole in part[1:])
        if fits and not self.to_cut[k, part].any():
            return [[_closed(ring) for ring in rings]]
        if outer not in self.large:
            area = self.whole[outer].ring(self.latitudes).area_sr()
            self.large[outer] = area > LARGE_SR
        cut = cut_rings(rings, self.large[outer], self.latitudes)
        # rounding may leave nothing of a polygon of a few micrometres; it stays as it is
        whole = [[[_closed(ring) for ring in rings]]]
        return [[ring.tolist() for ring in polygon] for polygon in cut] or whole[0]


def _closed(ring: Floats) -> list[Any]:
    places: list[Any] = ring.tolist()
    return [*places, places[0]]


def _geometry(kind: str, members: list[Any], many: bool) -> Geometry:
    if many or len(members) != 1:
        return {"type": f"Multi{kind}", "coordinates": members}
    return {"type": kind, "coordinates": members[0]}
