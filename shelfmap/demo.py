"""The demo scenario: one invented coast that shows every case, its invented gauges and the settings to run it."""

import csv
import io
from pathlib import Path
from typing import Final, NamedTuple

import numpy as np
from numpy.typing import NDArray

from shelfmap.errors import GridError, OutputExistsError
from shelfmap.geodesy import WGS84, local_projection
from shelfmap.rasters import replace_file, write_geotiff
from shelfmap.synthetic import SyntheticGrid

__all__ = ["demo_gauges", "demo_scenario", "demo_settings", "write_demo"]

FloatArray = NDArray[np.float64]

SEED: Final = 20
NODATA: Final = -32768

# The scene is laid out in metres round its middle: `along` runs down the coast (bearing 172), `off` seaward (262).
MIDDLE_LON_DEG: Final = -20.75
MIDDLE_LAT_DEG: Final = -34.0
SEAWARD_DEG: Final = 262.0
LINE_OFF_KM: Final = 190.0  # the general line of the coast lies landward of the middle: most of the grid is sea
WEST_DEG: Final = -26.75
SOUTH_DEG: Final = -40.75
CELL_DEG: Final = 0.05
SHAPE: Final = (271, 238)
DEEP_M: Final = 4300.0

#: Stretches of coast: along [km], shelf width [km], depth of the break [m], e-folding length of the slope beyond
#: [km], share of the breakless ramp, height of the land [m]. Between rows all of them change smoothly.
_STRETCHES: Final = np.array([
    [-700.0, 354.0, 108.0, 80.0, 0.0, 250.0],
    [-330.0, 364.0, 108.0, 80.0, 0.0, 250.0],
    [-170.0, 130.0, 135.0, 70.0, 0.0, 350.0],
    [140.0, 115.0, 140.0, 70.0, 0.0, 450.0],
    [240.0, 18.0, 95.0, 32.0, 0.0, 1500.0],
    [420.0, 18.0, 95.0, 32.0, 0.0, 1500.0],
    [520.0, 18.0, 95.0, 60.0, 1.0, 500.0],
    [700.0, 18.0, 95.0, 60.0, 1.0, 350.0],
])  # fmt: skip


class _Lobe(NamedTuple):
    """A tapering stripe with round ends: ends as (along, off the smooth coast) [km], half-widths [km], relief [m]."""

    start: tuple[float, float]
    end: tuple[float, float]
    start_half_km: float
    end_half_km: float
    relief_m: float


_GULF: Final = _Lobe((-85.0, 25.0), (-20.0, -215.0), 46.0, 27.0, 75.0)
_INLETS: Final = (
    _Lobe((-520.0, 10.0), (-500.0, -62.0), 7.0, 6.0, 30.0),
    _Lobe((150.0, 10.0), (163.0, -55.0), 7.0, 6.0, 40.0),
    _Lobe((320.0, 10.0), (300.0, -50.0), 7.0, 6.0, 60.0),
    _Lobe((560.0, 10.0), (590.0, -48.0), 7.0, 6.0, 25.0),
)
_LAKE: Final = _Lobe((-330.0, -165.0), (-280.0, -140.0), 14.0, 20.0, 45.0)
_ISLANDS: Final = (
    _Lobe((-258.0, 128.0), (-232.0, 138.0), 13.0, 10.0, 420.0),  # above 500 km2
    _Lobe((38.0, 62.0), (45.0, 58.0), 7.0, 5.5, 180.0),
    _Lobe((62.0, 78.0), (64.0, 80.0), 6.0, 6.0, 150.0),
    _Lobe((70.0, 52.0), (76.0, 54.0), 5.5, 5.5, 120.0),
    _Lobe((92.0, 68.0), (99.0, 74.0), 6.0, 5.0, 200.0),
    _Lobe((108.0, 48.0), (110.0, 50.0), 5.5, 5.5, 90.0),
)
_VOID: Final = _Lobe((-462.0, 205.0), (-430.0, 228.0), 24.0, 17.0, 0.0)

#: Tide a straight wall would have, amplitude [m] and Greenwich phase lag [deg] at the middle; the lag grows down
#: the coast at the pace of a long wave in the deep sea.
_WALL_TIDE: Final = {"M2": (0.45, 95.0), "S2": (0.18, 123.0)}
_LAG_DEG_PER_KM: Final = 0.04

#: Gauges: name, place (along, off the smooth coast) [km], invented gain of M2 and S2 over the wall tide, lag [deg].
_GAUGES: Final = (
    ("Velmarrow", -620.0, 3.0, 3.7, 108.0),
    ("Oskeld", -540.0, 3.0, 3.8, 106.0),
    ("Tarrowin", -410.0, 3.0, 3.7, 104.0),
    ("Brellane", -320.0, 3.0, 3.1, 92.0),
    ("Isle Quorrin", -247.0, 148.0, 1.7, 62.0),
    ("Pelskar", -150.0, 3.0, 1.35, 28.0),
    ("Mirrowen", -18.0, -100.0, 1.9, 40.0),
    ("Torvane", -20.0, -238.0, 2.2, 48.0),
    ("Ambrist", 67.0, 3.0, 1.3, 27.0),
    ("Keldrosk", 205.0, 3.0, 1.1, 21.0),
    ("Skarn Vey", 370.0, 3.0, 1.03, 19.0),
    ("Lanvossel", 610.0, 3.0, 1.1, 21.0),
)

_SETTINGS: Final = """\
# Settings of the demo: an invented coast with every case in one picture, and invented tide gauges.
# Every section is shown; a line left out takes its default. Paths are relative to this file.
title = "Invented demo coast"

[grid]
path = "{grid}"
positive = "up"             # values are elevations; "down" for depths, "auto" to let shelfmap decide

[coast]
level_m = 0.0               # elevation of the shoreline above the water level
generalise_km = 20.0        # inlets narrower than this do not turn the normals
smallest_island_km2 = 500.0 # islands below this area get no stations

[transects]
spacing_km = 20.0           # one station every 20 km of generalised coast
length_km = 600.0           # how far seaward the shelf break is searched

[shelf_break]
slope = 0.01                # gradient at which the continental slope begins
confirm_slope = 0.025       # gradient it must reach further on
smoothing_km = 5.0
sustain_km = 5.0
shallowest_m = 20.0
deepest_m = 550.0

[response]
constituents = ["M2", "S2", "N2", "K1", "O1"]
periods_h = [1.0, 3.0]      # further periods: seiches, meteotsunamis, tsunamis
rotation = true
friction_m_s = 1.0e-3
deep_m = 4000.0

[depth_error]               # how wrong the depths may be: sd = sqrt(fixed_m^2 + (per_depth * depth)^2)
fixed_m = 5.0               # 0.5 and 0.012 for a survey to Order 2 of IHO S-44
per_depth = 0.12
correlation_km = 20.0

[gauges]
file = "{gauges}"   # harmonic constants: amplitude and Greenwich phase lag by constituent

[output]
path = "demo.gpkg"
crs = "EPSG:4326"
profiles = true
response_curves = true
"""


def demo_scenario(seed: int = SEED) -> SyntheticGrid:
    """Give the invented coast of the demo: 1400 km of it in the open South Atlantic, where there is none.

    From north to south: a shelf tuned to M2 with a patch of missing data on it, an island above 500 km2, a gulf, a
    group of small islands, a narrow steep shelf, a ramp without a break; a lake below sea level inland and
    inlets too narrow to turn the coast.

    Parameters
    ----------
    seed : int
        Seed of the random relief.

    Returns
    -------
    SyntheticGrid
        Elevation in whole metres that fit int16, 0.05 degree cells, NaN where missing.

    Examples
    --------
    >>> grid = demo_scenario()
    >>> grid.elevation_m.shape, float(grid.elevation_m[135, 0]) < -4000
    ((271, 238), True)
    """
    rng = np.random.default_rng(seed)
    n_rows, n_cols = SHAPE
    lon, lat = np.meshgrid(WEST_DEG + CELL_DEG * np.arange(n_cols), SOUTH_DEG + CELL_DEG * np.arange(n_rows))
    along_km, off_km = _scene_from_lonlat(lon, lat)
    ragged_km = 2.0 * _relief(along_km, off_km, rng, 30.0, 150.0)
    rough = _relief(along_km, off_km, rng, 60.0, 300.0)
    sea_km = off_km - _coast_km(along_km)
    elevation_m = _open_coast(along_km, sea_km + ragged_km * np.exp(-np.maximum(sea_km, 0.0) / 40.0), rough)
    for lobe in (_GULF, *_INLETS, _LAKE):
        inside_km = _inside_km(along_km, sea_km, lobe) + ragged_km * min(1.0, lobe.start_half_km / 20.0)
        elevation_m = np.minimum(elevation_m, _carved(inside_km, lobe.relief_m))
    for lobe in _ISLANDS:
        inside_km = _inside_km(along_km, sea_km, lobe) + ragged_km * min(1.0, lobe.start_half_km / 20.0)
        elevation_m = np.maximum(elevation_m, -_carved(inside_km, lobe.relief_m))
    elevation_m = np.rint(elevation_m)
    elevation_m[_inside_km(along_km, sea_km, _VOID) + ragged_km > 0.0] = np.nan
    return SyntheticGrid(
        elevation_m=elevation_m.astype(np.float32),
        x0=WEST_DEG,
        y0=SOUTH_DEG,
        dx=CELL_DEG,
        dy=CELL_DEG,
        crs=WGS84,
        description="Invented coast made to show every case; no such place exists",
    )


def demo_gauges() -> dict[str, list[str] | list[float]]:
    """Give the twelve invented gauges of the demo, column by column.

    Returns
    -------
    dict of str to list
        ``id``, ``name``, ``lon`` and ``lat`` (degrees), ``source``, and for M2 and S2 the amplitude ``_amp_m``
        (metres) and Greenwich phase lag ``_phase_deg`` (degrees, 0 to 360): the tide at a straight wall times an
        invented gain like that of a shelf of that width.

    Examples
    --------
    >>> gauges = demo_gauges()
    >>> gauges["name"][0], gauges["M2_amp_m"][0], gauges["M2_phase_deg"][0]
    ('Velmarrow', 1.665, 178.2)
    """
    names, *numbers = zip(*_GAUGES, strict=True)
    along_km, sea_km, gain, lag_deg = (np.array(column) for column in numbers)
    lon, lat = _lonlat_from_scene(along_km, sea_km + _coast_km(along_km))
    columns: dict[str, list[str] | list[float]] = {
        "id": [f"D{number:02d}" for number in range(1, len(names) + 1)],
        "name": list(names),
        "lon": lon.round(3).tolist(),
        "lat": lat.round(3).tolist(),
        "source": ["invented"] * len(names),
    }
    for wave, (wall_m, wall_deg) in _WALL_TIDE.items():
        columns[f"{wave}_amp_m"] = (wall_m * gain).round(3).tolist()
        columns[f"{wave}_phase_deg"] = ((wall_deg + lag_deg + _LAG_DEG_PER_KM * along_km) % 360.0).round(1).tolist()
    return columns


def demo_settings(grid: str = "demo.tif", gauges: str = "demo_gauges.csv") -> str:
    """Text of the demo's settings, TOML, for a grid and gauges named relative to the settings file.

    Examples
    --------
    >>> demo_settings().splitlines()[2]
    'title = "Invented demo coast"'
    """
    return _SETTINGS.format(grid=grid, gauges=gauges)


def write_demo(folder: str | Path, *, overwrite: bool = False) -> list[Path]:
    """Write the demo's grid, gauges and settings into a folder, which is made if need be.

    Parameters
    ----------
    folder : str or Path
        Where ``demo.tif``, ``demo_gauges.csv`` and ``demo.toml`` go.
    overwrite : bool
        Whether existing files of these names are replaced.

    Returns
    -------
    list of Path
        The three files, in that order.

    Raises
    ------
    GridError
        If one of them cannot be written.
    OutputExistsError
        If one of them exists and `overwrite` is off; nothing is written then.

    Examples
    --------
    >>> import tempfile
    >>> with tempfile.TemporaryDirectory() as folder:
    ...     [path.name for path in write_demo(folder)]
    ['demo.tif', 'demo_gauges.csv', 'demo.toml']
    """
    folder = Path(folder)
    grid_path, gauges_path, settings_path = paths = [
        folder / name for name in ("demo.tif", "demo_gauges.csv", "demo.toml")
    ]
    taken = [str(path) for path in paths if path.exists()]
    if taken and not overwrite:
        raise OutputExistsError(
            f"{', '.join(taken)} exists already; allow it to be overwritten or choose another folder"
        )
    try:
        folder.mkdir(parents=True, exist_ok=True)
    except OSError as error:
        raise GridError(f"folder {folder} cannot be made: {error.strerror}; choose another folder") from error
    grid = demo_scenario()
    write_geotiff(
        grid_path,
        np.where(np.isnan(grid.elevation_m), NODATA, grid.elevation_m).astype(np.int16),
        x0=grid.x0,
        y0=grid.y0,
        dx=grid.dx,
        dy=grid.dy,
        crs=grid.crs,
        nodata=NODATA,
        description="elevation above mean sea level, positive up",
        tags={"TIFFTAG_IMAGEDESCRIPTION": grid.description},
        overwrite=overwrite,
    )
    replace_file(gauges_path, _csv(demo_gauges()).encode())
    replace_file(settings_path, demo_settings().encode())
    return paths


def _csv(columns: dict[str, list[str] | list[float]]) -> str:
    """Columns as comma-separated text with a heading."""
    text = io.StringIO()
    writer = csv.writer(text, lineterminator="\n")
    writer.writerow(columns)
    writer.writerows(zip(*columns.values(), strict=True))
    return text.getvalue()


def _scene_from_lonlat(lon_deg: FloatArray, lat_deg: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Turn longitude and latitude into kilometres along and off the coast's general line."""
    x_m, y_m = local_projection(MIDDLE_LON_DEG, MIDDLE_LAT_DEG).from_lonlat(lon_deg, lat_deg)
    sine, cosine = np.sin(np.radians(SEAWARD_DEG)), np.cos(np.radians(SEAWARD_DEG))
    return (sine * y_m - cosine * x_m) / 1e3, (sine * x_m + cosine * y_m) / 1e3 + LINE_OFF_KM


def _lonlat_from_scene(along_km: FloatArray, off_km: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Undo `_scene_from_lonlat`."""
    sine, cosine = np.sin(np.radians(SEAWARD_DEG)), np.cos(np.radians(SEAWARD_DEG))
    off_km = off_km - LINE_OFF_KM
    x_m, y_m = (sine * off_km - cosine * along_km) * 1e3, (sine * along_km + cosine * off_km) * 1e3
    return local_projection(MIDDLE_LON_DEG, MIDDLE_LAT_DEG).to_lonlat(x_m, y_m)


def _coast_km(along_km: FloatArray) -> FloatArray:
    """Distance of the smooth coast off its general line."""
    return -42.0 * np.sin(along_km / 205.0 + 0.4) + 18.0 * np.sin(along_km / 66.0 + 1.0)


def _open_coast(along_km: FloatArray, sea_km: FloatArray, rough: FloatArray) -> FloatArray:
    """Elevation of the open coast: land, shelf, slope and deep sea, or the ramp, by the stretch of coast."""
    width_km, break_m, slope_km, ramp, land_m = (_between(along_km, column) for column in range(1, 6))
    part = np.clip(sea_km / width_km, 0.0, 1.0)
    shelf_m = break_m * part * (1.55 - 0.55 * part)
    slope_m = (DEEP_M - break_m) * -np.expm1(-np.maximum(sea_km - width_km, 0.0) / slope_km)
    ramp_m = DEEP_M * -np.expm1(-((np.maximum(sea_km, 0.0) / 450.0) ** 1.5))
    depth_m = (1.0 - ramp) * (shelf_m + slope_m) + ramp * ramp_m
    depth_m += rough * np.minimum(0.03 * depth_m, 60.0)
    height_m = land_m * -np.expm1(np.minimum(sea_km, 0.0) / 50.0) * (1.0 + 0.25 * np.clip(rough, -3.0, 3.0))
    return np.where(sea_km > 0.0, -depth_m, height_m)


def _between(along_km: FloatArray, column: int) -> FloatArray:
    """Give a column of the table of stretches at any place, passing smoothly from row to row."""
    knots, values = _STRETCHES[:, 0], _STRETCHES[:, column]
    row = np.clip(np.searchsorted(knots, along_km) - 1, 0, knots.size - 2)
    t = np.clip((along_km - knots[row]) / (knots[row + 1] - knots[row]), 0.0, 1.0)
    between: FloatArray = values[row] + (values[row + 1] - values[row]) * t * t * (3.0 - 2.0 * t)
    return between


def _inside_km(along_km: FloatArray, sea_km: FloatArray, lobe: _Lobe) -> FloatArray:
    """Distance from the edge of a lobe, positive inside."""
    (a0, b0), (a1, b1) = lobe.start, lobe.end
    along, off = a1 - a0, b1 - b0
    t = np.clip(((along_km - a0) * along + (sea_km - b0) * off) / (along**2 + off**2), 0.0, 1.0)
    half_km = lobe.start_half_km + t * (lobe.end_half_km - lobe.start_half_km)
    return half_km - np.hypot(along_km - a0 - t * along, sea_km - b0 - t * off)


def _carved(inside_km: FloatArray, relief_m: float) -> FloatArray:
    """Elevation of a hollow: down to `relief_m` inside, rising 1:125 round it. Negated it is an island."""
    return np.where(inside_km > 0.0, relief_m * np.expm1(-inside_km / 9.0), -8.0 * inside_km)


def _relief(
    along_km: FloatArray, off_km: FloatArray, rng: np.random.Generator, shortest_km: float, longest_km: float
) -> FloatArray:
    """Smooth random field of variance one: 64 plane waves, lengths even in the logarithm, random bearing and phase."""
    n_waves = 64
    length_km = shortest_km * (longest_km / shortest_km) ** rng.random(n_waves)
    bearing, phase = 2.0 * np.pi * rng.random((2, n_waves))
    field = np.zeros_like(along_km)
    for length, angle, start in zip(length_km, bearing, phase, strict=True):
        field += np.cos(2.0 * np.pi / length * (np.cos(angle) * along_km + np.sin(angle) * off_km) + start)
    field *= np.sqrt(2.0 / n_waves)
    return field
