"""Findings about chains: plates that reach no frame, chains that differ, partners that jump."""

from __future__ import annotations

import numpy as np

from restore.findings import Finding, Place
from restore.geometry.rotations import Rotations
from restore.geometry.sphere import EARTH_RADIUS_KM
from restore.history import links
from restore.history.circuit import TOLERANCE_KM, Circuit
from restore.history.links import Chain


def place_of(circuit: Circuit, row: int) -> Place:
    """Where a row stands."""
    table = circuit.history.tables[int(circuit.history.rows.table[row])]
    return Place(table.file, int(circuit.history.rows.line[row]) or None)


def unreached_plates(circuit: Circuit) -> list[Finding]:
    """Plates from which no chain leads to the frame at any age."""
    findings = []
    for plate in circuit.plates:
        if circuit.covered(plate) or plate == circuit.frame:
            continue
        rows = circuit.history.rows
        row = int(np.flatnonzero((rows.plate == plate) | (rows.relative_to == plate))[0])
        what = f"no chain leads from {plate} to {circuit.frame} at any age"
        remedy = "add a pair that ties it, or ask for another frame"
        findings.append(Finding("warning", "no chain", place_of(circuit, row), what, remedy=remedy))
    return findings


def differing_chains(circuit: Circuit) -> list[Finding]:
    """Loops of pairs that do not close: two chains between the same plates that differ."""
    findings: dict[tuple[str, Chain, Chain], Finding] = {}
    for conflict in circuit.pieces.conflicts:
        key = (conflict.plate, conflict.one, conflict.other)
        km = conflict.misfit_rad * EARTH_RADIUS_KM
        kept = findings.get(key)
        if kept is not None and (kept.km or 0.0) >= km:
            continue
        row = int(circuit.pairs[conflict.other[0].pair].rows[-1])
        what = (
            f"two chains differ at {conflict.younger_ma:g}..{conflict.older_ma:g} Ma:"
            f" {circuit.say(conflict.plate, conflict.one)} and"
            f" {circuit.say(conflict.plate, conflict.other)}"
        )
        remedy = "rank the tables in the manifest, or leave one of the pairs out"
        findings[key] = Finding("warning", "two chains", place_of(circuit, row), what, km, remedy)
    return list(findings.values())


def partner_jumps(circuit: Circuit) -> list[Finding]:
    """Changes of a plate's chain at an age at which the two chains differ by more than 1 km."""
    findings = []
    pieces = circuit.pieces
    seen: set[tuple[float, Chain, Chain]] = set()
    for code, plate in enumerate(circuit.plates):
        numbers = pieces.chain_of[code]
        for at, cut in enumerate(pieces.cuts):
            younger, older = int(numbers[2 * at]), int(numbers[2 * at + 2])
            if younger < 0 or older < 0 or younger == older:
                continue
            one, other = pieces.chains[younger], pieces.chains[older]
            while one and other and one[-1] == other[-1]:
                one, other = one[:-1], other[:-1]
            if (float(cut), one, other) in seen:
                continue
            seen.add((float(cut), one, other))
            km = _difference_km(circuit, one, other, float(cut))
            if km > TOLERANCE_KM and one and other and one[0] != other[0]:
                row = int(circuit.pairs[other[0].pair].rows[0])
                what = f"{plate} jumps at {cut:g} Ma, where its partner changes"
                remedy = "compare the two rows at that age; the younger interval's is used"
                findings.append(
                    Finding("warning", "partner change", place_of(circuit, row), what, km, remedy)
                )
    return findings


def _difference_km(circuit: Circuit, one: Chain, other: Chain, age: float) -> float:
    """Greatest distance on the globe between what two chains give at an age."""
    at = np.array([age])
    first, second = (Rotations(links.compose(circuit.stages, chain, at)) for chain in (one, other))
    return float(first.angle_to(second)[0]) * EARTH_RADIUS_KM
