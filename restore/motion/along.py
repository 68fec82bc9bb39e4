"""Along a flowline: rates and azimuths by stage, distances from the ridge, ages of the crust."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import ArrayLike

from restore.geometry import so3
from restore.geometry.sphere import Floats, compass_deg, cross, dot, length, tangent_frame, unit_vectors
from restore.history.circuit import REACHED
from restore.history.tracked import Tracked, row_variance
from restore.motion.flowlines import Spreading
from restore.motion.half_stages import HalfStages
from restore.motion.ridge_points import RidgePoints

STAGE_COLUMNS = (
    "younger_ma",
    "older_ma",
    "full_rate_mm_yr",
    "half_rate_mm_yr",
    "azimuth_deg",
    "full_rate_sigma_mm_yr",
    "half_rate_sigma_mm_yr",
    "azimuth_sigma_deg",
    "length_km",
    "distance_km",
)


@dataclass(frozen=True, eq=False)
class ArmStages:
    """One arm from one start point, stage by stage `(s,)`, and finer, node by node `(j,)`.

    Rates in mm/yr: `full_rate_mm_yr` at which the plates parted, and the part of it that this plate
    kept. `azimuth_deg`: the direction in which the plate moved away from the ridge, at the middle of
    the stage on the arm, in the plate's present-day coordinates; NaN where nothing moves. Sigmas are
    errors of rows only, NaN where not known. `length_km` of the arm in the stage; `distance_km` from
    the ridge, along the arm, at its older end. `node_ma`, `node_km`: distance by age.
    """

    start: str
    plate: str
    columns: dict[str, Floats]
    node_ma: Floats
    node_km: Floats

    def distance_at(self, ages: ArrayLike) -> Floats:
        """Distance from the ridge, km along the arm, of crust of each age (Ma); NaN beyond the arm."""
        asked = np.asarray(ages, dtype=np.float64)
        return np.interp(asked, self.node_ma, self.node_km, left=np.nan, right=np.nan)

    def age_at(self, distances_km: ArrayLike) -> Floats:
        """Age (Ma) of the crust at each distance from the ridge, km along the arm; NaN beyond it.

        Where the arm did not grow for a while the youngest age is given.
        """
        asked = np.asarray(distances_km, dtype=np.float64)
        ages: Floats = np.interp(asked, self.node_km, self.node_ma, left=np.nan, right=np.nan)
        at = np.minimum(np.searchsorted(self.node_km, asked, side="left"), len(self.node_km) - 1)
        return np.where(self.node_km[at] == asked, self.node_ma[at], ages)


def along(spreading: Spreading, starts: RidgePoints) -> list[ArmStages]:
    """Both arms of each start point, the first plate's first, from its age to the oldest asked.

    Stages are cut at the rows' ages. On a composed path rates are means over the stage of the speed
    `|s x b|` along small circles; their sigmas are those of the stage as one turn. Ages outside the
    history end an arm. Raises as `flowlines` does.
    """
    oldest = max(spreading.ages)
    youngest = float(starts.age_ma.min()) if len(starts) else 0.0
    half = spreading.half_stages(min(youngest, oldest), oldest)
    vectors = unit_vectors(spreading.latitudes.inward(starts.lat_deg), starts.lon_deg)
    found: list[ArmStages] = []
    meshes: dict[tuple[float, bool], _Mesh] = {}
    for row, name in enumerate(starts.start):
        key = float(starts.age_ma[row]), bool(starts.on_first[row])
        if key not in meshes:
            meshes[key] = _Mesh(spreading, half, *key, oldest)
        for side, plate in enumerate(spreading.plates):
            found.append(meshes[key].stages_of(name, plate, side, vectors[row]))
    return found


class _Mesh:
    """What all start points of one age share: nodes, stages, and the rotations at them."""

    def __init__(
        self, spreading: Spreading, half: HalfStages, start_ma: float, first: bool, oldest: float
    ) -> None:
        self.spreading = spreading
        self.errors = spreading.circuit.history.row_errors()
        inside = half.edges[(half.edges > start_ma) & (half.edges < oldest)]
        edges = np.unique(np.concatenate([[start_ma], inside, [max(oldest, start_ma)]]))
        nodes = half.nodes[(half.nodes > start_ma) & (half.nodes < oldest)]
        nodes = np.union1d(nodes, edges)
        reached = half.reach(start_ma, first, nodes).status == REACHED
        count = len(nodes) if np.all(reached) else int(np.argmin(reached))
        self.nodes = nodes[:count]
        self.edges = edges[np.isin(edges, self.nodes)]
        self.middles = 0.5 * (self.edges[1:] + self.edges[:-1])
        self.share = spreading.shares.at(0.5 * (self.nodes[1:] + self.nodes[:-1]))
        self.reach = half.reach(start_ma, first, self.nodes).on
        self.half_way = half.reach(start_ma, first, self.middles).on
        node_turns, edge_turns = half.at(self.nodes).turn, half.at(self.edges).turn
        self.steps = [_own_steps(node_turns, side) for side in (0, 1)]
        self.stages = [_own_steps(edge_turns, side) for side in (0, 1)]

    def stages_of(self, name: str, plate: str, side: int, start: Floats) -> ArmStages:
        """One arm of one start point."""
        radius = self.spreading.radius_km
        path = self.reach[side].apply(start)[:-1]
        steps = so3.logarithm(self.steps[side].quaternions)
        parted = length(cross(steps, path)) * radius
        kept = np.where(side == 0, self.share, 1.0 - self.share)
        distance = np.concatenate([[0.0], np.cumsum(kept * parted)])
        full = np.concatenate([[0.0], np.cumsum(parted)])
        at_edge = np.searchsorted(self.nodes, self.edges)
        myr = np.diff(self.edges)
        grown = np.diff(distance[at_edge])
        rate = np.diff(full[at_edge]) / myr
        azimuth, rate_sigma, azimuth_sigma = self._directions(side, start)
        share = np.divide(grown, np.diff(full[at_edge]), out=np.zeros_like(grown), where=rate > 0.0)
        rate_sigma = rate_sigma * radius / myr
        columns = (
            *(self.edges[:-1], self.edges[1:], rate, grown / myr, azimuth),
            *(rate_sigma, rate_sigma * share, azimuth_sigma, grown, distance[at_edge][1:]),
        )
        named = dict(zip(STAGE_COLUMNS, columns, strict=True))
        return ArmStages(name, plate, named, self.nodes, distance)

    def _directions(self, side: int, start: Floats) -> tuple[Floats, Floats, Floats]:
        """Azimuth (degrees) by stage, sigma of the full stage's length (rad) and of the azimuth (degrees).

        With s the stage vector and x the arm at mid-stage the plate moves along `s x x`. Both s and x
        move with the rows: `ds = Jr(s)^-1 v`, `dx = X (u x x0)`; under x the local north turns too.
        """
        stage, turn = self.stages[side], self.half_way[side]
        s, x = so3.logarithm(stage.quaternions), turn.apply(start)
        east, north = tangent_frame(x)
        motion = cross(s, x)
        size = length(motion)[:, np.newaxis]
        ahead = np.divide(motion, size, out=np.zeros_like(motion), where=size > 0.0)
        azimuth = np.where(size[:, 0] > 0.0, compass_deg(dot(motion, east), dot(motion, north)), np.nan)
        if not self.spreading.errors:
            return azimuth, np.full(len(s), np.nan), np.full(len(s), np.nan)
        right = cross(ahead, x)
        level = np.hypot(x[:, 0], x[:, 1])[:, np.newaxis]
        turning = np.divide(x[:, 2:], level, out=np.zeros_like(level), where=level > 0.0) * east
        of_length = self._variance(stage, turn, s, start, cross(x, ahead), cross(ahead, s))
        with np.errstate(invalid="ignore", divide="ignore"):
            on_stage, on_place = cross(x, right) / size, cross(right, s) / size + turning
        of_azimuth = self._variance(stage, turn, s, start, on_stage, on_place)
        azimuth_sigma = np.rad2deg(np.sqrt(np.maximum(of_azimuth, 0.0)))
        return azimuth, np.sqrt(np.maximum(of_length, 0.0)), azimuth_sigma

    def _variance(
        self, stage: Tracked, turn: Tracked, s: Floats, start: Floats, on_stage: Floats, on_place: Floats
    ) -> Floats:
        """Variance of `on_stage . ds + on_place . dx`, rad^2."""
        rows = np.union1d(stage.rows, turn.rows)
        logarithmic = np.linalg.inv(so3.right_jacobian(s))
        stage_covector = np.einsum("ni,nij->nj", on_stage, logarithmic)
        back = so3.rotate_back(turn.quaternions, on_place)
        place_covector = cross(np.broadcast_to(start, back.shape), back)
        weights = np.einsum("ni,nmij->nmj", stage_covector, stage.by_rows(rows).jacobians)
        weights += np.einsum("ni,nmij->nmj", place_covector, turn.by_rows(rows).jacobians)
        return row_variance(weights, rows, self.errors)


def _own_steps(turns: Tracked, side: int) -> Tracked:
    """Each stage, younger to older, in the coordinates of the plate on a side: how it left the ridge."""
    if side == 1:
        return turns[1:] @ turns[:-1].inverse()
    return turns[1:].inverse() @ turns[:-1]


def stage_columns(arms: list[ArmStages]) -> dict[str, Any]:
    """All stages of all arms, as the columns of a table."""
    columns: dict[str, Any] = {"start": [], "plate": []}
    for arm in arms:
        count = len(arm.columns["younger_ma"])
        columns["start"] += [arm.start] * count
        columns["plate"] += [arm.plate] * count
    for name in STAGE_COLUMNS:
        columns[name] = np.concatenate([np.zeros(0), *(arm.columns[name] for arm in arms)])
    return columns


def distance_columns(arms: list[ArmStages], distances_km: Floats) -> dict[str, Any]:
    """The age of the crust at distances from the ridge along each arm, as the columns of a table."""
    return {
        "start": [arm.start for arm in arms for _ in distances_km],
        "plate": [arm.plate for arm in arms for _ in distances_km],
        "distance_km": np.tile(distances_km, len(arms)),
        "age_ma": np.concatenate([np.zeros(0), *(arm.age_at(distances_km) for arm in arms)]),
    }
