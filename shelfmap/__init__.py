"""Where tides and other long waves grow on a continental shelf, from a bathymetry grid.

The names of `__all__` are loaded when first asked for, so that ``import shelfmap`` costs nothing.
"""

from typing import TYPE_CHECKING

__version__ = "0.1.0"

__all__ = [
    "DepthError",
    "Friction",
    "Gauges",
    "Settings",
    "__version__",
    "compare",
    "coriolis_rad_s",
    "deep_end",
    "find_shelf_breaks",
    "lay_transects",
    "open_grid",
    "open_waters",
    "read_gauges",
    "read_table",
    "resonance_index",
    "run_field",
    "sample_profiles",
    "screen",
    "shelf_modes",
    "solve_field",
    "trace_coast",
    "wave_response",
]

if TYPE_CHECKING:
    from shelfmap.coast import trace_coast
    from shelfmap.comparison import compare
    from shelfmap.field import solve_field
    from shelfmap.fieldrun import run_field
    from shelfmap.gaugefile import read_gauges
    from shelfmap.gauges import Gauges
    from shelfmap.grid import open_grid
    from shelfmap.index import resonance_index
    from shelfmap.pipeline import screen
    from shelfmap.profiles import sample_profiles
    from shelfmap.response import DepthError, Friction, coriolis_rad_s, deep_end, shelf_modes, wave_response
    from shelfmap.settings import Settings
    from shelfmap.shelfbreak import find_shelf_breaks
    from shelfmap.transects import lay_transects
    from shelfmap.vectors import read_table
    from shelfmap.waters import open_waters
else:
    _HOMES = {
        "DepthError": "response",
        "Friction": "response",
        "Gauges": "gauges",
        "Settings": "settings",
        "compare": "comparison",
        "coriolis_rad_s": "response",
        "deep_end": "response",
        "find_shelf_breaks": "shelfbreak",
        "lay_transects": "transects",
        "open_grid": "grid",
        "open_waters": "waters",
        "read_gauges": "gaugefile",
        "read_table": "vectors",
        "resonance_index": "index",
        "run_field": "fieldrun",
        "sample_profiles": "profiles",
        "screen": "pipeline",
        "shelf_modes": "response",
        "solve_field": "field",
        "trace_coast": "coast",
        "wave_response": "response",
    }

    def __getattr__(name):
        """Load a public name from the module that defines it (PEP 562)."""
        from importlib import import_module  # noqa: PLC0415 - not a public name of this module

        if name not in _HOMES:
            raise AttributeError(f"module {__name__!r} has no attribute {name!r}")
        return getattr(import_module(f"{__name__}.{_HOMES[name]}"), name)

    def __dir__():
        """Public names, for completion."""
        return sorted({*globals(), *__all__})
