"""THE column table: every column of every layer, its unit, its meaning and what an empty value means.

The GeoPackage schema, its metadata, README's tables and the tests all read this module; a column that is not here
is not written.
"""

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
from types import MappingProxyType
from typing import Final, Literal

from shelfmap.errors import LayerError
from shelfmap.words import wave_title

__all__ = [
    "COLUMNS",
    "LAYERS",
    "Column",
    "LayerKind",
    "columns_of",
    "markdown_table",
]

Dtype = Literal["int64", "float64", "str", "bool"]
GeometryKind = Literal["line", "point"]


@dataclass(frozen=True, slots=True, kw_only=True)
class LayerKind:
    """One layer of the output: what it is called and what its rows are.

    Parameters
    ----------
    title, description : str
        For people: the layer's name in a GIS and one sentence on its rows.
    geometry : {"line", "point"} or None
        What each row is drawn as; None for a table.
    """

    title: str
    description: str
    geometry: GeometryKind | None = None


#: Every layer shelfmap writes, by name, in the order of the file.
LAYERS: Final[Mapping[str, LayerKind]] = MappingProxyType({
    "coast_index": LayerKind(
        title="Coast by resonance index",
        description="Pieces of shoreline, one per station, carrying the index: the layer to colour.",
        geometry="line",
    ),
    "transects": LayerKind(
        title="Shore-normal transects",
        description="Lines from the shoreline seaward, one per station, with all results.",
        geometry="line",
    ),
    "shelf_breaks": LayerKind(
        title="Shelf breaks",
        description="The shelf break on each transect that has one.",
        geometry="point",
    ),
    "profiles": LayerKind(
        title="Depth profiles",
        description="Depth along each transect, one row per sample.",
    ),
    "response": LayerKind(
        title="Response by period",
        description="Gain and lag of each transect, one row per wave and per point of its response curve.",
    ),
    "gauges": LayerKind(
        title="Tide gauges against the 2-D response",
        description="Gauges, the tide observed at each, and what the 2-D response makes of it, fitted and left out.",
        geometry="point",
    ),
    "natural_modes": LayerKind(
        title="Natural modes of the region",
        description="Free modes that a tide at the open edge drives, each where its water level swings most.",
        geometry="point",
    ),
    "field_waves": LayerKind(
        title="2-D response by wave",
        description="What came of each wave: its largest gain, its edge tide, how well gauges are met.",
    ),
    "field_curves": LayerKind(
        title="2-D gain by period",
        description="Gain and lag against period at gauges or chosen points.",
    ),
    "coast_lines": LayerKind(
        title="Generalised coast",
        description="The coast that stations stand on, sea on the right hand: to edit and give back.",
        geometry="line",
    ),
    "transect_lines": LayerKind(
        title="Transects to edit",
        description="Lines from the shoreline seaward, one per station: to edit and give back.",
        geometry="line",
    ),
    "run": LayerKind(
        title="How this was made",
        description="Settings, versions, sources, counts and cautions of the run.",
    ),
})  # fmt: skip


@dataclass(frozen=True, slots=True, kw_only=True)
class Column:
    """One column: what it is called, what it means, what an empty value means.

    Parameters
    ----------
    name : str
        Column name, lower case; ``{wave}`` in it makes a template, one column per wave.
    dtype : {"int64", "float64", "str", "bool"}
        Kind of value.
    unit : str
        Unit of the value; empty for text and pure numbers.
    alias : str
        Human title, with the unit in square brackets.
    meaning : str
        One sentence in the user's words.
    null_means : str
        What an empty value means; empty where there is always a value.
    layers : tuple of str
        Layers that hold the column.
    stage : str
        Module that computes it.
    """

    name: str
    dtype: Dtype
    unit: str
    alias: str
    meaning: str
    null_means: str
    layers: tuple[str, ...]
    stage: str

    @property
    def is_template(self) -> bool:
        """True where the column stands once for each wave."""
        return "{wave}" in self.name


#: Stage of the columns that the 2-D response adds to layers of transects.
JOINED: Final = "joining"

_LINES = ("coast_index", "transects")
_TRANSECTS = ("transects",)
_BREAKS = ("shelf_breaks",)
_LAID = ("transects", "transect_lines")
_DRAWN = ("coast_index", "transects", "shelf_breaks")
_KEYED = ("coast_index", "transects", "shelf_breaks", "profiles", "response", "transect_lines")

_NO_BREAK = "No shelf break: see status."
_NO_PERIOD = "No shelf break, or nothing was computed on this transect: see status and note."
_NO_BREAK_FIGURE = "No shelf break, or too little around it to say."
_NO_MODE = "Mode not found or no usable profile: see status."
_NO_INDEX = "No index at any constituent: see status and note."
_NO_WAVE_INDEX = "No shelf with a break (see status), no mode that swings, or a wave without a gain: see note."
_NO_WAVE = "No usable profile (see status), or a wave too slow for the latitude or too short to compute: see note."

_NO_CELL = "No cell of the 2-D region in reach."
_NO_TIDE = "No cell of the 2-D region in reach, or the tide at its edge is not known."

_NO_CONSTANT = "Not given for this gauge."
_NO_FIT = "Out of reach, or no gauge has the constituent."
_NO_GAUGE = "No gauge in reach has the constituent."

_Row = tuple[str, Dtype, str, str, str, str]

# One block per stage and set of layers; a row is name, dtype, unit, title, meaning, meaning of an empty value.
# fmt: off
_TABLE: Final[tuple[tuple[str, tuple[str, ...], tuple[_Row, ...]], ...]] = (
    ("transects", _KEYED, (
        ("transect_id", "int64", "", "Transect number",
         "Number of the transect, the same in every layer.", ""),
    )),
    ("coast", (*_DRAWN, "transect_lines"), (
        ("coast_part", "int64", "", "Part of the coast",
         "Number of the stretch of coast the station stands on.",
         "Transect drawn by hand, away from the coast line."),
        ("coast_km", "float64", "km", "Distance along the coast",
         "Distance of the station along its stretch of the generalised coast.",
         "Transect drawn by hand, away from the coast line."),
    )),
    ("transects", _LAID, (
        ("lon_deg", "float64", "deg", "Longitude of the shore end",
         "Longitude where the transect leaves the shore.", ""),
        ("lat_deg", "float64", "deg", "Latitude of the shore end",
         "Latitude where the transect leaves the shore.", ""),
        ("bearing_deg", "float64", "deg", "Seaward bearing",
         "Compass bearing of the transect at the shore, seaward, clockwise from north.", ""),
        ("search_km", "float64", "km", "Search length", "How far seaward the transect was to be followed.", ""),
        ("length_km", "float64", "km", "Wet length used",
         "Length of the transect over water that was used.", "No water was found: see status."),
        ("end_reason", "str", "", "Why the transect ends", "What ended the transect at its seaward end.",
         "The transect has no seaward end: see status."),
    )),
    ("transects", _TRANSECTS, (
        ("crosses", "bool", "", "Crosses another",
         "Whether it crosses another transect of the same stretch of coast before the break.", ""),
    )),
    ("shelfbreak", _BREAKS, (
        ("lon_deg", "float64", "deg", "Longitude of the break", "Longitude of the shelf break.", ""),
        ("lat_deg", "float64", "deg", "Latitude of the break", "Latitude of the shelf break.", ""),
    )),
    ("pipeline", _DRAWN, (
        ("status", "str", "", "What came of the transect",
         "One word for whether the results hold and, if not, why.", ""),
        ("note", "str", "", "Remarks", "Anything else to know about this transect.", "Nothing to remark."),
    )),
    ("index", _LINES, (
        ("index_max", "float64", "", "Resonance index, largest",
         "Largest index over the constituents (periods if none is asked for): 0 not tuned, 1 tuned and leak-proof.",
         _NO_INDEX),
        ("index_constituent", "str", "", "Wave with the largest index",
         "Constituent that has the largest index.", _NO_INDEX),
        ("index_mode", "int64", "", "Mode with the largest index",
         "Number of the natural mode behind the largest index, 1 the slowest.", _NO_INDEX),
        ("index_class", "str", "", "Resonance class", "The largest index as a word, for colouring.", _NO_INDEX),
        ("tuning", "float64", "", "Tuning to that mode",
         "How close the wave is to that mode's period, from 0 to 1; index = tuning x strength.", _NO_INDEX),
        ("strength", "float64", "", "Strength of that mode",
         "How well that mode holds its energy on the shelf, from 0 to 1.", _NO_INDEX),
        ("confidence", "str", "", "Confidence in the index",
         "How far the index can be trusted here.", _NO_INDEX),
    )),
    ("shelfbreak", _DRAWN, (
        ("shelf_width_km", "float64", "km", "Shelf width", "Distance from the shore to the shelf break.", _NO_BREAK),
        ("break_depth_m", "float64", "m", "Depth of the break", "Water depth at the shelf break.", _NO_BREAK),
    )),
    ("shelfbreak", ("transects", "shelf_breaks"), (
        ("break_contrast", "float64", "", "Contrast of the break",
         "Slope beyond the break over slope before it: the larger, the clearer the break.", _NO_BREAK_FIGURE),
        ("break_spread_km", "float64", "km", "Spread of the break",
         "How far the break moves over a band of thresholds and smoothing lengths.", _NO_BREAK_FIGURE),
    )),
    ("shelfbreak", _BREAKS, (
        ("slope_before", "float64", "", "Slope before the break",
         "Mean gradient of the outer shelf (rise over run).", _NO_BREAK_FIGURE),
        ("slope_beyond", "float64", "", "Slope beyond the break",
         "Mean gradient of the upper continental slope (rise over run).", _NO_BREAK_FIGURE),
        ("picked", "bool", "", "Picked by hand", "Whether the break was given by the user and not found here.", ""),
    )),
    ("response", _TRANSECTS, (
        ("mean_depth_m", "float64", "m", "Mean depth of the shelf",
         "Mean water depth from shore to break.", _NO_PERIOD),
        ("travel_time_h", "float64", "h", "Travel time over the shelf",
         "Time a long wave takes from the break to the shore.", _NO_PERIOD),
        ("quarter_wave_h", "float64", "h", "Four travel times",
         "Four travel times, without rotation: a first guess that is too long for a sloping shelf.", _NO_PERIOD),
    )),
    ("response", _LINES, (
        ("period1_h", "float64", "h", "Natural period, mode 1",
         "Slowest natural period of the shelf, with a node at the break.", _NO_PERIOD),
        ("period1_sd_h", "float64", "h", "Natural period, mode 1, error",
         "One standard deviation of that period from errors of depth and break position.", _NO_PERIOD),
    )),
    ("response", _TRANSECTS, (
        ("pole1_h", "float64", "h", "Period with leakage, mode 1",
         "Period of the slowest mode of shelf and deep sea together, without friction.", _NO_MODE),
    )),
    ("response", _LINES, (
        ("q1", "float64", "", "Quality factor, mode 1",
         "Q of the slowest mode from leakage to the deep sea alone: a free swing falls to 1/e in Q/pi cycles.",
         _NO_MODE),
    )),
    ("response", _TRANSECTS, (
        ("damped_q1", "float64", "", "Quality factor with friction, mode 1",
         "Q of the slowest mode with friction.", _NO_MODE),
        ("period2_h", "float64", "h", "Natural period, mode 2",
         "Second natural period, node at the break.", _NO_PERIOD),
        ("pole2_h", "float64", "h", "Period with leakage, mode 2",
         "Period of the second mode of shelf and deep sea.", _NO_MODE),
        ("q2", "float64", "", "Quality factor, mode 2", "Q of the second mode from leakage alone.", _NO_MODE),
        ("period3_h", "float64", "h", "Natural period, mode 3",
         "Third natural period, node at the break.", _NO_PERIOD),
        ("pole3_h", "float64", "h", "Period with leakage, mode 3",
         "Period of the third mode of shelf and deep sea.", _NO_MODE),
        ("q3", "float64", "", "Quality factor, mode 3", "Q of the third mode from leakage alone.", _NO_MODE),
        ("current_antinode_km", "float64", "km", "Strongest currents, mode 1",
         "Distance from the shore where the slowest mode drives its strongest currents.", _NO_PERIOD),
        ("kernel_peak_share", "float64", "", "Weight of the heaviest cell",
         "Largest share of one sample in the slowest period: above 0.05 a single shoal may decide it.", _NO_PERIOD),
        ("deep_m", "float64", "m", "Depth of the deep sea",
         "Depth of the sea taken beyond the transect.", "No usable profile: see status."),
        ("friction_m_s", "float64", "m/s", "Bottom friction",
         "Linear friction; constituents with an offshore amplitude use drag instead, see run.",
         "No usable profile: see status."),
    )),
    ("profiles", _TRANSECTS, (
        ("n_bridged", "int64", "", "Land samples bridged", "Number of dry samples bridged inside the transect.", ""),
        ("n_filled", "int64", "", "Missing samples filled", "Number of missing depths filled in.", ""),
        ("n_despiked", "int64", "", "Spikes removed", "Number of single shoal or pit samples smoothed away.", ""),
        ("fetch_km", "float64", "km", "Distance to facing land",
         "Distance from the shore to the land on the other side.", "No land faces it within the search length."),
    )),
    ("response", _LINES, (
        ("gain_{wave}", "float64", "", "Gain at {wave}",
         "Amplitude of {wave} at the shore over that at a straight wall in the deep sea, without friction.", _NO_WAVE),
        ("damped_gain_{wave}", "float64", "", "Gain with friction at {wave}",
         "The same gain of {wave} with friction.", _NO_WAVE),
        ("lag_{wave}_deg", "float64", "deg", "Lag at {wave}",
         "How much later {wave} peaks at the shore than at a wall at the profile's deep end, with friction.",
         _NO_WAVE),
        ("edge_ratio_{wave}", "float64", "", "Shore over break at {wave}",
         "Amplitude of {wave} at the shore over that at the break: what a pair of gauges would see.",
         "No shelf break, no usable profile, or the break lies near a node."),
    )),
    ("index", _LINES, (
        ("index_{wave}", "float64", "", "Resonance index at {wave}",
         "Tuning x strength at {wave}, the largest over the first three modes.", _NO_WAVE_INDEX),
    )),
    (JOINED, _LINES, (
        ("field_ratio", "float64", "", "2-D gain over that of the transect",
         "Gain in two dimensions over that of the transect, both with friction, at the first wave that has both: 1 "
         "where the transect's picture holds.",
         "No cell of the 2-D region in reach, or no gain of the transect."),
        ("field_gain_{wave}", "float64", "", "2-D gain at {wave}",
         "Amplitude of {wave} at the shore over that of the same tide all along the region's open edge, in two "
         "dimensions, with friction.", _NO_CELL),
        ("field_lag_{wave}_deg", "float64", "deg", "2-D lag at {wave}",
         "How much later {wave} peaks at the shore than at the region's open edge, -180 to 180.", _NO_CELL),
        ("field_tide_{wave}_m", "float64", "m", "2-D amplitude of {wave}",
         "Amplitude of {wave} at the shore, its edge tide fitted to the gauges or given.", _NO_TIDE),
        ("field_phase_{wave}_deg", "float64", "deg", "2-D phase of {wave}",
         "Greenwich phase lag of {wave} at the shore, its edge tide fitted to the gauges, 0 to 360.", _NO_TIDE),
    )),
    ("profiles", ("profiles",), (
        ("distance_km", "float64", "km", "Distance from the shore", "Distance of the sample along the transect.", ""),
        ("lon_deg", "float64", "deg", "Longitude of the sample", "Longitude of the sample.", ""),
        ("lat_deg", "float64", "deg", "Latitude of the sample", "Latitude of the sample.", ""),
        ("depth_m", "float64", "m", "Water depth",
         "Depth used, positive down, 0 at the shoreline.", ""),
        ("filled", "bool", "", "Filled or mended", "Whether the depth was bridged, filled or despiked, not read.", ""),
        ("period1_kernel_per_km", "float64", "1/km", "Hold on the slowest period",
         "Share per km of this stretch of seabed in the slowest period, 0 beyond the break: where it is large, a "
         "survey pays.", "No shelf break: see status."),
    )),
    ("response", ("response",), (
        ("wave", "str", "", "Constituent", "Name of the constituent; no letters for other periods.", ""),
        ("kind", "str", "", "Kind of row",
         "Whether the row is a constituent, a period asked for or part of a curve.", ""),
        ("period_h", "float64", "h", "Wave period", "Period of the wave.", ""),
        ("gain", "float64", "", "Gain without friction",
         "Amplitude at the shore over that at a straight wall in the deep sea, without friction.", _NO_WAVE),
        ("damped_gain", "float64", "", "Gain with friction", "The same gain with friction.", _NO_WAVE),
        ("lag_deg", "float64", "deg", "Lag with friction",
         "How much later the wave peaks at the shore than at a wall at the profile's deep end, -180 to 180.", _NO_WAVE),
        ("edge_ratio", "float64", "", "Shore over break",
         "Amplitude at the shore over that at the break.",
         "No shelf break, no usable profile, or the break lies near a node."),
        ("index", "float64", "", "Resonance index",
         "Tuning x strength, the largest over the first three modes.",
         "No index for this wave, or a row of the response curve."),
    )),
    ("fieldlayers", ("gauges",), (
        ("gauge", "str", "", "Name of the gauge", "What the gauge is called.", ""),
        ("lon_deg", "float64", "deg", "Longitude", "Longitude of the gauge.", ""),
        ("lat_deg", "float64", "deg", "Latitude", "Latitude of the gauge.", ""),
        ("gauge_use", "str", "", "What came of it", "How the gauge was used, and whether the others bear it out.", ""),
        ("cell_away_km", "float64", "km", "Distance to its cell",
         "Distance to the centre of the nearest cell of water, which stands for the gauge.", ""),
        ("cell_depth_m", "float64", "m", "Depth of its cell", "Depth of that cell, as it was used.", "Out of reach."),
        ("note", "str", "", "Remarks", "What is odd about the gauge.", "Nothing to remark."),
        ("field_gain_{wave}", "float64", "", "2-D gain at {wave}",
         "Amplitude of {wave} at its cell over that of the same tide all along the region's open edge.", _NO_CELL),
        ("observed_{wave}_m", "float64", "m", "Observed amplitude of {wave}", "Amplitude of {wave} as observed.",
         _NO_CONSTANT),
        ("observed_{wave}_deg", "float64", "deg", "Observed phase of {wave}",
         "Greenwich phase lag of {wave} as observed, 0 to 360.", _NO_CONSTANT),
        ("fitted_{wave}_m", "float64", "m", "Fitted amplitude of {wave}",
         "Amplitude of {wave} with the edge tide fitted to all gauges.", _NO_FIT),
        ("fitted_{wave}_deg", "float64", "deg", "Fitted phase of {wave}",
         "Greenwich phase lag of {wave} with the edge tide fitted to all gauges, 0 to 360.", _NO_FIT),
        ("left_out_{wave}_m", "float64", "m", "Predicted amplitude of {wave}",
         "Amplitude of {wave} with the edge tide fitted to all other gauges.", _NO_FIT),
        ("left_out_{wave}_deg", "float64", "deg", "Predicted phase of {wave}",
         "Greenwich phase lag of {wave} with the edge tide fitted to all other gauges, 0 to 360.", _NO_FIT),
        ("left_out_error_{wave}_m", "float64", "m", "Error of prediction of {wave}",
         "Length of the difference of the observed vector of {wave} and the one predicted from the other gauges.",
         "The gauge does not have it, or there was no fit."),
        ("expected_error_{wave}_m", "float64", "m", "Expected error of {wave}",
         "One standard deviation of that difference, local error included.", _NO_FIT),
    )),
    ("fieldlayers", ("natural_modes",), (
        ("mode", "int64", "", "Number of the mode", "Number of the mode, 1 the one that an edge tide drives most.", ""),
        ("period_h", "float64", "h", "Natural period", "Period of the mode, with friction.", ""),
        ("q", "float64", "", "Quality factor", "Quality factor: its swing falls by e in Q / pi periods.", ""),
        ("response", "float64", "", "How strongly it answers",
         "Root mean square over the region of what the mode adds to a unit edge tide at its own period.", ""),
        ("largest", "float64", "", "Its largest swing", "The largest of that, at this point.", ""),
        ("participation", "float64", "", "Share of the first mode's response", "Response over that of mode 1.", ""),
        ("map", "str", "", "File of the map", "Name of its map.", "No maps were written."),
    )),
    ("fieldlayers", ("field_waves",), (
        ("wave", "str", "", "Constituent", "Name of the constituent; no letters for other periods.", ""),
        ("period_h", "float64", "h", "Wave period", "Period of the wave.", ""),
        ("largest_gain", "float64", "", "Largest gain", "Largest amplitude over that of the same tide all along the "
         "open edge.", ""),
        ("largest_lon_deg", "float64", "deg", "Longitude of it", "Longitude of the cell with the largest gain.", ""),
        ("largest_lat_deg", "float64", "deg", "Latitude of it", "Latitude of the cell with the largest gain.", ""),
        ("edge_tide_m", "float64", "m", "Size of the edge tide",
         "Standard deviation of the edge tide that makes the gauges most likely.", _NO_GAUGE),
        ("local_error_m", "float64", "m", "Local error",
         "Root mean square of what gauges show and cells do not.", _NO_GAUGE),
        ("n_gauges", "int64", "", "Gauges fitted", "Gauges in reach that have the constituent.", ""),
        ("n_off", "int64", "", "Gauges off", "Those of them that the others do not bear out.", ""),
        ("explained_fitted", "float64", "", "Explained, fitted",
         "Share of the tide at the gauges that the fit explains.", _NO_GAUGE),
        ("explained_left_out", "float64", "", "Explained, left out",
         "The same share, each gauge predicted from all others.", _NO_GAUGE),
        ("map", "str", "", "File of the map", "Name of its map.", "No maps were written."),
    )),
    ("fieldlayers", ("field_curves",), (
        ("point", "str", "", "Name of the point", "Gauge, or number of the chosen point.", ""),
        ("lon_deg", "float64", "deg", "Longitude", "Longitude of the point.", ""),
        ("lat_deg", "float64", "deg", "Latitude", "Latitude of the point.", ""),
        ("period_h", "float64", "h", "Wave period", "Period of the wave.", ""),
        ("gain", "float64", "", "2-D gain", "Amplitude over that of the same tide all along the open edge.",
         "No cell of the region in reach."),
        ("lag_deg", "float64", "deg", "2-D lag",
         "How much later the wave peaks than at the open edge, -180 to 180.", "No cell of the region in reach."),
    )),
    ("coast", ("coast_lines",), (
        ("coast_part", "int64", "", "Part of the coast", "Number of the stretch of coast, 1 the longest.", ""),
        ("length_km", "float64", "km", "Length", "Length of the stretch.", ""),
        ("closed", "bool", "", "Goes round", "Whether it goes round: an island, or a sea with land all round.", ""),
    )),
    ("pipeline", ("run",), (
        ("topic", "str", "", "What it is about", "Settings, versions, sources, counts or cautions.", ""),
        ("name", "str", "", "What is told", "Name of the setting, program, file or count.", ""),
        ("value", "str", "", "What it says", "Its value, as text.", "Not set."),
    )),
)
# fmt: on

#: The column table, templates unexpanded, in the order of the files.
COLUMNS: Final[tuple[Column, ...]] = tuple(
    Column(
        name=name,
        dtype=dtype,
        unit=unit,
        alias=f"{title} [{unit}]" if unit else title,
        meaning=meaning,
        null_means=null_means,
        layers=layers,
        stage=stage,
    )
    for stage, layers, rows in _TABLE
    for name, dtype, unit, title, meaning, null_means in rows
)


def columns_of(layer: str, waves: Sequence[str] = (), *, with_field: bool = False) -> tuple[Column, ...]:
    """Columns of one layer in order, the templates expanded for each wave.

    Parameters
    ----------
    layer : str
        One of `LAYERS`.
    waves : sequence of str
        Labels from `shelfmap.words.wave_label`, in the order wanted.
    with_field : bool
        Whether the 2-D response is there too, and its columns on the layers of transects.

    Raises
    ------
    LayerError
        If the layer is unknown, a label is none, or the same label stands twice.

    Examples
    --------
    >>> [column.name for column in columns_of("coast_index", ["m2"])][-5:]
    ['gain_m2', 'damped_gain_m2', 'lag_m2_deg', 'edge_ratio_m2', 'index_m2']
    """
    if layer not in LAYERS:
        raise LayerError(f"layer {layer!r} is unknown; the layers are {', '.join(LAYERS)}")
    if len(set(waves)) != len(waves):
        raise LayerError(f"waves {list(waves)}: the same one stands twice; name each wave once")
    here = [column for column in COLUMNS if layer in column.layers and (with_field or column.stage != JOINED)]
    fixed = [column for column in here if not column.is_template]
    titles = {wave: wave_title(wave) for wave in waves}
    expanded = [
        replace(
            column,
            name=column.name.format(wave=wave),
            alias=column.alias.format(wave=title),
            meaning=column.meaning.format(wave=title),
        )
        for wave, title in titles.items()
        for column in here
        if column.is_template
    ]
    return (*fixed, *expanded)


def markdown_table(layer: str) -> str:
    """Table of one layer's columns for README, templates shown with ``{wave}``.

    Examples
    --------
    >>> print(markdown_table("run").splitlines()[2])
    | `topic` | What it is about | Settings, versions, sources, counts or cautions. | - |
    """
    columns_of(layer)  # refuses unknown layers
    rows = [
        f"| `{column.name}` | {column.alias} | {column.meaning} | {column.null_means or '-'} |"
        for column in COLUMNS
        if layer in column.layers
    ]
    return "\n".join(["| column | title [unit] | meaning | empty means |", "|---|---|---|---|", *rows])
