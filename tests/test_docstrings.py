"""Every public function documents its arguments, their units and shapes, and what it raises."""

import ast
import re
from pathlib import Path

import pytest

ROOT = Path(__file__).resolve().parents[1] / "scatterfit"
NUMERIC = re.compile(r"\b(float|complex|array_like|ndarray)\b")
ARRAY = re.compile(r"\b(array_like|ndarray)\b")
MANY = ("mapping", "Mapping", "dict", "sequence")
UNIT = re.compile(r"\[[^\]]+\]")
HEADING = re.compile(r"^(\w[\w ]*)\n-{3,}$", re.MULTILINE)
FEWEST_FUNCTIONS = 60
FEWEST_EXAMPLES = 40


def is_command(node):
    """Return whether a function is a command, whose docstring is its help text."""
    return any("app." in ast.unparse(decorator) for decorator in node.decorator_list)


def public_functions():
    for path in sorted(ROOT.rglob("*.py")):
        module = path.relative_to(ROOT)
        for node in ast.parse(path.read_text(encoding="utf-8")).body:
            public = isinstance(node, ast.FunctionDef) and not node.name.startswith("_")
            if public and not is_command(node):
                yield pytest.param(node, id=f"{module}:{node.name}")


FUNCTIONS = list(public_functions())


def sections(node):
    """Return heading to text for a numpy-style docstring."""
    text = ast.get_docstring(node) or ""
    parts = HEADING.split(text)
    return dict(zip(parts[1::2], parts[2::2], strict=True))


def entries(section):
    """Yield (names, type, description) of each entry in a Parameters or Returns section."""
    for block in re.split(r"\n(?=\S)", section.strip("\n")):
        head, _, description = block.partition("\n")
        names, _, kind = head.partition(" : ")
        yield [name.strip(" *") for name in names.split(",")], kind or names, description


def arguments(node):
    every = [*node.args.posonlyargs, *node.args.args, *node.args.kwonlyargs]
    every += [extra for extra in (node.args.vararg, node.args.kwarg) if extra]
    return [argument.arg for argument in every]


def own_nodes(node):
    """Yield the nodes of a function's body without those of functions defined in it."""
    for child in ast.iter_child_nodes(node):
        if not isinstance(child, ast.FunctionDef | ast.Lambda):
            yield child
            yield from own_nodes(child)


def raises(node):
    return any(isinstance(child, ast.Raise) and child.exc for child in own_nodes(node))


def returns_something(node):
    return any(isinstance(child, ast.Return) and child.value for child in own_nodes(node))


def test_there_is_something_to_check():
    examples = [f for f in FUNCTIONS if ">>>" in (ast.get_docstring(f.values[0]) or "")]
    assert len(FUNCTIONS) >= FEWEST_FUNCTIONS
    assert len(examples) >= FEWEST_EXAMPLES


@pytest.mark.parametrize("node", FUNCTIONS)
def test_every_argument_is_documented_under_its_own_name(node):
    documented = [name for names, _, _ in entries(sections(node).get("Parameters", ""))
                  for name in names if name]
    assert documented == arguments(node)


@pytest.mark.parametrize("node", FUNCTIONS)
def test_numbers_have_a_unit_and_arrays_a_shape(node):
    found = sections(node)
    for section in ("Parameters", "Returns", "Yields"):
        for names, kind, description in entries(found.get(section, "")):
            # A mapping or sequence of numbers says its units in words where they differ.
            if NUMERIC.search(kind) and not kind.startswith(MANY):
                assert UNIT.search(description) or UNIT.search(kind), f"{names}: no [unit]"
            if ARRAY.match(kind):
                assert "shape (" in kind or "shape (" in description, f"{names}: no shape"


@pytest.mark.parametrize("node", FUNCTIONS)
def test_what_is_returned_and_raised_is_documented(node):
    found = sections(node)
    if returns_something(node):
        assert {"Returns", "Yields"} & found.keys()
    if raises(node):
        assert "Raises" in found
