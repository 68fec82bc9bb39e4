"""Make the demo world: a small invented planet for trying every command.

The world has the size of the Earth and eight plates over 0..120 Ma, none of
which is real. All motions lead to one mantle frame, ``deep``::

    quemmel > deep
    ovrath > quemmel                      the ocean between them opens since 100 Ma
    pazzel > ovrath > quemmel             covers the north pole; no covariances
    glufta > quemmel                      covers the south pole
    zobbet > quemmel
    snivar > glufta (0..50 Ma), > zobbet (50..120 Ma)    changes its partner
    wirrum > glufta > quemmel             crosses the 180th meridian
    ibbun > wirrum > glufta > quemmel     goes under ovrath

Files written beside this script:

``history.toml``, ``rotations_poles.csv``, ``rotations_rim.csv``
    the rotation history; the second table follows the habits of a printed
    paper (other headers, semicolons, rotations towards the present);
``outlines.geojson``
    a complete tiling of the sphere; edges are great circles;
``cores.csv``
    sixty sites with ages, among them every awkward kind;
``ridge.csv``, ``ridge.geojson``, ``margin.geojson``, ``hotspots.csv``
    the spreading ridge, a closing margin, and hotspots that stand in ``deep``;
``relief.nc``
    relief (m) and crust age (Myr) on two-degree cells;
``demo.toml``
    the scenario that runs on them.

Run it without arguments. It needs numpy, scipy and xarray, uses fixed seeds,
does not use the package it serves, and ends by checking what it wrote.
"""

from __future__ import annotations

from pathlib import Path

import numpy as np
from demo_checks import check_all, owners, read_outlines
from demo_geojson import line, polygon, write_features
from demo_motions import (
    FRAME,
    OPENING_POLE,
    PAIR,
    build_history,
    poles_rows,
    rim_rows,
    write_table,
)
from demo_outlines import Outlines
from demo_sphere import to_latlon
from demo_surface import (
    CORE_HEADER,
    HISTORY_MA,
    OLDEST_MA,
    CrustAges,
    draw_cores,
    grid_axes,
    relief_grid,
)

SEED = 9
CORES = 60
MARGIN = ("ovrath", "ibbun")
HOTSPOTS = (("ashlume", -8.5, 12.25), ("quillar", 24.75, -158.5), ("brontu", -46.0, 71.5))

MANIFEST = f"""\
version = 1
title = "Rotation history of the demo world"

[frames]
{FRAME} = "mantle"

[[table]]
file = "rotations_poles.csv"
title = "Finite rotations of the inner plates"
citation = "Collected survey reports 12 to 30, an invented series"

[[table]]
file = "rotations_rim.csv"
title = "Finite rotations of the ocean rim"
citation = "Rim expedition, table 4, an invented paper"
turns = "to-present"
from_present = true
delimiter = ";"

[table.columns]
plate = "Moving"
relative_to = "Held"
age_ma = "t_Ma"
pole_lat_deg = "Lat"
pole_lon_deg = "Lon"
angle_deg = "Turn"
"""

SCENARIO = f"""\
version = 1
title = "Demo world: cores and ridge"

[history]
file = "history.toml"

[frame]
name = "{FRAME}"
kind = "mantle"

[conventions]
latitudes = "as-given"

[outlines]
file = "outlines.geojson"

[[task]]
name = "cores"
kind = "sites"
file = "cores.csv"
ages = "own"

[[task]]
name = "cores-by-twenty"
kind = "sites"
file = "cores.csv"
ages = "0:120:20"

[[task]]
name = "ridge-rates"
kind = "rates"
file = "ridge.csv"
plate = "{PAIR[0]}"
relative_to = "{PAIR[1]}"
age_ma = 0.0

[[task]]
name = "ridge-flowlines"
kind = "flowlines"
file = "ridge.csv"
between = ["ovrath", "quemmel"]
ages = "0:100:10"

[[task]]
name = "ridge-isochrons"
kind = "isochrons"
file = "ridge.geojson"
between = ["ovrath", "quemmel"]
ages = [20.0, 40.0, 60.0, 80.0]

[[task]]
name = "hotspot-trails"
kind = "trails"
file = "hotspots.csv"
plate = "quemmel"
ages = "0:100:10"

[[task]]
name = "margin-rates"
kind = "margin"
file = "margin.geojson"
between = ["ovrath", "ibbun"]
ages = [0.0, 20.0, 40.0]

[[task]]
name = "outlines-restored"
kind = "lines"
file = "outlines.geojson"
ages = [0.0, 60.0, 100.0]

[[task]]
name = "equator-crossings"
kind = "when"
file = "cores.csv"
during = [0.0, 100.0]
latitude = 0.0
"""


def write_shapes(outlines: Outlines, folder: Path) -> None:
    """Write the outlines, the ridge and the margin."""
    write_features(
        folder / "outlines.geojson",
        [
            (polygon(ring), {"plate": plate, "oldest_ma": OLDEST_MA.get(plate, HISTORY_MA)})
            for plate, ring in outlines.rings.items()
        ],
    )
    ridge = {"name": "long ridge", "between": list(PAIR)}
    write_features(folder / "ridge.geojson", [(line(outlines.ridge), ridge)])
    margin = {"name": "deep margin", "between": list(MARGIN)}
    path = outlines.corner_path(*MARGIN)[2:-3]
    write_features(folder / "margin.geojson", [(line(path), margin)])


def write_points(outlines: Outlines, folder: Path) -> None:
    """Write the middles of the ridge segments and the hotspots."""
    rows = [["start", "lat_deg", "lon_deg"]]
    for number, segment in enumerate(outlines.segments, start=1):
        lat, lon = to_latlon(segment.sum(axis=0))
        rows.append([f"ridge-{number:02d}", f"{lat:.4f}", f"{lon:.4f}"])
    write_table(folder / "ridge.csv", rows)
    spots = [[name, f"{lat:.4f}", f"{lon:.4f}"] for name, lat, lon in HOTSPOTS]
    write_table(folder / "hotspots.csv", [["hotspot", "lat_deg", "lon_deg"], *spots])


def main() -> None:
    """Write every file beside this script and print what the checks measure."""
    folder = Path(__file__).resolve().parent
    history = build_history()
    outlines = Outlines(PAIR, OPENING_POLE, SEED)
    crust = CrustAges(history, outlines.segments)

    (folder / "history.toml").write_text(MANIFEST, encoding="utf-8", newline="\n")
    (folder / "demo.toml").write_text(SCENARIO, encoding="utf-8", newline="\n")
    table = poles_rows(history, np.random.default_rng(SEED + 1))
    write_table(folder / "rotations_poles.csv", table)
    write_table(folder / "rotations_rim.csv", rim_rows(history), delimiter=";")
    write_shapes(outlines, folder)
    write_points(outlines, folder)

    cores = draw_cores(outlines, crust, CORES, SEED + 2)
    write_table(folder / "cores.csv", [CORE_HEADER, *(core.cells() for core in cores)])
    lat, lon = np.meshgrid(*grid_axes(), indexing="ij")
    plates = owners(read_outlines(folder), lat, lon)
    relief_grid(crust, plates, SEED + 3).to_netcdf(folder / "relief.nc", engine="netcdf4")

    for measured in check_all(outlines, folder):
        print(measured)


if __name__ == "__main__":
    main()
