"""What lies on the plates of the demo world: crust ages, relief and cores."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from itertools import pairwise

import numpy as np
import xarray as xr
from demo_motions import OPENING_SINCE_MA, PAIR, History
from demo_outlines import Outlines
from demo_sphere import Array, arc_deg, densify, to_latlon, to_xyz
from scipy.spatial import cKDTree
from scipy.spatial.transform import Rotation

OLDEST_MA = {"ibbun": 96.0, "wirrum": 112.0}
HISTORY_MA = 120.0
OCEANIC = ("wirrum", "ibbun")
FILL = -9999.0
GRID_DEG = 2.0


class CrustAges:
    """Ages of the crust made at the ridge since the two plates of ``PAIR`` parted.

    The ridge moves at half the rate of the pair, so crust of one age lies where
    the ridge stood at that age, carried since with either plate.
    """

    def __init__(self, history: History, segments: Sequence[Array]) -> None:
        ridge = np.vstack([densify(segment, 0.25) for segment in segments])
        rows = [row for row in history.rows[PAIR] if row.age_ma <= OPENING_SINCE_MA]
        half = Rotation.identity()
        ages: list[float] = []
        lines: dict[str, list[Array]] = {plate: [] for plate in PAIR}
        for young, old in pairwise(rows):
            start = young.rotation()
            vector = (old.rotation() * start.inv()).as_rotvec()
            steps = int(np.ceil((old.age_ma - young.age_ma) / 0.5))
            for share in np.arange(steps + 1) / steps:
                ages.append(young.age_ma + share * (old.age_ma - young.age_ma))
                middle = Rotation.from_rotvec(share * vector / 2) * half
                whole = Rotation.from_rotvec(share * vector) * start
                lines[PAIR[1]].append(middle.apply(ridge))
                lines[PAIR[0]].append((whole.inv() * middle).apply(ridge))
            half = Rotation.from_rotvec(vector / 2) * half
        self._ages = np.repeat(ages, len(ridge))
        self._trees = {plate: cKDTree(np.vstack(line)) for plate, line in lines.items()}

    def nearest(self, plate: str, xyz: Array) -> tuple[Array, Array]:
        """Return age in Myr and distance in degrees of the nearest known crust."""
        chord, index = self._trees[plate].query(xyz)
        return self._ages[index], np.degrees(2 * np.arcsin(chord / 2))


def smooth_noise(xyz: Array, rng: np.random.Generator) -> Array:
    """Return a smooth random field of about unit size at places on the sphere."""
    field = np.zeros(xyz.shape[:-1])
    for _ in range(60):
        length = rng.uniform(2.0, 22.0)
        wave = rng.normal(size=3)
        wave *= length / np.linalg.norm(wave)
        field += np.cos(xyz @ wave + rng.uniform(0, 2 * np.pi)) / length**0.7
    return np.asarray(field / np.std(field))


def relief_grid(crust: CrustAges, plates: Array, seed: int) -> xr.Dataset:
    """Return relief in metres and crust age in Myr on cell centres.

    ``plates`` holds the label of every cell. On the opening ocean the floor
    sinks with the square root of its age and rises again to the continents.
    """
    rng = np.random.default_rng(seed)
    lat, lon = grid_axes()
    xyz = to_xyz(lat[:, None], lon[None, :])
    noise = smooth_noise(xyz, rng)
    height = np.where(np.isin(plates, OCEANIC), -4300 + 450 * noise, 320 + 480 * noise)
    age_grid = np.full(plates.shape, np.nan)
    for plate in PAIR:
        here = plates == plate
        age, distance = crust.nearest(plate, xyz[here])
        floor = -2550 - 340 * np.sqrt(age) + 160 * noise[here]
        rise = np.clip((distance - 0.7) / 4.0, 0.0, 1.0)
        rise = rise**2 * (3 - 2 * rise)
        height[here] = floor + rise * (height[here] - floor)
        age_grid[here] = np.where(distance <= 0.7, age, np.nan)
    unsurveyed = arc_deg(xyz, to_xyz(-78.0, 150.0)) < 4.0
    return describe_grid(lat, lon, np.where(unsurveyed, np.nan, height), age_grid)


def grid_axes() -> tuple[Array, Array]:
    """Return latitudes and longitudes of the cell centres in degrees."""
    half = GRID_DEG / 2
    return np.arange(-90 + half, 90, GRID_DEG), np.arange(-180 + half, 180, GRID_DEG)


def describe_grid(lat: Array, lon: Array, height: Array, age: Array) -> xr.Dataset:
    """Wrap the grids in a dataset that follows the CF conventions."""
    half = GRID_DEG / 2
    cells = {"cell_methods": "area: mean"}
    data = xr.Dataset(
        {
            "relief": (
                ("lat", "lon"),
                height.astype("float32"),
                {
                    "standard_name": "height_above_mean_sea_level",
                    "long_name": "height of the solid surface",
                    "units": "m",
                    **cells,
                },
            ),
            "crust_age": (
                ("lat", "lon"),
                age.astype("float32"),
                {"long_name": "age of the ocean crust", "units": "Myr", **cells},
            ),
            "lat_bnds": (("lat", "bnds"), np.stack([lat - half, lat + half], axis=1)),
            "lon_bnds": (("lon", "bnds"), np.stack([lon - half, lon + half], axis=1)),
        },
        coords={"lat": ("lat", lat), "lon": ("lon", lon)},
        attrs={
            "Conventions": "CF-1.11",
            "title": "Relief and crust age of the demo world",
            "comment": "An invented world; no place on it is real.",
        },
    )
    for name, word in (("lat", "north"), ("lon", "east")):
        full = {"lat": "latitude", "lon": "longitude"}[name]
        data[name].attrs = {"standard_name": full, "long_name": full}
        data[name].attrs |= {"units": f"degrees_{word}", "axis": "YX"[name == "lon"]}
        data[name].attrs["bounds"] = f"{name}_bnds"
    for variable in data.variables:
        data[variable].encoding = {"_FillValue": None}
    for name in ("relief", "crust_age"):
        data[name].encoding = {"_FillValue": np.float32(FILL), "zlib": True, "complevel": 6}
    return data


@dataclass
class Core:
    """One drilled site; degrees, ages in Ma, sigma in Myr, ``None`` for not told."""

    site: str
    lat: float
    lon: float
    age: float | None = None
    sigma: float | None = None
    young: float | None = None
    old: float | None = None
    host: float | None = None
    plate: str = ""
    remark: str = ""

    def cells(self) -> list[str]:
        """Return the row of the table."""
        times = (self.age, self.sigma, self.young, self.old, self.host)
        told = ["" if value is None else f"{value:.1f}" for value in times]
        return [self.site, f"{self.lat:.4f}", f"{self.lon:.4f}", *told, self.plate, self.remark]


CORE_HEADER = (
    *("site", "lat_deg", "lon_deg", "age_ma", "age_sigma_myr", "age_young_ma", "age_old_ma"),
    *("host_age_ma", "plate", "remark"),
)

REMARKS = ("", "", "", "grey ooze", "ash bands", "red clay", "slumped top", "reef debris")

SPECIAL = (
    Core("top-1", 88.7312, 41.2054, 34.0, 1.2, remark="ice drift during drilling"),
    Core("seam-1", -12.3481, 179.7216, 58.5, 0.9, host=66.0),
    Core("seam-2", 17.9027, -179.8842, 22.4, 0.4, remark="second hole of a pair"),
    Core("fresh-1", 14.2265, -37.4418, 0.0, remark="surface grab"),
    Core("early-1", 20.6133, 38.9176, 130.0, 2.5, remark="older than the history"),
    Core("odd-1", -22.7704, -150.4479, 71.3, 1.1, host=64.0, remark="older than its crust"),
    Core("blank-1", 31.5542, 101.3307, remark="not dated"),
    Core("twice-1", -48.2918, 92.6645, 12.6, 0.3, remark="upper hole"),
    Core("twice-1", -48.2918, 92.6645, 47.9, 0.8, remark="lower hole"),
    Core("quote-1", 8.4417, 19.2730, 63.0, 1.5, remark='split in two, lower half "lost" on deck'),
)


def draw_cores(outlines: Outlines, crust: CrustAges, count: int, seed: int) -> list[Core]:
    """Return the sites: some placed by hand, the others spread over all plates."""
    rng = np.random.default_rng(seed)
    edges = np.vstack(list(outlines.rings.values()))
    cores: list[Core] = []
    while len(cores) + len(SPECIAL) < count:
        place = rng.normal(size=3)
        place /= np.linalg.norm(place)
        labels = outlines.plate_of_cell(place[None, :])
        quota = len([c for c in cores if c.plate == labels[0]]) < (count + 7) // 8
        ridge_far = arc_deg(place, outlines.ridge).min() > 4.0
        if quota and ridge_far and arc_deg(place, edges).min() > 2.0:
            cores.append(date_core(place, labels[0], crust, len(cores), rng))
    cores.sort(key=lambda core: core.site)
    for core in SPECIAL:
        core.plate = outlines.plate_of_cell(to_xyz(core.lat, core.lon)[None, :])[0]
    return [*cores, *SPECIAL]


def date_core(place: Array, plate: str, crust: CrustAges, number: int, rng: np.random.Generator) -> Core:
    """Return a site with an age that its crust and its plate allow."""
    lat, lon = (round(float(value), 4) for value in to_latlon(place))
    limit, host = min(118.0, OLDEST_MA.get(plate, HISTORY_MA)), None
    if plate in PAIR:
        age, distance = crust.nearest(plate, place)
        host = round(float(age), 1) if distance < 0.7 else None
    elif plate in OCEANIC and rng.uniform() < 0.6:
        host = round(float(rng.uniform(20.0, limit)), 1)
    age_ma = round(float(rng.uniform(0.05, 0.97)) * (host or limit), 1)
    core = Core(f"{plate[:3]}-{101 + number}", lat, lon, host=host, plate=plate)
    core.remark = REMARKS[int(rng.integers(len(REMARKS)))]
    if number % 7 == 3:
        core.young, core.old = round(age_ma * 0.9, 1), round(min(age_ma * 1.08, host or limit), 1)
        return core
    core.age = age_ma
    if number % 5 != 1:
        core.sigma = round(0.2 + 0.02 * age_ma * float(rng.uniform(0.5, 1.5)), 1)
    if number % 9 == 4:
        core.young, core.old = round(age_ma * 0.96, 1), round(min(age_ma * 1.04, limit), 1)
    return core
