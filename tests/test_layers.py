"""The import order as a law: data flows one way, no module looks back, and reading text loads nothing heavy."""

from __future__ import annotations

import ast
import subprocess
import sys
from graphlib import CycleError, TopologicalSorter
from pathlib import Path

import pytest

LAYERS = ("faults", "text", "checked", "dates", "tape", "leaves", "machine", "estimators", "report", "api",
          "__init__", "cli", "__main__")
LIGHT = ("faults", "text", "checked", "dates", "api", "__init__", "cli", "__main__")  # answer at once
HEAVY = {"numpy", "numba", "scipy", "holidays", "rich", "matplotlib", "dask", "pandas"}

ROOT = Path(__file__).resolve().parent.parent / "mcx"
MODULES = {
    ".".join(("mcx", *path.relative_to(ROOT).with_suffix("").parts)).removesuffix(".__init__"): path
    for path in sorted(ROOT.rglob("*.py"))
}


def layer_of(module: str) -> str:
    """The layer that a module of mcx belongs to: the first part of its name under mcx."""
    return module.split(".")[1] if "." in module else "__init__"


def imports_of(module: str, top_only: bool = False) -> set[str]:
    """Every module that a file imports, also inside functions (or only those that run when it is imported)."""
    nodes = [ast.parse(MODULES[module].read_text(encoding="utf-8"))]
    found = set()
    while nodes:
        node = nodes.pop()
        if top_only and isinstance(node, ast.FunctionDef | ast.AsyncFunctionDef | ast.Lambda):
            continue
        if isinstance(node, ast.Import):
            found |= {name.name for name in node.names}
        elif isinstance(node, ast.ImportFrom):
            package = MODULES[module].name == "__init__.py"
            base = node.module or ""
            if node.level:
                stem = module.split(".")[: len(module.split(".")) - node.level + package]
                base = ".".join([*stem, base]).rstrip(".")
            whole = {f"{base}.{name.name}" for name in node.names}
            found |= {name if name in MODULES else base for name in whole}
        nodes.extend(ast.iter_child_nodes(node))
    return found


def own_imports(module: str) -> set[str]:
    """The modules of mcx that a module of mcx imports."""
    return {name for name in imports_of(module) if name.split(".")[0] == "mcx"}


def test_every_module_has_a_layer():
    """A new folder or file under mcx must be given its place in the order."""
    assert {layer_of(module) for module in MODULES} <= set(LAYERS)


@pytest.mark.parametrize("module", sorted(MODULES))
def test_imports_look_only_towards_the_text(module: str):
    """A file imports from its own layer and from those before it, never from a later one."""
    here = LAYERS.index(layer_of(module))
    wrong = {name for name in own_imports(module) if LAYERS.index(layer_of(name)) > here}
    assert not wrong, f"{module} imports {', '.join(sorted(wrong))}"


def test_no_circle_inside_a_layer():
    """The modules can be put in one order in which each imports only earlier ones."""
    try:
        TopologicalSorter({module: own_imports(module) for module in MODULES}).prepare()
    except CycleError as error:
        pytest.fail(" imports ".join(reversed(error.args[1])))


@pytest.mark.parametrize("module", sorted(name for name in MODULES if layer_of(name) in LIGHT))
def test_reading_loads_nothing_heavy(module: str):
    """The layers that read documents, and the doors, import heavy libraries only inside the functions that use them."""
    roots = {name.split(".")[0] for name in imports_of(module, top_only=True)}
    assert not roots & HEAVY


@pytest.mark.parametrize("module", ["mcx", "mcx.cli", "mcx.checked.load", "mcx.dates.dating"])
def test_a_fresh_process_stays_light(module: str):
    """Importing a door or a reader loads no heavy library, whatever the chain of imports."""
    code = f"import sys, {module}; print(*sorted({HEAVY!r} & set(sys.modules)))"
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, cwd=ROOT.parent, check=True)
    assert done.stdout.split() == []
