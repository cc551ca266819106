# SPDX-License-Identifier: MIT
"""Imports point downwards only, stages know nothing of files and little of one another, and help loads nothing heavy.

Imports inside functions count like those at the top: what matters is who knows of whom.
"""

import ast
import subprocess
import sys
from pathlib import Path

import pytest

import scanstrain

PACKAGE = Path(scanstrain.__file__).parent
MODULES = {".".join(path.relative_to(PACKAGE).with_suffix("").parts): path for path in PACKAGE.rglob("*.py")}

LAYERS = (
    ("errors", "attributes", "workers", "program", "capacity", "clock"),
    ("registry", "progress", "lock", "cluster"),
    ("linalg", "epoch", "mapped", "columns"),
    ("zones", "cells", "series", "limits", "damage", "budget", "forecast", "colours"),
    ("structures",),
    ("registration",),
    ("neighbourhood",),
    ("strain",),
    ("result", "synthetic", "io"),
    ("outputs",),
    ("config", "inspection"),
    ("tiles",),
    ("stores",),
    ("datum", "parts", "shape"),
    ("stages", "sources", "spread"),
    ("steps",),
    ("pipeline",),
    ("comparison", "plugin", "proof"),
    ("jobs",),
    ("batch",),
    ("evolution",),
    ("screens", "terminal"),
    ("plan_screens",),
    ("cli",),
    ("__init__", "__main__"),
)
"""From the bottom to the top: a module or package imports only from layers below its own, and from itself."""

RANK = {unit: rank for rank, units in enumerate(LAYERS) for unit in units}

STAGES = ("registration", "neighbourhood", "strain")
RESULTS = {"strain": {"registration.result", "neighbourhood.result"}, "neighbourhood": {"registration.result"}}
"""What a stage may know of the stages before it: the type that they hand on."""

NUMERICS = (
    "linalg",
    "epoch",
    "zones",
    "cells",
    "structures",
    "series",
    "limits",
    "damage",
    "budget",
    "forecast",
    *STAGES,
)
FILES = {"pathlib", "os", "io", "shutil", "tempfile", "json", "csv", "tomllib", "laspy", "lazrs", "pye57", "plyfile"}
SHOWN = {"click", "rich", "matplotlib", "pydantic", "jinja2", "logging"}


def unit(module):
    return module.partition(".")[0]


def imports(module):
    """Yield (line, module of this package, or None; outermost package) of every import of a module."""
    for node in ast.walk(ast.parse(MODULES[module].read_text(encoding="utf-8"))):
        if isinstance(node, ast.Import):
            names = [alias.name for alias in node.names]
        elif isinstance(node, ast.ImportFrom):
            assert not node.level, f"{module}:{node.lineno}: relative import"
            names = [str(node.module)]
            if names == ["scanstrain"]:
                names = [f"scanstrain.{alias.name}" for alias in node.names]
        else:
            continue
        for name in names:
            outermost, _, rest = name.partition(".")
            yield node.lineno, (rest or "__init__") if outermost == "scanstrain" else None, outermost


def inner(module):
    return [(line, name) for line, name, _ in imports(module) if name is not None]


def test_every_module_has_its_layer():
    assert {unit(module) for module in MODULES} == set(RANK)


@pytest.mark.parametrize("module", sorted(MODULES))
def test_imports_point_downwards(module):
    wrong = [
        f"{MODULES[module]}:{line}: {unit(module)} imports {name}"
        for line, name in inner(module)
        if unit(name) != unit(module) and RANK[unit(name)] >= RANK[unit(module)]
    ]
    assert wrong == []


@pytest.mark.parametrize("module", sorted(name for name in MODULES if unit(name) in STAGES))
def test_a_stage_knows_only_the_results_of_the_stages_before_it(module):
    stage = unit(module)
    wrong = [
        f"{MODULES[module]}:{line}: {stage} imports {name}"
        for line, name in inner(module)
        if unit(name) in STAGES and unit(name) != stage and name not in RESULTS.get(stage, set())
    ]
    assert wrong == []


@pytest.mark.parametrize("module", sorted(name for name in MODULES if unit(name) in NUMERICS))
def test_numerics_know_nothing_of_files_and_screens(module):
    tree = ast.parse(MODULES[module].read_text(encoding="utf-8"))
    called = {node.func.id for node in ast.walk(tree) if isinstance(node, ast.Call) and isinstance(node.func, ast.Name)}
    outside = {outermost for _, _, outermost in imports(module)}
    assert outside & (FILES | SHOWN) == set()
    assert "open" not in called


def test_truth_does_not_come_from_the_code_that_it_judges():
    used = {unit(name) for module in MODULES if unit(module) == "synthetic" for _, name in inner(module)}
    assert used <= {"synthetic", "epoch", "errors", "registry"}


def test_open3d_stands_behind_one_import():
    users = [module for module in MODULES for _, _, outermost in imports(module) if outermost == "open3d"]
    assert users == ["registration.coarse"]


@pytest.mark.parametrize("module", sorted(set(MODULES) - {"__main__"}))
def test_the_library_does_not_end_the_program_print_or_assert(module):
    """Errors are exceptions, results are return values; `workers` ends a worker process when it is told to stop."""
    tree = ast.parse(MODULES[module].read_text(encoding="utf-8"))
    found = [f"{node.lineno}: assert" for node in ast.walk(tree) if isinstance(node, ast.Assert)]
    for node in ast.walk(tree):
        if isinstance(node, ast.Call):
            name = ast.unparse(node.func)
            if name in ("print", "exit", "quit", "os._exit") or (name == "sys.exit" and module != "workers"):
                found.append(f"{node.lineno}: {name}")
    assert found == []


HEAVY = {"numpy", "scipy", "numba", "open3d", "laspy", "matplotlib", "pydantic", "pyproj", "rich"}


@pytest.mark.parametrize(
    "code",
    [
        "import scanstrain",
        "from scanstrain.cli import main; main(['--help'])",
        "from scanstrain.cli import main; main(['run', '--help'])",
        "from scanstrain.cli import main; main(['config', 'check', '--help'])",
    ],
)
def test_help_and_the_bare_import_load_nothing_heavy(code):
    code = f"import sys\n{code}\nprint('loaded:', *sorted({HEAVY!r} & set(sys.modules)))"
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    assert done.stdout.splitlines()[-1] == "loaded:"
