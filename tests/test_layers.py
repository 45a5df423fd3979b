"""The architecture, held to by its imports."""

from __future__ import annotations

import ast
import graphlib
import subprocess
import sys
from collections.abc import Iterator
from pathlib import Path

import pytest

ROOT = Path(__file__).parent.parent
# A module may import those of a lower rank, and those of its own package.
RANKS = {
    "generators": 0,
    "harness.records": 1,
    "harness.knowledge": 1,
    "harness.counts": 2,
    "harness.independence": 2,
    "harness.family_scores": 2,
    "harness.learners": 3,
    "harness.scorers": 3,
    "harness.plan": 5,
    "harness.ledger": 6,
    "harness.execution": 7,
    "harness.analysis": 7,
    "harness.conformance": 8,
    "harness.studies": 9,
    "harness.report": 10,
    "harness.cli": 11,
    "harness.front": 12,
}
SAME_RANK_ALLOWED = {("harness.family_scores", "harness.counts"), ("harness.independence", "harness.counts")}
FILES = sorted([*ROOT.glob("generators/**/*.py"), *ROOT.glob("harness/**/*.py")])


def module_name(file: Path) -> str:
    """Return the dotted name of a file's module."""
    parts = file.relative_to(ROOT).with_suffix("").parts
    return ".".join(parts[:-1] if parts[-1] == "__init__" else parts)


def layer_of(module: str) -> str | None:
    """Return the layer that a module belongs to, or None for one outside the project."""
    for layer in RANKS:
        if module == layer or module.startswith(layer + "."):
            return layer
    return None


def imports_of(file: Path, top_level: bool = False) -> Iterator[str]:
    """Yield what a file imports, wherever the import stands in it, or only what loading it imports."""
    tree = ast.parse(file.read_text(encoding="utf-8"))
    for node in tree.body if top_level else ast.walk(tree):
        if isinstance(node, ast.Import):
            yield from (alias.name for alias in node.names)
        elif isinstance(node, ast.ImportFrom) and node.module and not node.level:
            yield node.module
            yield from (f"{node.module}.{alias.name}" for alias in node.names)


@pytest.mark.parametrize("file", FILES, ids=module_name)
def test_imports_point_down_only(file: Path) -> None:
    """A module imports lower layers and its own, nothing else of the project."""
    own = layer_of(module_name(file))
    if own is None:
        pytest.skip("the package's own root belongs to no layer")

    wrong = [
        target
        for target in imports_of(file)
        if (layer := layer_of(target)) is not None
        and layer != own
        and RANKS[layer] >= RANKS[own]
        and (own, layer) not in SAME_RANK_ALLOWED
    ]

    assert wrong == []


def test_there_is_no_circle_among_modules() -> None:
    """The modules can be put into an order in which each loads only earlier ones."""
    names = {module_name(file) for file in FILES}
    graph = {
        module_name(file): {
            t for t in imports_of(file, top_level=True) if t in names and t != module_name(file)
        }
        for file in FILES
    }
    # A package's own __init__ is imported with each of its modules: that is Python, not a circle of ours.
    for name, targets in graph.items():
        graph[name] = {t for t in targets if not name.startswith(t + ".")}

    order = list(graphlib.TopologicalSorter(graph).static_order())

    assert set(order) == names


def test_the_help_imports_nothing_heavy() -> None:
    """`arcassay --help` answers without numpy, numba, pandas or matplotlib."""
    code = (
        "import sys; from harness.cli.main import run_command; run_command(['--help']); "
        "print(sorted({'numpy', 'numba', 'pandas', 'matplotlib', 'scipy'} & set(sys.modules)))"
    )

    result = subprocess.run(
        [sys.executable, "-c", code], capture_output=True, text=True, check=True, cwd=ROOT
    )

    assert result.stdout.splitlines()[-1] == "[]"


def test_only_the_command_line_prints() -> None:
    """No module below the command line calls print or exits."""
    offenders = []
    for file in FILES:
        if module_name(file).startswith(("harness.cli", "harness.front")):
            continue
        for node in ast.walk(ast.parse(file.read_text(encoding="utf-8"))):
            if isinstance(node, ast.Call) and ast.unparse(node.func) in ("print", "sys.exit", "exit", "quit"):
                offenders.append(f"{module_name(file)}:{node.lineno}")

    assert offenders == []


def test_no_submodule_carries_the_name_of_a_public_function() -> None:
    """What `arcassay` exports cannot be hidden by a module of the same name."""
    import arcassay

    stems = {file.stem for file in FILES}

    assert sorted(stems & set(arcassay.__all__)) == []
