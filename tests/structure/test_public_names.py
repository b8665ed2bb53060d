"""What `import rtctl` gives, and what it costs."""

import ast
import subprocess
import sys

import rtctl
from tests.structure.sources_of import TOP, tree

HEAVY = {"numba", "zmq", "pydantic", "click", "rich", "msgpack", "scipy"}


def test_import_is_light() -> None:
    """`import rtctl` loads neither the compiler nor sockets nor the command line: those come with the first use."""
    code = "import sys, rtctl; print(*sorted({m.split('.')[0] for m in sys.modules}))"
    loaded = subprocess.run([sys.executable, "-c", code], cwd=TOP, capture_output=True, text=True, check=True).stdout.split()
    assert "rtctl" in loaded
    assert not HEAVY & set(loaded)


def test_every_public_name_is_there() -> None:
    """Every name of __all__ resolves, and is listed by dir()."""
    for name in rtctl.__all__:
        assert getattr(rtctl, name) is not None
    assert set(rtctl.__all__) <= set(dir(rtctl))


def test_unknown_names_are_refused() -> None:
    """A name that is not public raises the usual AttributeError."""
    try:
        rtctl.inverse_dynamic  # noqa: B018  # the access is the test
    except AttributeError as error:
        assert str(error) == "module 'rtctl' has no attribute 'inverse_dynamic'"
    else:
        raise AssertionError("no AttributeError")


def test_type_checkers_see_the_same_names() -> None:
    """The names imported for type checkers are exactly the lazy ones."""
    module = tree(TOP / "rtctl/__init__.py")
    block = next(node for node in module.body if isinstance(node, ast.If))
    seen = {alias.name for node in block.body if isinstance(node, ast.ImportFrom) for alias in node.names}
    assert seen | {"__version__"} == set(rtctl.__all__)
