"""Every public name explains itself: modules, classes and functions carry a docstring, and so does every test."""

import ast

from tests.structure.sources_of import functions, place, python_files, tree

LONG_FUNCTION_LINES = 80
# name -> why it is longer than LONG_FUNCTION_LINES; a new one is split or listed here with its reason
LONG_FUNCTIONS: dict[str, str] = {}


def test_public_names_have_docstrings() -> None:
    """Modules, public classes and public functions of rtctl and drivers say in a sentence what they are."""
    without = []
    for path in python_files("rtctl", "drivers"):
        module = tree(path)
        if not ast.get_docstring(module):
            without.append(f"{place(path, module)} module")
        for node in module.body:
            public = isinstance(node, ast.FunctionDef | ast.ClassDef) and not node.name.startswith("_")
            if public and not ast.get_docstring(node):  # type: ignore[arg-type]  # a function or class, as just checked
                without.append(f"{place(path, node)} {node.name}")
    assert without == []


def test_tests_have_docstrings() -> None:
    """Each test says in one sentence which behaviour is wanted."""
    without = [
        f"{place(path, function)} {function.name}"
        for path in python_files("tests")
        for function in functions(tree(path))
        if function.name.startswith("test_") and not ast.get_docstring(function)
    ]
    assert without == []


def test_long_functions_are_listed_with_a_reason() -> None:
    """A function above the limit is split, or listed with the reason why splitting would hide something."""
    long = {
        f"{path.name}:{function.name}"
        for path in python_files("rtctl", "drivers")
        for function in functions(tree(path))
        if (function.end_lineno or 0) - function.lineno + 1 > LONG_FUNCTION_LINES
    }
    assert long == set(LONG_FUNCTIONS)
