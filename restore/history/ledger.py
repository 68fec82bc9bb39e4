"""The ledger: the chain behind a number written out, down to the lines of the tables.

A segment is a chain with one stage per link: results whose ages lie in the same segment share its
entries, so that a million sites need a few thousand. What differs from result to result (the age,
the fraction between two rows, the rotation of each link) follows from the age.
"""

from __future__ import annotations

import functools
import hashlib
import math
from collections.abc import Iterable, Iterator
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from restore.geometry.rotations import Rotations
from restore.geometry.sphere import EARTH_RADIUS_KM, Floats, distance_km
from restore.geometry.uncertain import Sensitivity
from restore.history import links
from restore.history.circuit import Circuit, CircuitRotations
from restore.history.links import Chain, Step

NO_SEGMENT = -1


@dataclass(frozen=True)
class Segment:
    """A chain and, for each of its links, the stage (between two rows) that is used."""

    chain: Chain
    stages: tuple[int, ...]


@dataclass(frozen=True, eq=False)
class Ledger:
    """The ledger of many results: `segment` (n,) numbers into `segments`, -1 where there is none.

    `ages` (n,), Ma, are the ages used. `sensitivity` is kept where the shares of the variance are
    wanted; `points` (n, 3) where it is to say how far each link moved a point.
    """

    circuit: Circuit
    ages: Floats
    segment: NDArray[np.int64]
    segments: tuple[Segment, ...]
    sensitivity: Sensitivity | None = None
    points: Floats | None = None
    just_younger: bool = False

    @classmethod
    def of(
        cls,
        found: CircuitRotations,
        sensitivity: Sensitivity | None = None,
        points: Floats | None = None,
        just_younger: bool = False,
    ) -> Ledger:
        """The ledger of rotations from a Circuit; with `just_younger` that of rates, see `links.Stages.find`."""
        segment, segments = segments_of(found.circuit, found.chain, found.ages, just_younger)
        return cls(found.circuit, found.ages, segment, segments, sensitivity, points, just_younger)

    def __len__(self) -> int:
        return len(self.segment)

    def ids(self) -> list[str]:
        """The id of each segment: ten hexadecimal digits made from its rows, the same in every run."""
        return [segment_id(self.circuit, segment) for segment in self.segments]

    def id_column(self) -> list[str]:
        """The id of each result, empty where it has none."""
        ids = [*self.ids(), ""]
        return [ids[number] for number in self.segment.tolist()]

    def steps(self, item: int) -> list[Step]:
        """The links of one result at its age; empty where it has no chain."""
        if self.segment[item] == NO_SEGMENT:
            return []
        chain = self.segments[int(self.segment[item])].chain
        ages = self.ages[item : item + 1]
        return list(links.steps_along(self.circuit.stages, chain, ages, self.just_younger))

    def links_of(self, item: int) -> list[dict[str, Any]]:
        """The links of one result, nearest the plate first: what acts, between which rows, how far.

        `pole_lat_deg`, `pole_lon_deg`, `angle_deg`: the link's rotation as it acts, degrees on the
        sphere; multiplied in the order of the list they give the result. `moved_km`: of the point,
        or where none is given `greatest_km`, the most that the link moves any point.
        """
        shares = self._shares(item)
        here = None if self.points is None else self.points[item]
        records = []
        for number, step in enumerate(self.steps(item), start=1):
            pair = self.circuit.pairs[step.link.pair]
            rotation = Rotations(step.rotation[0])
            lat, lon, angle = (float(v) for v in rotation.as_poles())
            record: dict[str, Any] = {
                "link": number,
                "plate": pair.plate if step.link.forward else pair.relative_to,
                "relative_to": pair.relative_to if step.link.forward else pair.plate,
                "turned_round": not step.link.forward,
                "age_ma": float(self.ages[item]),
                "fraction": float(step.fraction[0]),
                "pole_lat_deg": None if math.isnan(lat) else lat,
                "pole_lon_deg": None if math.isnan(lon) else lon,
                "angle_deg": angle,
            }
            if here is None:
                record["greatest_km"] = math.radians(angle) * EARTH_RADIUS_KM
            else:
                there = rotation.apply(here)
                record["moved_km"] = float(distance_km(here, there))
                here = there
            stage = int(step.stage[0])
            record["younger"] = self._row(int(self.circuit.stages.younger[stage]), shares)
            record["older"] = self._row(int(self.circuit.stages.older[stage]), shares)
            records.append(record)
        return records

    def as_records(self) -> list[dict[str, Any]]:
        """The links of all results, one after the other."""
        return [record for item in range(len(self)) for record in self.links_of(item)]

    def _shares(self, item: int) -> dict[int, float | None]:
        if self.sensitivity is None:
            return {}
        errors = self.circuit.history.row_errors()
        one = Sensitivity(
            self.sensitivity.rows[item : item + 1], self.sensitivity.matrices[item : item + 1]
        )
        shares = one.variance_shares(errors)[0]
        return {
            int(row): None if math.isnan(share) else float(share)
            for row, share in zip(one.rows[0], shares, strict=True)
            if row >= 0
        }

    def _row(self, number: int, shares: dict[int, float | None]) -> dict[str, Any]:
        """A row as printed and as meant; an implied zero row stands on no line."""
        return row_record(self.circuit, number) | {"variance_share": shares.get(number, 0.0)}

    def words(self, item: int = 0) -> Iterator[str]:
        """The ledger of one result in words, one line per link and two per row."""
        links_ = self.links_of(item)
        if len(links_) > 1:
            yield "chain: link 1 acts first; the result is " + " * ".join(
                f"link {record['link']}" for record in reversed(links_)
            )
        for record in links_:
            turned = ", the pair turned round" if record["turned_round"] else ""
            pole = "zero rotation"
            if record["pole_lat_deg"] is not None:
                pole = f"pole {record['pole_lat_deg']:.10f} {record['pole_lon_deg']:.10f}"
                pole += f", angle {record['angle_deg']:.10f} deg"
            distance = "moved" if "moved_km" in record else "greatest"
            yield (
                f"link {record['link']}: {record['plate']} relative to {record['relative_to']}"
                f" at {record['age_ma']:g} Ma{turned}: {pole};"
                f" {distance} {record[distance + '_km']:.3f} km"
            )
            for side in ("younger", "older"):
                row = record[side]
                share = row["variance_share"]
                known = "share of variance not known" if share is None else f"{share:.1%} of the variance"
                where = ":".join(str(row[name]) for name in ("file", "line") if row[name]) or "no line"
                yield f"    {side} row {row['age_ma']:g} Ma, {where}: {known}"
                names = ("printed", "chron", "reference", "citation", "note")
                said = [row[name] for name in names if row[name]]
                if said:
                    yield "        " + " | ".join(said)
            yield f"    fraction between them {record['fraction']:.10f}"


ROW_NAMES = (
    *("file", "line", "age_ma", "pole_lat_deg", "pole_lon_deg", "angle_deg"),
    *("printed", "chron", "reference", "note", "citation"),
)


def entries(circuit: Circuit, segments: Iterable[Segment]) -> dict[str, list[Any]]:
    """The entries of segments as columns, one row per segment and link, ordered by id and link."""
    names = ["ledger_id", "link", "plate", "relative_to", "turned_round"]
    names += [f"{side}_{name}" for side in ("younger", "older") for name in ROW_NAMES]
    rows = []
    for segment in segments:
        its_id = segment_id(circuit, segment)
        for at, (link, stage) in enumerate(zip(segment.chain, segment.stages, strict=True), 1):
            pair = circuit.pairs[link.pair]
            ends = (pair.plate, pair.relative_to)
            row: list[Any] = [its_id, at, *(ends if link.forward else ends[::-1]), not link.forward]
            for side in (circuit.stages.younger, circuit.stages.older):
                record = row_record(circuit, int(side[stage]))
                row += [record[name] for name in ROW_NAMES]
            rows.append(row)
    rows.sort(key=lambda row: (row[0], row[1]))
    return {name: [row[i] for row in rows] for i, name in enumerate(names)}


@functools.lru_cache(maxsize=100_000)
def segment_id(circuit: Circuit, segment: Segment) -> str:
    """Ten hexadecimal digits made from the links and rows of a segment."""
    said: list[tuple[Any, ...]] = []
    for link, stage in zip(segment.chain, segment.stages, strict=True):
        pair = circuit.pairs[link.pair]
        said.append((pair.plate, pair.relative_to, link.forward))
        for side in (circuit.stages.younger, circuit.stages.older):
            record = row_record(circuit, int(side[stage]))
            said.append(tuple(str(record[name]) for name in ROW_NAMES[1:6]))
    return hashlib.sha256(repr(said).encode()).hexdigest()[:10]


def row_record(circuit: Circuit, number: int) -> dict[str, Any]:
    """A row as plain values: where it stands, as meant, as printed."""
    history = circuit.history
    if number < 0:
        return {
            "file": "",
            "line": None,
            "age_ma": 0.0,
            "pole_lat_deg": None,
            "pole_lon_deg": None,
            "angle_deg": 0.0,
            "printed": "",
            "chron": "",
            "reference": "",
            "note": "zero at the present by the table's from_present",
            "citation": "",
        }
    row = history.rows.row(number)
    zero = row.angle_deg == 0.0
    return {
        "file": history.tables[row.table].file,
        "line": row.line or None,
        "age_ma": row.age_ma,
        "pole_lat_deg": None if zero else row.pole_lat_deg,
        "pole_lon_deg": None if zero else row.pole_lon_deg,
        "angle_deg": row.angle_deg,
        "printed": row.printed,
        "chron": row.chron,
        "reference": row.reference,
        "note": row.note,
        "citation": history.tables[row.table].citation,
    }


def segments_of(
    circuit: Circuit, chain: NDArray[np.int32], ages: Floats, just_younger: bool = False
) -> tuple[NDArray[np.int64], tuple[Segment, ...]]:
    """The segment (n,) of each chain and age (Ma), and the segments; numbered by chain, then by age."""
    segment = np.full(len(chain), NO_SEGMENT, dtype=np.int64)
    segments: list[Segment] = []
    for number in np.unique(chain[chain >= 0]):
        its_chain = circuit.pieces.chains[int(number)]
        items = np.flatnonzero(chain == number)
        found = [circuit.stages.find(link.pair, ages[items], just_younger) for link in its_chain]
        code = np.zeros(len(items), dtype=np.int64)
        for stage in found:
            _, code = np.unique(code * (len(circuit.stages.half) + 1) + stage, return_inverse=True)
        _, first = np.unique(code, return_index=True)
        segment[items] = len(segments) + code
        for at in first:
            segments.append(Segment(its_chain, tuple(int(stage[at]) for stage in found)))
    return segment, tuple(segments)
