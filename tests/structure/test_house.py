"""The house itself: import direction, late imports, data headers, top level, wording."""

from __future__ import annotations

import ast
import subprocess
import sys
from pathlib import Path

import pytest

import dosekit
from dosekit.basis.tables import REQUIRED_HEADER, parse_table

ROOT = Path(__file__).resolve().parents[2]
PACKAGE = ROOT / "dosekit"
ROOMS = [
    "basis",
    "beams",
    "capture",
    "depths",
    "effects",
    "grids",
    "maps",
    "modulation",
    "outputs",
    "studies",
]
SHARED = {"errors", "caution", "__version__"}
HEAVY = ["numba", "xarray", "pydicom", "matplotlib", "scipy", "h5netcdf", "pandas", "pydantic", "jinja2"]


def _modules():
    return sorted(path for path in PACKAGE.rglob("*.py") if path.parent != PACKAGE)


def _imports(tree):
    for node in ast.walk(tree):
        if isinstance(node, ast.Import):
            for alias in node.names:
                yield node.lineno, alias.name.split(".")
        elif isinstance(node, ast.ImportFrom):
            assert node.level == 0, "relative imports hide the direction"
            base = (node.module or "").split(".")
            if base == ["dosekit"]:
                for alias in node.names:
                    yield node.lineno, [*base, alias.name]
            else:
                yield node.lineno, base


def test_there_are_modules_to_walk():
    assert len(_modules()) > 20


@pytest.mark.parametrize("path", _modules(), ids=lambda path: str(path.relative_to(PACKAGE)))
def test_a_room_imports_only_from_rooms_above_it(path):
    room = path.relative_to(PACKAGE).parts[0]
    assert room in ROOMS
    for line, parts in _imports(ast.parse(path.read_text(encoding="utf-8"))):
        if parts[0] != "dosekit" or len(parts) < 2 or parts[1] in SHARED:
            continue
        assert parts[1] in ROOMS, f"{path.name}:{line} imports {'.'.join(parts)}"
        assert ROOMS.index(parts[1]) <= ROOMS.index(room), f"{path.name}:{line}: {room} imports from {parts[1]}"


@pytest.mark.parametrize(
    "code", ["import dosekit", "import dosekit.__main__", "import dosekit; dosekit.material('water')"]
)
def test_nothing_heavy_loads_early(code):
    probe = f"{code}\nimport sys\nprint([m for m in {HEAVY!r} if m in sys.modules])"
    done = subprocess.run([sys.executable, "-c", probe], capture_output=True, text=True, check=True)
    assert done.stdout.strip() == "[]"


def test_public_names_are_pinned():
    fixed = {"material", "Layers", "Beam", "depth_curve", "phantom", "read_ct", "fold", "run"}
    assert fixed <= set(dosekit.__all__)
    for name in dosekit.__all__:
        assert getattr(dosekit, name) is not None


@pytest.mark.parametrize("path", sorted(PACKAGE.glob("*/data/*.csv")), ids=lambda path: path.stem)
def test_every_data_table_says_where_it_comes_from(path):
    table = parse_table(path.read_text(encoding="utf-8"), name=path.name)
    assert set(REQUIRED_HEADER) <= set(table.header)
    assert len(table) > 0


def test_top_level_is_tidy():
    done = subprocess.run(["git", "ls-files"], cwd=ROOT, capture_output=True, text=True, check=False)
    if done.returncode:
        pytest.skip("not a git checkout")
    top = {line.split("/")[0] for line in done.stdout.splitlines()}
    allowed = {"README.md", "DEVELOPERS.md", "pyproject.toml", "dosekit", "phantoms", "tests", "docs"}
    assert {name for name in top if not name.startswith(".")} <= allowed


@pytest.mark.parametrize("path", _modules(), ids=lambda path: str(path.relative_to(PACKAGE)))
def test_every_module_says_what_it_is_for(path):
    tree = ast.parse(path.read_text(encoding="utf-8"))
    doc = ast.get_docstring(tree)
    assert doc
    assert len(doc) > 20
