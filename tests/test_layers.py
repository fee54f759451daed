"""The layer rule: each folder imports only folders before it, and says so where it starts."""

from __future__ import annotations

import ast
import re
from pathlib import Path

import pytest

import twicetold

HOME = Path(twicetold.__file__).parent
LAYERS = ("catalogue", "graph", "statistics", "references", "spread", "evidence", "report")
# Single modules that every layer may use: they import nothing of the layers themselves.
PLAIN = {"errors", "randomness", "workers", "folders", "display", "_sfc64", "_compiled"}
# The plan takes the reading rules from the catalogue; the layers below inference never see it.
PLAN = {"plan": ("evidence", "report")}
# Nothing of the commands is imported by any layer.
COMMANDS = {"cli", "run", "_records", "verify", "progress", "cluster", "example", "interrupt"}


def imported(path: Path) -> set[str]:
    """Parts of twicetold that a module imports anywhere, in functions and for types too."""
    return {name.split(".")[1] for name in imported_modules(path)}


def imported_modules(path: Path) -> set[str]:
    names = set()
    for node in ast.walk(ast.parse(path.read_text(encoding="utf-8"))):
        if isinstance(node, ast.ImportFrom):
            assert node.level == 0, f"{path}: relative import"
            module = node.module or ""
            names |= (
                {f"{module}.{a.name}" for a in node.names} if module == "twicetold" else {module}
            )
        elif isinstance(node, ast.Import):
            names |= {a.name for a in node.names}
    return {n for n in names if n.startswith("twicetold.")}


def test_every_part_has_its_place():
    parts = {p.stem for p in HOME.glob("*.py")} | {
        p.parent.name for p in HOME.glob("*/__init__.py")
    }
    inner = {"__init__", "_plan_sections", "_plan_values"}
    assert parts - inner == {*LAYERS, *PLAIN, *PLAN, *COMMANDS}


@pytest.mark.parametrize("layer", LAYERS)
def test_imports_go_only_down_the_list(layer):
    allowed = {*LAYERS[: LAYERS.index(layer) + 1], *PLAIN, "__version__"}
    allowed |= {name for name, users in PLAN.items() if layer in users}
    wrong = {
        f"{path.relative_to(HOME)} imports {name}"
        for path in (HOME / layer).rglob("*.py")
        for name in imported(path) - allowed
    }
    assert not wrong


def test_plain_modules_and_the_example_import_no_layer():
    for path in [*(HOME / f"{name}.py" for name in PLAIN), *(HOME / "example").glob("*.py")]:
        assert imported(path) <= {*PLAIN, "example"}, path
    plan = {"errors", "_plan_sections", "_plan_values", "catalogue"}
    for name in ("plan", "_plan_sections", "_plan_values"):
        assert imported(HOME / f"{name}.py") <= plan, name


@pytest.mark.parametrize("layer", [*LAYERS, "example"])
def test_each_folder_states_its_layer(layer):
    said = ast.get_docstring(ast.parse((HOME / layer / "__init__.py").read_text(encoding="utf-8")))
    assert "Layer rule:" in said


def test_the_report_computes_no_statistic():
    # Of the worlds it knows only the shape of a finished law.
    below = ("twicetold.statistics", "twicetold.references", "twicetold.spread")
    for path in (HOME / "report").rglob("*.py"):
        used = {m for m in imported_modules(path) if m.startswith(below)}
        assert used <= {"twicetold.references.law"}, path


def test_tests_share_code_by_modules_with_names_of_their_own():
    # Which ``conftest`` an import would find hangs on the order of the folders.
    tests = list(Path(__file__).parent.rglob("*.py"))
    assert not [p for p in tests if re.search(r"^(from|import) conftest", p.read_text(), re.M)]
    names = [p.name for p in tests if p.name != "conftest.py"]
    assert len(names) == len(set(names))
