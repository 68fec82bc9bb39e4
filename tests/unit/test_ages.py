"""The ages asked: own, lists, steps, numbers; exact decimals, and what is refused."""

import numpy as np
import pytest

from restore.errors import InputError
from restore.motion.ages import MOST_AGES, parse_ages


@pytest.mark.parametrize(
    ("asked", "ages"),
    [
        ("0:0.3:0.1", [0.0, 0.1, 0.2, 0.3]),
        ("0:1:0.1", [0.0, 0.1, 0.2, 0.3, 0.4, 0.5, 0.6, 0.7, 0.8, 0.9, 1.0]),
        ("0:120:40", [0.0, 40.0, 80.0, 120.0]),
        ("5:5:1", [5.0]),
        ("0.7:1:0.1", [0.7, 0.8, 0.9, 1.0]),
        (" 10 : 30 : 10 ", [10.0, 20.0, 30.0]),
        ("0:2e1:5", [0.0, 5.0, 10.0, 15.0, 20.0]),
        ("0,10,20", [0.0, 10.0, 20.0]),
        ("20, 0.5 ,20", [20.0, 0.5, 20.0]),
        ("33.3", [33.3]),
        (12, [12.0]),
        (1.5, [1.5]),
        ([3, 1, 2], [3.0, 1.0, 2.0]),
        (np.array([0.25]), [0.25]),
    ],
)
def test_ages(asked, ages):
    """Steps give the decimals that were written, stop included; lists keep order and repeats."""
    found = parse_ages(asked)
    assert found is not None
    assert list(found) == ages


@pytest.mark.parametrize("asked", ["own", " own "])
def test_own(asked):
    """`own` is no list of ages: each site has its own."""
    assert parse_ages(asked) is None


@pytest.mark.parametrize(
    ("start", "stop", "step", "count"),
    [
        ("0", "0.7", "0.1", 8),
        ("0", "4.35", "0.05", 88),
        ("0.1", "0.9", "0.2", 5),
        ("0", "66", "0.6", 111),
    ],
)
def test_the_stop_is_reached_whatever_rounding_says(start, stop, step, count):
    """Where the steps lead to the stop, it is the last age, to the bit, and none lies beyond it."""
    ages = parse_ages(f"{start}:{stop}:{step}")
    assert ages is not None
    assert len(ages) == count
    assert (ages[0], ages[-1]) == (float(start), float(stop))
    assert np.all(np.diff(ages) > 0.0)


def test_zero_has_no_sign():
    """Minus zero is today like zero, and is written like it."""
    found = parse_ages("-0.0,5")
    assert found is not None
    assert not np.signbit(found).any()


@pytest.mark.parametrize(
    ("asked", "message"),
    [
        ("ten", "ages 'ten': 'ten' is not a number; write own, 0,10,20 or 0:120:10"),
        ("", "ages '': '' is not a number"),
        ("0,,5", "ages '0,,5': '' is not a number"),
        ("0:10", "ages '0:10': write start:stop:step, for example 0:120:10"),
        ("0:10:2:2", "write start:stop:step"),
        ("0:x:2", "'x' is not a number"),
        ("0:10:0", "the step must be above 0 and stop not below start"),
        ("0:10:-1", "the step must be above 0"),
        ("10:0:1", "stop not below start"),
        ("0:inf:1", "the step must be above 0 and stop not below start"),
        ("nan:1:1", "the step must be above 0 and stop not below start"),
        ("0:1:1e-9", f"more than {MOST_AGES} ages"),
        ("0:1:1e-320", f"more than {MOST_AGES} ages"),
        ("-5", "ages '-5': -5: ages are finite, in Ma, positive into the past"),
        ("-5:5:5", "-5: ages are finite, in Ma, positive into the past"),
        ("0,inf", "inf: ages are finite"),
        ("0,nan", "nan: ages are finite"),
        ([], "at least one age is needed"),
        ([[1.0, 2.0]], "ages"),
        ([1.0, -2.0], "-2: ages are finite, in Ma"),
        (["ten"], "is not a number"),
        ([None], "ages"),
    ],
)
def test_what_is_refused(asked, message):
    """Every fault is an InputError that repeats what was asked and says what would be right."""
    with pytest.raises(InputError, match=message.replace("[", r"\[")) as caught:
        parse_ages(asked)
    assert "\n" not in str(caught.value)


def test_the_callers_list_is_left_alone():
    """The ages that come out do not change when the array that went in does."""
    mine = np.array([1.0, 2.0])
    found = parse_ages(mine)
    assert found is not None
    mine[:] = 7.0
    assert list(found) == [1.0, 2.0]
