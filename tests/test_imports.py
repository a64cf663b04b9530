"""Imports run one way, and starting up costs little."""

from __future__ import annotations

import ast
import subprocess
import sys
from collections.abc import Iterator
from pathlib import Path

import pytest

import phaseid

PACKAGE = Path(phaseid.__file__).parent
BELOW: dict[str, set[str]] = {
    "errors": set(),
    "resources": set(),
    "units": set(),
    "crystal": {"errors", "resources", "units"},
    "probes": {"crystal", "errors", "resources", "units"},
    "library": {"crystal", "errors", "resources", "units"},
    "rings": {"probes", "crystal", "errors", "resources", "units"},
}
BELOW["matching"] = {*BELOW["library"], *BELOW["rings"], "library", "rings"}
BELOW["reports"] = {*BELOW["matching"], "matching"}
BELOW["cli"] = {*BELOW["reports"], "reports"}
# the front door and the ways in may name everything, lazily
TOP = ("__init__", "__main__", "notebook", "notebook_input")

HEAVY = {
    "pymatgen",
    "scipy",
    "spglib",
    "sqlite_utils",
    "rich",
    "matplotlib",
    "pandas",
    "NCrystal",
    "reportlab",
}
LIGHT_ROOMS = ("cli", "errors", "resources", *TOP)
MODULES = sorted(PACKAGE.rglob("*.py"))


def _name(path: Path) -> str:
    return ".".join(path.relative_to(PACKAGE).with_suffix("").parts)


def _imports(tree: ast.AST, *, at_start_only: bool = False) -> Iterator[tuple[int, str]]:
    """Yield (line, dotted module) of every import, or of those that run when the file is loaded."""
    for node in ast.iter_child_nodes(tree):
        if at_start_only and isinstance(node, ast.FunctionDef | ast.AsyncFunctionDef | ast.Lambda):
            continue
        if at_start_only and isinstance(node, ast.If) and "TYPE_CHECKING" in ast.dump(node.test):
            continue
        if isinstance(node, ast.Import):
            for alias in node.names:
                yield node.lineno, alias.name
        elif isinstance(node, ast.ImportFrom):
            assert node.level == 0, f"line {node.lineno}: write the import in full"
            for alias in node.names:
                yield node.lineno, f"{node.module}.{alias.name}"
        yield from _imports(node, at_start_only=at_start_only)


def _upward(name: str, source: str) -> list[str]:
    """Return the imports in `source` that a module called `name` may not make."""
    room = name.split(".")[0]
    tree = ast.parse(source)
    found = []
    for line, target in _imports(tree):
        if not target.startswith("phaseid.") or target == "phaseid.__version__":
            continue
        other = target.split(".")[1]
        if other != room and other not in BELOW[room]:
            found.append(f"{name} line {line}: {target}")
    return found


@pytest.mark.parametrize("path", MODULES, ids=_name)
def test_imports_point_downward(path: Path) -> None:
    if _name(path) not in TOP:
        assert _upward(_name(path), path.read_text(encoding="utf-8")) == []


@pytest.mark.parametrize("path", MODULES, ids=_name)
def test_heavy_libraries_load_only_inside_functions(path: Path) -> None:
    tree = ast.parse(path.read_text(encoding="utf-8"))
    loaded = {target.split(".")[0] for _, target in _imports(tree, at_start_only=True)}
    barred = HEAVY | ({"numpy", "gemmi"} if _name(path).split(".")[0] in LIGHT_ROOMS else set())
    assert not loaded & barred


@pytest.mark.parametrize(
    ("name", "source"),
    [
        ("crystal.cif", "from phaseid.library import Library"),
        ("rings.files", "def f():\n    import phaseid.matching.identify"),
        ("crystal.lines", "from phaseid.probes import Probe"),
        ("library.library", "from phaseid.rings import RingList"),
        ("errors", "from phaseid.units import d_from_g"),
    ],
)
def test_an_upward_import_is_refused(name: str, source: str) -> None:
    assert len(_upward(name, source)) == 1


def test_a_heavy_import_at_module_level_is_seen() -> None:
    tree = ast.parse("import scipy.optimize\ndef f():\n    import pandas")
    assert [target for _, target in _imports(tree, at_start_only=True)] == ["scipy.optimize"]


@pytest.mark.parametrize(
    ("code", "barred"),
    [
        ("import phaseid", ("numpy", "gemmi", "typer", "sqlite3")),
        (
            "import phaseid.cli.main",
            ("numpy", "gemmi", "pymatgen", "rich", "scipy", "sqlite_utils"),
        ),
    ],
)
def test_start_up_loads_nothing_heavy(code: str, barred: tuple[str, ...]) -> None:
    script = f"import sys\n{code}\nprint([n for n in {barred!r} if n in sys.modules])"
    done = subprocess.run(
        [sys.executable, "-c", script], capture_output=True, text=True, check=True
    )
    assert done.stdout.strip() == "[]"
