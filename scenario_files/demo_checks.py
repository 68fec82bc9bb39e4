"""Checks of the demo world, made on the files as they were written."""

from __future__ import annotations

import csv
import json
from pathlib import Path

import numpy as np
from demo_motions import FRAME, OPENING_SINCE_MA, PAIR, PARTNER_CHANGE_MA, History, Row
from demo_outlines import Outlines
from demo_sphere import EARTH_RADIUS_KM, Array, inside_ring, ring_area, to_xyz
from scipy.spatial.transform import Rotation

Parts = dict[str, list[Array]]


def require(holds: object, complaint: str) -> None:
    """Stop with ``complaint`` where a property of the world does not hold."""
    if not holds:
        raise ValueError(complaint)


def read_rows(path: Path, delimiter: str = ",") -> list[dict[str, str]]:
    """Return the rows of a table as dictionaries."""
    with path.open(encoding="utf-8", newline="") as stream:
        return list(csv.DictReader(stream, delimiter=delimiter))


def read_history(folder: Path) -> History:
    """Return the history that the two rotation tables tell."""
    history = History()
    for cells in read_rows(folder / "rotations_poles.csv"):
        numbers = [float(cells[k] or 0) for k in ("pole_lat_deg", "pole_lon_deg", "angle_deg")]
        pair = (cells["plate"], cells["relative_to"])
        history.rows.setdefault(pair, []).append(Row(float(cells["age_ma"]), *numbers))
    for cells in read_rows(folder / "rotations_rim.csv", ";"):
        lat, lon, angle = (float(cells[k]) for k in ("Lat", "Lon", "Turn"))
        pair = (cells["Moving"], cells["Held"])
        rows = history.rows.setdefault(pair, [Row(0.0, 0.0, 0.0, 0.0)])
        rows.append(Row(float(cells["t_Ma"]), lat, lon, -angle))
    for rows in history.rows.values():
        ages = [row.age_ma for row in rows]
        require(ages == sorted(set(ages)), "rows out of order")
    return history


def read_outlines(folder: Path) -> Parts:
    """Return for each plate its closed (lon, lat) rings."""
    parts: Parts = {}
    for feature in json.loads((folder / "outlines.geojson").read_text("utf-8"))["features"]:
        shape = feature["geometry"]
        single = shape["type"] == "Polygon"
        rings = shape["coordinates"] if single else [part[0] for part in shape["coordinates"]]
        parts[feature["properties"]["plate"]] = [np.array(ring) for ring in rings]
    return parts


def owners(parts: Parts, lat: Array, lon: Array) -> Array:
    """Return the plate of each place; each place must be in exactly one plate."""
    count = np.zeros(lat.shape, dtype=int)
    label = np.full(lat.shape, "", dtype="U8")
    for plate, rings in parts.items():
        for ring in rings:
            inside = inside_ring(ring, lat, lon)
            count += inside
            label[inside] = plate
    require(np.all(count == 1), f"{np.sum(count != 1)} places are not in exactly one plate")
    return label


def check_covariances(folder: Path) -> str:
    """Check that the matrices are positive definite and of sensible size."""
    sizes, bare = [], 0
    for cells in read_rows(folder / "rotations_poles.csv"):
        if not cells["cov_a"]:
            bare += 1
            continue
        a, b, c, d, e, f = (float(cells[f"cov_{letter}"]) for letter in "abcdef")
        matrix = np.array([[a, b, c], [b, d, e], [c, e, f]]) * float(cells["cov_factor"])
        values = np.linalg.eigvalsh(matrix / float(cells["kappa"] or 1))
        require(values[0] > 0, "a covariance is not positive definite")
        sizes.append(np.sqrt(values) * EARTH_RADIUS_KM)
    require(np.min(sizes) >= 2.0 and np.max(sizes) <= 25.0, "sizes outside 2..25 km")
    return f"{len(sizes)} covariances, {np.min(sizes):.1f}..{np.max(sizes):.1f} km; {bare} rows bare"


def check_tiling(parts: Parts) -> str:
    """Check that the rings are anticlockwise and cover the sphere once."""
    areas = {plate: [ring_area(ring[:, 1], ring[:, 0]) for ring in rings] for plate, rings in parts.items()}
    require(min(min(values) for values in areas.values()) > 0, "a ring is clockwise")
    excess = sum(sum(values) for values in areas.values()) / (4 * np.pi) - 1
    require(abs(excess) < 1e-9, f"areas differ from the sphere by {excess:.2e}")
    rng = np.random.default_rng(5)
    lat = np.degrees(np.arcsin(rng.uniform(-1, 1, 20000)))
    owners(parts, lat, rng.uniform(-180, 180, 20000))
    shares = ", ".join(f"{p} {sum(v) / (4 * np.pi):.1%}" for p, v in areas.items())
    return f"area of the tiling less the sphere {excess:+.1e}; {shares}"


def check_partner_change(history: History, parts: Parts) -> str:
    """Check that the plate with two partners does not jump between them."""
    points = to_xyz(*np.vstack(parts["snivar"]).T[::-1])
    young = history.to_frame("snivar", PARTNER_CHANGE_MA, young_side=True).apply(points)
    old = history.to_frame("snivar", PARTNER_CHANGE_MA, young_side=False).apply(points)
    jump = float(np.linalg.norm(young - old, axis=1).max()) * EARTH_RADIUS_KM
    require(jump < 0.1, f"jump of {jump} km")
    return f"snivar jumps by {jump:.4f} km at {PARTNER_CHANGE_MA:g} Ma"


def check_rates(history: History, parts: Parts) -> str:
    """Check the rates along all boundaries and the speeds over the mantle."""
    rings = {plate: np.vstack(rings) for plate, rings in parts.items()}
    places = {plate: {tuple(place) for place in ring} for plate, ring in rings.items()}
    rates: dict[bool, list[Array]] = {True: [], False: []}
    speeds = []
    for age in np.arange(0.5, 119.5, 2.0):
        spins = {plate: history.velocity(plate, age) for plate in rings}
        for plate, ring in rings.items():
            carry = history.to_frame(plate, age)
            speeds.append(speed(spins[plate], carry.apply(to_xyz(ring[:, 1], ring[:, 0]))))
            for other in rings:
                common = np.array(sorted(places[plate] & places[other]))
                pair_is_ocean = {plate, other} == set(PAIR)
                if plate == other or not len(common) or (pair_is_ocean and age > OPENING_SINCE_MA):
                    continue
                line = carry.apply(to_xyz(common[:, 1], common[:, 0]))
                rates[pair_is_ocean].append(speed(spins[plate] - spins[other], line))
    ocean, rest = np.hstack(rates[True]), np.hstack(rates[False])
    require(ocean.min() >= 15 and ocean.max() <= 60, "opening rate outside 15..60 mm/yr")
    require(rest.min() >= 5 and rest.max() <= 100, f"{rest.min()}..{rest.max()} mm/yr")
    require(np.hstack(speeds).max() < 110, "too fast over the mantle")
    return (
        f"opening {ocean.min():.1f}..{ocean.max():.1f} mm/yr, other boundaries "
        f"{rest.min():.1f}..{rest.max():.1f}, over the mantle up to {np.hstack(speeds).max():.1f}"
    )


def speed(spin: Array, points: Array) -> Array:
    """Return speeds in mm/yr (km/Myr) of points under an angular velocity in rad/Myr."""
    return np.asarray(np.linalg.norm(np.cross(spin, points), axis=1) * EARTH_RADIUS_KM)


def check_margin(history: History, folder: Path) -> str:
    """Check that the margin closes along its whole length today."""
    told = json.loads((folder / "margin.geojson").read_text("utf-8"))["features"][0]
    path = np.array(told["geometry"]["coordinates"])
    first, second = told["properties"]["between"]
    xyz = to_xyz(path[:, 1], path[:, 0])
    middle = (xyz[:-1] + xyz[1:]) / 2
    out = np.cross(np.diff(xyz, axis=0), middle)
    out /= np.linalg.norm(out, axis=1)[:, None]
    spin = history.velocity(second, 0.1) - history.velocity(first, 0.1)
    closing = -np.sum(np.cross(spin, middle) * out, axis=1) * EARTH_RADIUS_KM
    require(closing.min() > 0, "the margin opens somewhere")
    return f"margin of {len(path)} vertices closes {closing.min():.1f}..{closing.max():.1f} mm/yr"


def check_cores(outlines: Outlines, parts: Parts, folder: Path) -> str:
    """Check the plate of every site in two ways."""
    cores = read_rows(folder / "cores.csv")
    lat, lon = (np.array([float(core[key]) for core in cores]) for key in ("lat_deg", "lon_deg"))
    told = [core["plate"] for core in cores]
    require(list(owners(parts, lat, lon)) == told, "a site is outside its outline")
    require(outlines.plate_of_cell(to_xyz(lat, lon)) == told, "a site is in a foreign cell")
    return f"{len(cores)} sites on {len(set(told))} plates, all inside their outlines"


def check_all(outlines: Outlines, folder: Path) -> list[str]:
    """Run every check on the files of ``folder`` and return what was measured."""
    history, parts = read_history(folder), read_outlines(folder)
    chains = {
        " > ".join(history.chain(plate, age)): None
        for plate in parts
        for age in (10.0, PARTNER_CHANGE_MA + 30)
    }
    require(all(2 <= len(chain.split(" > ")) <= 5 for chain in chains), "a chain is too long")
    now = [history.to_frame(plate, 0.0) for plate in parts]
    require(Rotation.concatenate(now).magnitude().max() == 0.0, f"{FRAME} is not today's map")
    size = sum(path.stat().st_size for path in folder.iterdir() if path.is_file())
    return [
        *chains,
        check_covariances(folder),
        check_tiling(parts),
        check_partner_change(history, parts),
        check_rates(history, parts),
        check_margin(history, folder),
        check_cores(outlines, parts, folder),
        f"{size / 1e3:.0f} kB in all",
    ]
