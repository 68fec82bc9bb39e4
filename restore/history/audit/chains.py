"""Findings about chains: plates that reach no frame, chains that differ, partners that jump."""

from __future__ import annotations

from itertools import pairwise

import numpy as np

from restore.findings import Finding
from restore.geometry.sphere import EARTH_RADIUS_KM
from restore.history.audit.misfits import Misfit, apart_km, nearest_row
from restore.history.audit.places import pair_name, place_of_row
from restore.history.circuit import TOLERANCE_KM, Circuit
from restore.history.intervals import Conflict
from restore.history.links import Chain, Link

NEAR_GAP_MYR = 0.5
"""A gap as short as this between two pairs is likely a matter of rounded ages."""


def unreached_plates(circuit: Circuit) -> list[Finding]:
    """Plates from which no chain leads to the frame, at any age or past the end of a chain."""
    findings = []
    oldest: dict[str, tuple[float, int]] = {}
    for pair in circuit.pairs:
        own = (pair.oldest_ma, int(pair.rows[-1]))
        oldest[pair.plate] = max(oldest.get(pair.plate, own), own)
    for plate in circuit.plates:
        spans = circuit.covered(plate)
        if plate == circuit.frame:
            continue
        rows = circuit.history.rows
        if not spans:
            row = int(np.flatnonzero((rows.plate == plate) | (rows.relative_to == plate))[0])
            what = f"no chain leads from {plate} to {circuit.frame} at any age"
            remedy = "add a pair that ties it, or ask for another frame"
        elif plate in oldest and oldest[plate][0] > spans[-1][1]:
            end, row = oldest[plate]
            what = (
                f"no chain leads from {plate} to {circuit.frame} between {spans[-1][1]:g} and {end:g} Ma,"
                f" where {plate} has rows"
            )
            remedy = "the chain ends at a partner: add older rows for it"
        else:
            continue
        place = place_of_row(circuit.history, row)
        findings.append(Finding("warning", "no chain", place, what, remedy=remedy))
    return findings


def differing_chains(circuit: Circuit) -> list[Finding]:
    """Loops of pairs that do not close: two chains between the same plates that differ."""
    worst: dict[tuple[str, Chain, Chain], Conflict] = {}
    for conflict in circuit.pieces.conflicts:
        key = (conflict.plate, conflict.one, conflict.other)
        if key not in worst or worst[key].misfit_rad < conflict.misfit_rad:
            worst[key] = conflict
    findings = []
    for conflict in worst.values():
        misfit = Misfit.worst(circuit, conflict)
        row = int(circuit.pairs[conflict.other[0].pair].rows[-1])
        what = (
            f"two chains differ at {conflict.younger_ma:g}..{conflict.older_ma:g} Ma:"
            f" {circuit.say(conflict.plate, conflict.one)} and"
            f" {circuit.say(conflict.plate, conflict.other)}; {misfit.in_words(circuit)}"
        )
        remedy = "rank the tables in the manifest, or leave one of the pairs out"
        km = conflict.misfit_rad * EARTH_RADIUS_KM
        place = place_of_row(circuit.history, row)
        findings.append(Finding("warning", "two chains", place, what, km, remedy))
    return findings


def partner_jumps(circuit: Circuit) -> list[Finding]:
    """Changes of a plate's chain at an age at which the two chains differ by more than 1 km."""
    findings = []
    pieces = circuit.pieces
    seen: set[tuple[float, Chain, Chain]] = set()
    younger, older = pieces.chain_of[:, 0:-1:2], pieces.chain_of[:, 2::2]
    changes = np.argwhere((younger >= 0) & (older >= 0) & (younger != older))
    for code, at in changes.tolist():
        plate, cut = circuit.plates[code], float(pieces.cuts[at])
        one, other = pieces.chains[younger[code, at]], pieces.chains[older[code, at]]
        while one and other and one[-1] == other[-1]:
            one, other = one[:-1], other[:-1]
        if not one or not other or one[0] == other[0] or (cut, one, other) in seen:
            continue
        seen.add((cut, one, other))
        if apart_km(circuit, one, other, cut) > TOLERANCE_KM:
            misfit = Misfit.at(circuit, one, other, cut)
            row = nearest_row(circuit, other[0].pair, cut)
            what = f"{plate} jumps at {cut:g} Ma, where its partner changes; {misfit.in_words(circuit)}"
            remedy = "compare the two rows at that age; the younger interval's is used"
            place = place_of_row(circuit.history, row)
            findings.append(Finding("warning", "partner change", place, what, misfit.km, remedy))
    return findings


def gaps(circuit: Circuit) -> list[Finding]:
    """Ages inside a plate's history at which no chain leads to the frame; a short one is likely rounding."""
    findings = []
    for plate in circuit.plates:
        spans = circuit.covered(plate) if plate != circuit.frame else []
        for (_, younger), (older, _) in pairwise(spans):
            row = _row_at(circuit, plate, older)
            short = older - younger <= NEAR_GAP_MYR
            what = f"{plate} has no chain to {circuit.frame} between {younger:g} and {older:g} Ma"
            remedy = "add rows for it; a gap is never bridged by itself"
            if short:
                remedy = (
                    f"likely rounding: make the ages equal, or state join_within_myr = {NEAR_GAP_MYR:g}"
                )
            kind = "near gap" if short else "gap"
            findings.append(
                Finding("warning", kind, place_of_row(circuit.history, row), what, remedy=remedy)
            )
    return findings


def not_from_present(circuit: Circuit) -> list[Finding]:
    """Plates whose chain does not reach the present."""
    findings = []
    for plate in circuit.plates:
        spans = circuit.covered(plate)
        if plate != circuit.frame and spans and spans[0][0] > 0.0:
            row = _row_at(circuit, plate, spans[0][0])
            what = (
                f"{plate} is tied to {circuit.frame} only from {spans[0][0]:g} Ma on, not from the present"
            )
            remedy = "add a row of age 0 or state from_present = true"
            place = place_of_row(circuit.history, row)
            findings.append(Finding("note", "not from the present", place, what, remedy=remedy))
    return findings


def _row_at(circuit: Circuit, plate: str, age: float) -> int:
    """The row that ends or begins a chain of the plate at an age: nearest the plate that has one."""
    numbers, *_ = circuit.find(circuit.codes([plate]), np.array([age]))
    chain = circuit.pieces.chains[int(numbers[0])] if numbers[0] >= 0 else ()
    for link in chain:
        pair = circuit.pairs[link.pair]
        for row, its_age in zip(pair.rows, pair.ages, strict=True):
            if its_age == age and row >= 0:
                return int(row)
    return int(circuit.pairs[chain[0].pair].rows[-1]) if chain else -1


def mixed_frames(circuit: Circuit) -> list[Finding]:
    """Chains that pass through a mantle frame on their way to a spin-axis frame, or the other way."""
    history = circuit.history
    findings: dict[str, Finding] = {}
    own = history.kind_of(circuit.frame)
    for chain in circuit.pieces.chains:
        labels = [_end_of(circuit, link) for link in chain]
        for label, link in zip(labels[:-1], chain[1:], strict=True):
            kind = history.kind_of(label)
            if kind not in {"plate", own} and label not in findings:
                row = int(circuit.pairs[link.pair].rows[-1])
                what = (
                    f"chains to {circuit.frame} ({own}) pass through {label} ({kind}):"
                    f" {pair_name(label, circuit.frame)} mixes two kinds of frame"
                )
                remedy = "the motion between the two kinds (true polar wander) must be meant"
                place = place_of_row(history, row)
                findings[label] = Finding("warning", "frames mixed", place, what, remedy=remedy)
    return list(findings.values())


def _end_of(circuit: Circuit, link: Link) -> str:
    pair = circuit.pairs[link.pair]
    return pair.relative_to if link.forward else pair.plate


def closing_loops(circuit: Circuit) -> list[Finding]:
    """Loops of pairs that close within 1 km: harmless, and worth knowing."""
    findings: dict[tuple[str, Chain, Chain], Finding] = {}
    for loop in circuit.pieces.closings:
        key = (loop.plate, loop.one, loop.other)
        row = int(circuit.pairs[loop.other[0].pair].rows[-1])
        what = (
            f"two chains agree at {loop.younger_ma:g}..{loop.older_ma:g} Ma:"
            f" {circuit.say(loop.plate, loop.one)} and {circuit.say(loop.plate, loop.other)}"
        )
        km = loop.misfit_rad * EARTH_RADIUS_KM
        if key not in findings or (findings[key].km or 0.0) < km:
            findings[key] = Finding("note", "loop", place_of_row(circuit.history, row), what, km)
    return list(findings.values())
