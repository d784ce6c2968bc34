"""The house keeps its floors: imports only go down, third-party packages stay on theirs, files stay small."""

import ast
import subprocess
import sys
from pathlib import Path

import pytest

ROOT = Path(__file__).parents[1]
FLOORS = ("calibration", "bridgeio", "tui")
#: Floor -> what it may import besides the standard library and the floors below.
ALLOWED = {
    "calibration": {"numpy"},
    "bridgeio": {"numpy", "serial", "pydantic"},
    "tui": {"numpy", "textual", "rich"},
}
#: Module -> what it alone may import, inside functions only.
INSIDE_ONLY = {
    "calibration/fit_warmth.py": {"scipy"},
    "calibration/laws/log.py": {"scipy"},
    "calibration/laws/table.py": {"scipy"},
    "bridgeio/bridge_pictures.py": {"matplotlib"},
}
MODULES = [path for floor in FLOORS for path in sorted((ROOT / floor).rglob("*.py"))]


def imported(tree):
    """Top-level package names that a module imports (its own package's relative imports left out)."""
    for node in ast.walk(tree):
        if isinstance(node, ast.Import):
            yield from (alias.name.split(".")[0] for alias in node.names)
        elif isinstance(node, ast.ImportFrom) and node.level == 0 and node.module:
            yield node.module.split(".")[0]


@pytest.mark.parametrize("path", MODULES, ids=lambda path: str(path.relative_to(ROOT)))
def test_module_imports_only_downwards(path):
    """A module imports the standard library, its floor's packages and floors below, nothing else."""
    floor = path.relative_to(ROOT).parts[0]
    below = set(FLOORS[: FLOORS.index(floor) + 1])
    allowed = ALLOWED[floor] | below | set(sys.stdlib_module_names)
    tree = ast.parse(path.read_text(encoding="utf-8"))
    inside = INSIDE_ONLY.get(str(path.relative_to(ROOT)), set())
    assert set(imported(tree)) <= allowed | inside
    top = ast.Module([node for node in tree.body if isinstance(node, ast.Import | ast.ImportFrom)], [])
    assert not set(imported(top)) & inside, "only inside functions: it costs too much to import"


@pytest.mark.parametrize("path", MODULES, ids=lambda path: str(path.relative_to(ROOT)))
def test_module_is_introduced_and_small(path):
    """A module says what it is for, and has at most 400 lines."""
    text = path.read_text(encoding="utf-8")
    assert ast.get_docstring(ast.parse(text))
    assert len(text.splitlines()) <= 400


def test_headless_reading_never_loads_the_screen_library():
    """What `stream` imports loads neither textual nor scipy nor matplotlib."""
    code = (
        "import sys, tui.commands.stream, tui.commands.reading, bridgeio.desk, bridgeio.bridge_file, bridgeio.rows;"
        "import bridgeio.ports, bridgeio.receiver;"
        "print(sorted({'textual', 'rich', 'scipy', 'matplotlib'} & set(sys.modules)))"
    )
    done = subprocess.run(
        [sys.executable, "-c", code], cwd=ROOT, capture_output=True, text=True, timeout=60, check=True
    )
    assert done.stdout.strip() == "[]"


def test_nothing_unsafe_is_used():
    """No pickle, eval, exec or yaml anywhere in the program: files are data."""
    for path in MODULES:
        tree = ast.parse(path.read_text(encoding="utf-8"))
        assert not {"pickle", "marshal", "shelve", "yaml"} & set(imported(tree)), path
        calls = {
            node.func.id for node in ast.walk(tree) if isinstance(node, ast.Call) and isinstance(node.func, ast.Name)
        }
        assert not {"eval", "exec"} & calls, path
