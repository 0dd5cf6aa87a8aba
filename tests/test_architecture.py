"""The folder listing is the data flow: a stage imports only from stages listed above it."""

import ast
import io
import subprocess
import sys
import tokenize
from pathlib import Path

import pytest

ROOT = Path(__file__).resolve().parents[1] / "scatterfit"
FLOW = ["apparatus", "cloud_optics", "droplet_growth", "forward", "inversion",
        "measured_pulse", "measured_series", "nucleation", "overnight", "report"]
GROUND = {"constants", "errors", "matter", "units"}
EDGE = {"overnight", "report", "files", "cli", "__main__"}
EDGE_ONLY = {"typer", "rich", "matplotlib", "csv", "json", "tomllib", "pathlib", "os", "sqlite3",
             "shutil", "tempfile", "subprocess", "sys"}
DRAWERS = {"utils", "helpers", "common", "misc"}
MOST_MODULE_LINES = 400
MOST_FUNCTION_LINES = 50
MODULES = sorted(ROOT.rglob("*.py"))
NAMES = [str(path.relative_to(ROOT)) for path in MODULES]


def owner(path):
    """Return the stage folder, or the top-level module up to its first underscore."""
    name = path.relative_to(ROOT).parts[0].removesuffix(".py")
    return name if name in FLOW or name.startswith("__") else name.partition("_")[0]


def tree(path):
    return ast.parse(path.read_text(encoding="utf-8"))


def imports(path):
    """Yield every imported module name, absolute form only."""
    for node in ast.walk(tree(path)):
        if isinstance(node, ast.Import):
            yield from (alias.name for alias in node.names)
        elif isinstance(node, ast.ImportFrom):
            assert not node.level, f"{path}:{node.lineno}: use absolute imports"
            yield from (f"{node.module}.{alias.name}" for alias in node.names)


def own_imports(path):
    """Yield the first part after ``scatterfit.`` of every import from the project."""
    for name in imports(path):
        top, *rest = name.split(".")
        if top == "scatterfit" and rest:
            yield rest[0] if rest[0] in FLOW else rest[0].partition("_")[0]


def test_there_is_something_to_check():
    assert len(MODULES) > 30
    assert any(owner(path) == "cli" for path in MODULES)


def test_folder_listing_is_the_data_flow():
    folders = [path.name for path in ROOT.iterdir() if path.is_dir()]
    stages = sorted(name for name in folders if name not in {"__pycache__", "matter"})
    assert stages == FLOW == sorted(FLOW)


@pytest.mark.parametrize("path", MODULES, ids=NAMES)
def test_imports_point_up_the_listing(path):
    me = owner(path)
    for other in own_imports(path):
        if me in FLOW:
            below = other in FLOW and FLOW.index(other) > FLOW.index(me)
            assert not below, f"{me} imports {other}, which is further down the flow"
            assert other != "cli", f"{me} imports the command line"
            assert other != "files" or me in EDGE, f"{me} is pure: it may not read files"
        elif me in GROUND:
            assert other in GROUND, f"{me} may import only the ground floor, not {other}"
        elif me == "files":
            assert other not in {"cli", "report"}, f"{me} imports {other}, which uses it"


@pytest.mark.parametrize("path", MODULES, ids=NAMES)
def test_only_the_edge_touches_the_world(path):
    if owner(path) in EDGE:
        return
    for name in imports(path):
        top = name.partition(".")[0]
        assert top not in EDGE_ONLY, f"{owner(path)} is pure: it may not import {top}"
    calls = {node.func.id for node in ast.walk(tree(path))
             if isinstance(node, ast.Call) and isinstance(node.func, ast.Name)}
    assert not calls & {"open", "print", "input", "exec", "eval"}


@pytest.mark.parametrize("path", MODULES, ids=NAMES)
def test_modules_stay_small_and_have_a_name_that_says_something(path):
    lines = len(path.read_text(encoding="utf-8").splitlines())
    assert lines <= MOST_MODULE_LINES, f"{lines} lines; split what could stand alone"
    assert path.stem not in DRAWERS


def code_lines(path):
    """Return the numbers of lines that hold more than a comment, a docstring or nothing."""
    text = path.read_text(encoding="utf-8")
    layout = {tokenize.COMMENT, tokenize.NL, tokenize.NEWLINE, tokenize.INDENT, tokenize.DEDENT,
              tokenize.ENCODING, tokenize.ENDMARKER}
    lines = set()
    for token in tokenize.generate_tokens(io.StringIO(text).readline):
        if token.type not in layout:
            lines.update(range(token.start[0], token.end[0] + 1))
    for node in ast.walk(tree(path)):
        if isinstance(node, ast.Expr) and isinstance(node.value, ast.Constant):
            lines.difference_update(range(node.lineno, node.end_lineno + 1))
    return lines


@pytest.mark.parametrize("path", MODULES, ids=NAMES)
def test_functions_stay_small(path):
    code = code_lines(path)
    for node in ast.walk(tree(path)):
        if isinstance(node, ast.FunctionDef):
            size = len(code & set(range(node.body[0].lineno, node.end_lineno + 1)))
            assert size <= MOST_FUNCTION_LINES, f"{node.name} has {size} lines of code"


def loaded_by(statement, *modules):
    """Return which of the modules a fresh interpreter has loaded after a statement."""
    wanted = ", ".join(repr(name) for name in modules)
    code = f"import sys; {statement}; print(*[m for m in ({wanted},) if m in sys.modules])"
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    return done.stdout.split()


def test_importing_the_package_loads_no_slow_library():
    assert loaded_by("import scatterfit", "matplotlib", "typer", "lmfit", "sys") == ["sys"]


def test_help_needs_no_numerics():
    silent = "import io, contextlib; from scatterfit.cli import main"
    call = "with contextlib.redirect_stdout(io.StringIO()): main(['--help'])"
    code = f"exec({silent + chr(10) + call!r})"
    assert loaded_by(code, "numpy", "scipy", "matplotlib", "typer") == ["typer"]


def test_the_linter_finds_nothing():
    call = [sys.executable, "-m", "ruff", "check", "--quiet", "--no-cache", str(ROOT.parent)]
    done = subprocess.run(call, capture_output=True, text=True, check=False)
    assert done.returncode == 0, done.stdout + done.stderr
