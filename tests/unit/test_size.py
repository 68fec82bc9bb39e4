"""Nothing grows too long, and everything public says what it is and in which units."""

import ast
import re
from pathlib import Path

import pytest

import restore

PACKAGE = Path(restore.__file__).parent
FILES = sorted(PACKAGE.rglob("*.py"))
LONGEST_FILE = 500
LONGEST_FUNCTION = 60
FUNCTIONS = (ast.FunctionDef, ast.AsyncFunctionDef)
# units, and words for numbers that have none
UNIT = re.compile(
    r"\b(deg|degrees?|rad|radians?|Ma|Myr|km|mm/yr|metres?|unit vectors?|quaternions?|rotations?|matrix|matrices"
    r"|covariances?|Jacobians?|covectors?|probability|fractions?|share|weights?|degrees of freedom|nu)\b",
    re.IGNORECASE,
)
# arithmetic on vectors of any unit
UNITLESS = {"dot", "cross", "length", "normalise"}
AGES = {"age", "ages"}
FLOATS = re.compile(r"\b(float|Floats|ArrayLike)\b")


def id_of(path):
    return str(path.relative_to(PACKAGE))


def tree_of(path):
    return ast.parse(path.read_text(encoding="utf-8"))


def is_public(name):
    return not name.startswith("_")


def public_definitions(tree):
    """(qualified name, node, the class it stands in) of everything a user of the module may call."""
    for node in tree.body:
        if isinstance(node, (*FUNCTIONS, ast.ClassDef)) and is_public(node.name):
            yield node.name, node, None
        if isinstance(node, ast.ClassDef) and is_public(node.name):
            for inner in node.body:
                if isinstance(inner, (*FUNCTIONS, ast.ClassDef)) and is_public(inner.name):
                    yield f"{node.name}.{inner.name}", inner, node


def lines_of_body(function):
    """Lines from the first statement to the last, the docstring left out."""
    body = function.body
    if ast.get_docstring(function) is not None:
        body = body[1:]
    return body[-1].end_lineno - body[0].lineno + 1 if body else 0


def overrides(function, inside):
    """Whether a method is one that a base class of another package documents."""
    return (
        inside is not None
        and bool(inside.bases)
        and function.name
        in {
            *("convert", "get_metavar", "list_commands", "get_command", "resolve_command"),
            *("format_commands", "invoke"),
        }
    )


@pytest.mark.parametrize("path", FILES, ids=id_of)
def test_files_are_short(path):
    """A file holds one noun, in at most 500 lines."""
    assert len(path.read_text(encoding="utf-8").splitlines()) <= LONGEST_FILE


@pytest.mark.parametrize("path", FILES, ids=id_of)
def test_functions_are_short(path):
    """A function does one thing, in at most 60 lines."""
    long = {
        f"{node.name} (line {node.lineno})": lines_of_body(node)
        for node in ast.walk(tree_of(path))
        if isinstance(node, FUNCTIONS) and lines_of_body(node) > LONGEST_FUNCTION
    }
    assert long == {}


@pytest.mark.parametrize("path", FILES, ids=id_of)
def test_everything_public_has_a_docstring(path):
    """Modules, classes, functions and methods say what they are."""
    tree = tree_of(path)
    assert ast.get_docstring(tree), path
    bare = [
        name
        for name, node, inside in public_definitions(tree)
        if not ast.get_docstring(node) and not overrides(node, inside)
    ]
    assert bare == []


def float_arguments(function):
    """Arguments that are annotated as numbers and whose name does not end in their unit.

    A mapping of columns carries the units in its keys.
    """
    arguments = function.args
    every = [*arguments.posonlyargs, *arguments.args, *arguments.kwonlyargs]
    return [
        argument.arg
        for argument in every
        if argument.annotation is not None
        and FLOATS.search(ast.unparse(argument.annotation))
        and not re.match(r"(dict|Mapping)\[str, ", ast.unparse(argument.annotation))
        and not re.search(r"_(deg|ma|myr|km|rad|mm_yr|dof)$", argument.arg)
    ]


@pytest.mark.parametrize("path", FILES, ids=id_of)
def test_numbers_have_units(path):
    """A docstring that names a number says in which unit it is, unless its name does; so does one that
    speaks of ages, which are Ma.
    """
    silent = {}
    for name, node, inside in public_definitions(tree_of(path)):
        # the arguments of commands are options, whose help says their unit
        if not isinstance(node, FUNCTIONS) or path.parent.name == "commands":
            continue
        words = f"{ast.get_docstring(node) or ''} {ast.get_docstring(inside) or '' if inside else ''}"
        named = [
            argument
            for argument in float_arguments(node)
            if f"`{argument}`" in words or (argument in AGES and re.search(rf"\b{argument}\b", words))
        ]
        if name not in UNITLESS and named and not UNIT.search(words):
            silent[name] = named
    assert silent == {}
