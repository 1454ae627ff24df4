"""The cut of the package: imports point up one list, heavy libraries live in one place, all is documented."""

import ast
import importlib
import inspect
import subprocess
import sys
import typing
from pathlib import Path

import pytest

import shelfmap

PACKAGE = Path(shelfmap.__file__).parent

#: Modules from the ground up; a module may import those before it. `_kernels` stands for all compiled loops.
ORDER = [
    "errors", "workers", "constants", "words", "settingvalues", "settings", "waves", "geodesy", "_kernels",
    "vertical", "localfiles", "rasterfile", "lattice", "sheets", "grid", "inspection", "rasters", "synthetic", "demo",
    "basins", "chains", "closing", "coast", "transects", "profiles", "shelfbreak", "deepsea", "modes", "response",
    "index", "gauges", "dissection", "waters", "mesh", "longwave", "freemodes", "edgetide", "field", "assess",
    "columns", "antimeridian", "replacement", "checkpoint", "vectors", "layers", "geopackage", "tables", "joining",
    "stations", "inputs", "gaugefile", "region", "fieldlayers", "fieldmaps", "comparison", "figures", "comparing",
    "provenance", "sections", "laying", "pipeline", "fieldrun", "cli", "__main__",
]  # fmt: skip

#: Libraries that only these modules import.
ONLY_HERE = {
    "pyproj": {"geodesy"},
    "numba": {"_kernels"},
    "rasterio": {"rasterfile", "rasters"},
    "contourpy": {"closing"},
    "geopandas": {"vectors"},
    "pyogrio": {"geopackage", "vectors"},
    "pyarrow": {"layers", "geopackage"},
    "sqlite3": {"geopackage", "replacement", "vectors"},
    "pydantic": {"settings", "settingvalues"},
    "tomllib": {"settings"},
    "click": {"cli"},
    "matplotlib": {"figures"},
    "concurrent": {"workers", "pipeline", "fieldrun"},
    "multiprocessing": {"workers"},
    "distributed": {"workers"},
}

TOP_LEVEL = {"README.md", "DEVELOPERS.md", "CHANGELOG.md", "LICENSE", "pyproject.toml", "shelfmap", "tests"} | {
    "demo_grids",
    "configs",
}


def name_of(path):
    """Module a file belongs to; all compiled loops are one."""
    return "_kernels" if path.parent.name == "_kernels" else path.stem


FILES = sorted(path for path in PACKAGE.rglob("*.py") if path != PACKAGE / "__init__.py")
MODULES = [".".join(path.relative_to(PACKAGE.parent).with_suffix("").parts).removesuffix(".__init__") for path in FILES]


def imported(path):
    """Full names a file imports, wherever in it."""
    for node in ast.walk(ast.parse(path.read_text(encoding="utf-8"))):
        if isinstance(node, ast.Import):
            yield from (alias.name for alias in node.names)
        elif isinstance(node, ast.ImportFrom):
            assert node.level == 0, f"{path.name}: import by full name"
            if node.module == "shelfmap":
                yield from (f"shelfmap.{alias.name}" for alias in node.names)
            else:
                yield node.module or ""


def test_every_module_has_its_place_in_the_order():
    assert {name_of(path) for path in FILES} == set(ORDER)
    assert len(set(ORDER)) == len(ORDER)


@pytest.mark.parametrize("path", FILES, ids=MODULES)
def test_imports_only_point_up_the_list(path):
    here = ORDER.index(name_of(path))
    for name in imported(path):
        if name.startswith("shelfmap.") and name != "shelfmap.__version__":
            other = name.split(".")[1]
            inside_kernels = other == name_of(path) == "_kernels"
            assert inside_kernels or ORDER.index(other) < here, f"{path.name} imports {name}"


@pytest.mark.parametrize("path", FILES, ids=MODULES)
def test_each_library_is_imported_in_its_own_modules_only(path):
    for name in imported(path):
        allowed = ONLY_HERE.get(name.split(".")[0], {name_of(path)})
        assert name_of(path) in allowed, f"{path.name} imports {name}"


def test_the_command_line_starts_without_any_heavy_library():
    """Of what is installed, only click; so `shelfmap --help` takes a tenth of a second."""
    code = "import sys, shelfmap.cli; print(*{name.split('.')[0] for name in sys.modules})"
    loaded = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True).stdout.split()
    heavy = {"numpy", "scipy", "pandas", "shapely", "geopandas", "pydantic", "sqlite3", *ONLY_HERE} - {"click"}
    assert set(loaded) & heavy == set()
    assert {"click", "shelfmap"} <= set(loaded)


def public(module):
    """What a module offers, functions and classes only."""
    offered = ((name, getattr(module, name)) for name in getattr(module, "__all__", []))
    return [(name, thing) for name, thing in offered if inspect.isfunction(thing) or inspect.isclass(thing)]


@pytest.mark.parametrize("name", ["shelfmap", *MODULES])
def test_everything_public_is_documented_and_annotated(name):
    module = importlib.import_module(name)
    assert (module.__doc__ or "").strip()
    assert "_kernels" in name or hasattr(module, "__all__")
    assert all(hasattr(module, offered) for offered in getattr(module, "__all__", []))
    for called, thing in public(module):
        assert (thing.__doc__ or "").strip(), called
        if inspect.isfunction(thing):
            hints = typing.get_type_hints(thing)
            assert {*inspect.signature(thing).parameters, "return"} <= set(hints), called


@pytest.mark.parametrize("path", FILES, ids=MODULES)
def test_only_the_command_line_speaks(path):
    calls = [node.func for node in ast.walk(ast.parse(path.read_text(encoding="utf-8"))) if isinstance(node, ast.Call)]
    spoken = [call for call in calls if isinstance(call, ast.Name) and call.id == "print"]
    assert not spoken
    assert path.stem == "cli" or not any(isinstance(call, ast.Attribute) and call.attr == "echo" for call in calls)


def test_the_top_of_the_repository_holds_only_what_was_agreed(repository):
    if not (repository / ".git").exists():
        pytest.skip("not a repository: an unpacked copy may hold anything beside it")
    listed = subprocess.run(["git", "ls-files"], cwd=repository, capture_output=True, text=True, check=True)
    top = {line.split("/")[0] for line in listed.stdout.splitlines()}
    assert {entry for entry in top if not entry.startswith(".")} <= TOP_LEVEL


def test_compiled_loops_are_exact():
    """No fastmath: with contraction allowed, a first run and worker processes differed in the last bit."""
    for path in (PACKAGE / "_kernels").glob("*.py"):
        calls = [node for node in ast.walk(ast.parse(path.read_text(encoding="utf-8"))) if isinstance(node, ast.Call)]
        assert not [word for call in calls for word in call.keywords if word.arg == "fastmath"], path
