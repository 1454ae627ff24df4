"""The 2-D response as layers: gauges, natural modes, one row a wave, curves of gain against period."""

from typing import Any, Final

import numpy as np
import shapely
from numpy.typing import NDArray

from shelfmap.edgetide import explained_share, why_off
from shelfmap.field import CellWave, Field, Spectrum
from shelfmap.gauges import Gauges
from shelfmap.geodesy import unwrap_lon_deg
from shelfmap.layers import Layer
from shelfmap.waves import Wave

__all__ = ["field_layers", "map_name", "mode_map_name"]

FloatArray = NDArray[np.float64]
ComplexArray = NDArray[np.complex128]

#: A gauge as far as this from its cell, in kilometres, is said to be.
_FAR_KM: Final = 5.0


def map_name(wave: Wave) -> str:
    """Name of the file that holds the map of a wave."""
    return f"field_{wave.label}.tif"


def mode_map_name(number: int) -> str:
    """Name of the file that holds the map of a natural mode."""
    return f"mode_{number}.tif"


def field_layers(field: Field, *, with_maps: bool = False) -> list[Layer]:
    """Layers of a region: those that have rows of `gauges`, `natural_modes`, `field_waves` and `field_curves`.

    Parameters
    ----------
    field : Field
        The response.
    with_maps : bool
        Whether there are maps to be named in them.
    """
    layers = [] if field.gauges is None else [_gauge_layer(field, field.gauges)]
    if field.modes:
        layers.append(_mode_layer(field, with_maps=with_maps))
    layers.append(_wave_layer(field, with_maps=with_maps))
    if field.spectrum is not None:
        layers.append(_curve_layer(field.spectrum))
    return layers


def _gauge_layer(field: Field, gauges: Gauges) -> Layer:
    in_reach = field.gauge_cell >= 0
    away_km = field.gauge_away_m / 1e3
    depth_m = np.where(in_reach, field.mesh.depth_m[np.maximum(field.gauge_cell, 0)], np.nan)
    columns: dict[str, NDArray[Any]] = {
        "gauge": gauges.name,
        "lon_deg": gauges.lon_deg,
        "lat_deg": gauges.lat_deg,
        "cell_away_km": away_km,
        "cell_depth_m": depth_m,
    }
    notes: list[list[str]] = [
        [f"stands {away:.0f} km from its cell"] if reached and away > _FAR_KM else []
        for away, reached in zip(away_km, in_reach, strict=True)
    ]
    use = np.where(in_reach, "no_value", "out_of_reach").astype(object)
    waves = [done for done in field.waves if done.wave.name in gauges.constituents]
    for done in waves:
        unit = abs(done.unit[np.maximum(field.gauge_cell, 0)])
        columns[f"field_gain_{done.wave.label}"] = np.where(in_reach, unit, np.nan)
        columns |= _constants(done, gauges, in_reach)
        for row, (is_off, why) in _judged(done, gauges, in_reach).items():
            if why:
                notes[row].append(why)
            if use[row] != "off":
                use[row] = "off" if is_off else "fitted"
    columns["gauge_use"] = use
    columns["note"] = np.array(["; ".join(parts) or None for parts in notes], dtype=object)
    return Layer(
        name="gauges",
        columns=columns,
        geometry=shapely.points(gauges.lon_deg, gauges.lat_deg),
        waves=[done.wave.label for done in waves],
    )


def _constants(done: CellWave, gauges: Gauges, in_reach: NDArray[np.bool_]) -> dict[str, FloatArray]:
    """Columns of one constituent at all gauges."""
    label = done.wave.label
    column = gauges.constituents.index(done.wave.name)
    fitted, left_out = (_spread(in_reach, None if done.fit is None else getattr(done.fit, key)) for key in _FITS)
    expected_m = np.full(len(in_reach), np.nan)
    if done.fit is not None:
        expected_m[in_reach] = done.fit.left_out_sd_m
    return {
        f"observed_{label}_m": gauges.amplitude_m[:, column],
        f"observed_{label}_deg": gauges.phase_deg[:, column],
        f"fitted_{label}_m": abs(fitted),
        f"fitted_{label}_deg": _phase_deg(fitted),
        f"left_out_{label}_m": abs(left_out),
        f"left_out_{label}_deg": _phase_deg(left_out),
        f"left_out_error_{label}_m": abs(left_out - gauges.constants(done.wave.name)),
        f"expected_error_{label}_m": expected_m,
    }


_FITS: Final = ("fitted", "left_out")


def _spread(in_reach: NDArray[np.bool_], values: ComplexArray | None) -> ComplexArray:
    """Values of the gauges in reach at all gauges."""
    out = np.full(len(in_reach), complex(np.nan, np.nan))
    if values is not None:
        out[in_reach] = values
    return out


def _phase_deg(values: ComplexArray) -> FloatArray:
    return np.asarray(np.mod(np.degrees(np.angle(values)), 360.0))


def _judged(done: CellWave, gauges: Gauges, in_reach: NDArray[np.bool_]) -> dict[int, tuple[bool, str]]:
    """Row of each gauge that one constituent was fitted to: whether the others do not bear it out, and why."""
    if done.fit is None:
        return {}
    observed = gauges.constants(done.wave.name)[in_reach]
    is_off = done.fit.is_off(observed)
    rows = np.flatnonzero(in_reach)
    return {
        int(row): (
            bool(off),
            f"{done.wave.name} has {why_off(seen, left_out, done.wave.period_h)}" if off else "",
        )
        for row, off, seen, left_out in zip(rows, is_off, observed, done.fit.left_out, strict=True)
        if np.isfinite(seen)
    }


def _mode_layer(field: Field, *, with_maps: bool) -> Layer:
    modes, mesh = field.modes, field.mesh
    number = np.arange(1, len(modes) + 1)
    node = [int(np.argmax(abs(mode.elevation))) for mode in modes]
    names = [mode_map_name(int(each)) if with_maps else None for each in number]
    return Layer(
        name="natural_modes",
        columns={
            "mode": number,
            "period_h": np.array([mode.period_h for mode in modes]),
            "q": np.array([mode.q for mode in modes]),
            "response": np.array([mode.response for mode in modes]),
            "largest": np.array([abs(mode.elevation).max() for mode in modes]),
            "participation": np.array([mode.participation for mode in modes]),
            "map": np.array(names, dtype=object),
        },
        geometry=shapely.points(mesh.node_lon_deg[node], mesh.node_lat_deg[node]),
    )


def _wave_layer(field: Field, *, with_maps: bool) -> Layer:
    rows = [_wave_row(field, done) | {"map": map_name(done.wave) if with_maps else None} for done in field.waves]
    columns = {name: np.array([row[name] for row in rows]) for name in rows[0]}
    for name in ("wave", "map"):
        columns[name] = columns[name].astype(object)
    return Layer(name="field_waves", columns=columns)


def _wave_row(field: Field, done: CellWave) -> dict[str, Any]:
    cell = int(np.argmax(abs(done.unit)))
    lon, lat = field.waters.lonlat()
    row = {
        "wave": done.wave.name,
        "period_h": done.wave.period_h,
        "largest_gain": float(abs(done.unit[cell])),
        "largest_lon_deg": float(unwrap_lon_deg(lon.flat[field.mesh.cell[cell]], 0.0)),
        "largest_lat_deg": float(lat.flat[field.mesh.cell[cell]]),
        "edge_tide_m": np.nan,
        "local_error_m": np.nan,
        "n_gauges": 0,
        "n_off": 0,
        "explained_fitted": np.nan,
        "explained_left_out": np.nan,
    }
    if done.fit is None or field.gauges is None:
        return row
    observed = field.gauges.constants(done.wave.name)[field.gauge_cell >= 0]
    return row | {
        "edge_tide_m": done.fit.tide_sd_m,
        "local_error_m": done.fit.local_sd_m,
        "n_gauges": int(np.isfinite(observed).sum()),
        "n_off": int(done.fit.is_off(observed).sum()),
        "explained_fitted": explained_share(observed, done.fit.fitted),
        "explained_left_out": explained_share(observed, done.fit.left_out),
    }


def _curve_layer(curves: Spectrum) -> Layer:
    n_periods, n_points = curves.unit.shape
    return Layer(
        name="field_curves",
        columns={
            "point": np.repeat(curves.points.name, n_periods),
            "lon_deg": np.repeat(curves.points.lon_deg, n_periods),
            "lat_deg": np.repeat(curves.points.lat_deg, n_periods),
            "period_h": np.tile(curves.period_h, n_points),
            "gain": abs(curves.unit).T.ravel(),
            "lag_deg": np.degrees(np.angle(curves.unit)).T.ravel(),
        },
    )
