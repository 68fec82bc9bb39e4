"""Sites from file to file in chunks, with flat memory: read, restore, write, and the evidence."""

from __future__ import annotations

import json
import os
from collections import Counter
from collections.abc import Callable, Iterable, Iterator, Mapping, Sequence
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import numpy as np

from restore.errors import InputError
from restore.files.atomic import check_target, refuse_input, whole_file
from restore.files.delimited import DelimitedReader, Layout
from restore.files.tables import TableOut, csv_text
from restore.findings import Finding, Place
from restore.history.circuit import Circuit
from restore.history.ledger import Segment, entries
from restore.motion.site_table import SiteReader
from restore.motion.sites import SiteJob, SiteResults, restore_table

CHUNK = 50_000
LEDGER_ENDINGS = (".csv", ".json", ".txt")
MOST_WRITTEN_OUT = 10_000
POSITION = ("restored_lat_deg", "restored_lon_deg")


@dataclass
class Done:
    """What a file of sites came to: rows by status, whether one was malformed, all findings, and the
    segments of the ledger that its results used.
    """

    counts: Counter[str] = field(default_factory=Counter)
    malformed: bool = False
    findings: list[Finding] = field(default_factory=list)
    segments: dict[Segment, None] = field(default_factory=dict)


def restore_file(
    table: str | os.PathLike[str],
    job: SiteJob,
    layout: Layout,
    out: str | os.PathLike[str] | None,
    ledger_file: str | os.PathLike[str] | None,
    provenance: Mapping[str, Any],
    say: Callable[[Iterable[Finding]], None] = lambda findings: None,
    advance: Callable[[int], None] = lambda done: None,
) -> Done:
    """Restore a file of sites into `out` (standard output as CSV if None), in the order of its rows.

    `ledger_file`: a `.csv` of the entries that the results share, a `.json` that also writes out every link
    of the first 10 000 results, or a `.txt` that tells those in words. Raises TableError or InputError if the file as a whole
    is at fault; then nothing is written.
    """
    if ledger_file is not None:
        _check_ledger(ledger_file, out, provenance)
    done, written_out = Done(), _WrittenOut()
    in_full = ledger_file is not None and Path(ledger_file).suffix.lower() in {".json", ".txt"}
    with DelimitedReader(table, layout) as reader:
        site_reader = SiteReader(reader, job.ages is None, job.clock)
        with TableOut(out, provenance, POSITION) as target:
            for chunk in reader.chunks(CHUNK):
                results = restore_table(site_reader.parse(chunk), job)
                target.add(results.columns)
                say(results.findings)
                done.counts.update(results.counts())
                done.malformed |= results.malformed
                done.findings += results.findings
                done.segments.update(dict.fromkeys(results.ledger.segments))
                if in_full:
                    written_out.add(results)
                advance(reader.bytes_read())
    if job.clock is not None and job.clock.restatement is not None:
        clock = job.clock.restatement
        what = f"ages restated from {clock.older.name} to {clock.newer.name}: up to {job.clock.most_myr:.3g} Myr"
        done.findings.append(Finding("note", "restated", Place(os.fspath(table)), what))
        say(done.findings[-1:])
    if ledger_file is not None:
        write_ledger(ledger_file, job.circuit, done.segments, written_out.results, provenance)
    return done


def _check_ledger(
    file: str | os.PathLike[str], out: str | os.PathLike[str] | None, provenance: Mapping[str, Any]
) -> None:
    """Refuse at the start what could not be written at the end."""
    if Path(file).suffix.lower() not in LEDGER_ENDINGS:
        raise InputError(f"{os.fspath(file)}: a ledger is written as {', '.join(LEDGER_ENDINGS)}")
    check_target(file)
    refuse_input(file, (record["file"] for record in provenance.get("inputs", ())))
    if out is not None and Path(file).absolute() == Path(out).absolute():
        raise InputError(f"{os.fspath(file)}: the ledger and the sites cannot be one file")


@dataclass
class _WrittenOut:
    """The ledger of each result with a chain: its links in full as long as they are few."""

    results: list[dict[str, Any]] = field(default_factory=list)
    rows: int = 0

    def add(self, results: SiteResults) -> None:
        left = MOST_WRITTEN_OUT - self.rows
        ledger = results.with_details() if left > 0 else results.ledger
        ids = ledger.id_column()
        names = results.columns.get("site")
        for item in np.flatnonzero(ledger.segment >= 0).tolist():
            record: dict[str, Any] = {"row": self.rows + item}
            if names is not None:
                record["site"] = names[item]
            record |= {"restored_age_ma": float(ledger.ages[item]), "ledger_id": ids[item]}
            if item < left:
                record["links"] = ledger.links_of(item)
                record["words"] = list(ledger.words(item))
            self.results.append(record)
        self.rows += len(results)


def write_ledger(
    file: str | os.PathLike[str],
    circuit: Circuit,
    segments: Iterable[Segment],
    results: Sequence[Mapping[str, Any]],
    provenance: Mapping[str, Any],
) -> None:
    """Write the entries that results share, as `.csv` or, with the results themselves, as `.json`; or the
    results in words, as `.txt`.
    """
    columns = entries(circuit, segments)
    with whole_file(file) as part:
        if Path(file).suffix.lower() == ".txt":
            part.write_text("".join(_in_words(results)), encoding="utf-8")
            return
        if Path(file).suffix.lower() == ".csv":
            part.write_text(csv_text(columns), encoding="utf-8")
            return
        rows = zip(*columns.values(), strict=True)
        records = [dict(zip(columns, row, strict=True)) for row in rows]
        content = {"provenance": provenance, "entries": records, "results": _without_words(results)}
        part.write_text(json.dumps(content, indent=1, allow_nan=False) + "\n", encoding="utf-8")


def _in_words(results: Sequence[Mapping[str, Any]]) -> Iterator[str]:
    for result in results:
        name = result.get("site", f"row {result['row']}")
        yield f"{name}, {result['restored_age_ma']:g} Ma, ledger {result['ledger_id']}\n"
        yield from (f"  {line}\n" for line in result.get("words", ()))


def _without_words(results: Sequence[Mapping[str, Any]]) -> list[dict[str, Any]]:
    return [{key: value for key, value in result.items() if key != "words"} for result in results]
