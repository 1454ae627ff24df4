"""The 2-D response as maps: a Cloud-Optimised GeoTIFF a wave, a natural mode, and one of what was solved on."""

from collections.abc import Iterator
from pathlib import Path
from typing import Any, Final

import numpy as np
from numpy.typing import NDArray

from shelfmap import __version__
from shelfmap.field import CellWave, Field
from shelfmap.fieldlayers import map_name, mode_map_name
from shelfmap.freemodes import FreeMode
from shelfmap.longwave import Ellipse, currents, ellipse
from shelfmap.rasters import Band, write_cog
from shelfmap.settings import FieldSettings, Settings
from shelfmap.waves import waves_of
from shelfmap.words import CAUTIONS

__all__ = ["map_names", "write_maps"]

ComplexArray = NDArray[np.complex128]
FloatArray = NDArray[np.float64]

#: Said of currents.
_INERTIAL: Final = "; empty where the wave is about as slow as the Earth turns there, or slower."
#: Map of the depths and the friction that were used.
DEPTH_MAP: Final = "field_depth.tif"


def map_names(settings: Settings) -> list[str]:
    """Names of the maps that a run may write: of fewer modes where fewer are found."""
    count = (settings.field or FieldSettings()).modes
    modes = [mode_map_name(number) for number in range(1, count + 1)]
    return [DEPTH_MAP, *(map_name(wave) for wave in waves_of(settings)), *modes]


def write_maps(field: Field, folder: Path, title: str) -> list[Path]:
    """Write every map of a region into a folder that has none of them yet.

    Parameters
    ----------
    field : Field
        The response.
    folder : Path
        Where they go.
    title : str
        Name of the run.

    Raises
    ------
    GridError
        If one cannot be written.
    """
    common = {"cautions": CAUTIONS, "software": f"shelfmap {__version__}", "title": title}
    written = [_write(folder / DEPTH_MAP, _ground(field), field, common)]
    for done in field.waves:
        tags = common | {"wave": done.wave.name or "period", "period_h": f"{done.wave.period_h:.8g}"}
        written.append(_write(folder / map_name(done.wave), list(_wave_bands(field, done)), field, tags))
    for number, mode in enumerate(field.modes, start=1):
        tags = common | {
            "period_h": f"{mode.period_h:.6g}",
            "q": f"{mode.q:.6g}",
            "participation": f"{mode.participation:.6g}",
        }
        written.append(_write(folder / mode_map_name(number), list(_mode_bands(field, mode)), field, tags))
    return written


def _write(path: Path, bands: list[Band], field: Field, tags: dict[str, str]) -> Path:
    waters = field.waters
    return write_cog(path, bands, x0=waters.x0, y0=waters.y0, dx=waters.dx, dy=waters.dy, crs=waters.crs_wkt, tags=tags)


def _ground(field: Field) -> list[Band]:
    return [
        _band(field, "depth_m", "m", "Depth used.", field.mesh.depth_m),
        _band(field, "friction_m_s", "m s-1", "Linear bottom friction used.", field.friction_m_s),
    ]


def _wave_bands(field: Field, done: CellWave) -> Iterator[Band]:
    """Bands of a wave: in answer to a unit edge tide, and the tide itself where it is known."""
    over = (
        "the elevation of the open edge, the same all along it"
        if field.mesh.is_held
        else "twice the wave that comes in through the open edge, the same all along it"
    )
    flow = _shown_flow(field, done, done.unit_east, done.unit_north)
    yield _band(field, "gain", "", f"Amplitude over {over}.", abs(done.unit))
    yield _band(field, "lag_deg", "deg", "How much later it peaks than the edge tide.", _lag_deg(done.unit))
    yield _band(
        field, "current_per_m", "s-1", f"Largest current speed for an edge tide of 1 m{_INERTIAL}", flow.major_m_s
    )
    if done.tide is None or done.tide_east is None or done.tide_north is None:
        return
    source = "fitted to gauges" if done.fit is not None else "as given"
    flow = _shown_flow(field, done, done.tide_east, done.tide_north)
    yield _band(field, "amplitude_m", "m", f"Amplitude, the edge tide {source}.", abs(done.tide))
    if done.fit is not None:
        phase_deg = np.mod(np.degrees(np.angle(done.tide)), 360.0)
        yield _band(field, "phase_deg", "deg", "Greenwich phase lag, 0 to 360.", phase_deg)
    yield _band(field, "major_m_s", "m s-1", f"Largest speed of the current{_INERTIAL}", flow.major_m_s)
    yield _band(
        field, "minor_m_s", "m s-1", "Smallest speed; negative where the current turns clockwise.", flow.minor_m_s
    )
    yield _band(field, "bearing_deg", "deg", "Compass bearing of the largest speed, 0 to 180.", flow.bearing_deg)


def _shown_flow(field: Field, done: CellWave, east: ComplexArray, north: ComplexArray) -> Ellipse:
    """Ellipse of a current, empty where the wave is slower than the Earth turns.

    Beyond that latitude waves bound to the slopes of the bed, which the cells do not resolve, are as strong in the
    current as what is resolved, though not in the elevation.
    """
    is_slow = done.wave.omega_rad_s <= abs(field.mesh.coriolis_rad_s)
    return ellipse(*(np.where(is_slow, np.nan, part) for part in (east, north)))


def _mode_bands(field: Field, mode: FreeMode) -> Iterator[Band]:
    elevation = mode.elevation[field.mesh.corner].mean(axis=1)
    largest = elevation[np.argmax(abs(elevation))]
    flow = ellipse(*currents(field.mesh, mode.elevation / abs(largest), mode.omega, field.friction_m_s))
    yield _band(field, "elevation", "", "Amplitude over the largest one.", abs(elevation / largest))
    yield _band(
        field, "lag_deg", "deg", "How much later it peaks than where it is largest.", _lag_deg(elevation / largest)
    )
    yield _band(field, "current_per_m", "s-1", "Largest current speed where the largest swing is 1 m.", flow.major_m_s)


def _band(field: Field, name: str, unit: str, meaning: str, values: Any) -> Band:
    return Band(name=name, unit=unit, description=meaning, values=field.on_map(values).astype(np.float32))


def _lag_deg(values: ComplexArray) -> FloatArray:
    return np.asarray(np.degrees(np.angle(values)))
