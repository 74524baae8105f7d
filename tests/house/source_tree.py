"""The project's own sources as parsed trees, for the tests that read the code."""

from __future__ import annotations

import ast
from collections.abc import Iterator
from pathlib import Path

ROOT = Path(__file__).resolve().parents[2]
ROOMS = ("rig", "fit", "reports")


def source_files(*rooms: str) -> list[Path]:
    """Return all Python files of some rooms (all rooms by default), sorted."""
    return sorted(path for room in rooms or ROOMS for path in (ROOT / room).rglob("*.py"))


def tree_of(path: Path) -> ast.Module:
    """Parse one file."""
    return ast.parse(path.read_text(encoding="utf-8"), filename=str(path))


def imported_modules(tree: ast.AST) -> Iterator[str]:
    """Yield the dotted name of every module that is imported, anywhere in the tree."""
    for node in ast.walk(tree):
        if isinstance(node, ast.Import):
            yield from (alias.name for alias in node.names)
        elif isinstance(node, ast.ImportFrom) and node.module:
            yield node.module


def public_definitions(
    tree: ast.Module,
) -> Iterator[ast.FunctionDef | ast.AsyncFunctionDef | ast.ClassDef]:
    """Yield module-level functions and classes whose name is public, and their methods."""
    for node in tree.body:
        if isinstance(node, ast.FunctionDef | ast.AsyncFunctionDef | ast.ClassDef):
            if node.name.startswith("_"):
                continue
            yield node
            if isinstance(node, ast.ClassDef):
                inner = (part for part in node.body if isinstance(part, ast.FunctionDef))
                yield from (part for part in inner if not part.name.startswith("_"))
