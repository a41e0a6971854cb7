"""Imports run one way, from left to right along the flow of the data, and a test says so."""

from __future__ import annotations

import ast
from pathlib import Path

import pytest

PACKAGE = Path(__file__).parent.parent / "tnquench"

#: Ranks of the folders and files; a module may import lower ranks and its own folder, never its own rank's
#: neighbours.
RANKS = {
    "conventions": 0,
    "errors": 0,
    "config": 1,
    "model": 1,
    "dataset": 1,
    "stopping": 1,
    "evolution": 2,
    "bethe": 2,
    "observables": 3,
    "hydro": 3,
    "budget": 4,
    "report": 5,
    "cluster": 6,
    "notebook": 6,
    "judge": 6,
    "start_of": 7,
    "prediction_of": 8,
    "assemble": 9,
    "outcome": 10,
    "checkpoints": 10,
    "stretch_of": 11,
    "side_by_side": 11,
    "quantum_of": 12,
    "run": 13,
    "refine": 14,
    "terminal": 15,
    "cli": 16,
    "__main__": 17,
}

#: What the report may see: files, the budget's norms and windows, and how honest it was found to be; any
#: report can be rebuilt from its dataset.
REPORT_SEES = {
    "tnquench.conventions",
    "tnquench.errors",
    "tnquench.budget.honesty",
    "tnquench.budget.verdict",
}

#: Evolution and prediction never see each other: their agreement must mean something.
APART = {("observables", "bethe"), ("hydro", "evolution"), ("hydro", "observables"), ("hydro", "model")}

MODULES = sorted(path for path in PACKAGE.rglob("*.py") if path != PACKAGE / "__init__.py")


def room(module: str) -> str:
    return module.split(".")[1]


def imported_modules(tree: ast.AST) -> list[str]:
    """Full names of every own module imported anywhere in a tree."""
    found = []
    for node in ast.walk(tree):
        if isinstance(node, ast.Import):
            found += [alias.name for alias in node.names if alias.name.startswith("tnquench")]
        elif isinstance(node, ast.ImportFrom) and node.module and node.module.startswith("tnquench"):
            found.append(node.module)
    return found


@pytest.mark.parametrize("path", MODULES, ids=lambda path: str(path.relative_to(PACKAGE)))
def test_module_imports_only_leftwards(path: Path) -> None:
    here = path.relative_to(PACKAGE).with_suffix("").parts[0]
    for module in imported_modules(ast.parse(path.read_text())):
        assert module != "tnquench", "import the module that holds the name, not the package"
        there = room(module)
        if there == here:
            continue
        assert RANKS[there] < RANKS[here], f"{path.name} imports {module}, against the flow of the data"
        assert (here, there) not in APART, f"{here} must not see {there}"
        if here == "report":
            assert there == "dataset" or module in REPORT_SEES, "the report reads datasets only"


@pytest.mark.parametrize("path", MODULES, ids=lambda path: str(path.relative_to(PACKAGE)))
def test_no_own_import_hides_in_a_function(path: Path) -> None:
    for node in ast.walk(ast.parse(path.read_text())):
        if isinstance(node, ast.FunctionDef | ast.AsyncFunctionDef):
            assert not imported_modules(node), f"{path.name}: {node.name} imports inside its body"


def test_no_ring_inside_a_folder() -> None:
    graph = {
        ".".join(("tnquench", *path.relative_to(PACKAGE).with_suffix("").parts)): set(
            imported_modules(ast.parse(path.read_text()))
        )
        for path in MODULES
    }
    settled: set[str] = set()
    while len(settled) < len(graph):
        ready = {
            name for name, needs in graph.items() if name not in settled and needs & set(graph) <= settled
        }
        assert ready, f"these modules import each other in a ring: {sorted(set(graph) - settled)}"
        settled |= ready
