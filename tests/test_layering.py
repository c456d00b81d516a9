"""Imports run one way, and the pure parts stay pure; read from the source, nothing is imported."""

import ast
from collections.abc import Iterator
from pathlib import Path

import pytest

ROOT = Path(__file__).parent.parent
OURS = ("trialrunner", "drivers", "mock_rig")

MAY_IMPORT = {
    "trialrunner.core": {"trialrunner.core"},
    "trialrunner": {"trialrunner", "trialrunner.core", "drivers"},
    "drivers": {"drivers"},
    "mock_rig": {"mock_rig", "drivers"},
}
"""What each part may import of ours. No other arrow."""

CORE_LIBRARIES = {"numpy", "scipy"}
CORE_STANDARD = {
    "bisect", "collections", "contextlib", "dataclasses", "enum", "fractions", "functools",
    "heapq", "itertools", "math", "operator", "statistics", "types", "typing",
}  # fmt: skip
"""The core may use these of the standard library: nothing that knows a clock, a file, a socket, a
log, a thread or chance. A list of what is allowed, so that a new module cannot slip in."""

PURE_DRIVERS = ("codec", "framing", "messages", "fields", "limits", "errors", "tables")
LINK_LIBRARIES = {"serial", "zmq", "socket", "select", "os", "fcntl", "termios", "time"}

LAZY = {"scipy.signal"}
"""Costs over a second; imported inside the functions that need it."""

CLICK_ONLY = ("trialrunner/__main__.py", "trialrunner/cli/__init__.py", "trialrunner/exit_codes.py")
"""Loaded by `trialrunner --help`, which must answer at once."""
CHEAP = {
    "click",
    "trialrunner",
    "trialrunner.cli",
    "trialrunner.exit_codes",
}


def sources(folder: str) -> list[Path]:
    found = sorted((ROOT / folder).rglob("*.py"))
    assert found, f"no sources in {folder}"
    return found


def imports(path: Path, *, top_level: bool = False) -> Iterator[str]:
    """Full names of the modules that a file imports; `from a import b` counts as a.b and a."""
    tree = ast.parse(path.read_text(encoding="utf-8"), str(path))
    for node in _top_level(tree) if top_level else ast.walk(tree):
        if isinstance(node, ast.Import):
            yield from (alias.name for alias in node.names)
        elif isinstance(node, ast.ImportFrom):
            assert node.level == 0, f"{path}: relative imports hide the arrow"
            yield str(node.module)
            yield from (f"{node.module}.{alias.name}" for alias in node.names)


def _top_level(tree: ast.Module) -> Iterator[ast.AST]:
    """Nodes that run when the module is imported: all but the insides of functions."""
    waiting: list[ast.AST] = [tree]
    while waiting:
        node = waiting.pop()
        yield node
        if not isinstance(node, ast.FunctionDef | ast.AsyncFunctionDef | ast.Lambda):
            waiting += ast.iter_child_nodes(node)


def part_of(module: str) -> str | None:
    """The part that a module of ours belongs to."""
    fitting = [part for part in MAY_IMPORT if module == part or module.startswith(part + ".")]
    return max(fitting, key=len, default=None)


def module_of(path: Path) -> str:
    return ".".join(path.relative_to(ROOT).with_suffix("").parts).removesuffix(".__init__")


@pytest.mark.parametrize("folder", OURS)
def test_imports_follow_the_arrows(folder: str) -> None:
    """trialrunner to core and drivers, mock_rig to drivers, and nothing else."""
    for path in sources(folder):
        here = part_of(module_of(path))
        assert here is not None
        for name in imports(path):
            there = part_of(name)
            allowed = there is None or there in MAY_IMPORT[here]
            assert allowed, f"{path.relative_to(ROOT)} must not import {name}"


def test_the_core_uses_only_numerics() -> None:
    """No clock, file, socket, log, thread or randomness; annotated types in bounds.py alone."""
    for path in sources("trialrunner/core"):
        extra = {"annotated_types"} if path.name == "bounds.py" else set()
        for name in imports(path):
            root = name.partition(".")[0]
            allowed = root in CORE_LIBRARIES | CORE_STANDARD | extra | {"trialrunner"}
            assert allowed, f"{path.relative_to(ROOT)} must not import {name}"
            assert not name.startswith("numpy.random"), f"{path.relative_to(ROOT)}: {name}"


BANNED_IN_CORE = {"open", "print", "input", "eval", "exec", "__import__"}


def test_the_core_opens_and_prints_nothing() -> None:
    """Also not through a builtin, or numpy's own files and random numbers."""
    numpy_files = {"load", "save", "savez", "loadtxt", "savetxt", "fromfile", "tofile", "memmap"}
    for path in sources("trialrunner/core"):
        for node in ast.walk(ast.parse(path.read_text(encoding="utf-8"))):
            where = f"{path.relative_to(ROOT)}:{getattr(node, 'lineno', 0)}"
            if isinstance(node, ast.Call) and isinstance(node.func, ast.Name):
                assert node.func.id not in BANNED_IN_CORE, where
            if isinstance(node, ast.Attribute) and getattr(node.value, "id", "") == "np":
                assert node.attr not in numpy_files | {"random"}, where


@pytest.mark.parametrize("folder", OURS)
def test_slow_imports_wait_until_they_are_needed(folder: str) -> None:
    """A module that is imported for its names must not pay for filters it never designs."""
    for path in sources(folder):
        slow = LAZY & set(imports(path, top_level=True))
        assert not slow, f"{path.relative_to(ROOT)} imports {slow} at module level"


@pytest.mark.parametrize("name", PURE_DRIVERS)
def test_the_pure_drivers_know_no_link(name: str) -> None:
    """Bytes in, messages out: a codec that can be tested without a port."""
    path = ROOT / "drivers" / f"{name}.py"
    for module in imports(path):
        root, _, rest = module.partition(".")
        assert root not in LINK_LIBRARIES, f"{path.name} must not import {module}"
        if root == "drivers" and rest:
            assert rest.partition(".")[0] in PURE_DRIVERS, f"{path.name} must not import {module}"


@pytest.mark.parametrize("file", CLICK_ONLY)
def test_the_command_line_loads_only_click(file: str) -> None:
    """Commands are imported when they are run."""
    for name in imports(ROOT / file, top_level=True):
        root = name.partition(".")[0]
        if root == "trialrunner":
            assert any(name == one or name.startswith(one + ".") for one in CHEAP), (
                f"{file}: {name}"
            )
        else:
            assert root in {"click", *_STANDARD}, f"{file} imports {name} for --help"


_STANDARD = {
    "collections", "datetime", "enum", "importlib", "os", "pathlib", "sys", "tempfile", "traceback",
}  # fmt: skip


def test_the_walk_itself_sees_what_it_should(tmp_path: Path) -> None:
    """A test that cannot fail proves nothing: here is a file with every kind of import."""
    file = tmp_path / "sample.py"
    file.write_text(
        "import os.path\nfrom a.b import c\n"
        "def f():\n    import scipy.signal\n"
        "class K:\n    import time\n"
        "if x:\n    from scipy import signal\n"
    )
    assert {"os.path", "a.b", "a.b.c", "scipy.signal", "time"} <= set(imports(file))
    assert "scipy.signal" in set(imports(file, top_level=True))
    file.write_text("def f():\n    from scipy import signal\n")
    assert "scipy.signal" not in set(imports(file, top_level=True))
    assert part_of("trialrunner.core.laws.pd") == "trialrunner.core"
    assert part_of("trialrunner.session") == "trialrunner"
    assert part_of("trialrunners") is None
