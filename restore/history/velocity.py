"""Angular velocities along chains, and how linear results move with every row's error.

In the plate's own coordinates the angular velocity of a chain is `eta = sum_l B_l^T zeta_l`, with
B_l the links before l and zeta_l that link's stage velocity, forward in time: `-log(R1^-1 R2) /
(t2 - t1)`. In the frame it is `omega = A eta`, the law `omega(A/F) = omega(B/F) + R(B->F) omega(A/B)`.
At a row's age the stage just younger counts, at 0 Ma the first.
"""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from typing import NamedTuple

import numpy as np

from restore.geometry import so3
from restore.geometry.sphere import Floats, cross
from restore.geometry.uncertain import Sensitivity
from restore.history.circuit import CircuitRotations
from restore.history.links import Ints, Stages, Step


def stage_velocity(stages: Stages, step: Step) -> Floats:
    """Zeta (n, 3), rad/Myr, of one link as a pair listed it, in its plate's coordinates.

    NaN for a pair of one row, which says where a plate was and not how fast it went.
    """
    axis = np.moveaxis(stages.axis.take(step.stage, axis=1), 0, -1)
    myr = stages.length_myr.take(step.stage)
    speed = np.where(np.isinf(myr), np.nan, -2.0 * stages.half.take(step.stage) / myr)
    velocity: Floats = axis * speed[..., np.newaxis]
    return velocity


def link_velocity(stages: Stages, step: Step) -> Floats:
    """Zeta (n, 3), rad/Myr, of one link in the direction of the chain, in its first plate's coordinates."""
    velocity = stage_velocity(stages, step)
    if step.link.forward:
        return velocity
    return -so3.rotate_back(step.rotation, velocity)


def angular_velocity(found: CircuitRotations) -> Floats:
    """Eta (n, 3), rad/Myr, forward in time, in each plate's own coordinates; NaN without a chain.

    Turned by the rotation of the same age it is in the frame's coordinates at that age.
    """
    stages = found.circuit.stages
    eta = np.full((len(found.chain), 3), np.nan)
    for items, steps in found.steps(just_younger=True):
        total = np.zeros((len(items), 3))
        for step in reversed(steps):
            total = link_velocity(stages, step) + so3.rotate_back(step.rotation, total)
        eta[items] = total
    return eta


class Functional(NamedTuple):
    """A linear result `on_rotation . u + on_velocity . d_eta` of a chain, in the plate's coordinates.

    Covectors (n, 3): on the chain's small rotation u, and on the change of its angular velocity.
    """

    on_rotation: Floats
    on_velocity: Floats


def sensitivity(found: CircuitRotations, results: Sequence[Functional]) -> Sensitivity:
    """Jacobians (n, m, k, 3), by the rows used, of k linear results at each rotation of `found`."""
    count = len(found.chain)
    chains = found.circuit.pieces.chains
    longest = max((len(chains[c]) for c in found.chain if c >= 0), default=0)
    rows = np.full((count, max(2 * longest, 1)), -1, dtype=np.int64)
    matrices = np.zeros((count, max(2 * longest, 1), len(results), 3))
    for items, steps in found.steps(just_younger=True):
        for k, result in enumerate(results):
            here = Functional(result.on_rotation[items], result.on_velocity[items])
            for at, (row, pulled) in enumerate(_pulled(found.circuit.stages, steps, here)):
                used = np.any(pulled != 0.0, axis=-1)
                rows[items, at] = np.where(used, row, rows[items, at])
                matrices[items, at, k] = pulled
    return Sensitivity.combined([Sensitivity(rows, matrices)])


def _pulled(stages: Stages, steps: Sequence[Step], result: Functional) -> Iterator[tuple[Ints, Floats]]:
    """(rows, covectors) of the younger and the older row of each link, from the plate outwards."""
    velocities = [link_velocity(stages, step) for step in steps]
    for at, step in enumerate(steps):
        rest = np.zeros_like(velocities[at])
        for later in range(len(steps) - 1, at, -1):
            rest = so3.rotate_back(steps[later - 1].rotation, velocities[later] + rest)
        # later links' velocities turn with this link's error: c . (-u x rest) = u . (c x rest)
        turn = result.on_rotation + cross(result.on_velocity, rest)
        passed = Functional(*(so3.rotate(step.rotation, c) for c in result))
        if step.link.forward:
            own = Functional(turn, result.on_velocity)
        else:
            own_velocity = -passed.on_velocity
            own_turn = -so3.rotate(step.rotation, turn)
            own_turn = own_turn + cross(stage_velocity(stages, step), own_velocity)
            own = Functional(own_turn, own_velocity)
        yield from _of_stage(stages, step, own)
        result = passed


def _of_stage(stages: Stages, step: Step, own: Functional) -> Iterator[tuple[Ints, Floats]]:
    """The two rows of one stage: `u = (I - G) u1 + G u2`, `d zeta = (Jl^-1 u1 - Jr^-1 u2) / dt`.

    On the plane across the stage, Jr^-1 is multiplication by w / sin(w) exp(iw), Jl^-1 by its
    conjugate, w half the stage angle; 1 on the axis.
    """
    half = stages.half.take(step.stage)
    axis = np.moveaxis(stages.axis.take(step.stage, axis=1), 0, -1)
    older = so3.pull_back_stage(own.on_rotation, axis, so3.stage_weights(step.fraction, half))
    younger = own.on_rotation - older
    across = np.where(half == 0.0, 1.0, half / np.tan(np.where(half == 0.0, 1.0, half)))
    one = np.ones_like(half)
    rate = 1.0 / stages.length_myr.take(step.stage)[..., np.newaxis]
    right = so3.pull_back_stage(own.on_velocity, axis, so3.StageWeights(one, across, half))
    left = so3.pull_back_stage(own.on_velocity, axis, so3.StageWeights(one, across, -half))
    yield stages.younger.take(step.stage), younger + rate * left
    yield stages.older.take(step.stage), older - rate * right
