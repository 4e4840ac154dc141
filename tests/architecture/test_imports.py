"""Who may import whom: stages look down only, third-party packages stay where they belong."""

from __future__ import annotations

import ast
import subprocess
import sys
from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path

import pytest

import scantling

ROOT = Path(scantling.__file__).parent
ORDER = (
    "errors", "core", "design", "diagnostics", "law", "simulation", "planning", "report",
    "pipeline", "planned", "stressed", "cli",
)  # fmt: skip
MODULES = {
    ".".join(("scantling", *path.relative_to(ROOT).with_suffix("").parts)).removesuffix(
        ".__init__"
    ): path
    for path in sorted(ROOT.rglob("*.py"))
}
# The package's own __init__ only maps public names to their homes, and __main__ starts the
# command line: neither is a stage.
STAGES = {
    name: path for name, path in MODULES.items() if name.count(".") and "__main__" not in name
}
ANYWHERE = {"numpy", "scipy"}
HOMES = {
    "pandas": {"design"},
    "pyarrow": {"design"},
    "click": {"cli"},
    "rich": {"cli"},
    "arch": {"diagnostics", "law"},
    "statsmodels": {"diagnostics", "law"},
    "sklearn": {"diagnostics"},
    "threadpoolctl": {"core"},
    "joblib": {"core"},
    "distributed": {"core"},
}
LATE = {
    "pandas", "pyarrow", "statsmodels", "sklearn", "arch", "rich", "threadpoolctl", "joblib",
    "distributed",
}  # fmt: skip
"""Imported inside the function that needs them."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Import:
    """One import statement's target."""

    target: str
    """Dotted name of what is imported."""
    line: int
    """Where."""
    inside: bool
    """Whether it stands inside a function."""


def imports(path: Path) -> Iterator[Import]:
    """Every import of a module, those inside functions included; types alone do not count."""

    def walk(node: ast.AST, inside: bool) -> Iterator[Import]:
        for child in ast.iter_child_nodes(node):
            if isinstance(child, ast.If) and ast.unparse(child.test) == "TYPE_CHECKING":
                continue
            if isinstance(child, ast.Import):
                for alias in child.names:
                    yield Import(target=alias.name, line=child.lineno, inside=inside)
            elif isinstance(child, ast.ImportFrom):
                assert child.level == 0, f"{path.name}:{child.lineno}: a relative import"
                assert child.module is not None
                for alias in child.names:
                    whole = f"{child.module}.{alias.name}"
                    target = whole if whole in MODULES else child.module
                    yield Import(target=target, line=child.lineno, inside=inside)
            deeper = inside or isinstance(
                child, ast.FunctionDef | ast.AsyncFunctionDef | ast.Lambda
            )
            yield from walk(child, deeper)

    yield from walk(ast.parse(path.read_text(encoding="utf-8")), False)


def stage(name: str) -> str:
    """Stage of a dotted name: scantling.law.fit -> law."""
    return name.split(".")[1]


EVERY = [(name, found) for name, path in STAGES.items() for found in imports(path)]
OWN = [(name, f) for name, f in EVERY if f.target.split(".")[0] == "scantling"]
FOREIGN = [
    (name, f)
    for name, f in EVERY
    if f.target.split(".")[0] not in sys.stdlib_module_names | {"scantling"}
]


def test_there_is_something_to_look_at() -> None:
    assert len(STAGES) > 50 and len(OWN) > 150 and len(FOREIGN) > 50
    assert any(f.inside for _, f in FOREIGN)


def test_every_stage_is_in_the_order() -> None:
    assert {stage(name) for name in STAGES} == set(ORDER)


def test_stages_import_only_what_lies_below() -> None:
    wrong = [
        f"{name}:{f.line} imports {f.target}"
        for name, f in OWN
        if f.target == "scantling" or ORDER.index(stage(f.target)) > ORDER.index(stage(name))
    ]
    assert not wrong, "\n".join(wrong)


def test_no_cycles() -> None:
    """Among modules, imports inside functions included."""
    edges: dict[str, set[str]] = {name: set() for name in STAGES}
    for name, found in OWN:
        target = found.target if found.target in STAGES else found.target.rpartition(".")[0]
        # A package's __init__ holds a docstring only; importing a module runs it, no more.
        edges[name].add(target)
    done: set[str] = set()

    def visit(name: str, above: tuple[str, ...]) -> None:
        assert name not in above, " -> ".join([*above[above.index(name) :], name])
        if name not in done:
            for target in sorted(edges.get(name, ())):
                visit(target, (*above, name))
            done.add(name)

    for name in edges:
        visit(name, ())


def test_package_inits_hold_a_docstring_only() -> None:
    for path in ROOT.glob("*/__init__.py"):
        body = ast.parse(path.read_text(encoding="utf-8")).body
        assert len(body) == 1 and isinstance(body[0], ast.Expr), path


def test_third_party_packages_stay_at_home() -> None:
    wrong = []
    for name, found in FOREIGN:
        package = found.target.split(".")[0]
        if package not in ANYWHERE and stage(name) not in HOMES.get(package, set()):
            wrong.append(f"{name}:{found.line} imports {package}")
    assert not wrong, "\n".join(wrong)


def test_heavy_packages_are_imported_late() -> None:
    wrong = [
        f"{name}:{f.line} imports {f.target} at the top"
        for name, f in FOREIGN
        if f.target.split(".")[0] in LATE and not f.inside
    ]
    assert not wrong, "\n".join(wrong)


def test_kernels_know_arrays_only() -> None:
    """simulation/: numpy, scipy, core, and the errors that the public solver raises."""
    allowed = {"numpy", "scipy"}
    wrong = [
        f"{name}:{f.line} imports {f.target}"
        for name, f in [*OWN, *FOREIGN]
        if stage(name) == "simulation"
        and f.target.split(".")[0] not in allowed
        and not f.target.startswith("scantling.simulation")
        and stage(f.target) not in ("core", "errors")
    ]
    assert not wrong, "\n".join(wrong)


@pytest.mark.parametrize("package", ["socket", "urllib", "http", "pickle", "requests", "ftplib"])
def test_no_network_and_no_pickle(package: str) -> None:
    assert not [name for name, f in EVERY if f.target.split(".")[0] == package]


def test_nothing_is_executed_from_text() -> None:
    for name, path in MODULES.items():
        for node in ast.walk(ast.parse(path.read_text(encoding="utf-8"))):
            if isinstance(node, ast.Call) and isinstance(node.func, ast.Name):
                assert node.func.id not in {"eval", "exec", "compile", "__import__"}, name


def test_every_module_imports_alone() -> None:
    """In a fresh interpreter each: forked from one that has loaded only what all of them need."""
    code = f"""
import os, sys, traceback
import numpy, scipy.special, scipy.stats, scipy.linalg, scipy.optimize, click
faults = []
for name in {sorted(set(MODULES) - {"scantling.__main__"})!r}:
    child = os.fork()
    if child == 0:
        try:
            __import__(name)
            heavy = [p for p in ("pandas", "statsmodels", "sklearn", "arch") if p in sys.modules]
            if heavy:
                print(name, "loads", *heavy)
            os._exit(1 if heavy else 0)
        except BaseException:
            traceback.print_exc()
            os._exit(1)
    if os.waitpid(child, 0)[1] != 0:
        faults.append(name)
sys.exit(" ".join(faults) or 0)
"""
    done = subprocess.run(
        [sys.executable, "-W", "ignore", "-c", code], capture_output=True, text=True, check=False
    )
    assert done.returncode == 0, done.stderr + done.stdout
