"""Trails: the line that a hotspot, still or moving in some frame, leaves on a plate."""

from __future__ import annotations

import os
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass, field
from typing import Any

import numpy as np
from numpy.typing import NDArray

from restore.errors import InputError, TableError, raise_faults
from restore.files.columns import ColumnTable, read_columns
from restore.files.delimited import Layout
from restore.findings import Finding, did_you_mean
from restore.geometry.latitudes import Latitudes
from restore.geometry.sphere import EARTH_RADIUS_KM, Floats, angular_distance, lat_lon, unit_vectors
from restore.history.circuit import REACHED, SAYS, Circuit
from restore.history.store import History
from restore.history.tracked import Tracked
from restore.motion.ages import parse_ages
from restore.motion.flowlines import ELLIPSE
from restore.motion.nearest import Curve

SHOWN = ("crust", "passage")
NO_PATH = len(SAYS)
STATUSES = (*SAYS, "outside the hotspot's path")


@dataclass(frozen=True, eq=False)
class Hotspots:
    """Hotspots `(n,)` in a frame, degrees; `paths`: name -> ages (Ma, rising), latitudes, longitudes.

    A hotspot with a path moves along great circles between its places; one without stands still.
    """

    hotspot: list[str]
    lat_deg: Floats
    lon_deg: Floats
    paths: Mapping[str, tuple[Floats, Floats, Floats]] = field(default_factory=dict)
    own: Mapping[str, list[str]] = field(default_factory=dict)

    @classmethod
    def read(
        cls,
        path: str | os.PathLike[str],
        paths: str | os.PathLike[str] | None = None,
        layout: Layout | None = None,
    ) -> Hotspots:
        """Read `hotspot, lat_deg, lon_deg`, and `paths` of `hotspot, age_ma, lat_deg, lon_deg`.

        Raises TableError, one line per fault: a hotspot without a name or named twice, a path of a hotspot
        that is not there or with an age twice.
        """
        names = ("lat_deg", "lon_deg")
        table = read_columns(path, names, ("hotspot",), ("hotspot", *names), layout)
        labels = table.texts["hotspot"]
        findings = [
            Finding("error", "twice", table.place(row), f"hotspot {label!r} stands twice", remedy="name each once")
            for row, label in enumerate(labels)
            if label in labels[:row]
        ]  # fmt: skip
        raise_faults(TableError, findings)
        moving = {} if paths is None else _read_paths(paths, labels)
        return cls(labels, table.numbers["lat_deg"], table.numbers["lon_deg"], moving, table.own)

    @classmethod
    def of(cls, columns: Mapping[str, Sequence[Any]]) -> Hotspots:
        """From columns in memory, all still; raises InputError for a column that is missing."""
        for name in ("hotspot", "lat_deg", "lon_deg"):
            if name not in columns:
                had = ", ".join(map(str, columns))
                raise InputError(f"column {name!r} is missing; the columns are {had}")
        lat, lon = (np.asarray(columns[name], dtype=np.float64) for name in ("lat_deg", "lon_deg"))
        return cls([str(name) for name in columns["hotspot"]], lat, lon)

    def places(self, number: int, ages: Floats, latitudes: Latitudes) -> Floats:
        """Where a hotspot stood in the frame at each age: unit vectors `(k, 3)`, NaN outside its path."""
        path = self.paths.get(self.hotspot[number])
        if path is None:
            place = unit_vectors(latitudes.inward(self.lat_deg[number]), self.lon_deg[number])
            return np.broadcast_to(place, (len(ages), 3))
        known, lat, lon = path
        nodes = unit_vectors(latitudes.inward(lat), lon)
        return _along_great_circles(known, nodes, ages)

    def own_ages(self, number: int) -> Floats:
        """The ages at which a hotspot's path turns, Ma."""
        path = self.paths.get(self.hotspot[number])
        return np.zeros(0) if path is None else path[0]


def _read_paths(
    path: str | os.PathLike[str], labels: list[str]
) -> dict[str, tuple[Floats, Floats, Floats]]:
    names = ("age_ma", "lat_deg", "lon_deg")
    table = read_columns(path, names, ("hotspot",), ("hotspot", *names))
    rows: dict[str, list[int]] = {}
    findings = []
    for row, label in enumerate(table.texts["hotspot"]):
        if label not in labels:
            hint = did_you_mean(label, labels)
            findings.append(
                Finding("error", "hotspot", table.place(row), f"no hotspot {label!r}", remedy=hint)
            )
        age = table.numbers["age_ma"][row]
        if any(table.numbers["age_ma"][other] == age for other in rows.get(label, ())):
            what = f"hotspot {label!r} has two places at {age:g} Ma"
            findings.append(Finding("error", "twice", table.place(row), what, remedy="keep one"))
        rows.setdefault(label, []).append(row)
    raise_faults(TableError, findings)
    paths = {}
    for label, numbers in rows.items():
        order = sorted(numbers, key=lambda n: float(table.numbers["age_ma"][n]))
        age, lat, lon = (table.numbers[name][order] for name in names)
        paths[label] = (age, lat, lon)
    return paths


def _along_great_circles(known: Floats, nodes: Floats, ages: Floats) -> Floats:
    """Places between nodes `(m, 3)` at known ages, at constant speed along great circles."""
    before = np.clip(np.searchsorted(known, ages, side="right") - 1, 0, max(len(known) - 2, 0))
    after = np.minimum(before + 1, len(known) - 1)
    myr = known[after] - known[before]
    fraction = np.divide(ages - known[before], myr, out=np.zeros(len(ages)), where=myr > 0.0)
    a, b = nodes[before], nodes[after]
    arc = angular_distance(a, b)[:, np.newaxis]
    still = arc == 0.0
    sine = np.where(still, 1.0, np.sin(arc))
    f = fraction[:, np.newaxis]
    mixed = np.where(still, a, (np.sin((1.0 - f) * arc) * a + np.sin(f * arc) * b) / sine)
    inside = (ages >= known[0]) & (ages <= known[-1])
    return np.where(inside[:, np.newaxis], mixed, np.nan)


@dataclass(frozen=True, eq=False)
class Trails:
    """Trails of n hotspots at k ages (Ma): degrees `(n, k)`, today's places on the plate (`crust`) or,
    in the frame, of that crust that today lies over the hotspot (`passage`).

    `axes` `(4, n, k)`: 95 % ellipse (km, km, degrees) and degrees of freedom, error of rows only, NaN
    where not known. `status` numbers into `STATUSES`.
    """

    plate: str
    frame: str
    shown: str
    hotspots: Hotspots
    age_ma: Floats
    lat_deg: Floats
    lon_deg: Floats
    axes: Floats
    status: NDArray[np.int8]

    def columns(self) -> dict[str, Any]:
        """Long form: by hotspot, then by age."""
        steps = len(self.age_ma)
        count = self.lat_deg.size
        names = [name for name in self.hotspots.hotspot for _ in range(steps)]
        columns: dict[str, Any] = {
            "hotspot": names,
            "plate": [self.plate] * count,
            "age_ma": np.tile(self.age_ma, len(self.hotspots.hotspot)),
            "lat_deg": self.lat_deg.ravel(),
            "lon_deg": self.lon_deg.ravel(),
        }
        columns |= {name: axis.ravel() for name, axis in zip(ELLIPSE, self.axes, strict=True)}
        columns["errors"] = np.where(np.isnan(columns[ELLIPSE[0]]), "", "rows only").tolist()
        columns["status"] = [STATUSES[code] for code in self.status.ravel().tolist()]
        columns["shown"] = [self.shown] * count
        for name, values in self.hotspots.own.items():
            columns[name if name not in columns else f"own_{name}"] = [
                value for value in values for _ in range(steps)
            ]
        return columns


class TrailMaker:
    """Trails on one plate, of hotspots in the Circuit's frame: x(t) = R(t)^-1 s(t).

    `errors`: whether ellipses are wanted; True only if an error of the rows is known.
    """

    def __init__(
        self,
        history: History,
        plate: str,
        frame: str,
        latitudes: Latitudes | None = None,
        radius_km: float = EARTH_RADIUS_KM,
        beyond: str = "refuse",
    ) -> None:
        if plate == frame:
            raise InputError(f"plate and frame are both {plate!r}: nothing moves over a hotspot there")
        self.history, self.plate, self.radius_km = history, plate, radius_km
        self.circuit = Circuit(history, frame, beyond)
        self.circuit.covered(plate)
        self.latitudes = latitudes or Latitudes()
        self.row_errors = history.row_errors()
        self.errors = bool(np.any(self.row_errors.known & (history.rows.age_ma > 0.0)))

    def make(self, hotspots: Hotspots, ages: str | float | Iterable[float], shown: str = "crust") -> Trails:
        """Trails at ages in Ma.

        Raises InputError for ages at fault or another `shown`.
        """
        if shown not in SHOWN:
            raise InputError(f"shown = {shown!r}: must be one of {', '.join(SHOWN)}")
        asked = parse_ages(ages)
        if asked is None:
            raise InputError("ages 'own': trails need ages in Ma, such as 0:80:5")
        age = np.unique(np.array(asked))
        shape = (len(hotspots.hotspot), len(age))
        lat, lon = np.full(shape, np.nan), np.full(shape, np.nan)
        axes = np.full((4, *shape), np.nan)
        status = np.zeros(shape, dtype=np.int8)
        turn, reached = self._turns(age, shown)
        spread = turn.spread(self.row_errors) if self.errors else None
        for number in range(shape[0]):
            at = np.zeros(len(age)) if shown == "passage" else age
            place = hotspots.places(number, at, self.latitudes)
            on_path = ~np.isnan(place[:, 0])
            status[number] = np.where(reached != REACHED, reached, np.where(on_path, REACHED, NO_PATH))
            moved = turn.apply(place)
            its_lat, its_lon = lat_lon(moved)
            good = status[number] == REACHED
            lat[number] = np.where(good, self.latitudes.outward(its_lat), np.nan)
            lon[number] = np.where(good, its_lon, np.nan)
            for k in np.flatnonzero(good) if spread is not None else ():
                assert spread is not None
                ellipse, dof = spread.ellipse(int(k), moved[k : k + 1], self.radius_km)
                finite = np.where(np.isfinite(dof) & ~np.isnan(ellipse.major_km), dof, np.nan)
                axes[:, number, k] = [axis[0] for axis in (*ellipse, finite)]
        return Trails(self.plate, self.circuit.frame, shown, hotspots, age, lat, lon, axes, status)

    def _turns(self, ages: Floats, shown: str) -> tuple[Tracked, NDArray[np.int8]]:
        found = self.circuit.rotations(self.plate, ages)
        turn = Tracked.of(found, self.errors)
        # of a passage: the crust that lies over the hotspot today has the hotspot's own coordinates
        return (turn if shown == "passage" else turn.inverse()), found.status

    def curve(self, hotspots: Hotspots, number: int, oldest_ma: float) -> Curve:
        """One trail as a line fine enough for distances, from 0 Ma to an age inside the history.

        It ends where the hotspot's path does. Raises DomainError (its leaves) beyond the history.
        """
        self.circuit.at(self.plate, oldest_ma)
        edges = self.circuit.row_ages(self.plate, 0.0, oldest_ma)
        turns = hotspots.own_ages(number)
        inside = turns[(turns > 0.0) & (turns < oldest_ma)]
        edges = np.unique(np.concatenate([[0.0], edges, inside, [oldest_ma]]))

        def at(ages: Floats) -> Floats:
            back = self.circuit.rotations(self.plate, ages).rotations.inverse()
            return back.apply(hotspots.places(number, ages, self.latitudes))

        return Curve.of(edges, at, self.radius_km)


def trails(
    hotspots: str | os.PathLike[str] | Mapping[str, Sequence[Any]] | Hotspots,
    history: History,
    plate: str,
    frame: str,
    ages: str | float | Iterable[float],
    *,
    shown: str = "crust",
    paths: str | os.PathLike[str] | None = None,
    latitudes: str = "as-given",
    radius_km: float = EARTH_RADIUS_KM,
    beyond: str = "refuse",
) -> Trails:
    """The lines that hotspots in a frame leave on a plate, at ages in Ma.

    `hotspots`: a table `hotspot, lat_deg, lon_deg` (degrees), the same columns in memory, or Hotspots; `paths`: where those that move
    stood, `hotspot, age_ma, lat_deg, lon_deg`. `shown`: `crust`, where the crust that passed over each
    lies today, or `passage`, the path of the crust that today lies over it. Raises TableError or
    InputError for what is at fault, UnknownPlateError for an unknown label.
    """
    if isinstance(hotspots, Mapping):
        table = Hotspots.of(hotspots)
    else:
        table = hotspots if isinstance(hotspots, Hotspots) else Hotspots.read(hotspots, paths)
    maker = TrailMaker(history, plate, frame, Latitudes(latitudes), radius_km, beyond)
    return maker.make(table, ages, shown)


def compare_samples(
    maker: TrailMaker, hotspots: Hotspots, samples: ColumnTable, oldest_ma: float
) -> dict[str, Any]:
    """Dated samples against the trails: where and how old the trail is nearest to each.

    `samples`: see `read_samples`. Columns: `along_km`, distance along the trail from the hotspot, and
    `across_km`, off the trail, positive to the right looking towards older crust; `predicted_age_ma` of
    the trail there; `age_difference_myr`, the sample's age less the predicted one; `along_difference_km`,
    how much farther along the trail the sample lies than its own age says. NaN without an age. A sample
    whose nearest point is the old end of the trail has no predicted age: how far the trail goes was only a
    matter of what was asked. `age_difference_sigmas` counts the sample's own age sigma alone. Raises
    InputError if no trail is asked for, that is only one age.
    """
    if not oldest_ma > 0.0:
        raise InputError("ages: samples are held against a trail: ask for an age above 0")
    curves = {
        name: maker.curve(hotspots, number, oldest_ma) for number, name in enumerate(hotspots.hotspot)
    }
    count = len(samples)
    names = ("along_km", "across_km", "predicted_age_ma", "age_difference_myr", "along_difference_km")
    found = {name: np.full(count, np.nan) for name in names}
    points = unit_vectors(maker.latitudes.inward(samples.numbers["lat_deg"]), samples.numbers["lon_deg"])
    labels = samples.texts["hotspot"]
    nearest = [""] * count
    for name, curve in curves.items():
        foot = curve.nearest(points)
        mine = np.array([label in {name, ""} for label in labels], dtype=bool)
        better = mine & ~(np.abs(found["across_km"]) <= np.abs(foot.across_km))
        past = foot.age_ma >= curve.ages[-1] - 1e-9
        predicted = np.where(past, np.nan, foot.age_ma)
        age = samples.numbers["age_ma"]
        expected = np.interp(age, curve.ages, curve.along_km, left=np.nan, right=np.nan)
        values = (
            *(foot.along_km, foot.across_km, predicted, age - predicted),
            foot.along_km - expected,
        )
        for column, value in zip(names, values, strict=True):
            found[column] = np.where(better, value, found[column])
        nearest = [name if take else before for take, before in zip(better, nearest, strict=True)]
    columns: dict[str, Any] = {
        "sample": [text or str(row + 1) for row, text in enumerate(samples.texts["sample"])],
        "hotspot": nearest,
        "lat_deg": samples.numbers["lat_deg"],
        "lon_deg": samples.numbers["lon_deg"],
        "age_ma": samples.numbers["age_ma"],
        **found,
    }
    sigma = samples.numbers["age_sigma_myr"]
    with np.errstate(divide="ignore", invalid="ignore"):
        columns["age_difference_sigmas"] = np.where(
            sigma > 0.0, found["age_difference_myr"] / sigma, np.nan
        )
    ended = np.isnan(found["predicted_age_ma"]) & ~np.isnan(found["along_km"])
    columns["sample_note"] = [
        "nearest to the old end of the trail" if end else "" for end in ended.tolist()
    ]
    columns["errors"] = ["age of the sample only"] * count
    return {**columns, **{n: v for n, v in samples.own.items() if n not in columns}}


def read_samples(
    path: str | os.PathLike[str], hotspots: Hotspots, layout: Layout | None = None
) -> ColumnTable:
    """Read `lat_deg, lon_deg[, sample, hotspot, age_ma, age_sigma_myr]`; raises TableError."""
    numbers = ("lat_deg", "lon_deg", "age_ma", "age_sigma_myr")
    table = read_columns(path, numbers, ("sample", "hotspot"), ("lat_deg", "lon_deg"), layout)
    known = hotspots.hotspot
    findings = [
        Finding("error", "hotspot", table.place(row), f"no hotspot {label!r}", remedy=did_you_mean(label, known))
        for row, label in enumerate(table.texts["hotspot"])
        if label and label not in known
    ]  # fmt: skip
    raise_faults(TableError, findings)
    return table
