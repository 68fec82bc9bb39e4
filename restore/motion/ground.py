"""What sites stand on: the plate by label or outline, and the age of the crust beneath."""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from restore.errors import InputError
from restore.files.rasters import Field
from restore.findings import Finding
from restore.geometry.sphere import Floats
from restore.motion.site_table import SiteTable
from restore.outlines import Outlines

MILLIONS_OF_YEARS = frozenset({"ma", "myr", "my", "m.y.", "mya", "million years", "1e6 year", "1e6 years"})


@dataclass(eq=False)
class Placing:
    """For each site of a table `(n,)`: its plate and how it is known, and the ages of its crust.

    `plate_from`: `given`, `outlines` or empty. `host_ma`: age of the crust, infinite where it is not
    known; `youngest_ma`: age at which the plate's outline ends, 0 if it is there today. `remark`: a
    label that the outlines contradict. `distance_km`: to the outline that was taken because it is
    near, 0 inside, NaN where none was.
    """

    plate: list[str]
    plate_from: list[str]
    host_ma: Floats
    youngest_ma: Floats
    remark: list[str]
    distance_km: Floats | None = None
    findings: list[Finding] = field(default_factory=list)

    @classmethod
    def as_given(cls, table: SiteTable) -> Placing:
        """By the columns of the table alone."""
        host = table.numbers["host_age_ma"]
        return cls(
            list(table.plate),
            ["given" if plate else "" for plate in table.plate],
            np.where(np.isnan(host), np.inf, host),
            np.zeros(len(table)),
            [""] * len(table),
        )


@dataclass(frozen=True, eq=False)
class Ground:
    """Outlines and a field of crustal ages (Ma), either of which may be missing.

    `within_km`: sites on no outline go to the nearest one within this distance. The crust's age comes
    from the site's own column, else from the field, else from the lifetime of the outline.
    """

    outlines: Outlines | None = None
    crust: Field | None = None
    within_km: float = 0.0

    def __post_init__(self) -> None:
        if self.crust is None:
            return
        name, units = self.crust.name, self.crust.units
        if units and units.lower() not in MILLIONS_OF_YEARS:
            raise InputError(f"crustal ages {name!r}: units {units!r}; they are wanted in Ma or Myr")
        if np.any(self.crust.values < 0.0):
            least = np.nanmin(self.crust.values)
            raise InputError(f"crustal ages {name!r}: {least:g} Ma; ages are positive, gaps are NaN")

    def place(self, table: SiteTable) -> Placing:
        """The plates and crust of the sites of a table."""
        placing = Placing.as_given(table)
        usable = ~table.bad_place
        lat = np.where(usable, table.numbers["lat_deg"], 0.0)
        lon = np.where(usable, table.numbers["lon_deg"], 0.0)
        outline_host = np.full(len(table), np.inf)
        if self.outlines is not None:
            outline_host = self._by_outlines(self.outlines, table, placing, usable, lat, lon)
        host = table.numbers["host_age_ma"]
        if self.crust is not None:
            sampled = self.crust.nearest(lat, lon)
            host = np.where(np.isnan(host) & usable, sampled, host)
        placing.host_ma = np.where(np.isnan(host), outline_host, host)
        return placing

    def _by_outlines(
        self,
        outlines: Outlines,
        table: SiteTable,
        placing: Placing,
        usable: NDArray[np.bool_],
        lat: Floats,
        lon: Floats,
    ) -> Floats:
        assigned = outlines.plate_at(lat, lon, self.within_km)
        labels = [*(outline.plate for outline in outlines.outlines), ""]
        found = [labels[number] if ok else "" for number, ok in zip(assigned.outline, usable, strict=True)]
        agrees = np.ones(len(table), dtype=bool)
        for row, label in enumerate(found):
            if not placing.plate[row]:
                placing.plate[row] = label
                placing.plate_from[row] = "outlines" if label else ""
            elif label and label != placing.plate[row]:
                agrees[row] = False
                placing.remark[row] = f"outlines say {label}"
                what = f"plate {placing.plate[row]!r} is given where the outlines say {label!r}"
                place = table.plate_place(row)
                remedy = "the label that was given is kept"
                placing.findings.append(Finding("warning", "plate differs", place, what, remedy=remedy))
        for row in np.flatnonzero((assigned.overlaps > 0) & usable).tolist():
            what = f"{int(assigned.overlaps[row]) + 1} outlines of one rank hold the site; {found[row]} is taken"
            place = table.plate_place(row)
            remedy = "rank the outlines"
            placing.findings.append(Finding("warning", "outlines overlap", place, what, remedy=remedy))
        if self.within_km > 0.0:
            placing.distance_km = np.where(usable, assigned.distance_km, np.nan)
        youngest, oldest = outlines.lifetimes(np.where(agrees & usable, assigned.outline, -1))
        placing.youngest_ma = youngest
        return oldest
