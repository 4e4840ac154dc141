"""What every module keeps to: docstrings, frozen records, sizes, names, no printing."""

from __future__ import annotations

import ast
import shutil
import subprocess
from collections.abc import Iterator
from pathlib import Path

import pytest

import scantling

ROOT = Path(scantling.__file__).parent
PATHS = sorted(ROOT.rglob("*.py"))
TREES = {str(path.relative_to(ROOT)): ast.parse(path.read_text(encoding="utf-8")) for path in PATHS}
PUBLIC = (
    "InputError", "NotAvailableError", "ScantlingError", "budget", "fit_law", "lasso_batch",
    "moment_exists", "read_design", "render", "tail_index", "vet",
)  # fmt: skip


def is_text(node: ast.stmt | None) -> bool:
    """Whether a statement is a string standing alone."""
    return (
        isinstance(node, ast.Expr)
        and isinstance(node.value, ast.Constant)
        and isinstance(node.value.value, str)
        and bool(node.value.value.strip())
    )


def classes(tree: ast.Module) -> Iterator[ast.ClassDef]:
    """Every class of a module."""
    return (node for node in ast.walk(tree) if isinstance(node, ast.ClassDef))


def dataclass_call(node: ast.ClassDef) -> ast.expr | None:
    """The dataclass decorator of a class, if it has one."""
    for decorator in node.decorator_list:
        called = decorator.func if isinstance(decorator, ast.Call) else decorator
        if ast.unparse(called).split(".")[-1] == "dataclass":
            return decorator
    return None


def test_public_names_are_exactly_these() -> None:
    assert sorted(scantling.__all__) == list(PUBLIC)
    for name in PUBLIC:
        assert getattr(scantling, name).__doc__, name
        assert name in dir(scantling)
    with pytest.raises(AttributeError, match="no attribute 'helpers'"):
        scantling.helpers  # noqa: B018
    assert issubclass(scantling.InputError, ValueError)
    assert issubclass(scantling.NotAvailableError, scantling.InputError)


def test_dataclasses_are_frozen_slotted_and_keyword_only() -> None:
    wanted = {"frozen": True, "slots": True, "kw_only": True}
    wrong, seen = [], 0
    for name, tree in TREES.items():
        for node in classes(tree):
            decorator = dataclass_call(node)
            if decorator is None:
                continue
            seen += 1
            given = {}
            if isinstance(decorator, ast.Call):
                given = {k.arg: ast.literal_eval(k.value) for k in decorator.keywords}
            if not wanted.items() <= given.items():
                wrong.append(f"{name}: {node.name}")
    assert seen > 40
    assert not wrong, "\n".join(wrong)


def test_every_field_of_a_record_is_described() -> None:
    """A string after the field; class variables are no fields."""
    wrong = []
    for name, tree in TREES.items():
        for node in classes(tree):
            if dataclass_call(node) is None:
                continue
            for place, field in enumerate(node.body):
                if not isinstance(field, ast.AnnAssign):
                    continue
                if "ClassVar" in ast.unparse(field.annotation):
                    continue
                after = node.body[place + 1] if place + 1 < len(node.body) else None
                if not is_text(after):
                    wrong.append(f"{name}:{field.lineno}: {node.name}.{ast.unparse(field.target)}")
    assert not wrong, f"{len(wrong)} fields without a line:\n" + "\n".join(wrong)


def test_modules_and_everything_public_have_docstrings() -> None:
    wrong = []
    for name, tree in TREES.items():
        if not ast.get_docstring(tree):
            wrong.append(name)
        for owner in [tree, *classes(tree)]:
            hidden = isinstance(owner, ast.ClassDef) and owner.name.startswith("_")
            for node in owner.body:
                if hidden or not isinstance(node, ast.FunctionDef | ast.ClassDef):
                    continue
                if not node.name.startswith("_") and not ast.get_docstring(node):
                    wrong.append(f"{name}:{node.lineno}: {node.name}")
    assert not wrong, "\n".join(wrong)


def test_everything_is_typed() -> None:
    """Every argument and every result; mypy says whether the types hold."""
    wrong = []
    for name, tree in TREES.items():
        for node in ast.walk(tree):
            if isinstance(node, ast.FunctionDef):
                every = [*node.args.posonlyargs, *node.args.args, *node.args.kwonlyargs]
                bare = [a.arg for a in every if a.annotation is None]
                if node.returns is None or set(bare) - {"self", "cls"}:
                    wrong.append(f"{name}:{node.lineno}: {node.name}")
    assert not wrong, "\n".join(wrong)


def test_computing_never_prints() -> None:
    """No print anywhere; only cli/ touches the terminal's streams."""
    wrong = []
    for name, tree in TREES.items():
        for node in ast.walk(tree):
            if isinstance(node, ast.Call) and ast.unparse(node.func) == "print":
                wrong.append(f"{name}:{node.lineno}")
            streams = isinstance(node, ast.Attribute) and node.attr in ("stdout", "stderr")
            if streams and not name.startswith("cli"):
                wrong.append(f"{name}:{node.lineno}")
    assert not wrong, "\n".join(wrong)


def test_randomness_comes_from_named_streams_only() -> None:
    """No global state, and generators are made in core/streams.py alone."""
    wrong = []
    for name, tree in TREES.items():
        for node in ast.walk(tree):
            if not isinstance(node, ast.Call):
                continue
            called = ast.unparse(node.func)
            if called.startswith(("random.", "np.random.")) and name != "core/streams.py":
                wrong.append(f"{name}:{node.lineno}: {called}")
    assert not wrong, "\n".join(wrong)


def test_sizes() -> None:
    long = {p: n for p in PATHS if (n := len(p.read_text("utf-8").splitlines())) > 400}
    assert not long, long


def test_names() -> None:
    banned = {"utils", "util", "helpers", "helper", "misc", "common"}
    for path in PATHS:
        assert not banned & set(path.relative_to(ROOT).with_suffix("").parts), path
        assert len(path.relative_to(ROOT).parts) <= 2, f"{path}: deeper than package, stage, module"


def test_test_files_have_one_name_each() -> None:
    tests = ROOT.parents[1] / "tests"
    if not tests.is_dir():
        pytest.skip("installed without its tests")
    files = [path.name for path in tests.rglob("test_*.py")]
    assert len(files) == len(set(files))
    assert not list(tests.rglob("__init__.py"))


def test_top_level_of_the_repository() -> None:
    top = ROOT.parents[1]
    git = shutil.which("git")
    if git is None or not (top / ".git").exists():
        pytest.skip("not a checkout")
    done = subprocess.run(
        [git, "-C", str(top), "ls-files", "--cached", "--others", "--exclude-standard"],
        capture_output=True,
        text=True,
        check=True,
    )
    found = {line.split("/")[0] for line in done.stdout.splitlines() if (top / line).exists()}
    assert {name for name in found if not name.startswith(".")} == {
        "README.md", "DEVELOPERS.md", "CHANGELOG.md", "pyproject.toml", "src", "tests", "reports",
        "examples",
    }  # fmt: skip
