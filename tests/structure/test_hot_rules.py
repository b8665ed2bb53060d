"""Rules of compiled code that the compiler does not enforce (DEVELOPERS.md, hot code)."""

import ast
from pathlib import Path

from rtctl.kernels.compile import COMPILED_PLACES
from tests.structure.sources_of import TOP, decorators, functions, place, python_files, tree

# Code between a measurement and the torque that leaves: a comparison there must trip on NaN.
JUDGING = ("rtctl/supervisor", "rtctl/cycle.py", "rtctl/laws", "rtctl/loop", "rtctl/wire", "rtctl/plant/driver_duty.py")
ALLOCATING = {
    "zeros",
    "empty",
    "ones",
    "array",
    "full",
    "zeros_like",
    "empty_like",
    "ones_like",
    "copy",
    "dot",
    "append",
    "tolist",
}


def hot_functions() -> list[tuple[Path, ast.FunctionDef]]:
    return [(path, node) for path in python_files("rtctl") for node in functions(tree(path)) if "hot" in decorators(node)]


def is_compiled_place(path: Path) -> bool:
    return path.relative_to(TOP / "rtctl").parts[0] in COMPILED_PLACES


def test_there_are_hot_functions() -> None:
    """The other tests of this file look at something."""
    assert len(hot_functions()) > 20


def test_compiled_code_stands_in_listed_places_only() -> None:
    """The compile cache is keyed by the files of the listed places, so compiled code anywhere else would go stale."""
    makers = {"hot", "callback", "njit", "jit", "cfunc", "vectorize", "guvectorize"}
    wrong = []
    for path in python_files("rtctl"):
        for node in ast.walk(tree(path)):
            uses = (isinstance(node, ast.FunctionDef) and decorators(node) & makers) or (
                isinstance(node, ast.Call) and isinstance(node.func, ast.Name) and node.func.id in makers
            )
            if uses and not is_compiled_place(path):
                wrong.append(place(path, node))
    assert wrong == []


def test_one_decorator_compiles_everything() -> None:
    """numba's own decorators appear in rtctl/kernels/compile.py only; fastmath is never switched on."""
    wrong = []
    for path in python_files("rtctl", "drivers"):
        if path == TOP / "rtctl/kernels/compile.py":
            continue
        for node in functions(tree(path)):
            if decorators(node) & {"njit", "jit", "cfunc", "vectorize", "guvectorize", "generated_jit"}:
                wrong.append(place(path, node))
    for path in python_files("rtctl", "drivers"):
        for keyword in ast.walk(tree(path)):
            if isinstance(keyword, ast.keyword) and keyword.arg == "fastmath":
                if not (isinstance(keyword.value, ast.Constant) and keyword.value.value is False):
                    wrong.append(f"{place(path, keyword.value)} fastmath")
    assert wrong == []


def test_no_exceptions_text_or_containers_in_hot_functions() -> None:
    """A hot function returns a status: no raise, try, assert, with, f-string, print, dict, set, list or comprehension."""
    banned = (
        ast.Raise,
        ast.Try,
        ast.Assert,
        ast.With,
        ast.JoinedStr,
        ast.Dict,
        ast.Set,
        ast.List,
        ast.ListComp,
        ast.SetComp,
        ast.DictComp,
        ast.GeneratorExp,
        ast.Yield,
        ast.Lambda,
    )
    wrong = []
    for path, function in hot_functions():
        body = function.body[1:] if ast.get_docstring(function) else function.body
        for statement in body:
            for node in ast.walk(statement):
                called = (
                    isinstance(node, ast.Call) and isinstance(node.func, ast.Name) and node.func.id in ("print", "str", "repr")
                )
                if isinstance(node, banned) or called:
                    wrong.append(f"{place(path, node)} {type(node).__name__} in {function.name}")
    assert wrong == []


def test_hot_functions_call_nothing_that_allocates() -> None:
    """Outputs and scratch are arguments: no array is made, copied or multiplied through BLAS, and no `@`."""
    wrong = []
    for path, function in hot_functions():
        for node in ast.walk(function):
            if isinstance(node, ast.BinOp) and isinstance(node.op, ast.MatMult):
                wrong.append(f"{place(path, node)} @ in {function.name}")
            if isinstance(node, ast.Call) and isinstance(node.func, ast.Attribute) and node.func.attr in ALLOCATING:
                wrong.append(f"{place(path, node)} {node.func.attr} in {function.name}")
    assert wrong == []


def test_limits_are_tested_positively() -> None:
    """`abs(x) > limit` lets NaN pass; `not (-limit <= x <= limit)` does not: the first form judges nothing."""
    judging = python_files(*JUDGING)
    wrong = []
    for path, function in hot_functions():
        if path not in judging:
            continue
        for node in ast.walk(function):
            if isinstance(node, ast.Compare) and isinstance(node.left, ast.Call) and isinstance(node.left.func, ast.Name):
                if node.left.func.id in ("abs", "fabs") and isinstance(node.ops[0], ast.Gt | ast.GtE):
                    wrong.append(f"{place(path, node)} in {function.name}")
    assert wrong == []


def test_no_compiled_function_writes_into_the_model() -> None:
    """Only the arm loader and what builds the blocks of a run write model fields; every compiled function reads them."""
    wrong = []
    for path, function in hot_functions():
        for node in ast.walk(function):
            targets = node.targets if isinstance(node, ast.Assign) else [node.target] if isinstance(node, ast.AugAssign) else []
            for target in targets:
                root = target
                while isinstance(root, ast.Subscript):
                    inner = root.value
                    if isinstance(inner, ast.Name) and inner.id == "model":
                        wrong.append(f"{place(path, node)} in {function.name}")
                    if isinstance(root.slice, ast.Constant) and root.slice.value == "model":
                        wrong.append(f"{place(path, node)} in {function.name}")
                    root = inner
    assert wrong == []


def test_every_function_that_is_not_compiled_has_types() -> None:
    """mypy passes over functions without annotations in the compiled places, so every other function there must have them all.

    Templates of `callback` and the generators inside intrinsics are compiled or typed by numba: they take untyped arguments.
    """
    wrong = []
    for path in python_files("rtctl", "drivers"):
        module = tree(path)
        templates = {
            node.args[0].id
            for node in ast.walk(module)
            if isinstance(node, ast.Call)
            and isinstance(node.func, ast.Name)
            and node.func.id == "callback"
            and node.args
            and isinstance(node.args[0], ast.Name)
        }
        for function in functions(module):
            if decorators(function) & {"hot", "intrinsic", "overload"} or function.name in templates:
                continue
            arguments = [*function.args.posonlyargs, *function.args.args, *function.args.kwonlyargs]
            missing = [a.arg for a in arguments if a.annotation is None and a.arg not in ("self", "cls")]
            if missing or (function.returns is None and function.name != "__init__"):
                wrong.append(f"{place(path, function)} {function.name} {missing}")
    assert wrong == []
