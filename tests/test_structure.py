"""Layers only look down, imports stay light, and nothing of the trade hides in code."""

from __future__ import annotations

import ast
import subprocess
import sys
from pathlib import Path

import pytest

ROOT = Path(__file__).resolve().parent.parent
HEAVY = ("geopandas", "rasterio", "matplotlib", "folium", "pyogrio", "scipy", "shapely", "openpyxl", "dask")

# A room may import from rooms of a lower or the same number.
ROOMS = {
    "landcarbon.errors": 0,
    "landcarbon.constants": 0,
    "landcarbon.columns": 0,
    "landcarbon.findings": 1,
    "landcarbon.factors": 1,
    "landcarbon.inputs": 1,
    "landcarbon.inventory": 2,
    "landcarbon.raster": 2,
    "landcarbon.read": 3,
    "landcarbon.check": 4,
    "landcarbon.pools": 5,
    "landcarbon.plots": 6,
    "landcarbon.pool_options": 7,
    "landcarbon.sample_pools": 8,
    "landcarbon.estimate": 7,
    "landcarbon.change": 8,
    "landcarbon.marks": 8,
    "landcarbon.publish": 9,
    "landcarbon.statements": 10,
    "landcarbon.trace": 9,
    "landcarbon.trace_change": 9,
    "landcarbon.reckon_notes": 10,
    "landcarbon.reckon_plan": 10,
    "landcarbon.reckon": 11,
    "landcarbon.pipeline": 12,
    "landcarbon.assemble": 13,
    "landcarbon.api": 14,
    "landcarbon.demo": 14,
    "landcarbon.cli": 15,
}


def modules(package):
    return sorted((ROOT / package).rglob("*.py"))


def name_of(path):
    parts = path.relative_to(ROOT).with_suffix("").parts
    return ".".join(parts[:-1] if parts[-1] == "__init__" else parts)


def imported(path, *, lazy=True):
    """Module names a file imports; with ``lazy`` false only those of its top level."""
    tree = ast.parse(path.read_text(encoding="utf-8"))
    nodes = ast.walk(tree) if lazy else top_level(tree)
    for node in nodes:
        if isinstance(node, ast.Import):
            yield from (alias.name for alias in node.names)
        elif isinstance(node, ast.ImportFrom) and node.module and node.level == 0:
            yield node.module


def top_level(tree):
    for node in tree.body:
        guard = isinstance(node, ast.If) and "TYPE_CHECKING" in ast.dump(node.test)
        if not guard:
            yield node


def room_of(module):
    parts = module.split(".")
    return ".".join(parts[:2]) if len(parts) > 1 else module


def test_allometry_never_imports_landcarbon():
    found = [(name_of(p), m) for p in modules("allometry") for m in imported(p) if m.split(".")[0] == "landcarbon"]
    assert found == []


def test_no_edge_points_back():
    backward = []
    for path in modules("landcarbon"):
        here = room_of(name_of(path))
        if here == "landcarbon":
            continue
        for module in imported(path, lazy=False):
            there = room_of(module)
            if there.startswith("landcarbon.") and ROOMS[there] > ROOMS[here]:
                backward.append((name_of(path), module))
    assert backward == []


def test_every_room_is_listed():
    rooms = {room_of(name_of(path)) for path in modules("landcarbon")} - {"landcarbon"}
    assert rooms - {"landcarbon.demo_parcels"} == set(ROOMS)


def test_the_root_is_not_imported_from_inside():
    """Cycles through the package root are kept out; the version is the one exception, for the command line."""
    found = []
    for path in modules("landcarbon"):
        tree = ast.parse(path.read_text(encoding="utf-8"))
        for node in ast.walk(tree):
            if isinstance(node, ast.ImportFrom) and node.module == "landcarbon":
                found += [(name_of(path), alias.name) for alias in node.names if alias.name != "__version__"]
            if isinstance(node, ast.Import):
                found += [(name_of(path), alias.name) for alias in node.names if alias.name == "landcarbon"]
    assert found == []


@pytest.mark.parametrize(
    "code",
    [
        "import landcarbon",
        "import landcarbon.cli",
        "import allometry",
        "import sys; sys.argv = ['landcarbon', '--help']; import landcarbon.cli\n"
        "try:\n    landcarbon.cli.main()\nexcept SystemExit: pass",
    ],
)
def test_imports_stay_light(code, tmp_path):
    script = f"{code}\nimport sys\nprint('loaded:', [m for m in {HEAVY!r} if m in sys.modules])"
    done = subprocess.run([sys.executable, "-c", script], capture_output=True, text=True, cwd=ROOT, check=True)
    assert done.stdout.strip().endswith("loaded: []")


@pytest.mark.parametrize("package", ["landcarbon", "allometry"])
def test_public_surface_is_stated(package):
    lacking = []
    for path in modules(package):
        text = path.read_text(encoding="utf-8")
        has_code = any(isinstance(node, ast.FunctionDef | ast.ClassDef) for node in ast.parse(text).body)
        if has_code and not path.name.startswith("_") and "__all__" not in text:
            lacking.append(name_of(path))
    assert lacking == []


def test_sizes_stay_within_the_limits():
    too_long = [name_of(p) for package in ("landcarbon", "allometry") for p in modules(package)
                if p.read_text(encoding="utf-8").count("\n") > 500]  # fmt: skip
    assert too_long == []


def test_no_machine_or_registry_is_named():
    words = ("pypi" + ".org", "python" + "hosted", "registry.npm" + "js", "/wo" + "rk/", "/ro" + "ot/")
    places = [
        p
        for p in ROOT.rglob("*")
        if p.suffix in {".py", ".md", ".toml", ".csv", ".html", ".ipynb", ".js", ".css", ".j2"}
    ]
    skipped = {".git", ".venv", "build", "dist", "landcarbon-demo", "results"}
    found = [
        (str(path.relative_to(ROOT)), word)
        for path in places
        if not skipped & set(path.relative_to(ROOT).parts)
        for word in words
        if word in path.read_text(encoding="utf-8", errors="ignore")
    ]
    assert found == []
