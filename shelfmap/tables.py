"""Stage results of transects, put into the columns of the column table: units turned, remarks written."""

from collections.abc import Iterator
from dataclasses import dataclass
from typing import Any, Final

import numpy as np
import shapely
from numpy.typing import NDArray

from shelfmap.assess import SHUT_OFF_RATIO, doubts, sills
from shelfmap.geodesy import unwrap_lon_deg
from shelfmap.index import ResonanceIndex, index_class
from shelfmap.layers import Layer
from shelfmap.profiles import END_REASONS, Profiles, lines_along, place_on
from shelfmap.response import ShelfModes, WaveResponse
from shelfmap.settings import Settings
from shelfmap.shelfbreak import ShelfBreaks
from shelfmap.transects import Transects
from shelfmap.waves import Wave, waves_of

__all__ = [
    "WORKING_COLUMNS",
    "Columns",
    "Screened",
    "profile_layer",
    "response_layer",
    "station_columns",
    "transect_columns",
]

FloatArray = NDArray[np.float64]
Columns = dict[str, NDArray[Any]]

#: Columns of `station_columns` that are in no layer.
WORKING_COLUMNS: Final = ("line", "shore_lon", "break_lon", "remarks", "n_doubts")


@dataclass(frozen=True, slots=True, kw_only=True)
class Screened:
    """Everything computed for a set of transects, one row each; the result of a section and of a whole run."""

    transects: Transects
    profiles: Profiles
    breaks: ShelfBreaks
    status: NDArray[np.object_]
    """(n,) words of `shelfmap.words.STATUSES`."""
    outer_depth_m: FloatArray
    """(n,) depth of the deep sea beyond each profile, metres; NaN where nothing was computed."""
    is_stepped: NDArray[np.bool_]
    """(n,) True where the profile does not reach that depth itself."""
    modes: ShelfModes
    waves: WaveResponse
    index: ResonanceIndex
    curve: WaveResponse | None
    """Response at the periods of the curve, NaN below a quarter of the travel time; None where not asked for."""
    curve_period_h: FloatArray
    """(m,) periods of the curve, hours."""


def station_columns(screened: Screened, settings: Settings) -> Columns:
    """Columns of the layers with one row a transect, and what `shelfmap.stations` needs to finish them.

    Parameters
    ----------
    screened : Screened
        Some transects of a run, n of them.
    settings : Settings
        Which waves are wanted.

    Returns
    -------
    dict of str to (n,) array
        By name; those of `WORKING_COLUMNS` are in no layer: places with longitudes that do not jump at 180 degrees, the
        line of each transect as well-known binary, remarks and the number of doubts among them.
    """
    waves = waves_of(settings)
    transects, profiles = screened.transects, screened.profiles
    break_lon, break_lat = place_on(transects, profiles.shore_m + screened.breaks.break_m)
    shore_m = np.nan_to_num(profiles.shore_m)
    # from its shore to its last sample; a stub of one step where there is no profile
    lines = lines_along(transects, shore_m, shore_m + np.maximum(profiles.length_m, profiles.step_m))
    return {
        **transect_columns(transects, profiles),
        **_profile_columns(screened, settings),
        **_break_columns(screened, break_lon, break_lat),
        **_mode_columns(screened),
        **_wave_columns(screened, waves),
        **_remark_columns(screened, waves),
        "line": shapely.to_wkb(lines),
        "shore_lon": profiles.shore_lon_deg,
        "break_lon": break_lon,
    }


def _nullable(values: NDArray[Any], missing: NDArray[np.bool_]) -> NDArray[np.object_]:
    """Same values as objects, None where missing."""
    out = values.astype(object)
    out[missing] = None
    return out


def transect_columns(transects: Transects, profiles: Profiles) -> Columns:
    """Columns of `transect_lines`: where each transect stands, leads and ends."""
    no_shore = np.isnan(profiles.shore_lon_deg)
    end = np.array([*END_REASONS, None], dtype=object)[profiles.end_reason]
    return {
        "transect_id": transects.transect_id,
        "coast_part": _nullable(transects.coast_part, transects.coast_part < 1),
        "coast_km": transects.coast_m / 1e3,
        "lon_deg": unwrap_lon_deg(np.where(no_shore, transects.lon_deg, profiles.shore_lon_deg), 0.0),
        "lat_deg": np.where(no_shore, transects.lat_deg, profiles.shore_lat_deg),
        "bearing_deg": transects.bearing_deg,
        "search_km": np.nanmax(transects.node_m, axis=1) / 1e3,
        "length_km": np.where(profiles.n_samples > 0, profiles.length_m / 1e3, np.nan),
        "end_reason": end,
    }


def _profile_columns(screened: Screened, settings: Settings) -> Columns:
    profiles = screened.profiles
    at_land = np.isin(profiles.end_reason, [END_REASONS.index("facing_land"), END_REASONS.index("island")])
    return {
        "status": screened.status,
        "n_bridged": profiles.n_bridged,
        "n_filled": profiles.n_filled,
        "n_despiked": profiles.n_despiked,
        "fetch_km": np.where(at_land, profiles.length_m / 1e3, np.nan),
        "deep_m": screened.outer_depth_m,
        "friction_m_s": np.where(np.isnan(screened.outer_depth_m), np.nan, settings.response.friction_m_s),
    }


def _break_columns(screened: Screened, break_lon: FloatArray, break_lat: FloatArray) -> Columns:
    breaks, profiles = screened.breaks, screened.profiles
    on_shelf = profiles.distance_m[None, :] <= np.nan_to_num(breaks.break_m, nan=-1.0)[:, None]
    depth_m = np.where(on_shelf, profiles.depth_m, 0.0)
    # trapezoids to the last sample before the break, and one to the break itself
    last = np.maximum(on_shelf.sum(axis=1) - 1, 0)
    rows = np.arange(len(last))
    area_m2 = (depth_m.sum(axis=1) - 0.5 * (depth_m[:, 0] + depth_m[rows, last])) * profiles.step_m
    area_m2 += 0.5 * (depth_m[rows, last] + breaks.depth_m) * (breaks.break_m - last * profiles.step_m)
    return {
        "break_lon_deg": unwrap_lon_deg(break_lon, 0.0),
        "break_lat_deg": break_lat,
        "shelf_width_km": breaks.break_m / 1e3,
        "break_depth_m": breaks.depth_m,
        "break_contrast": breaks.contrast,
        "break_spread_km": breaks.spread_m / 1e3,
        "slope_before": breaks.slope_before,
        "slope_beyond": breaks.slope_beyond,
        "picked": breaks.is_picked,
        "mean_depth_m": area_m2 / breaks.break_m,
    }


def _mode_columns(screened: Screened) -> Columns:
    modes = screened.modes
    pole_h = 2 * np.pi / modes.pole_rad_s.real / 3600
    columns: Columns = {
        "travel_time_h": modes.travel_time_s / 3600,
        "quarter_wave_h": modes.quarter_wave_s / 3600,
        "period1_sd_h": modes.period_sd_s / 3600,
        "damped_q1": modes.damped_q[:, 0],
        "current_antinode_km": modes.current_antinode_m / 1e3,
        "kernel_peak_share": modes.kernel_peak_share,
    }
    for mode in range(3):
        columns[f"period{mode + 1}_h"] = modes.node_period_s[:, mode] / 3600
        columns[f"pole{mode + 1}_h"] = pole_h[:, mode]
        columns[f"q{mode + 1}"] = modes.q[:, mode]
    return columns


def _wave_columns(screened: Screened, waves: tuple[Wave, ...]) -> Columns:
    response, index = screened.waves, screened.index
    columns: Columns = {}
    for k, wave in enumerate(waves):
        columns[f"gain_{wave.label}"] = response.gain[:, k]
        columns[f"damped_gain_{wave.label}"] = response.damped_gain[:, k]
        columns[f"lag_{wave.label}_deg"] = np.degrees(response.lag_rad[:, k])
        columns[f"edge_ratio_{wave.label}"] = response.edge_ratio[:, k]
        columns[f"index_{wave.label}"] = index.index[:, k]
    counted = np.array([bool(wave.name) for wave in waves])
    if not counted.any():
        counted[:] = True
    filled = np.where(np.isnan(index.index) | ~counted, -1.0, index.index)
    best = np.argmax(filled, axis=1)
    rows = np.arange(len(best))
    none = filled[rows, best] < 0
    names = np.array([wave.name or f"{wave.period_h:g} h" for wave in waves], dtype=object)
    largest = np.where(none, np.nan, index.index[rows, best])
    return columns | {
        "index_max": largest,
        "index_constituent": _nullable(names[best], none),
        "index_mode": _nullable(index.mode[rows, best], none),
        "index_class": _nullable(index_class(largest), none),
        "tuning": np.where(none, np.nan, index.tuning[rows, best]),
        "strength": np.where(none, np.nan, index.strength[rows, best]),
    }


def _remark_columns(screened: Screened, waves: tuple[Wave, ...]) -> Columns:
    """Remarks on each transect by itself, and how many of them are doubts."""
    profiles, modes = screened.profiles, screened.modes
    n = len(screened.status)
    remarks: list[list[str]] = [[] for _ in range(n)]
    n_doubts = np.zeros(n, dtype=np.int64)
    holds_index = screened.status == "ok"
    error = modes.period_sd_s / modes.node_period_s[:, 0]
    for text, holds in doubts(profiles, screened.breaks, modes.kernel_peak_share, error, modes.damped_q[:, 0]):
        for row in np.flatnonzero(holds & holds_index):
            remarks[row].append(text[row])
        n_doubts += holds
    computed = np.isfinite(screened.outer_depth_m)
    for missed, reason in _why_not(screened):
        remarks[missed].append(reason)
    for reason, of_waves in _wave_remarks(screened, computed, holds_index):
        for row in np.flatnonzero(of_waves.any(axis=1)):
            names = [
                wave.name or f"{wave.period_h:g} h" for wave, holds in zip(waves, of_waves[row], strict=True) if holds
            ]
            remarks[row].append(f"{reason}: {', '.join(names)}")
    for row in np.flatnonzero(holds_index & np.isnan(modes.pole_rad_s.real).all(axis=1)):
        remarks[row].append("no mode found")
    for row in np.flatnonzero(holds_index & (modes.q[:, 0] < 0.5)):
        remarks[row].append("mode 1 is overdamped")
    for row in np.flatnonzero(screened.is_stepped & computed):
        deepest_m = np.nanmax(profiles.depth_m[row])
        remarks[row].append(
            f"profile ends at {deepest_m:.0f} m, sea beyond taken as {screened.outer_depth_m[row]:.0f} m"
        )
    return {"remarks": np.array(["; ".join(parts) or None for parts in remarks], dtype=object), "n_doubts": n_doubts}


def _wave_remarks(
    screened: Screened, computed: NDArray[np.bool_], has_break: NDArray[np.bool_]
) -> Iterator[tuple[str, NDArray[np.bool_]]]:
    """Reasons for empty values at single waves, each with the transects and waves it holds for."""
    response = screened.waves
    slow = response.below_inertial & computed[:, None]
    yield "below_inertial (slower than the inertial period)", slow
    uncomputed = np.isnan(response.damped_gain) & computed[:, None] & ~slow
    yield "not computed (wave too short for this transect, or drag unsettled)", uncomputed
    yield "break near a node, no edge_ratio", np.isnan(response.edge_ratio) & has_break[:, None] & ~uncomputed


def _why_not(screened: Screened) -> Iterator[tuple[int, str]]:
    """Rows without an index, and where and how their transects end."""
    profiles = screened.profiles
    basin_m, sill_m = sills(profiles, screened.breaks)
    for row in np.flatnonzero((screened.status != "ok") & (profiles.n_samples > 0)).tolist():
        km, depth_m = profiles.length_m[row] / 1e3, profiles.depth_m[row, profiles.n_samples[row] - 1]
        status = screened.status[row]
        searched = profiles.end_reason[row] == END_REASONS.index("search_length")
        if status == "no_break" and searched and np.isnan(screened.outer_depth_m[row]):
            yield row, f"search ended {km:.0f} km out in {depth_m:.0f} m of water: raise transects.length_km"
        elif status == "edge_of_grid":
            yield row, f"grid ends {km:.0f} km out in {depth_m:.0f} m of water"
        elif status == "void":
            yield row, f"depths are missing {km:.0f} km out"
        elif status == "island" and basin_m[row] > SHUT_OFF_RATIO * sill_m[row]:
            yield row, f"basin of {basin_m[row]:.0f} m behind a sill of {sill_m[row]:.1f} m"
        elif status in {"facing_land", "island"}:
            yield row, f"land {km:.0f} km out"


def profile_layer(screened: Screened) -> Layer:
    """Layer `profiles`: a row for each sample of each transect."""
    profiles = screened.profiles
    wet = np.arange(profiles.depth_m.shape[1])[None, :] < profiles.n_samples[:, None]
    row, sample = np.nonzero(wet)
    lon_deg, lat_deg = place_on(screened.transects, profiles.shore_m[:, None] + profiles.distance_m[None, :])
    return Layer(
        name="profiles",
        columns={
            "transect_id": profiles.transect_id[row],
            "distance_km": profiles.distance_m[sample] / 1e3,
            "lon_deg": unwrap_lon_deg(lon_deg[wet], 0.0),
            "lat_deg": lat_deg[wet],
            "depth_m": profiles.depth_m[wet],
            "filled": profiles.is_filled[wet],
            "period1_kernel_per_km": screened.modes.kernel_per_m[wet] * 1e3,
        },
    )


def response_layer(screened: Screened, settings: Settings) -> Layer:
    """Layer `response`: waves asked for, then the curve, by transect; without a response there are no rows."""
    response, waves = screened.waves, waves_of(settings)
    n_waves = len(waves)
    fields = ("gain", "damped_gain", "lag_rad", "edge_ratio")
    values = {name: getattr(response, name) for name in fields} | {"index": screened.index.index}
    kinds = ["constituent" if wave.name else "period" for wave in waves]
    names = [wave.name for wave in waves]
    periods_h = np.array([wave.period_h for wave in waves])
    if screened.curve is not None:
        curve = screened.curve
        values = {name: np.hstack([values[name], getattr(curve, name)]) for name in fields} | {
            "index": np.hstack([values["index"], np.full(curve.gain.shape, np.nan)])
        }
        kinds += ["curve"] * len(screened.curve_period_h)
        names += [""] * len(screened.curve_period_h)
        periods_h = np.concatenate([periods_h, screened.curve_period_h])
    shown = np.isfinite(values["gain"])
    shown[:, :n_waves] = np.isfinite(screened.outer_depth_m)[:, None]
    row, wave = np.nonzero(shown)
    return Layer(
        name="response",
        columns={
            "transect_id": screened.transects.transect_id[row],
            "wave": np.array(names, dtype=object)[wave],
            "kind": np.array(kinds, dtype=object)[wave],
            "period_h": periods_h[wave],
            "gain": values["gain"][shown],
            "damped_gain": values["damped_gain"][shown],
            "lag_deg": np.degrees(values["lag_rad"][shown]),
            "edge_ratio": values["edge_ratio"][shown],
            "index": values["index"][shown],
        },
    )
