"""How far two chains are apart, whether errors explain it, and whether one table turned the wrong way."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from restore.geometry import so3
from restore.geometry.sphere import EARTH_RADIUS_KM, Floats
from restore.geometry.uncertain import Significance, significance
from restore.history.circuit import Circuit
from restore.history.closure import along
from restore.history.intervals import Conflict
from restore.history.links import Chain, Link, steps_along

SIGNIFICANT = 0.05
BETTER_BY = 5.0
"""A table is suspected of turning the wrong way if that leaves so many times less."""


@dataclass(frozen=True)
class Misfit:
    """What is left over at an age after a walk along one chain and back along the other.

    `km`: at most, on the globe; `test`: whether errors of the rows leave as much.
    """

    one: Chain
    other: Chain
    age_ma: float
    km: float
    test: Significance

    @classmethod
    def at(cls, circuit: Circuit, one: Chain, other: Chain, age_ma: float) -> Misfit:
        """The misfit of two chains between the same plates at an age (Ma)."""
        back = tuple(Link(link.pair, not link.forward) for link in reversed(other))
        found = along(circuit, (*one, *back), np.array([age_ma]))
        sensitivity, errors = found.sensitivity(), circuit.history.row_errors()
        covariance = sensitivity.covariance(errors)[0]
        dof = float(sensitivity.effective_dof(errors)[0])
        vector = found.rotations.as_vectors()[0]
        km = float(np.linalg.norm(vector)) * EARTH_RADIUS_KM
        return cls(one, other, age_ma, km, significance(vector, covariance, dof))

    @classmethod
    def worst(cls, circuit: Circuit, conflict: Conflict) -> Misfit:
        """The misfit of two chains where it is greatest: at the ages of their rows and between."""
        one, other = conflict.one, conflict.other
        ages = [np.linspace(conflict.younger_ma, conflict.older_ma, 5)]
        ages += [circuit.stages.ages[link.pair] for link in (*one, *other)]
        inside = np.unique(np.concatenate(ages))
        inside = inside[(inside >= conflict.younger_ma) & (inside <= conflict.older_ma)]
        turns = [_turned(circuit, chain, inside) for chain in (one, other)]
        sizes = so3.angle(so3.multiply(so3.conjugate(turns[0]), turns[1]))
        return cls.at(circuit, one, other, float(inside[sizes.argmax()]))

    def in_words(self, circuit: Circuit) -> str:
        """Whether errors explain it, and the table that would leave far less if it turned otherwise."""
        probability = self.test.probability
        if np.isnan(probability):
            said = "the errors of its rows are not known"
        else:
            side = "beyond" if probability < SIGNIFICANT else "within"
            said = f"{side} the errors of its rows (probability {probability:.2g})"
        tables = {_table_of(circuit, link, self.age_ma) for link in (*self.one, *self.other)}
        left = {t: apart_km(circuit, self.one, self.other, self.age_ma, t) for t in tables}
        best = min(sorted(left), key=left.__getitem__)
        if left[best] * BETTER_BY < self.km:
            name = circuit.history.tables[best].file or "<rows>"
            said += f"; if all of {name} turned the other way, {left[best]:.0f} km would be left"
        return said


def apart_km(
    circuit: Circuit, one: Chain, other: Chain, age_ma: float, inverted: int | None = None
) -> float:
    """Greatest distance on the globe between what two chains give at an age (Ma).

    `inverted`: a table, by its number, whose rows are taken the other way round.
    """
    turns = [_turned(circuit, chain, np.array([age_ma]), inverted) for chain in (one, other)]
    return float(so3.angle(so3.multiply(so3.conjugate(turns[0]), turns[1]))[0]) * EARTH_RADIUS_KM


def _turned(circuit: Circuit, chain: Chain, ages: Floats, inverted: int | None = None) -> Floats:
    """Quaternions (n, 4) of a chain at ages (n,), with the rows of one table the other way round."""
    total = np.broadcast_to(so3.IDENTITY, (len(ages), 4))
    for step in steps_along(circuit.stages, chain, ages):
        turn = step.rotation
        if inverted is not None and _table_of(circuit, step.link, float(ages[0])) == inverted:
            turn = so3.conjugate(turn)
        total = so3.multiply(turn, total)
    return total


def _table_of(circuit: Circuit, link: Link, age_ma: float) -> int:
    return int(circuit.history.rows.table[nearest_row(circuit, link.pair, age_ma)])


def nearest_row(circuit: Circuit, pair: int, age_ma: float) -> int:
    """The row of a pair, by its number, that is nearest in age; implied zero rows do not count."""
    own = circuit.pairs[pair]
    written = own.rows >= 0
    at = int(np.abs(own.ages[written] - age_ma).argmin())
    return int(own.rows[written][at])
