"""What `import shelfmap` offers, and what it costs."""

import subprocess
import sys

import pytest

import shelfmap


@pytest.mark.parametrize("name", shelfmap.__all__)
def test_every_public_name_is_the_one_of_its_module(name):
    found = getattr(shelfmap, name)
    assert name in dir(shelfmap)
    if name != "__version__":
        assert getattr(sys.modules[found.__module__], name) is found


def test_other_names_are_none():
    with pytest.raises(AttributeError, match="module 'shelfmap' has no attribute 'scren'"):
        _ = shelfmap.scren


def test_import_loads_nothing_else():
    """Nor does the command line, so that --help comes at once."""
    code = "import sys, shelfmap.cli; print(*sys.modules)"
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    loaded = set(done.stdout.split())
    assert "click" in loaded
    assert not loaded & {"numpy", "numba", "rasterio", "pyogrio", "shapely", "scipy", "pydantic", "pyproj", "pandas"}
