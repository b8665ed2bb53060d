"""Data flows one way: a module imports only from lower levels (DEVELOPERS.md, the map of the house)."""

import ast
import subprocess
import sys
from pathlib import Path

import pytest

from tests.structure.sources_of import TOP, module_name, place, python_files, tree

# Longest prefix decides. Modules of one level may import each other only inside the same entry. Halves order one level's entries.
LEVELS = {
    "rtctl.errors": 0,
    "rtctl.causes": 0,
    "rtctl.places": 0.5,
    "rtctl.progress": 0,
    "rtctl.kernels": 1,
    "rtctl.blocks": 1.5,
    "rtctl.config": 2,
    "rtctl.arm": 3,
    "rtctl.config.limits_file": 3.2,  # limits and runs are checked against an arm
    "rtctl.config.run_file": 3.4,
    "rtctl.dynamics": 4,
    "rtctl.references": 4,
    "rtctl.laws": 4,
    "rtctl.supervisor": 5,
    "rtctl.cycle": 6,
    "rtctl.wire": 7,
    "rtctl.record": 7,
    "rtctl.plant": 7,
    "rtctl.loop": 8,
    "rtctl.assembly": 6.5,
    "rtctl.sim_process": 8.5,
    "rtctl.vet": 9,
    "rtctl.compare": 9,
    "rtctl.report": 9.2,  # shows what compare counts
    "rtctl.run": 9,
    "rtctl.demo": 9.5,  # does the other jobs one after the other
    "rtctl.cli": 10,
    "rtctl": 11,  # the public names of the package
    "drivers": 12,
}
LAZY_PACKAGES = ("numba", "llvmlite", "zmq", "msgpack", "pydantic", "click", "rich", "scipy", "matplotlib")


def entry_of(module: str) -> str | None:
    """The entry of LEVELS that holds a module; None for modules of other packages."""
    parts = module.split(".")
    for length in range(len(parts), 0, -1):
        prefix = ".".join(parts[:length])
        if prefix in LEVELS and (prefix != "rtctl" or module == "rtctl"):
            return prefix
    return None


def imports(path: Path) -> list[tuple[ast.AST, str]]:
    """Every module a file imports, also inside functions, as absolute names."""
    own = module_name(path)
    package = own.split(".") if path.name == "__init__.py" else own.split(".")[:-1]
    found: list[tuple[ast.AST, str]] = []
    for node in ast.walk(tree(path)):
        if isinstance(node, ast.Import):
            found += [(node, alias.name) for alias in node.names]
        elif isinstance(node, ast.ImportFrom):
            base = ".".join(package[: len(package) - node.level + 1]) + "." if node.level else ""
            module = (base + (node.module or "")).strip(".")
            for alias in node.names:
                # `from rtctl import arm` imports the module rtctl.arm, `from rtctl.arm import Arm` imports rtctl.arm
                nested = f"{module}.{alias.name}"
                is_module = (TOP / nested.replace(".", "/")).with_suffix(".py").exists() or (
                    TOP / nested.replace(".", "/")
                ).is_dir()
                found.append((node, nested if is_module else module))
    return found


def test_every_module_has_a_level() -> None:
    """A new module is added to the level table, or it sits in a package that is there."""
    without = [module_name(path) for path in python_files("rtctl", "drivers") if entry_of(module_name(path)) is None]
    assert without == []


def test_imports_go_to_lower_levels_only() -> None:
    """A module imports from lower levels and from its own entry; never upward, never sideways."""
    upward = []
    for path in python_files("rtctl", "drivers"):
        own = entry_of(module_name(path))
        for node, module in imports(path):
            other = entry_of(module)
            if own is None or other is None or other == own:
                continue
            if not LEVELS[other] < LEVELS[own]:
                upward.append(f"{place(path, node)} imports {module}")
    assert upward == []


def test_the_package_never_imports_its_drivers() -> None:
    """Drivers are processes of their own; rtctl only starts them by name."""
    wrong = [
        f"{place(path, node)} imports {module}"
        for path in python_files("rtctl")
        for node, module in imports(path)
        if module.split(".")[0] in ("drivers", "rtctl_drivers")
    ]
    assert wrong == []


def test_oracles_are_the_only_users_of_reference_libraries() -> None:
    """Libraries that serve as outside truth are imported in tests/oracles only."""
    reference = {"pinocchio", "mujoco"}
    wrong = [
        f"{place(path, node)} imports {module}"
        for path in python_files("rtctl", "drivers", "tests")
        for node, module in imports(path)
        if module.split(".")[0] in reference and "oracles" not in path.parts
    ]
    assert wrong == []


@pytest.mark.slow
def test_import_of_the_package_loads_numpy_only() -> None:
    """`import rtctl` is quick: everything heavy is imported on first use."""
    script = f"import sys, rtctl; print(*[name for name in {LAZY_PACKAGES!r} if name in sys.modules])"
    done = subprocess.run([sys.executable, "-c", script], cwd=TOP, capture_output=True, text=True, check=True)
    assert done.stdout.strip() == ""
