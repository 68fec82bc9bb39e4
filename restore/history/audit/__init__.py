"""The audit of a history: one function per kind of finding; here all of them in order."""

from __future__ import annotations

from restore.findings import Finding
from restore.history.audit import chains, offpath, pairs, rows
from restore.history.circuit import Circuit
from restore.history.links import pairs_of
from restore.history.store import History

OF_ROWS = (rows.rows_without_reference, rows.rows_without_covariance, rows.mixed_clocks)
OF_PAIRS = (
    pairs.slips,
    offpath.rows_off_their_path,
    pairs.tables_in_radians,
    pairs.stages_too_fast_or_wide,
    pairs.antipodal_poles,
    pairs.rough_velocities,
)
OF_CHAINS = (
    chains.unreached_plates,
    chains.not_from_present,
    chains.gaps,
    chains.partner_jumps,
    chains.differing_chains,
    chains.closing_loops,
    chains.mixed_frames,
)
SEVERITIES = ("error", "warning", "note")


def audit(history: History, frame: str | None = None) -> list[Finding]:
    """All findings of a history: those of its reading, of its rows, pairs and chains to `frame`.

    Errors first, then warnings, then notes. Without a frame a stated mantle or spin-axis frame is
    taken, else the label that most plates are tied to.
    """
    findings = list(history.findings)
    if not len(history):
        return findings
    for of_rows in OF_ROWS:
        findings += of_rows(history)
    tracks = pairs.tracks_of(history, pairs_of(history))
    for of_pairs in OF_PAIRS:
        findings += of_pairs(history, tracks)
    circuit = Circuit(history, frame or widest_frame(history), mixed_clocks=True)
    for of_chains in OF_CHAINS:
        findings += of_chains(circuit)
    return sorted(findings, key=lambda finding: SEVERITIES.index(finding.severity))


def widest_frame(history: History) -> str:
    """A stated mantle or spin-axis frame, else the label that most plates are tied to."""
    for label, kind in history.frames.items():
        if kind != "plate" and label in history.plates():
            return label
    moving = set(history.rows.plate)
    roots = [label for label in history.plates() if label not in moving] or history.plates()
    partners = list(history.rows.relative_to)
    return max(roots, key=lambda label: (partners.count(label), label))
