"""Shared vocabulary of the tests: points, rotations and small histories, drawn by hypothesis.

Beside every drawn history stands an oracle: scipy's Rotation and Slerp, fed with the rows as they
are printed, which shares no code with the package. Distances are metres on a sphere of `R_M`.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, replace
from functools import cache

import numpy as np
from hypothesis import HealthCheck, settings
from hypothesis import strategies as st
from scipy.spatial.transform import Rotation, Slerp

from restore.history.conventions import Table
from restore.history.rows import Row
from restore.history.store import History

settings.register_profile(
    "oncewhere",
    derandomize=True,
    deadline=None,
    database=None,
    max_examples=50,
    suppress_health_check=[HealthCheck.too_slow],
)
settings.load_profile("oncewhere")

R_M = 6_371_008.8
FASTEST_RAD_PER_MYR = 0.05
MOST_RAD_PER_STAGE = 1.0
HALF_TURN = math.pi


def assert_within(measured: object, bar: float, what: str = "") -> None:
    """Assert that every measured value is at most `bar` in size; NaN is not."""
    worst = float(np.max(np.abs(np.asarray(measured, dtype=np.float64)), initial=0.0))
    assert worst <= bar, f"{what} measured {worst:.3g}, bar {bar:.3g}".strip()


# ---- points ----


@cache
def latitudes() -> st.SearchStrategy[float]:
    """Latitudes in degrees, poles and equator often among them."""
    special = [90.0, -90.0, 0.0, -0.0, 89.999999999, -89.999999999, 1e-12, 45.0]
    return st.one_of(st.sampled_from(special), st.floats(-90.0, 90.0))


@cache
def longitudes() -> st.SearchStrategy[float]:
    """Longitudes in [-180, 180), degrees, both sides of the date line often among them."""
    edge = float(np.nextafter(180.0, 0.0))
    special = [-180.0, edge, -edge, 0.0, -0.0, 90.0, -90.0, 1e-12]
    return st.one_of(st.sampled_from(special), st.floats(-180.0, edge))


def vector_of(lat_deg: float, lon_deg: float) -> np.ndarray:
    """The unit vector of a place, by the standard library."""
    lat, lon = math.radians(lat_deg), math.radians(lon_deg)
    level = math.cos(lat)
    return np.array([level * math.cos(lon), level * math.sin(lon), math.sin(lat)])


def place_of(vector: np.ndarray) -> tuple[float, float]:
    """Latitude and longitude, degrees, of a vector, by the standard library."""
    x, y, z = (float(c) for c in vector)
    return math.degrees(math.atan2(z, math.hypot(x, y))), math.degrees(math.atan2(y, x))


@cache
def unit_vectors() -> st.SearchStrategy[np.ndarray]:
    """Unit vectors (3,), the six ends of the axes often among them."""
    axes = st.sampled_from([s * e for e in np.eye(3) for s in (1.0, -1.0)])
    return st.one_of(axes, st.builds(vector_of, latitudes(), longitudes()))


def metres_apart(one: np.ndarray, other: np.ndarray) -> np.ndarray:
    """Distance on the globe between unit vectors that lie close together: the chord, in metres."""
    return np.linalg.norm(np.asarray(one) - np.asarray(other), axis=-1) * R_M


# ---- rotations ----


@cache
def angles(most: float = HALF_TURN) -> st.SearchStrategy[float]:
    """Angles in radians from 1e-12 to `most`, evenly in their logarithm; 0 and `most` often."""
    spread = st.floats(-12.0, math.log10(most)).map(lambda x: min(10.0**x, most))
    return st.one_of(st.just(0.0), st.just(most), spread, st.floats(0.0, most))


@cache
def rotation_vectors(most: float = HALF_TURN) -> st.SearchStrategy[np.ndarray]:
    """Rotation vectors (3,), radians: zero, tiny and half turns often among them."""
    return st.builds(lambda axis, angle: axis * angle, unit_vectors(), angles(most))


def quaternion_of(vector: np.ndarray) -> np.ndarray:
    """The unit quaternion, scalar first, of a rotation vector, by scipy."""
    return Rotation.from_rotvec(vector).as_quat(scalar_first=True)


@cache
def quaternions() -> st.SearchStrategy[np.ndarray]:
    """Unit quaternions (4,), scalar first, of either sign; exact half turns often among them."""
    units = st.sampled_from([s * e for e in np.eye(4) for s in (1.0, -1.0)])
    turned = rotation_vectors().map(quaternion_of)
    return st.one_of(units, turned, turned.map(lambda q: -q))


def quaternions_apart(one: np.ndarray, other: np.ndarray) -> np.ndarray:
    """Angle in radians between rotations that lie close together; q and -q are one rotation."""
    one, other = np.asarray(one), np.asarray(other)
    same = np.linalg.norm(one - other, axis=-1)
    opposite = np.linalg.norm(one + other, axis=-1)
    return 2.0 * np.minimum(same, opposite)


def random_quaternions(seed: int, count: int) -> np.ndarray:
    """Seeded quaternions (count, 4), evenly spread over all rotations."""
    q = np.random.default_rng(seed).normal(size=(count, 4))
    return q / np.linalg.norm(q, axis=1, keepdims=True)


def scipy_of(wxyz: np.ndarray) -> Rotation:
    """scipy's rotation of quaternions that are scalar first."""
    return Rotation.from_quat(np.asarray(wxyz).reshape(-1, 4), scalar_first=True)


# ---- rows ----


def row_of(
    plate: str,
    relative_to: str,
    age_ma: float,
    turn: Rotation,
    covariance: np.ndarray | None = None,
    table: int = 0,
) -> Row:
    """A row that holds a rotation, as pole and angle in degrees."""
    vector = turn.as_rotvec()
    size = float(np.linalg.norm(vector))
    lat, lon = place_of(vector) if size else (0.0, 0.0)
    angle = math.degrees(size)
    return Row(plate, relative_to, age_ma, lat, lon, angle, covariance, table=table)


def turn_of(row: Row) -> Rotation:
    """The rotation that a row prints, by scipy."""
    if row.angle_deg == 0.0:
        return Rotation.identity()
    axis = vector_of(row.pole_lat_deg, row.pole_lon_deg)
    return Rotation.from_rotvec(math.radians(row.angle_deg) * axis)


def turned_round(row: Row) -> Row:
    """The same knowledge listed the other way round: inverse rotation, covariance A C A^T."""
    turn = turn_of(row)
    covariance = row.covariance
    if covariance is not None:
        matrix = turn.as_matrix()
        covariance = matrix @ covariance @ matrix.T
        covariance = 0.5 * (covariance + covariance.T)
    angle = -row.angle_deg if row.angle_deg else 0.0
    return replace(
        row, plate=row.relative_to, relative_to=row.plate, angle_deg=angle, covariance=covariance
    )


def perturbed(row: Row, small: np.ndarray) -> Row:
    """The row with a small rotation that acts first: `A expm([u]x)`."""
    turn = turn_of(row) * Rotation.from_rotvec(small)
    return row_of(row.plate, row.relative_to, row.age_ma, turn, row.covariance, row.table)


# ---- small histories ----


@dataclass(frozen=True)
class Leg:
    """A span of ages in which one path of (plate, relative_to, forward) leads to the frame."""

    younger_ma: float
    older_ma: float
    path: tuple[tuple[str, str, bool], ...]


@dataclass(frozen=True)
class Case:
    """A small history, the plate and frame it is about, and the paths between them by age."""

    rows: tuple[Row, ...]
    plate: str
    frame: str
    legs: tuple[Leg, ...]
    from_present: bool

    @property
    def oldest_ma(self) -> float:
        """The oldest age at which the plate is tied to the frame."""
        return self.legs[-1].older_ma

    def history(self) -> History:
        """The history, through the package's own door."""
        return History.from_rows(self.rows, (Table(from_present=self.from_present),))

    def with_row(self, number: int, row: Row) -> Case:
        """The same history with another row in one place."""
        rows = list(self.rows)
        rows[number] = row
        return replace(self, rows=tuple(rows))

    def path(self, age_ma: float) -> tuple[tuple[str, str, bool], ...]:
        """The path at an age; at a shared age the younger leg's."""
        return next(leg.path for leg in self.legs if leg.younger_ma <= age_ma <= leg.older_ma)

    def pair(self, plate: str, relative_to: str) -> tuple[np.ndarray, Rotation]:
        """Ages and rotations of a pair, the zero row at 0 Ma included."""
        rows = [r for r in self.rows if (r.plate, r.relative_to) == (plate, relative_to)]
        rows.sort(key=lambda r: r.age_ma)
        ages, turns = [r.age_ma for r in rows], [turn_of(r) for r in rows]
        if self.from_present and ages[0] > 0.0:
            ages, turns = [0.0, *ages], [Rotation.identity(), *turns]
        return np.array(ages), Rotation.concatenate(turns)

    def link(self, plate: str, relative_to: str, age_ma: float) -> Rotation:
        """One pair's rotation at an age, by scipy's Slerp."""
        ages, turns = self.pair(plate, relative_to)
        return turns[0] if len(ages) == 1 else Slerp(ages, turns)(age_ma)

    def rotation(self, age_ma: float) -> Rotation:
        """The plate's rotation relative to the frame, today to an age, by scipy."""
        total = Rotation.identity()
        for plate, relative_to, forward in self.path(age_ma):
            link = self.link(plate, relative_to, age_ma)
            total = (link if forward else link.inv()) * total
        return total

    def row_ages(self) -> list[float]:
        """Today, and every row's age at which the plate is tied to the frame."""
        return sorted({0.0, *(r.age_ma for r in self.rows if r.age_ma <= self.oldest_ma)})


@cache
def covariances() -> st.SearchStrategy[np.ndarray]:
    """Covariances (3, 3), rad^2, of some kilometres, positive definite and far from isotropic."""

    def build(seed: int) -> np.ndarray:
        random = np.random.default_rng(seed)
        root = random.uniform(-1.0, 1.0, (3, 3))
        matrix = root @ root.T + 0.05 * np.eye(3)
        return 0.5 * (matrix + matrix.T) * (10.0 ** random.uniform(2.7, 4.3) / R_M) ** 2

    return st.integers(0, 10_000).map(build)


@cache
def gaps_myr() -> st.SearchStrategy[float]:
    """Times between rows, Myr: irregular, and whole numbers so that pairs share ages."""
    return st.one_of(st.integers(1, 20).map(float), st.floats(0.3, 40.0))


@st.composite
def tracks(
    draw: st.DrawFn, plate: str, relative_to: str, start_ma: float = 0.0, errors: bool = False
) -> list[Row]:
    """The rows of one pair: the first at `start_ma`, then one to four at irregular ages.

    No stage is faster than 0.05 rad/Myr (three times today's fastest plate) or longer than 1 rad.
    """
    turn, age = Rotation.identity(), start_ma
    if start_ma > 0.0:
        turn = Rotation.from_rotvec(draw(rotation_vectors(1.0)))
    rows = [row_of(plate, relative_to, age, turn, _drawn(draw, errors and start_ma > 0.0))]
    for _ in range(draw(st.integers(1, 4))):
        gap = draw(gaps_myr())
        most = min(MOST_RAD_PER_STAGE, FASTEST_RAD_PER_MYR * gap)
        stage = Rotation.from_rotvec(most * draw(rotation_vectors(1.0)))
        turn, age = turn * stage, age + gap
        rows.append(row_of(plate, relative_to, age, turn, _drawn(draw, errors)))
    return rows


def _drawn(draw: st.DrawFn, errors: bool) -> np.ndarray | None:
    return draw(covariances()) if errors else None


@st.composite
def chain_cases(draw: st.DrawFn, most_links: int = 6, errors: bool = False, least_links: int = 1) -> Case:
    """A chain of links p0 > p1 > ..., each pair listed in one direction or the other."""
    count = draw(st.integers(least_links, most_links))
    rows: list[Row] = []
    path = []
    oldest = math.inf
    for i in range(count):
        forward = draw(st.booleans())
        ends = (f"p{i}", f"p{i + 1}") if forward else (f"p{i + 1}", f"p{i}")
        track = draw(tracks(*ends, errors=errors))
        oldest = min(oldest, track[-1].age_ma)
        rows += track
        path.append((*ends, forward))
    return _case(draw, rows, f"p{count}", (Leg(0.0, oldest, tuple(path)),))


@st.composite
def partner_cases(draw: st.DrawFn, errors: bool = False) -> Case:
    """A plate that changes its partner from `a` to `b`, both tied to the frame; no jump there."""
    first = draw(tracks("p0", "a", errors=errors))
    change = first[-1].age_ma
    rows: list[Row] = []
    ties: dict[str, tuple[str, str, bool]] = {}
    for partner in ("a", "b"):
        forward = draw(st.booleans())
        ends = (partner, "frame") if forward else ("frame", partner)
        track = draw(tracks(*ends, errors=errors))
        if track[-1].age_ma <= change:
            turn = turn_of(track[-1]) * Rotation.from_rotvec(0.01 * draw(rotation_vectors(1.0)))
            end = change + draw(gaps_myr())
            track.append(row_of(*ends, end, turn, _drawn(draw, errors)))
        tied_to = track[-1].age_ma
        rows += track
        ties[partner] = (*ends, forward)
    known = Case(tuple(rows), "p0", "frame", (), False)
    to_frame = {}
    for name, (plate, relative_to, forward) in ties.items():
        link = known.link(plate, relative_to, change)
        to_frame[name] = link if forward else link.inv()
    joint = to_frame["b"].inv() * to_frame["a"] * turn_of(first[-1])
    second = draw(tracks("p0", "b", start_ma=change, errors=errors))
    back = turn_of(second[0]).inv()
    second = [row_of("p0", "b", r.age_ma, joint * back * turn_of(r), r.covariance) for r in second]
    rows += first + second
    legs = (
        Leg(0.0, change, (("p0", "a", True), ties["a"])),
        Leg(change, min(tied_to, second[-1].age_ma), (("p0", "b", True), ties["b"])),
    )
    return _case(draw, rows, "frame", legs, from_present=False)


def _case(
    draw: st.DrawFn,
    rows: list[Row],
    frame: str,
    legs: tuple[Leg, ...],
    from_present: bool | None = None,
) -> Case:
    """The case, its zero rows written or implied, its rows in any order that keeps pairs sorted."""
    if from_present is None:
        from_present = draw(st.booleans())
    if from_present:
        rows = [row for row in rows if row.age_ma > 0.0]
    if draw(st.booleans()):
        rows = sorted(rows, key=lambda row: row.age_ma)
    return Case(tuple(rows), "p0", frame, legs, from_present)


def cases(most_links: int = 6, errors: bool = False) -> st.SearchStrategy[Case]:
    """Chains and partner changes."""
    return st.one_of(chain_cases(most_links, errors), partner_cases(errors))


def times_in(case: Case) -> st.SearchStrategy[float]:
    """Ages at which the plate is tied to the frame: anywhere, or exactly at a row."""
    anywhere = st.floats(0.0, 1.0).map(lambda f: min(f * case.oldest_ma, case.oldest_ma))
    return st.one_of(st.sampled_from(case.row_ages()), anywhere)


@st.composite
def dated_cases(draw: st.DrawFn, most_links: int = 6, errors: bool = False) -> tuple[Case, float]:
    """A small history and an age at which it has an answer."""
    case = draw(cases(most_links, errors))
    return case, draw(times_in(case))
