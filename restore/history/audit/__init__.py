"""The audit of a history: one function per kind of finding; here all of them in order."""

from __future__ import annotations

from restore.findings import Finding
from restore.history.audit.chains import differing_chains, partner_jumps, unreached_plates
from restore.history.circuit import Circuit
from restore.history.store import History


def audit(history: History, frame: str | None = None) -> list[Finding]:
    """All findings of a history: those of its reading, then those of its chains to `frame`.

    Without a frame the label that most plates reach is taken.
    """
    findings = list(history.findings)
    if not len(history):
        return findings
    circuit = Circuit(history, frame or widest_frame(history))
    for kind in (unreached_plates, differing_chains, partner_jumps):
        findings += kind(circuit)
    return findings


def widest_frame(history: History) -> str:
    """A stated mantle or spin-axis frame, else the label that most plates are tied to."""
    for label, kind in history.frames.items():
        if kind != "plate" and label in history.plates():
            return label
    moving = set(history.rows.plate)
    roots = [label for label in history.plates() if label not in moving] or history.plates()
    partners = list(history.rows.relative_to)
    return max(roots, key=lambda label: (partners.count(label), label))
