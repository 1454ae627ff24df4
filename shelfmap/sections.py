"""One section of coast: its work, from transects to packed rows of the layers."""

from dataclasses import dataclass, fields, replace
from typing import Final

import numpy as np
import shapely
from numpy.typing import NDArray

from shelfmap.assess import statuses, usable
from shelfmap.grid import GridSource
from shelfmap.index import ResonanceIndex, resonance_index
from shelfmap.layers import encode, pack, to_table
from shelfmap.profiles import END_REASONS, START_REASONS, Profiles, distance_along, lines_along, sample_profiles
from shelfmap.response import (
    DepthError,
    Friction,
    ShelfModes,
    WaveResponse,
    coriolis_rad_s,
    deep_end,
    shelf_modes,
    wave_response,
)
from shelfmap.settings import Settings
from shelfmap.shelfbreak import ShelfBreaks, find_shelf_breaks, measure_picked_breaks
from shelfmap.tables import Screened, profile_layer, response_layer, station_columns, transect_columns
from shelfmap.transects import Transects
from shelfmap.waves import waves_of

__all__ = [
    "CURVE_PERIODS_H",
    "Section",
    "pack_drawn_section",
    "pack_section",
    "sample_section",
    "screen_section",
]

FloatArray = NDArray[np.float64]
BoolArray = NDArray[np.bool_]

#: Periods of the response curves, hours, evenly spaced in their logarithm.
CURVE_PERIODS_H: Final = np.geomspace(0.5, 48.0, 64)
#: A curve shows periods from this share of the travel time on: below, its peaks lie closer than its points.
CURVE_LEAST_SHARE: Final = 0.25

#: Water is sought at least this many cells before a station on land, however little the coast is generalised.
LEAST_SEEK_CELLS: Final = 2.0

#: Lines to be edited begin this far landward of the shoreline, metres, so that they meet it when they come back.
SETBACK_M: Final = 10.0

#: Distances of the samples, depths, breaks, depth of the deep sea, Coriolis parameter: what the physics is given.
_Rows = tuple[FloatArray, FloatArray, FloatArray, FloatArray, FloatArray]


@dataclass(frozen=True, slots=True, kw_only=True)
class Section:
    """One section's work: everything its function needs, small enough to send to a process."""

    source: GridSource
    settings: Settings
    transects: Transects
    step_m: float
    """Sample spacing, metres."""
    islets: NDArray[np.object_]
    """Polygons (lon, lat) of land too small to carry stations."""
    picks: NDArray[np.object_]
    """(n,) points (lon, lat) of breaks picked by hand; None for none."""


def sample_section(section: Section) -> Profiles:
    """Depths along the transects of a section."""
    return sample_profiles(
        section.source,
        section.transects,
        section.step_m,
        seek_m=max(section.settings.coast.generalise_m / 2, LEAST_SEEK_CELLS * section.source.step_m),
        islets=section.islets,
    )


def screen_section(section: Section) -> Screened:
    """Screen one section of coast: a pure function of its input, fit for any executor."""
    settings = section.settings
    profiles = sample_section(section)
    breaks = _breaks(section, profiles)
    status = statuses(profiles, breaks, settings.shelf_break.ocean_m)
    computed = usable(status, profiles, settings.shelf_break.ocean_m)
    depth_m = np.where(computed[:, None], profiles.depth_m, np.nan)
    _, outer_depth_m, stepped = deep_end(profiles.distance_m, depth_m, settings.response.deep_m)
    rows = (
        profiles.distance_m,
        depth_m,
        np.where(computed, breaks.break_m, np.nan),
        outer_depth_m,
        coriolis_rad_s(profiles.shore_lat_deg, rotation=settings.response.rotation),
    )
    modes = _modes(section, rows, breaks.spread_m)
    omega_rad_s = 2 * np.pi / (np.array([wave.period_h for wave in waves_of(settings)]) * 3600)
    waves = wave_response(*rows, omega_rad_s, friction=_friction(settings))
    pole_rad_s = np.where((status == "ok")[:, None], modes.pole_rad_s, np.nan)
    index = resonance_index(omega_rad_s, pole_rad_s, modes.damped_q)
    return Screened(
        transects=section.transects,
        profiles=profiles,
        breaks=breaks,
        status=status,
        outer_depth_m=outer_depth_m,
        is_stepped=stepped,
        modes=modes,
        waves=waves,
        index=_without(index, waves.below_inertial),
        curve=_curve(settings, rows, modes.travel_time_s) if settings.output.response_curves else None,
        curve_period_h=CURVE_PERIODS_H,
    )


def pack_section(section: Section) -> bytes:
    """Screen one section, and give its rows of the layers, ready to be kept and written: see `shelfmap.layers.pack`.

    Table `stations` holds `shelfmap.tables.station_columns`; the others, encoded, are named as their layers.
    """
    screened, settings = screen_section(section), section.settings
    layers = [profile_layer(screened)] if settings.output.profiles else []
    layers.append(response_layer(screened, settings))
    return pack(
        {"stations": to_table(station_columns(screened, settings))} | {layer.name: encode(layer) for layer in layers}
    )


def pack_drawn_section(section: Section) -> bytes:
    """Sample one section only, and give its rows of `transect_lines`, with the line of each as well-known binary."""
    profiles = sample_section(section)
    lines = shapely.to_wkb(_lines_to_edit(section.transects, profiles))
    return pack({"stations": to_table(transect_columns(section.transects, profiles) | {"line": lines})})


def _breaks(section: Section, profiles: Profiles) -> ShelfBreaks:
    """Breaks found, those picked by hand in their place."""
    settings = section.settings.shelf_break
    found = find_shelf_breaks(profiles, settings)
    picked_m = np.full(len(profiles.n_samples), np.nan)
    for row, point in enumerate(section.picks):
        if point is not None:
            along_m = distance_along(section.transects, row, shapely.get_x(point), shapely.get_y(point))
            picked_m[row] = along_m - profiles.shore_m[row]
    picked = measure_picked_breaks(profiles, settings, picked_m)
    return ShelfBreaks(
        **{
            field.name: np.where(picked.is_picked, getattr(picked, field.name), getattr(found, field.name))
            for field in fields(ShelfBreaks)
        }
    )


def _modes(section: Section, rows: _Rows, break_spread_m: FloatArray) -> ShelfModes:
    error = section.settings.depth_error
    return shelf_modes(
        *rows,
        friction_m_s=section.settings.response.friction_m_s,
        depth_error=DepthError(
            fixed_m=error.fixed_m, per_depth=error.per_depth, correlation_m=error.correlation_km * 1e3
        ),
        # half the spread over thresholds, and a break that may lie anywhere within a sample each way
        break_sd_m=np.hypot(np.nan_to_num(break_spread_m) / 2, section.step_m / np.sqrt(3)),
    )


def _friction(settings: Settings) -> Friction:
    """Friction of the waves asked for: by drag for those with an amplitude offshore."""
    response = settings.response
    if response.drag is None:
        return Friction(linear_m_s=response.friction_m_s)
    amplitude = [response.offshore_amplitude_m.get(wave.name, np.nan) for wave in waves_of(settings)]
    return Friction(linear_m_s=response.friction_m_s, drag=response.drag, offshore_amplitude_m=amplitude)


def _curve(settings: Settings, rows: _Rows, travel_time_s: FloatArray) -> WaveResponse:
    """Response curves; none of it without a break, nor at periods too short to draw it at its points."""
    linear = Friction(linear_m_s=settings.response.friction_m_s)
    curve = wave_response(*rows, 2 * np.pi / (CURVE_PERIODS_H * 3600), friction=linear)
    with np.errstate(invalid="ignore"):
        shown = CURVE_PERIODS_H[None, :] * 3600 >= CURVE_LEAST_SHARE * travel_time_s[:, None]
    names = ("gain", "damped_gain", "lag_rad", "edge_ratio")
    return replace(curve, **{name: np.where(shown, getattr(curve, name), np.nan) for name in names})


def _without(index: ResonanceIndex, left_out: BoolArray) -> ResonanceIndex:
    """Same index, none where left out."""
    return ResonanceIndex(
        index=np.where(left_out, np.nan, index.index),
        mode=np.where(left_out, 0, index.mode),
        tuning=np.where(left_out, np.nan, index.tuning),
        strength=np.where(left_out, np.nan, index.strength),
    )


def _lines_to_edit(transects: Transects, profiles: Profiles) -> NDArray[np.object_]:
    """Line of each transect that comes back as the same transect: from just landward of its shore to past its end.

    What a profile ends at (land, missing depth, the grid's edge) lies on the line too, else it would be forgotten;
    one that ends at the search length ends there.
    """
    at_shore = profiles.start_reason == START_REASONS.index("shore")
    start_m = np.nan_to_num(profiles.shore_m) - SETBACK_M * at_shore
    searched = profiles.end_reason == END_REASONS.index("search_length")
    past = np.where(searched, -0.9, 0.5)  # steps past the last sample, less one
    stop_m = np.nan_to_num(profiles.shore_m) + (profiles.n_samples + past) * profiles.step_m
    start_m = np.maximum(start_m, np.nanmin(transects.node_m, axis=1))
    stop_m = np.minimum(stop_m, np.nanmax(transects.node_m, axis=1))
    return lines_along(transects, start_m, stop_m)
