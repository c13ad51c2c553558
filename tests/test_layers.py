"""Imports run one way: optimiser, then catalogs, then chemistry; and the house keeps its plan."""

from __future__ import annotations

import ast
from collections.abc import Iterator
from pathlib import Path

import pytest

ROOT = Path(__file__).resolve().parent.parent
FLOORS = {"chemistry": 0, "catalogs": 1, "optimiser": 2}
HEAVY = {"pandas", "scipy", "pulp", "highspy", "matplotlib", "openpyxl"}
FILES = sorted(path for package in FLOORS for path in (ROOT / package).rglob("*.py"))
READS_FILES = {
    "open",
    "read_text",
    "read_bytes",
    "write_text",
    "write_bytes",
    "loadtxt",
    "read_csv",
}


def module_name(path: Path) -> str:
    parts = path.relative_to(ROOT).with_suffix("").parts
    return ".".join(parts[:-1] if parts[-1] == "__init__" else parts)


def imports_of(tree: ast.AST, *, at_top: bool = False) -> Iterator[tuple[str, int]]:
    """Names of imported modules with their lines; what only type checkers see is left out."""
    for node in tree.body if at_top and isinstance(tree, ast.Module) else _running_code(tree):
        if isinstance(node, ast.Import):
            yield from ((alias.name, node.lineno) for alias in node.names)
        elif isinstance(node, ast.ImportFrom):
            assert node.level == 0, f"relative import in line {node.lineno}"
            yield node.module or "", node.lineno
            yield from ((f"{node.module}.{alias.name}", node.lineno) for alias in node.names)


def _running_code(node: ast.AST) -> Iterator[ast.AST]:
    for child in ast.iter_child_nodes(node):
        if isinstance(child, ast.If) and "TYPE_CHECKING" in ast.dump(child.test):
            continue
        yield child
        yield from _running_code(child)


def backward_arrows(source: str, package: str) -> list[str]:
    return [
        f"line {line}: {name}"
        for name, line in imports_of(ast.parse(source))
        if FLOORS.get(name.split(".")[0], -1) > FLOORS[package]
    ]


@pytest.mark.parametrize("path", FILES, ids=module_name)
def test_no_import_points_back_up(path: Path) -> None:
    package = path.relative_to(ROOT).parts[0]
    assert backward_arrows(path.read_text(encoding="utf-8"), package) == []


def test_an_arrow_back_would_be_seen() -> None:
    assert backward_arrows("def f():\n    from optimiser import plan\n", "catalogs") == [
        "line 2: optimiser",
        "line 2: optimiser.plan",
    ]


def test_modules_import_each_other_in_no_circle() -> None:
    modules = {module_name(path): path for path in FILES}
    arrows = {
        name: {
            target
            for target, _ in imports_of(ast.parse(path.read_text(encoding="utf-8")))
            if target in modules and target != name
        }
        for name, path in modules.items()
    }
    assert circle_in(arrows) == []


def circle_in(arrows: dict[str, set[str]]) -> list[str]:
    """Take away what imports nothing that is left, until nothing changes; the rest is circular."""
    left = {name: set(targets) for name, targets in arrows.items()}
    while free := [name for name, targets in left.items() if not targets & set(left)]:
        for name in free:
            del left[name]
    return sorted(left)


def test_a_circle_would_be_seen() -> None:
    assert circle_in({"a": {"b"}, "b": {"c"}, "c": {"b"}, "d": set()}) == ["a", "b", "c"]


@pytest.mark.parametrize(
    "path", [path for path in FILES if "chemistry" in path.parts], ids=module_name
)
def test_chemistry_reads_no_file(path: Path) -> None:
    tree = ast.parse(path.read_text(encoding="utf-8"))
    imported = {name.split(".")[0] for name, _ in imports_of(tree)}
    assert not imported & {"pathlib", "io", "os", "csv", "json", "yaml", "importlib"}
    called = {
        node.func.attr if isinstance(node.func, ast.Attribute) else getattr(node.func, "id", "")
        for node in ast.walk(tree)
        if isinstance(node, ast.Call)
    }
    assert not called & READS_FILES


@pytest.mark.parametrize("path", FILES, ids=module_name)
def test_heavy_libraries_load_where_they_are_used(path: Path) -> None:
    tree = ast.parse(path.read_text(encoding="utf-8"))
    top = {name.split(".")[0] for name, _ in imports_of(tree, at_top=True)}
    assert not top & HEAVY


def test_top_level_holds_only_what_the_house_plan_names() -> None:
    named = {
        "README.md", "DEVELOPERS.md", "pyproject.toml", "LICENSE",
        "optimiser", "chemistry", "catalogs", "tests",
    }  # fmt: skip
    made = {"build", "dist"}
    found = {path.name for path in ROOT.iterdir() if not path.name.startswith(".")} - made
    assert found == named
