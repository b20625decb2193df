"""Rules of the house that no other tool checks: layers, sizes, names and what lies at the top level."""

from __future__ import annotations

import ast
import subprocess
from collections.abc import Iterator
from fnmatch import fnmatch
from pathlib import Path
from typing import Any

import pytest

ROOT = Path(__file__).parent.parent
PACKAGE = ROOT / "crossing"
MODULES = sorted(PACKAGE.rglob("*.py"))
TREES = {path: ast.parse(path.read_text(encoding="utf-8"), filename=str(path)) for path in MODULES}

# Lowest first: a layer may import those before it and itself.
LAYERS = (
    *("errors", "progress", "outputs", "event", "optics", "stars", "shooting", "photometry"),
    *("population", "inference", "campaign", "report", "cli"),
)
TOP_LEVEL = {"README.md", "DEVELOPERS.md", "pyproject.toml", "LICENSE", "crossing", "tests", "demo_lightcurves"}
MOST_LINES = 500
MOST_FUNCTION_LINES = 80

each_module = pytest.mark.parametrize("path", MODULES, ids=lambda path: str(path.relative_to(ROOT)))


def layer_of(module: str) -> str | None:
    """Layer of a dotted name; None for the package's own front and for foreign modules."""
    parts = module.split(".")
    return parts[1] if parts[0] == "crossing" and len(parts) > 1 and parts[1] != "__main__" else None


def own_name(path: Path) -> str:
    return ".".join(path.relative_to(ROOT).with_suffix("").parts).removesuffix(".__init__")


def imports(tree: ast.AST) -> Iterator[tuple[int, str]]:
    """Line and dotted name of everything imported anywhere, also inside functions and for type checking only."""
    for node in ast.walk(tree):
        if isinstance(node, ast.Import):
            yield from ((node.lineno, alias.name) for alias in node.names)
        elif isinstance(node, ast.ImportFrom):
            stem = "." * node.level + (node.module or "")
            yield from ((node.lineno, f"{stem}.{alias.name}") for alias in node.names)


def upward(name: str, tree: ast.AST) -> list[str]:
    """Imports of the module `name` that its layer does not allow."""
    layer = layer_of(name)
    reach = len(LAYERS) if layer is None else LAYERS.index(layer)
    wrong = []
    for line, target in imports(tree):
        if target.startswith("."):
            wrong.append(f"line {line}: relative import {target}")
        elif target.split(".")[0] != "crossing":
            continue
        elif (other := layer_of(target)) not in LAYERS:
            wrong.append(f"line {line}: {target} is the package's front, not a layer")
        elif LAYERS.index(other) > reach:
            wrong.append(f"line {line}: {target} lies above {layer}")
    return wrong


def test_every_module_belongs_to_a_layer() -> None:
    assert len(MODULES) > 50
    strangers = {own_name(path) for path in MODULES if layer_of(own_name(path)) not in LAYERS}
    assert strangers == {"crossing", "crossing.__main__"}


@each_module
def test_imports_run_downward(path: Path) -> None:
    assert upward(own_name(path), TREES[path]) == []


@pytest.mark.parametrize(
    ("name", "code", "wrong"),
    [
        ("crossing.optics.fold", "from crossing.event import Value\nimport numpy", 0),
        ("crossing.optics.fold", "from crossing.optics.local import LocalLens", 0),
        ("crossing.optics.fold", "from crossing.stars.photosphere import ab_magnitude", 1),
        ("crossing.optics.fold", "def f():\n    import crossing.cli.main", 1),
        ("crossing.event.reader", "if TYPE_CHECKING:\n    from crossing.optics.local import LocalLens", 1),
        ("crossing.event.reader", "from crossing import outputs, optics", 1),
        ("crossing.event.reader", "from crossing import read_lightcurve", 1),
        ("crossing.event.reader", "from .records import Event", 1),
        ("crossing.errors", "from crossing.outputs import OutputFolder", 1),
    ],
)
def test_the_import_check_itself(name: str, code: str, wrong: int) -> None:
    assert len(upward(name, ast.parse(code))) == wrong


def test_modules_named_in_strings_exist() -> None:
    """The front and the command line load their modules late, by name."""
    names = {own_name(path) for path in MODULES}
    for path in (PACKAGE / "__init__.py", PACKAGE / "cli" / "main.py"):
        strings = [node.value for node in ast.walk(TREES[path]) if isinstance(node, ast.Constant)]
        late = {text for text in strings if isinstance(text, str) and text.startswith("crossing.") and " " not in text}
        assert late
        assert late <= names


@each_module
def test_module_size(path: Path) -> None:
    assert len(path.read_text(encoding="utf-8").splitlines()) <= MOST_LINES


@each_module
def test_function_size(path: Path) -> None:
    long = []
    for node in ast.walk(TREES[path]):
        if not isinstance(node, ast.FunctionDef | ast.AsyncFunctionDef):
            continue
        lines = (node.end_lineno or node.lineno) - node.lineno + 1
        if ast.get_docstring(node) is not None:
            first = node.body[0]
            lines -= (first.end_lineno or first.lineno) - first.lineno + 1
        if lines > MOST_FUNCTION_LINES:
            long.append(f"{node.name}: {lines} lines")
    assert long == []


def top_names(body: list[ast.stmt]) -> set[str]:
    """Names that the statements of a module define."""
    names: set[str] = set()
    for node in body:
        if isinstance(node, ast.FunctionDef | ast.ClassDef):
            names.add(node.name)
        elif isinstance(node, ast.ImportFrom | ast.Import):
            names |= {alias.asname or alias.name for alias in node.names}
        else:
            inner = ast.walk(node)
            names |= {item.id for item in inner if isinstance(item, ast.Name) and isinstance(item.ctx, ast.Store)}
    return names


def constant(body: list[ast.stmt], name: str) -> Any:
    """Value of the literal that is assigned to `name`."""
    for node in body:
        if isinstance(node, ast.Assign) and ast.unparse(node.targets[0]) == name:
            return ast.literal_eval(node.value)
    raise AssertionError(f"{name} is not defined")


@each_module
def test_every_module_says_what_is_public(path: Path) -> None:
    body = TREES[path].body
    assert ast.get_docstring(TREES[path]) is not None
    if len(body) == 1 or path.name == "__main__.py":  # nothing in it to be imported
        return
    defined = top_names(body)
    if path == PACKAGE / "__init__.py":  # its names arrive on first use
        defined |= set(constant(body, "_HOME"))
    assert set(constant(body, "__all__")) <= defined


@each_module
def test_nothing_that_a_library_should_not_do(path: Path) -> None:
    layer, wrong = layer_of(own_name(path)), []
    for node in ast.walk(TREES[path]):
        if isinstance(node, ast.Assert):  # vanishes under python -O
            wrong.append(f"line {node.lineno}: assert")
        called = node.func if isinstance(node, ast.Call) else None
        if isinstance(called, ast.Name) and called.id == "print" and layer != "cli":
            wrong.append(f"line {node.lineno}: print")
    for line, target in imports(TREES[path]):
        if "pyplot" in target or "pylab" in target:  # holds figures in global state
            wrong.append(f"line {line}: {target}")
        if target.split(".")[0] == "numba" and layer != "shooting":
            wrong.append(f"line {line}: compiled kernels outside shooting")
    assert wrong == []


def top_level() -> set[str]:
    """Names at the top level that are tracked, or would be by `git add`; without git, all but ignored ones."""
    command = ["git", "ls-files", "--cached", "--others", "--exclude-standard"]
    try:
        listed = subprocess.run(command, cwd=ROOT, capture_output=True, text=True, check=True).stdout.split("\n")
    except (OSError, subprocess.CalledProcessError):
        listed = []
    names = {line.strip('"').split("/")[0] for line in listed if line}
    if not names:
        ignore = ROOT / ".gitignore"
        patterns = [line.strip("/") for line in ignore.read_text().split()] if ignore.exists() else []
        found = {entry.name for entry in ROOT.iterdir()}
        names = {name for name in found if not any(fnmatch(name, pattern) for pattern in patterns)}
    return {name for name in names if not name.startswith(".")}


def test_top_level_listing() -> None:
    assert top_level() == TOP_LEVEL
