"""Imports run downwards only, kernels know nothing of ours, the core needs no extra."""

from __future__ import annotations

import ast
import subprocess
import sys
from pathlib import Path

import pytest

PACKAGE = Path(__file__).parent.parent / "streambasis"

# a module may import from its own layer and from those below it
LAYERS = [
    {"kernels"},
    {"_version", "errors", "state", "samples", "times", "inner", "decisions", "audit", "memory",
     "projecting", "growth", "window_arrays", "window_clock", "window",
     "basis_settings", "inspection", "basis", "ranks", "core_svd", "measuring", "weighing",
     "turning", "one_pass", "folding", "gaps",
     "principal_settings", "intake", "principal", "compare"},
    {"files", "seal", "layout", "snapshot"},
    {"feeds"},
    {"monitor"},
    {"warming", "watch", "report", "fleet"},
    {"commands", "cli", "__main__"},
]  # fmt: skip
CORE_THIRD_PARTY = {"numpy", "numba", "pyarrow"}
EXTRAS = {
    "feeds": {"paho"},
    "watch": {"rich", "prometheus_client", "paho"},
    "report": {"matplotlib"},
    "fleet": {"pyspark", "pandas"},
    "commands": {"click"},
}
FILES = sorted(PACKAGE.rglob("*.py"))


def layer_of(name: str) -> int:
    """Return the position of a top-level name of the package in LAYERS."""
    for position, names in enumerate(LAYERS):
        if name in names:
            return position
    raise AssertionError(f"{name} is in no layer: add it to LAYERS in {__file__}")


def imports(path: Path) -> set[str]:
    """Return the absolute dotted names that a file imports, outside ``if TYPE_CHECKING``."""
    tree = ast.parse(path.read_text())
    found: set[str] = set()
    skipped: set[ast.AST] = set()
    for node in ast.walk(tree):
        if isinstance(node, ast.If) and getattr(node.test, "id", "") == "TYPE_CHECKING":
            skipped.update(ast.walk(node))
        if node in skipped:
            continue
        if isinstance(node, ast.Import):
            found.update(alias.name for alias in node.names)
        elif isinstance(node, ast.ImportFrom):
            assert node.level == 0, f"{path}: relative import"
            found.update(f"{node.module}.{alias.name}" for alias in node.names)
    return found


def own_name(path: Path) -> str:
    """Return the top-level name inside the package that a file belongs to."""
    return path.relative_to(PACKAGE).parts[0].removesuffix(".py")


@pytest.mark.parametrize("path", FILES, ids=lambda p: str(p.relative_to(PACKAGE)))
def test_imports_run_downwards(path: Path) -> None:
    """No module imports from a layer above its own."""
    me = own_name(path)
    if me == "__init__":
        return
    for name in imports(path):
        parts = name.split(".")
        if parts[0] == "streambasis" and len(parts) > 1 and parts[1] != "__version__":
            assert layer_of(parts[1]) <= layer_of(me), f"{path} imports {name} from above"
            if me == "kernels":
                assert parts[1] == "kernels", f"{path}: kernels know no class of ours ({name})"


@pytest.mark.parametrize("path", FILES, ids=lambda p: str(p.relative_to(PACKAGE)))
def test_third_party_imports_belong_to_their_extra(path: Path) -> None:
    """The core imports numpy, numba and pyarrow; an extra is imported only in its own folder."""
    me = own_name(path)
    allowed = {"numpy", "numba"} if me == "kernels" else CORE_THIRD_PARTY | EXTRAS.get(me, set())
    for name in imports(path):
        root = name.split(".")[0]
        if root != "streambasis" and root not in sys.stdlib_module_names:
            assert root in allowed, f"{path} imports {root}"


def test_import_loads_no_extra_and_no_pyarrow() -> None:
    """Importing the package and its core objects loads neither pyarrow nor any extra."""
    extras = sorted(set().union(*EXTRAS.values()))
    code = (
        "import sys, streambasis; streambasis.StreamBasis(3).push([1.0, 2.0, 3.0]); "
        f"print([m for m in {['pyarrow', *extras]!r} if m in sys.modules])"
    )
    shown = subprocess.run(
        [sys.executable, "-c", code], capture_output=True, text=True, check=True, cwd=PACKAGE.parent
    )
    assert shown.stdout.strip() == "[]"
