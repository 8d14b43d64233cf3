"""The layer order of the package, and the imports that `strainkit --help` may not cause."""

from __future__ import annotations

import ast
import subprocess
import sys
from pathlib import Path

import pytest

import strainkit

PACKAGE = Path(strainkit.__file__).parent
#: imports run from a later group to an earlier one; members of one group do not import each other
LAYERS = (
    ("units", "errors"),
    ("findings", "shipped"),
    ("tensors",),
    ("crystal",),
    ("design",),
    ("run",),
    ("dynamics",),
    ("prepare", "evaluate", "collect"),
    ("fit",),
    ("derive",),
    ("present",),
    ("cli",),
)
LEVEL = {name: level for level, group in enumerate(LAYERS) for name in group}


def _imports(path: Path) -> list[str]:
    tree = ast.parse(path.read_text())
    names: list[str] = []
    for node in ast.walk(tree):
        if isinstance(node, ast.ImportFrom):
            assert node.level == 0, f"{path}: relative import"
            names.append(node.module or "")
        elif isinstance(node, ast.Import):
            names += [alias.name for alias in node.names]
    return [name.split(".")[1] for name in names if name.startswith("strainkit.")]


def _modules() -> list[Path]:
    return [path for path in sorted(PACKAGE.rglob("*.py")) if path != PACKAGE / "__init__.py"]


@pytest.mark.parametrize("path", _modules(), ids=lambda p: str(p.relative_to(PACKAGE)))
def test_imports_run_downwards(path):
    layer = path.relative_to(PACKAGE).parts[0].removesuffix(".py")
    assert layer in LEVEL, f"{layer} has no place in the layer order"
    for imported in _imports(path):
        allowed = imported == layer or LEVEL[imported] < LEVEL[layer]
        assert allowed, f"{path.name} in {layer} imports {imported}"


def test_every_layer_is_a_module_or_a_folder_of_the_package():
    present = {p.stem for p in PACKAGE.iterdir() if p.suffix == ".py" or (p / "__init__.py").exists()} - {"__init__"}
    assert present <= set(LEVEL)


@pytest.mark.parametrize("path", _modules(), ids=lambda p: str(p.relative_to(PACKAGE)))
def test_modules_are_short(path):
    lines = len(path.read_text().splitlines())
    assert lines <= 300, f"{lines} lines: is it still one thing?"


@pytest.mark.parametrize("arguments", [["--help"], ["--version"], ["fit", "--help"], ["prepare", "--help"]])
def test_help_imports_nothing_heavy(arguments):
    code = (
        "import sys\n"
        "from strainkit.cli.main import app\n"
        "try:\n"
        f"    app({arguments!r})\n"
        "except SystemExit:\n"
        "    pass\n"
        "heavy = ['ase', 'ase.io', 'numpy', 'scipy', 'matplotlib', 'phonopy', 'spglib', 'gemmi', 'rich', 'jinja2']\n"
        "print('HEAVY', [name for name in heavy if name in sys.modules])\n"
    )
    out = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True).stdout
    assert "HEAVY []" in out
