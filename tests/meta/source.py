"""The repository as the meta tests read it: text and syntax trees, never imported."""

import ast
from collections.abc import Iterator
from functools import cache
from pathlib import Path

ROOT = Path(__file__).parents[2]

ROOMS = ("autotune", "simulator", "tests")
PURE_ROOMS = (
    "autotune/loop",
    "autotune/experiment",
    "autotune/identify",
    "autotune/design",
    "autotune/confirmed_write",
)
TEXT_SUFFIXES = {"", ".json", ".jsonl", ".md", ".py", ".st", ".toml", ".txt", ".csv", ".html", ".css", ".js"}


@cache
def text_of(path: Path) -> str:
    """The file's text."""
    return path.read_text(encoding="utf-8")


@cache
def tree_of(path: Path) -> ast.Module:
    """The file's syntax tree."""
    return ast.parse(text_of(path), str(path))


def name_of(path: Path) -> str:
    """The path as it is written in lists: relative to the repository, with forward slashes."""
    return path.relative_to(ROOT).as_posix()


def modules(*folders: str) -> tuple[Path, ...]:
    """Every Python module below the folders, in order."""
    return tuple(path for folder in folders for path in sorted((ROOT / folder).rglob("*.py")))


def texts() -> Iterator[Path]:
    """Every text file that belongs to the repository."""
    for path in sorted(ROOT.iterdir()):
        if path.is_file() and (path.suffix in TEXT_SUFFIXES and not path.name.startswith(".coverage")):
            yield path
        elif path.name in {*ROOMS, "config", ".ci"}:
            yield from (
                inner
                for inner in sorted(path.rglob("*"))
                if inner.is_file() and inner.suffix in TEXT_SUFFIXES and "__pycache__" not in inner.parts
            )


def classes(tree: ast.Module) -> Iterator[ast.ClassDef]:
    """Every class of a module, nested ones too."""
    return (node for node in ast.walk(tree) if isinstance(node, ast.ClassDef))


def functions(tree: ast.Module) -> Iterator[ast.FunctionDef | ast.AsyncFunctionDef]:
    """Every function and method of a module."""
    return (node for node in ast.walk(tree) if isinstance(node, ast.FunctionDef | ast.AsyncFunctionDef))


def dotted(node: ast.AST) -> str:
    """``a.b.c`` of a chain of attributes; empty for anything else."""
    if isinstance(node, ast.Name):
        return node.id
    if isinstance(node, ast.Attribute) and (head := dotted(node.value)):
        return f"{head}.{node.attr}"
    return ""
