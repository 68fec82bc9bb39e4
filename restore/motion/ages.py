"""The ages that are asked: each site's own, a list, or start:stop:step.

Plain Python, so that a misused command can answer without loading numpy.
"""

from __future__ import annotations

import math
from collections.abc import Iterable

from restore.errors import InputError

MOST_AGES = 100_000


def parse_ages(asked: str | float | Iterable[float]) -> tuple[float, ...] | None:
    """Ages in Ma, or None for `own`: from "own", "0,10,20", "0:120:10" (stop included), a number or
    a sequence of numbers.

    A stop that no whole number of steps reaches ends the list all the same. Raises InputError if an age
    is not a number, is negative or not finite, or a step does not lead from start towards stop.
    """
    if isinstance(asked, str):
        if asked.strip() == "own":
            return None
        ages = _stepped(asked) if ":" in asked else _listed(asked)
    else:
        try:
            ages = [float(age) for age in asked] if isinstance(asked, Iterable) else [float(asked)]
        except (TypeError, ValueError):
            raise InputError(f"ages {asked!r}: an age is not a number; give ages in Ma") from None
    if not ages:
        raise InputError(f"ages {asked!r}: at least one age is needed")
    for age in ages:
        if not (math.isfinite(age) and age >= 0.0):
            raise InputError(f"ages {asked!r}: {age:g}: ages are finite, in Ma, positive into the past")
    return tuple(age + 0.0 for age in ages)


def _number(text: str, asked: str) -> float:
    try:
        return float(text)
    except ValueError:
        raise InputError(
            f"ages {asked!r}: {text.strip()!r} is not a number; write own, 0,10,20 or 0:120:10"
        ) from None


def _listed(asked: str) -> list[float]:
    return [_number(text, asked) for text in asked.split(",")]


def _stepped(asked: str) -> list[float]:
    parts = [_number(text, asked) for text in asked.split(":")]
    if len(parts) != 3:
        raise InputError(f"ages {asked!r}: write start:stop:step, for example 0:120:10")
    start, stop, step = parts
    if not all(map(math.isfinite, parts)) or step <= 0.0 or stop < start:
        raise InputError(f"ages {asked!r}: the step must be above 0 and stop not below start")
    count = (stop - start) / step
    if count > MOST_AGES:
        raise InputError(f"ages {asked!r}: more than {MOST_AGES} ages")
    # rounding may put the last step a hair beyond the stop that the user wrote
    whole = math.floor(count + 1e-9)
    # decimal steps such as 0.1 are meant as decimals: 0.3, not 0.30000000000000004
    ages = [min(float(f"{start + i * step:.12g}"), stop) for i in range(whole + 1)]
    return ages if ages[-1] == stop else [*ages, stop]
