"""The public face: what `restore` offers by name, and the tree of its errors."""

import re
import subprocess
import sys

import pytest

import restore
from restore import errors

NAMES = [
    "Circuit",
    "DomainError",
    "GapError",
    "History",
    "HistoryError",
    "InputError",
    "MissingPackageError",
    "OncewhereError",
    "OutsideHistoryError",
    "Rotations",
    "Row",
    "ScenarioError",
    "TableError",
    "TwoChainsError",
    "UnknownPlateError",
    "finite_pole",
    "flowlines",
    "rates",
    "restore_lines",
    "restore_sites",
    "run_scenario",
    "stage_pole",
    "trails",
]

TREE = {
    "OncewhereError": (Exception,),
    "InputError": ("OncewhereError", ValueError),
    "TableError": ("InputError",),
    "HistoryError": ("InputError",),
    "ScenarioError": ("InputError",),
    "DomainError": ("OncewhereError", ValueError),
    "UnknownPlateError": ("DomainError", KeyError),
    "OutsideHistoryError": ("DomainError",),
    "GapError": ("DomainError",),
    "TwoChainsError": ("DomainError",),
    "MissingPackageError": ("OncewhereError", ImportError),
}


def test_all_is_the_list_agreed():
    """`restore.__all__` is this list and nothing else."""
    assert restore.__all__ == NAMES
    assert sorted(NAMES) == NAMES


@pytest.mark.parametrize("name", NAMES)
def test_every_name_loads(name):
    """Each name loads, is documented, and is listed by `dir`."""
    thing = getattr(restore, name)
    assert thing.__doc__
    assert thing.__name__ == name
    assert name in dir(restore)


def test_a_name_that_is_not_there():
    """An unknown name is an AttributeError like any other."""
    with pytest.raises(AttributeError, match="module 'restore' has no attribute 'histroy'"):
        _ = restore.histroy


@pytest.mark.parametrize(("name", "bases"), TREE.items())
def test_the_tree_of_errors(name, bases):
    """Every error stands under the parents drawn, and is caught as the built-in kind it belongs to."""
    parents = tuple(getattr(errors, base) if isinstance(base, str) else base for base in bases)
    assert getattr(errors, name).__bases__ == parents


def test_the_drawing_is_the_tree():
    """The drawing at the top of the module shows every error, indented under its parent."""
    drawn = {}
    above: list[str] = []
    for line in str(errors.__doc__).splitlines():
        found = re.match(r"    ([| ]*(?:\|--|`--)?\s*)(\w+Error)\b", line)
        if found:
            depth = len(found[1]) // 4
            above[depth:] = [found[2]]
            drawn[found[2]] = above[depth - 1] if depth else None
    assert drawn == {name: bases[0] if isinstance(bases[0], str) else None for name, bases in TREE.items()}
    defined = {
        n
        for n, kind in vars(errors).items()
        if isinstance(kind, type) and kind.__module__ == errors.__name__
    }
    assert defined == set(TREE)


def test_errors_say_their_message_and_carry_findings():
    """The message is plain text, for errors that are a KeyError too."""
    assert (
        str(restore.UnknownPlateError("plate 'x' is not in the history"))
        == "plate 'x' is not in the history"
    )
    assert restore.InputError("a").findings == ()


def test_a_star_import_is_quiet():
    """`from restore import *` brings the names of `__all__`."""
    script = (
        "from restore import *; print(sorted(n for n in dir() if n in set(__import__('restore').__all__)))"
    )
    done = subprocess.run(
        [sys.executable, "-W", "error", "-c", script],
        capture_output=True,
        text=True,
        timeout=60,
        check=True,
    )
    assert done.stdout.strip() == str(NAMES)
