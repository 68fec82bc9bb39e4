"""Dated sites restored: each row answered, with its error or with the reason why not."""

from __future__ import annotations

import os
import zlib
from collections import Counter
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass, field, replace
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from restore.files.delimited import DelimitedReader, Layout
from restore.files.points import refuse_result_names
from restore.findings import Finding, did_you_mean
from restore.geometry.latitudes import Latitudes
from restore.geometry.sphere import EARTH_RADIUS_KM, Floats, unit_vectors
from restore.history.circuit import BLOCK, NO_PLATE, REACHED, SAYS, Circuit
from restore.history.ledger import Ledger, segments_of
from restore.history.store import History
from restore.motion.ages import parse_ages
from restore.motion.draws import Draws, drawn_columns
from restore.motion.ground import Ground, Placing
from restore.motion.paths import path_length_km
from restore.motion.points import Moved, Points, move_common, move_own
from restore.motion.site_clock import SiteClock
from restore.motion.site_table import SiteReader, SiteTable, table_from_columns

if TYPE_CHECKING:
    import pandas as pd

NOT_FORMED, OLDER_THAN_CRUST, NO_AGE, BAD_COORDINATE = range(len(SAYS), len(SAYS) + 4)
STATUSES = (*SAYS, "crust not yet formed", "older than its crust", "no age", "bad coordinate")
POINT_COLUMNS = (
    *("restored_lat_deg", "restored_lon_deg", "ellipse_major_km", "ellipse_minor_km"),
    *("ellipse_azimuth_deg", "ellipse_dof"),
)
RANGE_COLUMNS = (
    "restored_young_lat_deg",
    "restored_young_lon_deg",
    "restored_old_lat_deg",
    "restored_old_lon_deg",
    "path_km",
    "path_95_km",
)


@dataclass(frozen=True)
class SiteJob:
    """What to do with sites: the Circuit, the ages (Ma; None: each its own) and the conventions.

    `frame_kind`: `plate`, `mantle` or `spin-axis`, said in every output. `threads`: how many blocks
    are computed at once; it never changes a result.
    """

    circuit: Circuit
    ages: tuple[float, ...] | None = None
    latitudes: Latitudes = field(default_factory=Latitudes)
    radius_km: float = EARTH_RADIUS_KM
    frame_kind: str = "plate"
    threads: int = 1
    draws: Draws | None = None
    clock: SiteClock | None = None
    ground: Ground | None = None

    @property
    def with_errors(self) -> bool:
        """Whether the error of any row that turns is known."""
        history = self.circuit.history
        return bool(np.any(history.row_errors().known & (history.rows.age_ma > 0.0)))


@dataclass(eq=False)
class SiteResults:
    """Restored sites in long form: one row per site and age, in input order, then by age.

    `columns`: the user's own first, as they stood, then the results (see `restore_sites`). `status`
    numbers into `STATUSES`. `findings`: faults of the table and remarks, by place. `start_lat_deg`,
    `start_lon_deg`: today's position of each row as the sphere has it.
    """

    columns: dict[str, Sequence[Any] | NDArray[Any]]
    status: NDArray[np.int8]
    findings: list[Finding]
    ledger: Ledger
    start_lat_deg: Floats
    start_lon_deg: Floats

    def __len__(self) -> int:
        return len(self.status)

    def counts(self) -> Counter[str]:
        """How many rows have each status."""
        return Counter(STATUSES[code] for code in self.status.tolist())

    @property
    def malformed(self) -> bool:
        """Whether a row of the table could not be read as it should."""
        return any(finding.severity == "error" for finding in self.findings)

    def with_details(self) -> Ledger:
        """The ledger with each row's share of the variance and how far each link moved the site."""
        ledger = self.ledger
        known = ledger.segment >= 0
        plates = np.where(known, np.array(list(self.columns["plate"]), dtype=object), ledger.circuit.frame)
        found = ledger.circuit.rotations(plates, np.where(known, ledger.ages, 0.0))
        points = unit_vectors(self.start_lat_deg, self.start_lon_deg)
        return replace(ledger, sensitivity=found.sensitivity(), points=points)

    def to_dataframe(self) -> pd.DataFrame:
        """The results as a pandas DataFrame."""
        import pandas as pd

        return pd.DataFrame({name: list(column) for name, column in self.columns.items()})


def restore_table(table: SiteTable, job: SiteJob) -> SiteResults:
    """Restore the sites of one table, or of one chunk of it."""
    return _Restoring(table, job).results()


def restore_sites(
    sites: str | os.PathLike[str] | Mapping[str, Sequence[Any]],
    history: History,
    frame: str,
    ages: str | float | Iterable[float] = "own",
    *,
    latitudes: str = "as-given",
    radius_km: float = EARTH_RADIUS_KM,
    beyond: str = "refuse",
    layout: Layout | None = None,
    threads: int = 1,
    draws: int | None = None,
    seed: int = 1,
) -> SiteResults:
    """Restore dated sites to their own ages, or to given ones, relative to a frame.

    `sites`: a delimited file, or columns in memory (a dict, a DataFrame): `lat_deg`, `lon_deg`
    (degrees), `plate`, `age_ma` (Ma), and optionally `site`, `age_sigma_myr`, `age_young_ma` with
    `age_old_ma`, `host_age_ma`, `position_sigma_km`. `ages`: `own`, "0,10,20", "0:120:10" or numbers.

    The results add `restored_age_ma`, `restored_lat_deg`, `restored_lon_deg`, the 95 % ellipse
    (`ellipse_major_km`, `ellipse_minor_km`, `ellipse_azimuth_deg`, `ellipse_dof`), `status` and more;
    no row is ever dropped. Raises TableError or InputError if the table or the question as a whole
    is at fault, UnknownPlateError for an unknown frame.
    """
    asked = parse_ages(ages)
    job = SiteJob(
        Circuit(history, frame, beyond),
        asked,
        Latitudes(latitudes),
        radius_km,
        history.kind_of(frame),
        threads,
        None if draws is None else Draws(draws, seed),
    )
    if not isinstance(sites, (str, os.PathLike)):
        return restore_table(table_from_columns(sites, asked is None), job)
    with DelimitedReader(sites, layout) as reader:
        site_reader = SiteReader(reader, asked is None, job.clock)
        (chunk,) = reader.chunks(size=2**62)
        return restore_table(site_reader.parse(chunk), job)


class _Restoring:
    """One table on its way: the sites, what was asked, and what is known of each row."""

    def __init__(self, table: SiteTable, job: SiteJob) -> None:
        self.table = table
        self.job = job
        self.circuit = job.circuit
        self.findings = list(table.findings)
        self.own_ages = job.ages is None
        self.age = table.representative_age()
        self.placing = Placing.as_given(table) if job.ground is None else job.ground.place(table)
        self.findings += self.placing.findings
        self.plate = self.placing.plate
        known = sorted(set(self.plate) - {""})
        number = dict(zip(known, self.circuit.codes(known).tolist(), strict=True))
        self.codes = np.array([number.get(p, -1) for p in self.plate], dtype=np.int64)
        self._report_unknown([p for p in known if number[p] < 0])
        self.fault = self._faults_of_rows()

    def _report_unknown(self, labels: list[str]) -> None:
        rows_of: dict[str, list[int]] = {label: [] for label in labels}
        for row, plate in enumerate(self.plate) if labels else ():
            if plate in rows_of and row not in self.table.slipped:
                rows_of[plate].append(row)
        for label, rows in rows_of.items():
            if not rows:
                continue
            hint = did_you_mean(label, self.circuit.plates)
            more = f" ({len(rows)} sites)" if len(rows) > 1 else ""
            what = f"plate {label!r} is not in the history{more}"
            place = self.table.plate_place(rows[0])
            self.findings.append(Finding("warning", "unknown plate", place, what, remedy=hint))

    def _faults_of_rows(self) -> NDArray[np.int8]:
        """The status of rows that cannot be restored whatever the age, REACHED for the others."""
        table = self.table
        fault = np.full(len(table), REACHED, dtype=np.int8)
        fault[[not plate for plate in self.plate]] = NO_PLATE
        fault[self.age > self.placing.host_ma] = OLDER_THAN_CRUST
        if self.own_ages:
            fault[np.isnan(self.age)] = NO_AGE
        fault[table.bad_age] = NO_AGE
        fault[table.bad_place] = BAD_COORDINATE
        return fault

    def _points(self, rows: NDArray[np.int64] | None = None) -> Points:
        numbers, usable = self.table.numbers, self.fault == REACHED
        pick = slice(None) if rows is None else rows
        lat = np.where(usable, numbers["lat_deg"], 0.0)[pick]
        lon = np.where(usable, numbers["lon_deg"], 0.0)[pick]
        position = numbers["position_sigma_km"][pick]
        has_position = bool(np.any(position > 0.0))
        age_sigma = np.where(self.table.ranged, np.nan, numbers["age_sigma_myr"])[pick]
        has_age = self.own_ages and bool(np.any(age_sigma > 0.0))
        return Points(
            lat,
            lon,
            np.where(usable, self.codes, -1)[pick],
            self.job.latitudes,
            position / self.job.radius_km if has_position else None,
            age_sigma if has_age else None,
        )

    def results(self) -> SiteResults:
        """Everything of this table in long form."""
        job, count = self.job, len(self.table)
        threads = job.threads if count > 2 * BLOCK else 1
        if job.ages is None:
            asked = np.where(self.fault == REACHED, self.age, np.nan)
            moved = move_own(self.circuit, self._points(), asked, job.with_errors, threads)
            repeat, fault = 1, self.fault
        else:
            ages = np.array(job.ages)
            moved = _flat(move_common(self.circuit, self._points(), ages, job.with_errors, threads))
            repeat = len(ages)
            asked = np.tile(ages, count)
            fault = np.repeat(self.fault, repeat)
        host, gone = (np.repeat(a, repeat) for a in (self.placing.host_ma, self.placing.youngest_ma))
        fault = np.where((fault == REACHED) & (asked > host), NOT_FORMED, fault)
        fault = np.where((fault == REACHED) & (asked < gone), NO_PLATE, fault)
        status = np.where(fault != REACHED, fault, moved.status).astype(np.int8)
        results = self._result_columns(moved, asked, status, repeat)
        if self.own_ages and self.table.has_ranges:
            self._add_ranges(results, status)
        if job.draws is not None:
            results |= self._drawn(asked, status, repeat)
        self._add_remarks(results, asked, status, repeat)
        codes = np.repeat(np.where(self.fault == REACHED, self.codes, -1), repeat)
        ledger = self._ledger(codes, asked, status)
        results["ledger_id"] = ledger.id_column()
        columns = self._own_columns(results, repeat)
        start = self.job.latitudes.inward(self.table.numbers["lat_deg"])
        return SiteResults(
            {**columns, **results},
            status,
            self.findings,
            ledger,
            np.repeat(start, repeat),
            np.repeat(self.table.numbers["lon_deg"], repeat),
        )

    def _own_columns(self, results: Mapping[str, Any], repeat: int) -> dict[str, Any]:
        table = self.table
        names, taken = list(table.own), [*results, "plate_from"]
        if table.plate_column is not None and names[table.plate_column] != "plate":
            taken.append("plate")
        refuse_result_names(names, taken, table.file, table.header_line)
        columns: dict[str, Any] = {
            name: [value for value in column for _ in range(repeat)] if repeat > 1 else column
            for name, column in self.table.own.items()
        }
        columns["plate"] = [plate for plate in self.plate for _ in range(repeat)]
        columns["plate_from"] = [origin for origin in self.placing.plate_from for _ in range(repeat)]
        if self.placing.distance_km is not None:
            columns["outline_distance_km"] = np.repeat(self.placing.distance_km, repeat)
        return columns

    def _result_columns(
        self, moved: Moved, asked: Floats, status: NDArray[np.int8], repeat: int
    ) -> dict[str, Any]:
        reached = status == REACHED
        columns: dict[str, Any] = {
            "restored_age_ma": asked,
            "restored_lat_deg": np.where(reached, moved.lat_deg, np.nan),
            "restored_lon_deg": np.where(reached, moved.lon_deg, np.nan),
        }
        blank = np.full(len(status), np.nan)
        axes, dof = (blank, blank, blank), blank
        if moved.spread is not None:
            shape, nu = moved.spread.ellipse(self.job.radius_km)
            axes = tuple(np.where(reached, axis, np.nan) for axis in shape)  # type: ignore[assignment]
            dof = np.where(reached & np.isfinite(nu) & ~np.isnan(axes[0]), nu, np.nan)
        columns["ellipse_major_km"], columns["ellipse_minor_km"] = axes[0], axes[1]
        columns["ellipse_azimuth_deg"], columns["ellipse_dof"] = axes[2], dof
        words = self._error_words(axes[0], repeat)
        columns["errors"] = [word if ok else "" for word, ok in zip(words, reached.tolist(), strict=True)]
        columns["status"] = [STATUSES[code] for code in status.tolist()]
        return columns

    def _error_words(self, major: Floats, repeat: int) -> list[str]:
        """What the ellipse holds: never the model's own error."""
        numbers = self.table.numbers
        place = (numbers["position_sigma_km"] > 0.0).astype(int)
        age = np.zeros(len(self.table), dtype=int)
        if self.own_ages:
            age = ((numbers["age_sigma_myr"] > 0.0) & ~self.table.ranged).astype(int)
        words = ("rows only", "rows, age", "rows, site", "rows, site, age")
        said = np.repeat(2 * place + age, repeat).tolist()
        known = (~np.isnan(major)).tolist()
        return [words[code] if ok else "not known" for code, ok in zip(said, known, strict=True)]

    def _add_ranges(self, results: dict[str, Any], status: NDArray[np.int8]) -> None:
        """The two ends of an age range and the length of the path between them.

        `path_95_km`: the shortest stretch that holds 95 % of an age spread evenly over the range.
        """
        for name in RANGE_COLUMNS:
            results[name] = np.full(len(status), np.nan)
        rows = np.flatnonzero(self.table.ranged & (status == REACHED))
        if not len(rows):
            return
        points = self._points(rows)
        numbers = self.table.numbers
        young, old = numbers["age_young_ma"][rows], numbers["age_old_ma"][rows]
        host = self.placing.host_ma[rows]
        for name, ages in (("young", young), ("old", old)):
            moved = move_own(self.circuit, points, ages)
            here = moved.status == REACHED
            for axis, values in (("lat", moved.lat_deg), ("lon", moved.lon_deg)):
                results[f"restored_{name}_{axis}_deg"][rows] = np.where(here, values, np.nan)
            late = np.where(here, np.where(ages > host, NOT_FORMED, REACHED), moved.status)
            status[rows] = np.where(status[rows] == REACHED, late, status[rows])
        path = path_length_km(self.circuit, points, young, old, self.job.radius_km)
        results["path_km"][rows] = path
        results["path_95_km"][rows] = 0.95 * path
        # a range that reaches past what can be answered has no answer as a whole
        lost = rows[status[rows] != REACHED]
        for name in (*POINT_COLUMNS, *RANGE_COLUMNS):
            results[name][lost] = np.nan
        results["errors"] = ["" if row in set(lost) else said for row, said in enumerate(results["errors"])]
        results["status"] = [STATUSES[code] for code in status.tolist()]

    def _drawn(self, asked: Floats, status: NDArray[np.int8], repeat: int) -> dict[str, Floats]:
        """Monte Carlo answers; an age range counts as an even spread, a sigma as a normal one."""
        assert self.job.draws is not None
        rows = np.flatnonzero(status == REACHED)
        points = self._points(rows // repeat)
        ranges = None
        if self.own_ages:
            young, old = self.table.numbers["age_young_ma"], self.table.numbers["age_old_ma"]
            ranged = self.table.ranged
            ranges = np.where(ranged, young, np.nan)[rows], np.where(ranged, old, np.nan)[rows]
        drawn = drawn_columns(
            self.circuit, points, asked[rows], ranges, self.job.draws, self._seeds(rows, asked, repeat),
            self.job.radius_km,
        )  # fmt: skip
        columns = {}
        for name, values in drawn.items():
            columns[name] = np.full(len(status), np.nan)
            columns[name][rows] = values
        return columns

    def _seeds(self, rows: NDArray[np.int64], asked: Floats, repeat: int) -> NDArray[np.int64]:
        """A number for each row made from the site itself, so that its draws do not depend on others."""
        numbers = self.table.numbers
        seeds = []
        for row in rows.tolist():
            site = row // repeat
            said = (self.plate[site], float(asked[row]), *(float(numbers[name][site]) for name in numbers))
            seeds.append(zlib.crc32(repr(said).encode()))
        return np.array(seeds, dtype=np.int64)

    def _add_remarks(
        self, results: dict[str, Any], asked: Floats, status: NDArray[np.int8], repeat: int
    ) -> None:
        remarks = np.repeat(self._causes(), repeat)
        if self.own_ages:
            middle = self.table.ranged & np.isnan(self.table.numbers["age_ma"])
            remarks[middle & (status == REACHED)] = "age is the middle of its range"
        else:
            age = np.repeat(self.age, repeat)
            older = self.table.numbers["age_old_ma"]
            limit = np.where(np.isnan(np.repeat(older, repeat)), age, np.repeat(older, repeat))
            remarks[(limit < asked) & (status == REACHED)] = "sample is younger than the asked age"
        if self.circuit.beyond != "refuse":
            ends = np.repeat(self.circuit.oldest_by_code(self.codes), repeat)
            for row in np.flatnonzero((asked > ends) & (status == REACHED)).tolist():
                done = "held at" if self.circuit.beyond == "hold" else "extended beyond"
                said = f"{done} {ends[row]:g} Ma"
                remarks[row] = f"{remarks[row]}; {said}" if remarks[row] else said
        for row in np.flatnonzero((status == OLDER_THAN_CRUST) | (status == NOT_FORMED)).tolist():
            if not remarks[row]:
                remarks[row] = f"its crust is {self.placing.host_ma[row // repeat]:g} Myr old"
        for row, remark in enumerate(self.placing.remark):
            if remark:
                some = slice(row * repeat, (row + 1) * repeat)
                remarks[some] = [f"{said}; {remark}" if said else remark for said in remarks[some]]
        results["restored_note"] = remarks.tolist()
        for name, value in (
            ("frame", self.circuit.frame),
            ("frame_kind", self.job.frame_kind),
            ("latitudes", self.job.latitudes.kind),
            *([("time_scale", self.job.clock.to.name)] if self.job.clock is not None else []),
        ):
            results[name] = [value] * len(status)

    def _causes(self) -> NDArray[np.object_]:
        """Why a row could not be read, or that its plate is not in the history; else empty."""
        causes = np.full(len(self.table), "", dtype=object)
        row_of = {line: row for row, line in enumerate(self.table.lines)}
        for finding in self.table.findings:
            row = row_of.get(finding.place.line or -1)
            if row is not None and not causes[row]:
                causes[row] = finding.what
        for row in np.flatnonzero((self.codes < 0) & (self.fault == REACHED)).tolist():
            causes[row] = f"plate {self.plate[row]!r} is not in the history"
        return causes

    def _ledger(self, codes: NDArray[np.int64], asked: Floats, status: NDArray[np.int8]) -> Ledger:
        chain, _, used = self.circuit.find(codes, asked)
        chain = np.where(status == REACHED, chain, -1)
        segment, segments = segments_of(self.circuit, chain, used)
        return Ledger(self.circuit, used, segment, segments)


def _flat(moved: Moved) -> Moved:
    """Results (sites, ages) in long form: by site, then by age."""
    spread = moved.spread
    if spread is not None:
        names = ("east", "north", "cov", "squares_by_dof")
        spread = type(spread)(*(np.ascontiguousarray(getattr(spread, n)).ravel() for n in names))
    lat, lon, ages = (np.ascontiguousarray(a).ravel() for a in (moved.lat_deg, moved.lon_deg, moved.ages))
    return Moved(lat, lon, np.ascontiguousarray(moved.status).ravel(), ages, spread)
