"""Higher layers may import lower ones, never the reverse; heavy packages wait until they are needed."""

import ast
import subprocess
import sys
from graphlib import TopologicalSorter
from pathlib import Path

import pytest

PACKAGE = Path(__file__).parents[1] / "planner"

# Highest first. A name stands for the module and, where it is a package, for all within it.
# Modules of one package may import one another (without a cycle); other modules of a layer may not.
LAYERS = (
    ("planner.__main__",),
    ("planner.cli",),
    ("planner.commands",),
    ("planner.clients",),
    (
        "planner.reports.pdf",
        "planner.reports.terminal",
        "planner.reports.export",
        "planner.reports.protection",
    ),
    ("planner.reports",),
    ("planner.decisions", "planner.history", "planner.ladders", "planner.review", "planner.snapshot"),
    ("planner.surprises",),
    ("planner.plan",),
    ("planner.instructions", "planner.projection", "planner.proof"),
    ("planner.plan_record",),
    ("planner.rules", "planner.banded"),
    ("planner.outcomes",),
    ("planner.optimum",),
    ("planner.simulation",),
    ("planner.cashflow",),
    ("planner.problem_building",),
    ("planner.problem",),
    ("planner.scenarios", "planner.stresses"),
    ("planner.workbook",),
    ("planner.household_rules",),
    ("planner.assumption_rules", "planner.situation_rules"),
    ("planner.taxes", "planner.mortality", "planner.markets", "planner.preferences"),
    ("planner.tax_files",),
    ("planner.tax_assessment",),
    ("planner.tax_provisions",),
    ("planner.household",),
    ("planner.checks", "planner.codes", "planner.shipped", "planner.files", "planner.rule_terms"),
    ("planner.soa_tables",),
    ("planner.piecewise", "planner.diagnostics", "planner.data", "planner.beside", "planner.memory"),
    ("planner",),
)
EXCEPTIONS = {
    # A household is valid by construction, and its rules need the classes: a local import.
    ("planner.household", "planner.household_rules"),
}
MODULES = {
    ".".join(("planner", *path.relative_to(PACKAGE).with_suffix("").parts)).removesuffix(".__init__"): path
    for path in sorted(PACKAGE.rglob("*.py"))
}


def layer_of(module: str) -> tuple[int, str]:
    """Rank (0 is highest) and the longest layer name that covers a module."""
    matches = [
        (len(name), rank, name)
        for rank, names in enumerate(LAYERS)
        for name in names
        if module == name or (name != "planner" and module.startswith((name + ".", name + "_")))
    ]
    assert matches, f"{module} belongs to no layer: add it to LAYERS"
    _, rank, name = max(matches)
    return rank, name


def imports_of(module: str) -> set[str]:
    """Modules of this project that a module imports, inside functions too."""
    found = set()
    for node in ast.walk(ast.parse(MODULES[module].read_text("utf-8"))):
        if isinstance(node, ast.Import):
            found |= {alias.name for alias in node.names}
        elif isinstance(node, ast.ImportFrom):
            assert node.level == 0, f"{module}: write imports in full"
            for alias in node.names:
                full = f"{node.module}.{alias.name}"
                found.add(full if full in MODULES else str(node.module))
    return {n for n in found if n in MODULES and n != module and (module, n) not in EXCEPTIONS}


@pytest.mark.parametrize("module", MODULES)
def test_imports_only_from_lower_layers(module):
    rank, name = layer_of(module)
    for imported in imports_of(module):
        other_rank, other_name = layer_of(imported)
        assert other_rank > rank or other_name == name, f"{module} must not import {imported}"


def test_no_import_cycles():
    TopologicalSorter({module: imports_of(module) for module in MODULES}).prepare()


@pytest.mark.parametrize("module", ["planner", "planner.cli"])
def test_command_line_loads_no_heavy_package(module):
    """`--help` answers at once: numpy and the like load inside commands."""
    heavy = {"numpy", "scipy", "pandas", "openpyxl", "reportlab"}
    code = f"import {module}, sys; print(*({heavy!r} & set(sys.modules)))"
    loaded = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    assert loaded.stdout.split() == []
