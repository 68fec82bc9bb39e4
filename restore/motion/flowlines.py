"""Flowlines: the paths along which two plates parted, one arm on each, with the rows' errors."""

from __future__ import annotations

import os
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass, field
from typing import Any

import numpy as np
from numpy.typing import NDArray

from restore.errors import InputError
from restore.geometry import so3
from restore.geometry.latitudes import Latitudes
from restore.geometry.sphere import (
    EARTH_RADIUS_KM,
    Floats,
    angular_distance,
    lat_lon,
    unit_vectors,
    wrap_longitude,
)
from restore.history.circuit import BLOCK, REACHED, SAYS, Circuit
from restore.history.store import History
from restore.history.tracked import PointSpread, Tracked
from restore.motion.ages import parse_ages
from restore.motion.half_stages import HalfStages
from restore.motion.ridge_points import Jump, RidgePoints, read_jumps
from restore.motion.shares import Shares

YOUNGER, NOT_FORMED = len(SAYS), len(SAYS) + 1
STATUSES = (*SAYS, "younger than its start", "crust not yet formed")
ELLIPSE = ("ellipse_major_km", "ellipse_minor_km", "ellipse_azimuth_deg", "ellipse_dof")


@dataclass(frozen=True, eq=False)
class Spreading:
    """Two plates that part, and how their flowlines are to be made and given.

    `circuit`: the chains to the second plate. `frame`: chains to the frame that positions are wanted in,
    None for present-day coordinates of each plate; `restored_ma`: the age at which they are wanted
    there, None for each crust's own age. `every_myr`: rows in between, for drawing.
    """

    circuit: Circuit
    first: str
    shares: Shares
    ages: tuple[float, ...]
    frame: Circuit | None = None
    restored_ma: float | None = None
    every_myr: float | None = None
    tolerance_m: float = 10.0
    latitudes: Latitudes = field(default_factory=Latitudes)
    radius_km: float = EARTH_RADIUS_KM
    errors: bool = True

    @classmethod
    def between(
        cls,
        history: History,
        between: tuple[str, str],
        ages: str | float | Iterable[float],
        share: float | Shares = 0.5,
        frame: str | None = None,
        beyond: str = "refuse",
        **more: Any,
    ) -> Spreading:
        """From a history and labels; `more`: the other fields.

        Raises InputError for ages, a share or a step at fault, UnknownPlateError for an unknown label.
        """
        asked = parse_ages(ages)
        if asked is None:
            raise InputError("ages 'own': flowlines need ages in Ma, such as 0:60:5")
        circuit = Circuit(history, between[1], beyond)
        circuit.covered(between[0])
        known = history.row_errors().known & (history.rows.age_ma > 0.0)
        more = {"errors": bool(np.any(known)), **more}
        frames = None if frame is None else Circuit(history, frame, beyond)
        return cls(circuit, between[0], Shares.of(share), asked, frames, **more)

    def __post_init__(self) -> None:
        if self.every_myr is not None and not self.every_myr > 0.0:
            raise InputError(f"every_myr = {self.every_myr:g}: must be above 0, in Myr")
        if self.restored_ma is not None and self.frame is None:
            raise InputError("an age to restore flowlines to needs a frame")

    @property
    def plates(self) -> tuple[str, str]:
        """The two plates, the first one first."""
        return self.first, self.circuit.frame

    def ages_of(self, starts: RidgePoints) -> tuple[Floats, NDArray[np.bool_]]:
        """All ages of the rows, rising, and which of them were asked."""
        asked = np.unique(np.array(self.ages))
        if self.every_myr is None:
            return asked, np.ones(len(asked), dtype=bool)
        count = int(np.floor(asked[-1] / self.every_myr + 1e-9))
        between = np.arange(count + 1) * self.every_myr
        begins = starts.age_ma[starts.age_ma <= asked[-1]]
        ages = np.unique(np.concatenate([asked, between[between <= asked[-1]], begins]))
        return ages, np.isin(ages, asked)

    def half_stages(self, youngest_ma: float, oldest_ma: float) -> HalfStages:
        """The mesh of half stages that reaches from a youngest to an oldest age, Ma."""
        if oldest_ma > youngest_ma:
            self.shares.check_covers(youngest_ma, oldest_ma)
        return HalfStages(
            self.circuit,
            self.first,
            self.shares,
            oldest_ma,
            self.tolerance_m,
            self.radius_km,
            self.errors,
        )


@dataclass(frozen=True, eq=False)
class Flowlines:
    """Both arms from n start points at k ages: degrees `(n, 2, k)`, the first plate's arm first.

    `axes`: major, minor, azimuth, degrees of freedom of the 95 % ellipse (km, degrees), error of rows
    only, NaN where not known. `status` numbers into `STATUSES`; `plate` `(n, 2, k)`, 0 or 1: the plate
    that carries the crust, another than it formed on where a ridge jump had it captured.
    """

    spreading: Spreading
    starts: RidgePoints
    age_ma: Floats
    asked: NDArray[np.bool_]
    lat_deg: Floats
    lon_deg: Floats
    axes: Floats
    status: NDArray[np.int8]
    plate: NDArray[np.int8]

    def states(self) -> list[str]:
        """The status of each row that was asked."""
        return [STATUSES[code] for code in self.status[:, :, self.asked].ravel().tolist()]

    def columns(self) -> dict[str, Any]:
        """Long form: by start point, plate and age. Densified rows without an answer are left out."""
        shape = self.lat_deg.shape
        steps = shape[-1]
        keep = (np.broadcast_to(self.asked, shape) | (self.status == REACHED)).ravel()
        labels = np.array(self.spreading.plates, dtype=object)
        formed = np.broadcast_to(labels[:, np.newaxis], shape).ravel()[keep]
        columns: dict[str, Any] = {
            "start": np.repeat(np.array(self.starts.start, dtype=object), 2 * steps)[keep].tolist(),
            "plate": labels[self.plate.ravel()[keep]].tolist(),
            "age_ma": np.broadcast_to(self.age_ma, shape).ravel()[keep],
            "lat_deg": self.lat_deg.ravel()[keep],
            "lon_deg": self.lon_deg.ravel()[keep],
            "asked": np.broadcast_to(self.asked, shape).ravel()[keep],
        }
        columns |= {name: axis.ravel()[keep] for name, axis in zip(ELLIPSE, self.axes, strict=True)}
        known = ~np.isnan(columns[ELLIPSE[0]])
        columns["errors"] = np.where(known, "rows only", "not known").tolist()
        columns["status"] = [STATUSES[code] for code in self.status.ravel()[keep].tolist()]
        columns["formed_on"] = formed.tolist()
        taken = dict.fromkeys(columns)
        for name, values in self.starts.own.items():
            while name in taken:
                name = f"own_{name}"
            taken[name] = None
            columns[name] = np.repeat(np.array(values, dtype=object), 2 * steps)[keep].tolist()
        return columns


def arms_of(
    spreading: Spreading, starts: RidgePoints, jumps: Mapping[str, Sequence[Jump]] | None = None
) -> Flowlines:
    """Both arms from start points on the ridge; see `flowlines`."""
    return FlowlineMaker(spreading, starts).make(starts, jumps)


def flowlines(
    points: str | os.PathLike[str] | Mapping[str, Sequence[Any]],
    history: History,
    between: tuple[str, str],
    ages: str | float | Iterable[float],
    *,
    share: float | Shares = 0.5,
    jumps: str | os.PathLike[str] | None = None,
    frame: str | None = None,
    restored_ma: float | None = None,
    every_myr: float | None = None,
    tolerance_m: float = 10.0,
    latitudes: str = "as-given",
    radius_km: float = EARTH_RADIUS_KM,
    beyond: str = "refuse",
) -> Flowlines:
    """The paths along which two plates parted, one arm on each, at ages in Ma.

    `points`: a delimited file, or columns in memory: `lat_deg`, `lon_deg` (degrees), and optionally
    `start`, `age_ma` with `on_plate` for an extinct ridge. `share`: the part of new crust that the first
    plate keeps, in [0, 1]. Positions are in present-day coordinates of each plate; with `frame` where
    the crust was in it at its own age, or at `restored_ma`. At its own age both arms begin at the start
    point; rows without an answer say why. Raises TableError or InputError if the table or the question
    is at fault, UnknownPlateError and the other DomainErrors where no chain joins the plates.
    """
    spreading = Spreading.between(
        history, between, ages, share, frame, beyond,
        restored_ma=restored_ma, every_myr=every_myr, tolerance_m=tolerance_m,
        latitudes=Latitudes(latitudes), radius_km=radius_km,
    )  # fmt: skip
    if isinstance(points, Mapping):
        columns = dict(points)
        lat, lon = columns.pop("lat_deg"), columns.pop("lon_deg")
        starts = RidgePoints.of(lat, lon, between, **columns)
    else:
        starts = RidgePoints.read(points, between)
    return arms_of(spreading, starts, None if jumps is None else read_jumps(jumps, starts, between))


class FlowlineMaker:
    """The stages of two plates, prepared once for many start points in parts."""

    def __init__(self, spreading: Spreading, starts: RidgePoints) -> None:
        self.spreading = spreading
        self.ages, self.asked = spreading.ages_of(starts)
        youngest = float(starts.age_ma.min()) if len(starts) else 0.0
        self.half = spreading.half_stages(youngest, float(self.ages[-1]))
        self.row_errors = spreading.circuit.history.row_errors()
        self._in_frame = self._frame_turns()

    def _frame_turns(self) -> tuple[tuple[Tracked, NDArray[np.int8]], ...] | None:
        frame, restored = self.spreading.frame, self.spreading.restored_ma
        if frame is None:
            return None
        ages = self.ages if restored is None else np.full(len(self.ages), restored)
        turns = []
        for plate in self.spreading.plates:
            found = frame.rotations(plate, ages)
            turns.append((Tracked.of(found, self.spreading.errors), found.status))
        return tuple(turns)

    def make(self, starts: RidgePoints, jumps: Mapping[str, Sequence[Jump]] | None = None) -> Flowlines:
        """Both arms of some start points; their ages are those of all that the maker was made for."""
        steps, count = len(self.ages), len(starts)
        lat, lon = (np.moveaxis(np.full((2, steps, count), np.nan), -1, 0) for _ in range(2))
        axes = np.moveaxis(np.full((4, 2, steps, count), np.nan), -1, 1)
        status = np.full((count, 2, steps), YOUNGER, dtype=np.int8)
        plate = np.broadcast_to(np.array([0, 1], dtype=np.int8)[:, np.newaxis], status.shape)
        result = Flowlines(
            self.spreading, starts, self.ages, self.asked, lat, lon, axes, status, plate.copy()
        )
        vectors = unit_vectors(self.spreading.latitudes.inward(starts.lat_deg), starts.lon_deg)
        keys = np.stack([starts.age_ma, (starts.on_first & (starts.age_ma > 0.0)).astype(float)], axis=-1)
        unique, member = np.unique(keys, axis=0, return_inverse=True)
        order = np.argsort(member.ravel(), kind="stable")
        ends = np.cumsum(np.bincount(member.ravel(), minlength=len(unique)))
        for number, (age, first) in enumerate(unique.tolist()):
            items = order[(ends[number - 1] if number else 0) : ends[number]]
            self._fill(result, items, vectors[items], age, bool(first), self.ages >= age)
        if self._in_frame is None:
            _keep_digits(result)
        for row, name in enumerate(starts.start):
            self._jump(result, row, (jumps or {}).get(name, ()))
        return result

    def _fill(
        self,
        result: Flowlines,
        items: NDArray[np.int64],
        vectors: Floats,
        start_ma: float,
        first: bool,
        here: NDArray[np.bool_],
    ) -> None:
        """Both arms of start points that share age and coordinates, at those ages that are `here`."""
        reach = self.half.reach(start_ma, first, self.ages[here])
        places = np.flatnonzero(here)
        for side in (0, 1):
            turn, state = self._given(reach.on[side], reach.status, side, places)
            _write(result, items, side, places, vectors, turn, state, self.row_errors)

    def _given(
        self, turn: Tracked, status: NDArray[np.int8], side: int, places: NDArray[np.int64]
    ) -> tuple[Tracked, NDArray[np.int8]]:
        """The rotations that lead to where positions are wanted."""
        if self._in_frame is None:
            return turn, status
        to_frame, its_status = self._in_frame[side]
        status = np.where(status == REACHED, its_status[places], status)
        restored = self.spreading.restored_ma
        if restored is not None:
            status = np.where(self.ages[places] < restored, NOT_FORMED, status)
        return to_frame[places] @ turn, status.astype(np.int8)

    def _jump(self, result: Flowlines, row: int, jumps: Sequence[Jump]) -> None:
        """Crust older than each jump, from the ridge point of that time."""
        item = np.array([row])
        origin = (
            float(result.starts.age_ma[row]),
            bool(result.starts.on_first[row]),
            result.starts.lat_deg[row],
            result.starts.lon_deg[row],
        )
        for jump in jumps:
            vector = self._vector(jump.lat_deg, jump.lon_deg)
            here = self.ages > jump.age_ma
            result.plate[row, :, here] = (0, 1)
            self._fill(result, item, vector, jump.age_ma, jump.on_first, here)
            if jump.captured_by and np.any(here):
                ended = self.half.reach(origin[0], origin[1], np.array([jump.age_ma]))
                left_off = [turn.apply(self._vector(*origin[2:])) for turn in ended.on]
                self._capture(result, row, jump, vector, left_off)
            origin = (jump.age_ma, jump.on_first, jump.lat_deg, jump.lon_deg)

    def _vector(self, lat_deg: float, lon_deg: float) -> Floats:
        return unit_vectors([self.spreading.latitudes.inward(lat_deg)], [lon_deg])

    def _capture(
        self, result: Flowlines, row: int, jump: Jump, vector: Floats, left_off: list[Floats]
    ) -> None:
        """Crust between the extinct ridge and the new one goes on with the plate that captured it."""
        captor = self.spreading.plates.index(jump.captured_by)
        other = 1 - captor
        restored = self.spreading.restored_ma
        if self._in_frame is not None and (restored is None or restored >= jump.age_ma):
            return
        here = self.ages > jump.age_ma
        reach = self.half.reach(jump.age_ma, jump.on_first, self.ages[here])
        begun = self.half.reach(jump.age_ma, jump.on_first, np.array([jump.age_ma]))
        origin = begun.on[other].apply(vector)
        width = angular_distance(origin, left_off[other])
        taken = angular_distance(origin, reach.on[other].apply(vector)) < width
        places = np.flatnonzero(here)[taken]
        if not len(places):
            return
        at_jump = self.half.at(np.array([jump.age_ma])).turn
        across = at_jump.inverse() if captor == 0 else at_jump
        turn, state = self._given(across @ reach.on[other][taken], reach.status[taken], captor, places)
        _write(result, np.array([row]), other, places, vector, turn, state, self.row_errors)
        result.plate[row, other, places] = captor


def _write(
    result: Flowlines,
    items: NDArray[np.int64],
    side: int,
    places: NDArray[np.int64],
    vectors: Floats,
    turn: Tracked,
    status: NDArray[np.int8],
    row_errors: Any,
) -> None:
    """Positions and ellipses of points turned by each of k rotations."""
    spreading = result.spreading
    spread = turn.spread(row_errors) if spreading.errors else None
    matrices = so3.matrices(turn.quaternions)
    result.status[items[:, np.newaxis], side, places] = status
    consecutive = len(items) > 0 and int(items[-1] - items[0]) + 1 == len(items)
    for at in range(0, len(items), BLOCK):
        some = items[at : at + BLOCK]
        where: Any = slice(int(some[0]), int(some[-1]) + 1) if consecutive else some
        start = vectors[at : at + BLOCK]
        moved = np.moveaxis(np.empty((3, len(some))), 0, -1)
        for k, place in enumerate(places.tolist()):
            if status[k] != REACHED:
                continue
            for i in range(3):
                component = moved[..., i]
                np.multiply(start[..., 0], matrices[k, i, 0], out=component)
                component += start[..., 1] * matrices[k, i, 1]
                component += start[..., 2] * matrices[k, i, 2]
            lat, lon = lat_lon(moved)
            result.lat_deg[where, side, place] = spreading.latitudes.outward(lat)
            result.lon_deg[where, side, place] = lon
            if spread is not None:
                _write_ellipse(result, (where, side, place), spread, k, moved)


def _write_ellipse(result: Flowlines, where: Any, spread: PointSpread, number: int, moved: Floats) -> None:
    shape, dof = spread.ellipse(number, moved, result.spreading.radius_km)
    for target, values in zip(result.axes, shape, strict=False):
        target[where] = values
    result.axes[3][where] = np.where(np.isfinite(dof) & ~np.isnan(shape.major_km), dof, np.nan)


def _keep_digits(result: Flowlines) -> None:
    """At its own age a start point is where it was given, to the last digit."""
    starts = result.starts
    own = (result.age_ma == starts.age_ma[:, np.newaxis])[:, np.newaxis, :]
    given = np.stack([starts.on_first, ~starts.on_first], axis=-1) | (starts.age_ma == 0.0)[:, np.newaxis]
    rows, sides, places = np.nonzero(own & given[:, :, np.newaxis] & (result.status == REACHED))
    result.lat_deg[rows, sides, places] = starts.lat_deg[rows]
    result.lon_deg[rows, sides, places] = wrap_longitude(starts.lon_deg[rows])
    if result.spreading.errors:
        # whatever the rows' errors are, they cancel there, which rounding does not know
        result.axes[:3, rows, sides, places] = 0.0
        result.axes[3, rows, sides, places] = np.nan
