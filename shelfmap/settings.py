"""Frozen settings of a run, one class per stage, read from TOML with every key checked.

The names here are the interface: ``Settings.model_json_schema()`` is the schema editors use, and README's table
of settings is made from it. Lengths that end in ``_km`` and periods that end in ``_h`` are turned into SI by the
stages, through the ``_m`` properties here.
"""

import tomllib
from pathlib import Path
from typing import Annotated, Any, Final, Literal, Self, TypeVar

from pydantic import (
    BaseModel,
    ConfigDict,
    Field,
    ValidationError,
    field_validator,
    model_validator,
)

from shelfmap.errors import SettingsError
from shelfmap.settingvalues import (
    ColumnName,
    ConstituentName,
    DeepSea,
    FilePath,
    FilePaths,
    WaveColumns,
    check_box,
    fault_text,
    setting_rows,
    shown,
)

__all__ = [
    "VOID_LAND_M",
    "CoastSettings",
    "DepthErrorSettings",
    "FieldSettings",
    "GaugeSettings",
    "GridSettings",
    "OutputSettings",
    "ResponseSettings",
    "Settings",
    "ShelfBreakSettings",
    "TransectSettings",
    "markdown_settings",
]

#: Missing cells taken as land (`GridSettings.void_is_land`) stand this high above the water, metres: the shoreline of a
#: grid that holds depths only falls between its last wet cell and the next.
VOID_LAND_M: Final = 10.0
_S = TypeVar("_S", bound=BaseModel)


class _Stage(BaseModel):
    """Settings of one stage: frozen, no unknown keys, no infinite numbers."""

    model_config = ConfigDict(extra="forbid", frozen=True, allow_inf_nan=False)


class GridSettings(_Stage):
    """Where the depths come from and how to read them."""

    path: FilePaths = Field(
        description="Bathymetry raster, anything GDAL reads, relative to the settings file; or a list of rasters, the "
        "first that has a depth gives it: tiles of one grid, or fine ones before the coarse one that covers the most."
    )
    positive: Literal["auto", "up", "down"] = Field(
        "auto",
        description="Whether values are elevations (up) or depths (down); auto decides from the file, says why.",
    )
    crs: str | None = Field(
        None, description="Coordinate system, EPSG:n or WKT, only where the file lacks one or has it wrong."
    )
    band: int = Field(1, ge=1, description="Band of the raster.")
    variable: str | None = Field(None, description="Variable of a netCDF file that holds several.")
    level_shift_m: float = Field(
        0.0,
        ge=-500,
        le=500,
        description="How far the water stands above the grid's zero (datum or sea-level change), m.",
    )
    nodata: float | None = Field(None, description="Value that means missing, only where the file does not say.")
    void_is_land: bool = Field(False, description="Take missing cells as land: for grids that hold depths only.")

    @property
    def paths(self) -> tuple[Path, ...]:
        """The rasters, however many."""
        return (self.path,) if isinstance(self.path, Path) else self.path


class CoastSettings(_Stage):
    """How the shoreline becomes the coast that stations stand on."""

    level_m: float = Field(
        0.0,
        ge=-500,
        le=500,
        description="Elevation of the line stations stand on, above the water level, m; transects start at the water.",
    )
    generalise_km: float = Field(
        20.0, ge=0.001, le=500, description="Inlets narrower than this are bridged for the normals, km."
    )
    smallest_island_km2: float = Field(500.0, ge=0, description="Islands below this area get no stations, km2.")
    smallest_sea_km2: float = Field(
        2000.0, ge=0, description="Water that reaches the grid's edge is sea from this area on, km2."
    )
    smallest_enclosed_sea_km2: float = Field(
        100_000.0,
        ge=0,
        description="Water that does not reach the grid's edge is sea from this area on, km2.",
    )
    file: FilePath | None = Field(
        None, description="Vector file: polygons are land, lines are the coast to put stations on."
    )
    layer: str | None = Field(None, description="Layer of that file, where it holds several.")
    box: tuple[float, float, float, float] | None = Field(
        None, description="Part of the grid to put stations on: west, south, east, north, degrees."
    )

    @property
    def generalise_m(self) -> float:
        """`generalise_km` in metres."""
        return self.generalise_km * 1e3

    @model_validator(mode="after")
    def _box_in_order(self) -> Self:
        if self.box is not None:
            check_box(self.box)
        return self


class TransectSettings(_Stage):
    """Where stations stand and how far their transects reach."""

    spacing_km: float = Field(10.0, ge=0.001, le=1000, description="Distance between stations along the coast, km.")
    length_km: float = Field(600.0, ge=0.005, le=3000, description="How far seaward the shelf break is searched, km.")
    step_km: float | None = Field(
        None,
        ge=0.001,
        le=100,
        description="Sample spacing along a transect, km; default the grid's own step, of several grids the finest "
        "one's but at least a quarter of the last one's.",
    )
    file: FilePath | None = Field(None, description="Vector file of transects drawn or edited by hand.")
    layer: str | None = Field(None, description="Layer of that file, where it holds several.")

    @property
    def spacing_m(self) -> float:
        """`spacing_km` in metres."""
        return self.spacing_km * 1e3

    @property
    def length_m(self) -> float:
        """`length_km` in metres."""
        return self.length_km * 1e3

    @model_validator(mode="after")
    def _step_fits(self) -> Self:
        if self.step_km is not None and self.step_km * 5 > self.length_km:
            raise ValueError(f"step_km = {self.step_km}: at most a fifth of length_km = {self.length_km}")
        return self


class ShelfBreakSettings(_Stage):
    """When a steepening counts as the shelf break."""

    slope: float = Field(
        0.01, gt=0, lt=1, description="Gradient at which the continental slope begins (rise over run)."
    )
    confirm_slope: float = Field(
        0.025, gt=0, lt=1, description="Gradient it must reach further on to count; at least `slope`."
    )
    smoothing_km: float = Field(5.0, ge=0.001, le=200, description="Length over which gradients are taken, km.")
    sustain_km: float = Field(
        5.0, ge=0.001, le=200, description="Length over which the gradient must stay above `slope`, km."
    )
    shallowest_m: float = Field(20.0, ge=0, description="Least depth of a shelf break, m.")
    deepest_m: float = Field(550.0, gt=0, description="Greatest depth of a shelf break, m.")
    least_contrast: float = Field(
        2.0, ge=1, description="Least ratio of the gradient beyond the break to that before it."
    )
    ocean_m: float = Field(1000.0, gt=0, description="A transect that gets this deep has reached the open ocean, m.")
    file: FilePath | None = Field(None, description="Vector file of breaks picked by hand: points with transect_id.")
    layer: str | None = Field(None, description="Layer of that file, where it holds several.")

    @property
    def smoothing_m(self) -> float:
        """`smoothing_km` in metres."""
        return self.smoothing_km * 1e3

    @property
    def sustain_m(self) -> float:
        """`sustain_km` in metres."""
        return self.sustain_km * 1e3

    @model_validator(mode="after")
    def _in_order(self) -> Self:
        if not self.shallowest_m < self.deepest_m <= self.ocean_m:
            raise ValueError(
                f"shallowest_m = {self.shallowest_m}, deepest_m = {self.deepest_m}, ocean_m = {self.ocean_m}: "
                "must rise in this order"
            )
        return self


class ResponseSettings(_Stage):
    """Which waves, and the physics of the response."""

    constituents: tuple[ConstituentName, ...] = Field(
        ("M2", "S2", "N2", "K1", "O1"), description="Tidal constituents, by their usual names."
    )
    periods_h: tuple[Annotated[float, Field(ge=0.02, le=1000)], ...] = Field(
        (), max_length=200, description="Further periods, h: seiches, meteotsunamis and tsunamis are just periods."
    )
    rotation: bool = Field(True, description="Whether the Earth turns.")
    friction_m_s: float = Field(1.0e-3, ge=0, le=0.1, description="Linear bottom friction, m/s.")
    drag: float | None = Field(
        None,
        gt=0,
        le=0.1,
        description="Quadratic drag coefficient, used instead of friction_m_s where an amplitude is given.",
    )
    offshore_amplitude_m: dict[ConstituentName, Annotated[float, Field(gt=0, le=20)]] = Field(
        default_factory=dict, description="Amplitude at the deep sea by constituent, m, for the drag."
    )
    deep_m: DeepSea = Field(
        4000.0,
        description="Depth of the deep sea beyond the transect, m; or deepest: the greatest depth on it.",
    )

    @field_validator("offshore_amplitude_m", mode="before")
    @classmethod
    def _each_once(cls, value: object) -> object:
        if isinstance(value, dict) and len({str(name).lower() for name in value}) != len(value):
            raise ValueError(f"{list(value)}: the same constituent stands twice")
        return value

    @model_validator(mode="after")
    def _consistent(self) -> Self:
        if not self.constituents and not self.periods_h:
            raise ValueError("constituents and periods_h are both empty: name at least one wave")
        for name, values in (("constituents", self.constituents), ("periods_h", self.periods_h)):
            if len(set(values)) != len(values):
                raise ValueError(f"{name} = {list(values)}: the same one stands twice")
        if (self.drag is None) != (not self.offshore_amplitude_m):
            raise ValueError("drag and offshore_amplitude_m belong together: give both or none")
        strangers = set(self.offshore_amplitude_m) - set(self.constituents)
        if strangers:
            raise ValueError(f"offshore_amplitude_m names {sorted(strangers)}, not among constituents")
        return self


class DepthErrorSettings(_Stage):
    """How wrong the grid's depths may be: sd = sqrt(fixed_m^2 + (per_depth * depth)^2).

    The form is that of IHO S-44. The defaults are for global grids: two of them, ETOPO1 and ETOPO5, differ on the
    shelves of the Gulf of Maine and the south-eastern United States by a robust sd of 6-14 m in 20-50 m of water,
    16-26 m in 50-100 m and 27-51 m in 100-200 m; the square root of 2 is taken off, as both are in error. A survey to
    Order 2 of S-44 has fixed_m = 0.5, per_depth = 0.012.
    """

    fixed_m: float = Field(
        5.0, ge=0, le=1000, description="Part of the depth error that is the same at all depths, one sd, m."
    )
    per_depth: float = Field(0.12, ge=0, le=1, description="Part that grows with depth, one sd as a share of it.")
    correlation_km: float = Field(
        20.0, ge=0.001, le=2000, description="Distance over which depth errors go together, km."
    )


class GaugeSettings(_Stage):
    """Harmonic constants of the tide at gauges: what the file and its columns are called."""

    file: FilePath | None = Field(
        None, description="CSV table or vector file of points: harmonic constants of tide gauges."
    )
    layer: str | None = Field(None, description="Layer of that file, where it holds several.")
    id_column: ColumnName = Field("id", description="Column that names a gauge; rows are numbered where there is none.")
    lon_column: ColumnName = Field("lon", description="Column of longitudes, degrees, in a table without shapes.")
    lat_column: ColumnName = Field("lat", description="Column of latitudes, degrees, in a table without shapes.")
    amplitude_column: WaveColumns = Field(
        "{name}_amp_m", description="Column of amplitudes; {name} stands for the constituent."
    )
    phase_column: WaveColumns = Field(
        "{name}_phase_deg", description="Column of Greenwich phase lags, degrees; {name} stands for the constituent."
    )
    amplitude_unit: Literal["m", "cm", "mm", "ft"] = Field("m", description="Unit of the amplitudes.")
    reach_km: float = Field(
        15.0,
        ge=0,
        le=1000,
        description="What lies farther than this from the nearest cell of the 2-D region is not compared with it, km: "
        "gauges, points, stations.",
    )

    @model_validator(mode="after")
    def _columns_differ(self) -> Self:
        if self.amplitude_column == self.phase_column:
            raise ValueError(f"amplitude_column and phase_column are both {shown(self.phase_column)}: name two columns")
        return self


Side = Literal["south", "east", "north", "west"]


class FieldSettings(_Stage):
    """The 2-D response of a region: which waters, where they are open, and what is asked of them.

    Constituents, further periods, rotation and friction are those of the response of the transects.
    """

    box: tuple[float, float, float, float] | None = Field(
        None, description="Region: west, south, east, north, degrees; default the whole grid."
    )
    file: FilePath | None = Field(None, description="Vector file of polygons: the region is what lies inside.")
    layer: str | None = Field(None, description="Layer of that file, where it holds several.")
    cell_km: float | None = Field(
        None,
        ge=0.01,
        le=500,
        description="Size of the cells, km: means of whole blocks of the grid's; default its own.",
    )
    open_sides: tuple[Side, ...] | None = Field(
        None,
        description="Sides of the box where its water meets the open sea; default every stretch of water at the "
        "region's edge that gets `open_depth_m` deep.",
    )
    open_file: FilePath | None = Field(
        None, description="Vector file of polygons instead: the region's edge is open inside them."
    )
    open_layer: str | None = Field(None, description="Layer of that file, where it holds several.")
    open_depth_m: float = Field(
        200.0, ge=0, le=11_000, description="Depth that water at the region's edge must reach somewhere to be open, m."
    )
    edge: Literal["radiating", "held"] = Field(
        "radiating",
        description="What an open edge does: lets waves out (radiating), or has an elevation of its own (held).",
    )
    shallowest_m: float = Field(2.0, ge=0, le=1000, description="Shallower cells are taken as land, m.")
    least_depth_m: float = Field(
        10.0,
        ge=0,
        le=1000,
        description="Shallower water that is kept is taken to be this deep, m: channels carry more than a mean depth.",
    )
    drag: float | None = Field(
        2.5e-3,
        gt=0,
        le=0.1,
        description="Quadratic drag coefficient where the tide at the edge is known, from gauges or `edge_tide_m`; "
        "otherwise, or with none, response.friction_m_s holds. Write drag = false for none.",
    )
    edge_tide_m: dict[ConstituentName, Annotated[float, Field(gt=0, le=20)]] = Field(
        default_factory=dict, description="Amplitude of the tide at the open edge by constituent, m, without gauges."
    )
    modes: int = Field(6, ge=0, le=40, description="Natural modes wanted.")
    mode_period_h: float = Field(
        12.42, ge=0.02, le=1000, description="Period near which natural modes are looked for, h."
    )
    points_file: FilePath | None = Field(
        None, description="Vector file of points at which gain is given against period; default the gauges."
    )
    points_layer: str | None = Field(None, description="Layer of that file, where it holds several.")
    spectrum_h: tuple[Annotated[float, Field(ge=0.02, le=1000)], Annotated[float, Field(ge=0.02, le=1000)]] | None = (
        Field(None, description="Shortest and longest period of that curve, h; without it none is made.")
    )
    memory_gb: float = Field(
        4.0, gt=0, le=4096, description="Memory that one wave may take, GB; each worker takes as much."
    )
    folder: FilePath | None = Field(
        None, description="Folder for the maps; default output.path with _field instead of .gpkg."
    )

    @field_validator("drag", mode="before")
    @classmethod
    def _no_drag(cls, value: object) -> object:
        return None if value is False else value

    @model_validator(mode="after")
    def _consistent(self) -> Self:
        if self.box is not None:
            check_box(self.box)
        if self.open_sides is not None and self.open_file is not None:
            raise ValueError("open_sides and open_file are both given: leave one")
        if self.open_sides is not None and len(set(self.open_sides)) != len(self.open_sides):
            raise ValueError(f"open_sides = {list(self.open_sides)}: the same side stands twice")
        if self.spectrum_h is not None and not self.spectrum_h[0] < self.spectrum_h[1]:
            raise ValueError(f"spectrum_h = {list(self.spectrum_h)}: the shorter period comes first")
        return self


class OutputSettings(_Stage):
    """What is written, and where."""

    path: FilePath = Field(Path("coast.gpkg"), description="GeoPackage to write; relative to the settings file.")
    crs: str = Field("EPSG:4326", description="Coordinate system of the layers, EPSG:n.")
    profiles: bool = Field(True, description="Whether the table of depth profiles is written.")
    response_curves: bool = Field(True, description="Whether gain against period is written for each transect.")


class Settings(_Stage):
    """All settings of a run."""

    title: str = Field("", description="A name for the run.")
    grid: GridSettings
    coast: CoastSettings = CoastSettings()
    transects: TransectSettings = TransectSettings()
    shelf_break: ShelfBreakSettings = ShelfBreakSettings()
    response: ResponseSettings = ResponseSettings()
    depth_error: DepthErrorSettings = DepthErrorSettings()
    gauges: GaugeSettings = GaugeSettings()
    field: FieldSettings | None = Field(
        None, description="Section of the 2-D response; without it there are transects only."
    )
    output: OutputSettings = OutputSettings()

    @model_validator(mode="after")
    def _edge_tide_asked_for(self) -> Self:
        given = set(self.field.edge_tide_m) if self.field is not None else set()
        if strangers := given - set(self.response.constituents):
            raise ValueError(f"field.edge_tide_m names {sorted(strangers)}, not among response.constituents")
        return self

    @model_validator(mode="after")
    def _void_below_shoreline(self) -> Self:
        if self.grid.void_is_land and self.coast.level_m >= VOID_LAND_M:
            raise ValueError(
                f"grid.void_is_land with coast.level_m = {self.coast.level_m}: missing cells are read as land "
                f"{VOID_LAND_M:g} m high; give a level_m below that, or move the water with grid.level_shift_m"
            )
        return self

    @classmethod
    def from_toml(cls, path: str | Path) -> Self:
        """Read settings from a TOML file; paths in it are taken from the file's own folder.

        Raises
        ------
        SettingsError
            If the file cannot be read, is no TOML, or any key or value is not allowed; all faults are named.
        """
        path = Path(path)
        try:
            content = tomllib.loads(path.read_text(encoding="utf-8-sig"))
        except OSError as error:
            raise SettingsError(f"settings file {path} cannot be read: {error.strerror}") from error
        except UnicodeDecodeError as error:
            raise SettingsError(f"settings file {path} is no text in UTF-8; save it as UTF-8") from error
        except tomllib.TOMLDecodeError as error:
            raise SettingsError(f"settings file {path} is no valid TOML: {error}") from error
        except RecursionError as error:
            raise SettingsError(f"settings file {path} nests its values too deeply; two levels will do") from error
        return cls.from_dict(content, folder=path.resolve().parent, where=str(path))

    @classmethod
    def from_dict(cls, content: dict[str, Any], *, folder: str | Path = ".", where: str = "settings") -> Self:
        """Check settings given as nested dictionaries; relative paths are taken from `folder`.

        Raises
        ------
        SettingsError
            If any key or value is not allowed; every fault is named, with the nearest right name.

        Examples
        --------
        >>> settings = Settings.from_dict({"grid": {"path": "dem.tif"}}, folder="/data")
        >>> settings.grid.path.as_posix(), settings.transects.spacing_km
        ('/data/dem.tif', 10.0)
        """
        try:
            return _rooted(cls.model_validate(content), Path(folder))
        except ValidationError as error:
            faults = "\n".join(f"  {fault_text(cls, dict(fault))}" for fault in error.errors())
            raise SettingsError(f"{where}: {error.error_count()} setting(s) to mend\n{faults}") from error


def markdown_settings() -> str:
    r"""Table of all settings for README: name, default as TOML, meaning.

    Examples
    --------
    >>> print("\n".join(markdown_settings().splitlines()[:3]))
    | setting | default | meaning |
    |---|---|---|
    | `title` | `""` | A name for the run. |
    """
    return "\n".join(["| setting | default | meaning |", "|---|---|---|", *setting_rows(Settings, "")])


def _rooted(settings: _S, folder: Path) -> _S:
    """Return the same settings with every relative path standing in `folder`."""
    update: dict[str, object] = {}
    for name in type(settings).model_fields:
        value = getattr(settings, name)
        if isinstance(value, BaseModel):
            update[name] = _rooted(value, folder)
        elif isinstance(value, Path):
            update[name] = folder / value
        elif name == "path" and isinstance(value, tuple):
            update[name] = tuple(folder / path for path in value)
    return settings.model_copy(update=update)
