"""The project's own sources as syntax trees, for the tests of its structure."""

import ast
import functools
from collections.abc import Iterator
from pathlib import Path

TOP = Path(__file__).resolve().parents[2]


@functools.cache
def tree(path: Path) -> ast.Module:
    return ast.parse(path.read_text(), filename=str(path))


def python_files(*places: str) -> list[Path]:
    """Python files below the given places of the checkout, sorted."""
    files: list[Path] = []
    for place in places:
        path = TOP / place
        files.extend(sorted(path.rglob("*.py")) if path.is_dir() else [path])
    return files


def module_name(path: Path) -> str:
    """Dotted name below the top of the checkout: rtctl/laws/pd.py -> rtctl.laws.pd."""
    parts = path.relative_to(TOP).with_suffix("").parts
    return ".".join(parts[:-1] if parts[-1] == "__init__" else parts)


def functions(module: ast.Module) -> Iterator[ast.FunctionDef]:
    """Every function of a module, also methods and nested ones."""
    for node in ast.walk(module):
        if isinstance(node, ast.FunctionDef):
            yield node


def decorators(function: ast.FunctionDef) -> set[str]:
    """Names of a function's decorators, without arguments and module prefixes."""
    names = set()
    for node in function.decorator_list:
        target = node.func if isinstance(node, ast.Call) else node
        names.add(target.attr if isinstance(target, ast.Attribute) else getattr(target, "id", ""))
    return names


def place(path: Path, node: ast.AST) -> str:
    return f"{path.relative_to(TOP)}:{getattr(node, 'lineno', 0)}"
