"""Compiled code never writes into a model: numba does not refuse it, not even for a read-only block, so this looks at the text.

The loop shares one model with law, supervisor and record; a kernel that changed it would change every later torque.
"""

import ast
from pathlib import Path

from rtctl.kernels.compile import compiled_sources
from tests.structure.sources_of import decorators, functions, place, tree

MODEL_NAME = "model"


def is_model(node: ast.expr, aliases: set[str]) -> bool:
    """Whether an expression is a model, a part of one, or another name of either."""
    if isinstance(node, ast.Name):
        return node.id == MODEL_NAME or node.id in aliases
    if isinstance(node, ast.Subscript):
        named = isinstance(node.slice, ast.Constant) and node.slice.value == MODEL_NAME
        return named or is_model(node.value, aliases)
    return False


def pairs(target: ast.expr, value: ast.expr | None) -> list[tuple[ast.expr, ast.expr | None]]:
    """Each single target of an assignment with its value, tuples taken apart."""
    if not isinstance(target, ast.Tuple | ast.List):
        return [(target, value)]
    values: list[ast.expr | None] = list(value.elts) if isinstance(value, ast.Tuple | ast.List) else [None] * len(target.elts)
    return [pair for t, v in zip(target.elts, values, strict=True) for pair in pairs(t, v)]


def assignments(function: ast.FunctionDef) -> list[tuple[ast.expr, ast.expr | None]]:
    found: list[tuple[ast.expr, ast.expr | None]] = []
    for node in ast.walk(function):
        if isinstance(node, ast.Assign):
            found.extend(pair for target in node.targets for pair in pairs(target, node.value))
        elif isinstance(node, ast.AugAssign | ast.AnnAssign):
            found.append((node.target, node.value))
        elif isinstance(node, ast.For):
            found.extend(pairs(node.target, None))
    return found


def writes_into_model(function: ast.FunctionDef) -> list[ast.expr]:
    """Targets that lie inside a model, also through a local name of one of its fields."""
    found = assignments(function)
    aliases: set[str] = set()
    for _ in range(3):  # a name of a name of a field
        aliases |= {
            t.id
            for t, v in found
            if isinstance(t, ast.Name) and v is not None and (isinstance(v, ast.Subscript) and is_model(v, aliases))
        }
    return [t for t, _ in found if isinstance(t, ast.Subscript) and is_model(t, aliases)]


def is_compiled(function: ast.FunctionDef) -> bool:
    """Hot functions, and templates of callbacks, which read their blocks with `block_at`. Cold ones may build a model."""
    reads_blocks = any(isinstance(node, ast.Name) and node.id == "block_at" for node in ast.walk(function))
    return "hot" in decorators(function) or reads_blocks


def compiled_functions() -> list[tuple[Path, ast.FunctionDef]]:
    """Every compiled function of the compiled places."""
    return [(path, function) for path in compiled_sources() for function in functions(tree(path)) if is_compiled(function)]


def test_no_compiled_function_assigns_into_a_model() -> None:
    """No assignment of the compiled places has a model's field, or a local name of one, on its left."""
    wrong = [
        f"{place(path, target)} {function.name}: {ast.unparse(target)}"
        for path, function in compiled_functions()
        for target in writes_into_model(function)
    ]
    assert wrong == []


def test_the_rule_sees_what_it_forbids() -> None:
    """Plain, in-place, tuple and renamed writes are all found; reads and writes to scratch are not."""
    text = """
def bad(model, setup, ws):
    model["mass"][0] = 1.0
    model["n"] += 1
    x, model["h"][0, 1] = 1.0, 2.0
    setup["model"]["gravity"][2] = 0.0
    R, p = model["R_parent"], ws["p"]
    Q = R[0]
    Q[1] = 0.0
    R[0, 0, 0], p[0] = 1.0, 2.0

def good(model, setup, ws):
    R, k = ws["R"], model["parent"][0]
    R[k] = model["mass"][k]
    R[0] += model["h"][0, 0]
"""
    bad, good = list(functions(ast.parse(text)))
    assert [ast.unparse(target) for target in writes_into_model(bad)] == [
        "model['mass'][0]",
        "model['n']",
        "model['h'][0, 1]",
        "setup['model']['gravity'][2]",
        "Q[1]",
        "R[0, 0, 0]",
    ]
    assert writes_into_model(good) == []


def test_it_looks_at_the_kernels() -> None:
    """The functions looked at include the dynamics kernels."""
    names = {function.name for _, function in compiled_functions()}
    assert {"inverse_dynamics", "inertia_matrix", "forward_dynamics", "jacobian"} <= names
