"""The house keeps its shape: imports point one way, modules and functions stay short, each module
has its test, and no page speaks of things that are no part of the project.
"""

from __future__ import annotations

import ast
import re
from collections.abc import Iterator
from pathlib import Path

import pytest

ROOT = Path(__file__).resolve().parents[1]
PACKAGE = ROOT / "bayesglm"
MODULES = sorted(path for path in PACKAGE.rglob("*.py") if path.name != "__init__.py")

#: From the ground up; a module imports from its own layer or from those before it.
LAYERS = (
    ("errors", "verdict", "backend"),
    ("units",),
    ("recording",),
    ("kernels",),
    ("likelihood",),
    ("models",),
    ("inference",),
    ("checks",),
    ("features",),
    ("fitting",),
    ("report",),
    ("cli", "__main__"),
)
RANK = {name: rank for rank, layer in enumerate(LAYERS) for name in layer}

LONGEST_MODULE = 400
LONGEST_FUNCTION = 80

#: Modules without a test file of their own, and where they are tested.
TESTED_IN = {
    "__main__.py": "cli/test_main.py",
    "likelihood/least_squares.py": "likelihood/test_calibration.py",
    "likelihood/reference.py": "likelihood/test_voltage.py",
    "report/truth.py": "report/test_page.py",
    "report/page_cell.py": "report/test_page.py",
    "report/page_figures.py": "report/test_page.py",
    "report/style.py": "report/test_figure_style.py",
    "cli/options.py": "cli/test_fit.py",
    "cli/printing.py": "cli/test_check.py",
}


def name_of(path: Path) -> str:
    return path.relative_to(PACKAGE).as_posix()


def layer_of(path: Path) -> str:
    return path.relative_to(PACKAGE).with_suffix("").parts[0]


def twins(path: Path) -> list[Path]:
    """Where a module's test may stand: with its folder's name where two modules share theirs."""
    inside = path.relative_to(PACKAGE)
    names = (path.name, f"{inside.parent.name}_{path.name}")
    return [(ROOT / "tests" / inside).with_name(f"test_{name}") for name in names]


def imported_layers(tree: ast.AST) -> Iterator[tuple[int, str]]:
    """Line and layer of every import from the package, also of those inside functions."""
    for node in ast.walk(tree):
        modules: list[str] = []
        if isinstance(node, ast.Import):
            modules = [alias.name for alias in node.names]
        elif isinstance(node, ast.ImportFrom):
            assert node.level == 0, "imports name the package in full"
            whole = node.module == "bayesglm"
            names = [f"bayesglm.{alias.name}" for alias in node.names]
            modules = names if whole else [node.module or ""]
        for module in modules:
            if module.startswith("bayesglm."):
                yield node.lineno, module.split(".")[1]


@pytest.mark.parametrize("path", MODULES, ids=name_of)
def test_imports_point_one_way(path: Path) -> None:
    own = RANK[layer_of(path)]
    for line, layer in imported_layers(ast.parse(path.read_text(encoding="utf-8"))):
        assert layer in RANK, f"{name_of(path)}, line {line}: bayesglm.{layer} is no layer"
        assert RANK[layer] <= own, f"{name_of(path)}, line {line}: {layer} lies further up"


@pytest.mark.parametrize("path", MODULES, ids=name_of)
def test_modules_and_functions_are_short(path: Path) -> None:
    text = path.read_text(encoding="utf-8")
    lines = len(text.splitlines())
    assert lines <= LONGEST_MODULE, f"{name_of(path)} has {lines} lines"
    for node in ast.walk(ast.parse(text)):
        if isinstance(node, ast.FunctionDef | ast.AsyncFunctionDef):
            length = (node.end_lineno or node.lineno) - node.lineno + 1
            assert length <= LONGEST_FUNCTION, f"{name_of(path)}: {node.name} has {length} lines"


@pytest.mark.parametrize("path", MODULES, ids=name_of)
def test_modules_say_what_they_are_for(path: Path) -> None:
    assert ast.get_docstring(ast.parse(path.read_text(encoding="utf-8")))


def test_every_module_has_its_test() -> None:
    missing = [
        name_of(path)
        for path in MODULES
        if name_of(path) not in TESTED_IN and not any(twin.exists() for twin in twins(path))
    ]
    assert missing == []


def test_exemptions_are_needed_and_tested() -> None:
    for name, test in TESTED_IN.items():
        assert (PACKAGE / name).exists(), f"{name} is exempt and not there"
        assert not any(twin.exists() for twin in twins(PACKAGE / name)), f"{name} has a test"
        assert (ROOT / "tests" / test).exists(), f"{name} is tested in {test}, which is not there"


def texts() -> Iterator[Path]:
    """Every text of the project."""
    for name in ("bayesglm", "tests", "docs", "examples", ".ci"):
        for path in sorted((ROOT / name).rglob("*")):
            if path.is_file() and path.suffix not in (".gz", ".pyc", ".png", ".npz"):
                yield path
    yield from (ROOT / "README.md", ROOT / "DEVELOPERS.md", ROOT / "pyproject.toml")


# Written in pieces, so that this file is not what it looks for.
FOREIGN = re.compile(
    r"(?<![\w$])/wo" + r"rk/|\.\./sha" + r"red|DES" + r"IGN\.md|STY" + r"LE\.md"
    r"|CHE" + r"CKS\.md|\bsess" + r"ions?\b|\bhelp" + r"ers?\b|\bage" + r"nts?\b"
    r"|\blec" + r"tures?\b|\bregis" + r"try\b|\bseed docu" + r"ment",
    re.IGNORECASE,
)
#: The scope of a fixture has that name in pytest.
ALLOWED = re.compile(r"scope=\"sess" + r"ion\"")


def test_no_text_speaks_of_what_is_no_part_of_the_project() -> None:
    found = [
        f"{path.relative_to(ROOT)}, line {number}: {line.strip()}"
        for path in texts()
        for number, line in enumerate(path.read_text(encoding="utf-8").splitlines(), start=1)
        if FOREIGN.search(ALLOWED.sub("", line))
    ]
    assert found == []
