"""Small coasts with settings, and exact comparison of outputs, for the tests of whole runs."""

import numpy as np
import pandas as pd

from shelfmap.laying import lay
from shelfmap.sections import Section, screen_section
from shelfmap.settings import Settings
from shelfmap.stations import station_layers
from shelfmap.synthetic import shelf_profile, straight_coast
from shelfmap.tables import profile_layer, response_layer, station_columns
from shelfmap.vectors import read_table

RESULTS = ("coast_index", "transects", "shelf_breaks", "profiles", "response")
SHELF = shelf_profile(100e3, 150.0, 0.05, 3000.0)


def small_coast(**more):
    """Straight coast at 40 N, 300 km of it, sea in the west, a shelf of 100 km."""
    return straight_coast(270.0, 40.0, SHELF, **{"cell": 0.05, "shape": (55, 95), **more})


def settings_for(grid, folder, /, **tables):
    """Settings of a quick run of a grid into a folder; tables as in TOML, merged into these."""
    content = {
        "title": "test",
        "grid": {"path": str(grid), "positive": "up"},
        "coast": {"generalise_km": 10.0},
        "transects": {"spacing_km": 10.0, "length_km": 200.0},
        "output": {"path": "out.gpkg"},
    }
    for name, table in tables.items():
        content[name] = {**content.get(name, {}), **table}
    return Settings.from_dict(content, folder=folder)


def screened_of(settings):
    """Coast and, in SI units, results of every stage of a run, all its stations in one section."""
    laid = lay(settings, map)
    section = Section(
        source=laid.source,
        settings=settings,
        transects=laid.transects,
        step_m=laid.step_m,
        islets=laid.coast.islets,
        picks=np.full(len(laid.transects), None, dtype=object),
    )
    return laid.coast, screen_section(section)


def layers_of(screened, coast, settings):
    """Layers made of results, by name, as data frames."""
    made = [
        *station_layers(station_columns(screened, settings), screened.transects, coast, settings),
        profile_layer(screened),
        response_layer(screened, settings),
    ]
    return {layer.name: pd.DataFrame(layer.columns) for layer in made}


def assert_same_results(path, other):
    """Every table of two outputs is the same, number for number."""
    for layer in RESULTS:
        one, two = read_table(path, layer), read_table(other, layer)
        assert list(one) == list(two)
        for name in one:
            np.testing.assert_array_equal(one[name], two[name], err_msg=f"{layer}.{name}")
