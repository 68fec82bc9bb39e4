"""Points on a ridge, living or extinct, and the jumps that carried the ridge to other places."""

from __future__ import annotations

import os
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from restore.errors import InputError, TableError, raise_faults
from restore.files.columns import ColumnTable, read_columns
from restore.files.delimited import Layout
from restore.findings import Finding, did_you_mean
from restore.geometry.sphere import Floats


@dataclass(frozen=True, eq=False)
class RidgePoints:
    """Start points `(n,)`: names, degrees, the age (Ma) at which each lay on the ridge, and where.

    `on_first` `(n,)`: whether a point of an extinct ridge is given in coordinates of the first plate,
    else of the second; at age 0 the two are the same. `own`: the user's other columns.
    """

    start: list[str]
    lat_deg: Floats
    lon_deg: Floats
    age_ma: Floats
    on_first: NDArray[np.bool_]
    own: dict[str, list[str]]

    def __len__(self) -> int:
        return len(self.start)

    def some(self, part: slice) -> RidgePoints:
        """Some of them."""
        own = {name: values[part] for name, values in self.own.items()}
        return RidgePoints(
            self.start[part],
            self.lat_deg[part],
            self.lon_deg[part],
            self.age_ma[part],
            self.on_first[part],
            own,
        )

    @classmethod
    def of(
        cls,
        lat_deg: Sequence[float] | Floats,
        lon_deg: Sequence[float] | Floats,
        between: tuple[str, str],
        *,
        start: Sequence[str] | None = None,
        age_ma: Sequence[float] | Floats | None = None,
        on_plate: Sequence[str] | None = None,
    ) -> RidgePoints:
        """From columns in memory; raises InputError as `read` does, naming the row from 1."""
        lat, lon = (np.atleast_1d(np.asarray(v, dtype=np.float64)) for v in (lat_deg, lon_deg))
        count = len(lat)
        for name, values, limit in (("lat_deg", lat, 90.0), ("lon_deg", lon, 360.0)):
            if len(values) != count:
                raise InputError(
                    f"{name} has {len(values)} values, lat_deg {count}; give one for each point"
                )
            bad = np.flatnonzero(~(np.abs(values) <= limit))
            if len(bad):
                what = f"row {bad[0] + 1}: {name} = {values[bad[0]]:g}"
                raise InputError(f"{what}: must lie in -{limit:g}..{limit:g}")
        age = np.zeros(count) if age_ma is None else np.asarray(age_ma, dtype=np.float64)
        names = [str(i + 1) for i in range(count)] if start is None else [str(name) for name in start]
        plates = [""] * count if on_plate is None else list(on_plate)
        for row in range(count):
            fault = _side_fault(names[row], age[row], plates[row], between)
            if fault is not None:
                raise InputError(f"row {row + 1}: {fault[0]}; {fault[1]}")
        return cls(names, lat, lon, age, np.array([p == between[0] for p in plates], dtype=bool), {})

    @classmethod
    def read(
        cls, path: str | os.PathLike[str], between: tuple[str, str], layout: Layout | None = None
    ) -> RidgePoints:
        """Read `lat_deg, lon_deg[, start, age_ma, on_plate]` and any other columns.

        A point without a name is called by its number. Raises TableError, one line per fault: a place
        off the globe, an age above 0 without one of the two plates.
        """
        table = read_columns(
            path, ("lat_deg", "lon_deg", "age_ma"), ("start", "on_plate"), ("lat_deg", "lon_deg"), layout
        )
        names = [name or str(row + 1) for row, name in enumerate(table.texts["start"])]
        age = np.nan_to_num(table.numbers["age_ma"])
        plates = table.texts["on_plate"]
        raise_faults(TableError, _side_findings(table, names, age, plates, between))
        on_first = np.array([plate == between[0] for plate in plates], dtype=bool)
        lat, lon = table.numbers["lat_deg"], table.numbers["lon_deg"]
        return cls(names, lat, lon, age, on_first, table.own)


def _side_fault(name: str, age: float, plate: str, between: tuple[str, str]) -> tuple[str, str] | None:
    """What is wrong with the plate whose coordinates a start point is given in, and what would be right."""
    if not 0.0 <= age < np.inf:
        return f"start {name!r}: age_ma = {age:g}", "ages are finite, in Ma, positive into the past"
    if plate and plate not in between:
        return f"start {name!r}: on_plate = {plate!r}", did_you_mean(plate, between)
    if age > 0.0 and not plate:
        what = f"start {name!r} lay on the ridge at {age:g} Ma but on_plate is empty"
        return what, f"name the plate whose coordinates it is in: {' or '.join(between)}"
    return None


def _side_findings(
    table: ColumnTable, names: list[str], ages: Floats, plates: list[str], between: tuple[str, str]
) -> list[Finding]:
    findings = []
    for row, (name, age, plate) in enumerate(zip(names, ages, plates, strict=True)):
        fault = _side_fault(name, float(age), plate, between)
        if fault is not None:
            findings.append(Finding("error", "on_plate", table.place(row), fault[0], remedy=fault[1]))
    return findings


@dataclass(frozen=True)
class Jump:
    """A ridge jump: crust older than `age_ma` came from another ridge point, in degrees.

    `on_first`: the point is in present-day coordinates of the first plate, else of the second.
    `captured_by`: the plate that took over crust of the other when the ridge jumped, or empty.
    """

    age_ma: float
    lat_deg: float
    lon_deg: float
    on_first: bool = False
    captured_by: str = ""


def read_jumps(
    path: str | os.PathLike[str], starts: RidgePoints, between: tuple[str, str]
) -> dict[str, list[Jump]]:
    """Jumps by the name of the start point: `start, age_ma, lat_deg, lon_deg[, on_plate, captured_by]`.

    `on_plate` is the second plate unless the table says the first. Raises TableError for a start that
    is not there, a plate that is none of the two, or a jump that is not older than its start and than
    the jump before it.
    """
    numbers, texts = ("age_ma", "lat_deg", "lon_deg"), ("start", "on_plate", "captured_by")
    table = read_columns(path, numbers, texts, ("start", *numbers))
    begins = dict(zip(starts.start, starts.age_ma, strict=True))
    jumps: dict[str, list[Jump]] = {}
    findings = []
    for row, name in enumerate(table.texts["start"]):
        place = table.place(row)
        age, lat, lon = (float(table.numbers[column][row]) for column in numbers)
        plate, captor = table.texts["on_plate"][row], table.texts["captured_by"][row]
        for column, label in (("on_plate", plate), ("captured_by", captor)):
            if label and label not in between:
                what = f"{column} = {label!r}"
                hint = did_you_mean(label, between)
                findings.append(Finding("error", "plate", place, what, remedy=hint))
        if name not in begins:
            hint = did_you_mean(name, begins)
            findings.append(Finding("error", "start", place, f"no start point {name!r}", remedy=hint))
            continue
        before = jumps[name][-1].age_ma if name in jumps else float(begins[name])
        if not age > before:
            what = f"start {name!r}: jump at {age:g} Ma is not older than {before:g} Ma before it"
            remedy = "jumps of a start stand in order of age, older than the start itself"
            findings.append(Finding("error", "jump", place, what, remedy=remedy))
        jumps.setdefault(name, []).append(Jump(age, lat, lon, plate == between[0], captor))
    raise_faults(TableError, findings)
    return jumps
