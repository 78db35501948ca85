"""Every layer and every column of the results: title, quantity, meaning. Needs nothing but Python.

This one list drives the GeoPackage and its column descriptions, the page ``docs/layers.md`` and the
tests. A new layer or column is one entry here; the page is written anew by
``python -m terrain2q.columns > docs/layers.md``.
"""

from __future__ import annotations

from dataclasses import dataclass
from types import MappingProxyType

from terrain2q.units import SI, US, UnitSystem

CAUTION = (
    "Screening estimates; no substitute for a study by a licensed engineer. Local codes and the "
    "floodplain authority decide."
)
"""The line that goes with every result."""


@dataclass(frozen=True)
class Column:
    """One column, wherever it occurs.

    Attributes
    ----------
    name : str
        Its name in the layers.
    dtype : type
        ``str``, ``float`` or ``int``.
    quantity : str
        A quantity of :mod:`terrain2q.units`, which gives the unit.
    title : str
        Its name in words, for a heading.
    meaning : str
        One or two sentences.
    """

    name: str
    dtype: type
    quantity: str
    title: str
    meaning: str


@dataclass(frozen=True)
class Layer:
    """One layer of the results.

    Attributes
    ----------
    name : str
        Its name in the GeoPackage.
    geometry : str
        ``LineString ZM``, ``LineString``, ``MultiLineString``, ``MultiPolygon``, ``Point``, or empty for a
        table.
    title : str
        What it shows, for a heading.
    meaning : str
        What one row is.
    columns : tuple of str
        Names of its columns, in order.
    shape : str
        What the geometry is; empty for a table.
    """

    name: str
    geometry: str
    title: str
    meaning: str
    columns: tuple[str, ...]
    shape: str = ""


def _by_name(*entries):
    return MappingProxyType({entry.name: entry for entry in entries})


_RATING = (
    "stage", "depth", "discharge", "flow_area", "wetted_perimeter", "hydraulic_radius", "top_width",
    "mean_velocity", "froude", "conveyance", "alpha", "beta",
)  # fmt: skip

LAYERS: MappingProxyType[str, Layer] = _by_name(
    Layer(
        "sections",
        "LineString ZM",
        "Sections",
        "One row for each cut line, stored from left to right looking downstream.",
        (
            "section_id", "stream", "stream_distance", "lowest_ground", "slope", "slope_source", "length",
            "points", "findings",
        ),
        "The sampled profile: z is the elevation of the ground, m the station along the cut line.",
    ),
    Layer(
        "subareas",
        "LineString",
        "Subareas",
        "One row for each subarea of a section: a stretch with one roughness.",
        ("section_id", "subarea", "zone", "land_class", "n", "n_source", "start_station", "end_station"),
        "The stretch of the cut line that the subarea covers.",
    ),
    Layer(
        "ratings",
        "",
        "Ratings",
        "One row for each section at a stage. At a bank's top there are two rows of the same stage: before "
        "and after the hollow behind the bank fills.",
        ("section_id", *_RATING),
    ),
    Layer(
        "design_stages",
        "MultiLineString",
        "Design stages",
        "One row for each section at an event. A row of status failed keeps its place with empty numbers.",
        ("section_id", "event", *_RATING, "slope", "critical_stage", "channel_share", "status"),
        "The wetted part of the section.",
    ),
    Layer(
        "subarea_flows",
        "",
        "Flows by subarea",
        "One row for each subarea of a section at an event.",
        (
            "section_id", "event", "subarea", "stage", "flow_area", "wetted_perimeter", "conveyance",
            "discharge", "mean_velocity", "share",
        ),
    ),
    Layer(
        "crossings",
        "Point",
        "Crossings",
        "One row for each crossing of a road and a stream at an event; only where crossings were asked for. "
        "A row of status failed keeps its place with empty numbers.",
        (
            "crossing_id", "road", "stream", "event", "discharge", "stage", "crest", "freeboard",
            "crest_discharge", "first_event_over", "required_opening", "verdict", "rank", "status",
            "probability", "opening_share", "road_width_under_water", "largest_depth_on_road",
            "weir_discharge", "tailwater_stage", "overflow_station", "slope", "approach_distance",
        ),
        "Where the road meets the stream.",
    ),
    Layer(
        "flood_extent",
        "MultiPolygon",
        "Flood extent",
        "One row for each event; only where an extent was asked for.",
        ("event", "area", "largest_depth", "boundary_points", "boundary_within_tolerance"),
        "The ground under water between the first and the last section of each stream.",
    ),
    Layer(
        "low_not_joined",
        "MultiPolygon",
        "Low ground not joined",
        "One row for each event; only where an extent was asked for.",
        ("event", "area", "largest_depth"),
        "Ground below the water's level that the stream does not reach over the ground.",
    ),
    Layer(
        "required_widths",
        "LineString",
        "Required widths",
        "One row for each side of a section at an event; of a study with [bench] and flows.",
        ("section_id", "event", "discharge", "stage", "side", "width", "discharge_before", "status"),
        "The bench in plan, from the channel bank to the top of its outer slope; empty where none is needed.",
    ),
    Layer(
        "findings",
        "Point",
        "Findings",
        "One row for each thing a reviewer must know about one place.",
        ("code", "severity", "layer", "feature_id", "message", "remedy"),
        "The place; empty where a finding has none.",
    ),
    Layer(
        "road_profiles",
        "",
        "Road profiles",
        "One row for each point of the road at a crossing, in crossing_sections.gpkg.",
        ("crossing_id", "station", "road_elevation"),
    ),
    Layer(
        "crossing_steps",
        "",
        "Steps at crossings",
        "One row for each crossing at an event, in crossing_sections.gpkg: what its numbers are worked out "
        "with.",
        (
            "crossing_id", "event", "discharge", "event_probability", "weir_coefficient",
            "tailwater_distance", "allowed_stage", "opening_start", "opening_end", "opening_narrower",
            "opening_most", "opening_width",
        ),
    ),
    Layer(
        "opening_parts",
        "",
        "Required openings by subarea",
        "One row for each subarea of the approach section within the required opening, in "
        "crossing_sections.gpkg.",
        (
            "crossing_id", "event", "subarea", "n", "flow_area", "wetted_perimeter", "conveyance",
            "discharge",
        ),
    ),
)  # fmt: skip
"""The layers in the order in which they are written."""

COLUMNS: MappingProxyType[str, Column] = _by_name(
    # --- which place, which event ----------------------------------------------------------------
    Column("section_id", str, "text", "Section", "Id of the cut line, as its layer gives it."),
    Column(
        "stream",
        str,
        "text",
        "Stream",
        "Id of the stream that the cut line crosses; empty where none is known.",
    ),
    Column("event", str, "text", "Event", "Name of the design flow."),
    Column(
        "subarea",
        int,
        "count",
        "Subarea",
        "Number of the subarea in its section, from 1 at the left looking downstream.",
    ),
    Column(
        "zone",
        str,
        "text",
        "Zone",
        "left floodplain, channel or right floodplain; empty where the section is not divided.",
    ),
    Column(
        "status",
        str,
        "text",
        "Status",
        "ok; doubtful: there is an answer, read the findings before using it; failed: there is no answer.",
    ),
    # --- a section ---------------------------------------------------------------------------------
    Column(
        "stream_distance",
        float,
        "length",
        "Stream distance",
        "Distance along the stream line from its upstream end to the section, downstream positive; empty "
        "where the stream is not known.",
    ),
    Column(
        "lowest_ground", float, "length", "Lowest ground", "Elevation of the lowest ground of the channel."
    ),
    Column(
        "slope",
        float,
        "ratio",
        "Slope",
        "Friction slope used in Manning's equation: fall over distance along the stream.",
    ),
    Column(
        "slope_source",
        str,
        "text",
        "Source of slope",
        "Where the slope comes from: the key or the field that gave it.",
    ),
    Column(
        "length",
        float,
        "length",
        "Length",
        "Ground distance along the cut line from its left end to its right end.",
    ),
    Column("points", int, "count", "Points", "Number of points of the sampled profile."),
    Column(
        "findings",
        int,
        "count",
        "Findings",
        "Number of findings about this section; they are in the layer findings.",
    ),
    # --- a subarea ---------------------------------------------------------------------------------
    Column(
        "land_class",
        str,
        "text",
        "Land class",
        "Class of the land cover; empty where the roughness does not come from a class.",
    ),
    Column(
        "n",
        float,
        "roughness",
        "Manning's n",
        "Roughness used. Its tabulated value is the same in metres and in feet.",
    ),
    Column(
        "n_source",
        str,
        "text",
        "Source of n",
        "Where the roughness comes from: a table's row, the channel's own value or the default.",
    ),
    Column(
        "start_station",
        float,
        "length",
        "Start station",
        "Station of the subarea's left end, from the section's left end.",
    ),
    Column(
        "end_station",
        float,
        "length",
        "End station",
        "Station of the subarea's right end, from the section's left end.",
    ),
    # --- water -------------------------------------------------------------------------------------
    Column(
        "stage",
        float,
        "length",
        "Stage",
        "Elevation of the water surface in the channel; in subarea_flows, of the water over that subarea; in "
        "required_widths, the stage that is allowed; in crossings, at the road's upstream edge.",
    ),
    Column("depth", float, "length", "Depth", "Stage minus the lowest ground of the channel."),
    Column(
        "discharge",
        float,
        "flow",
        "Discharge",
        "Flow through the section; in subarea_flows, through that subarea.",
    ),
    Column(
        "flow_area",
        float,
        "area",
        "Flow area",
        "Area of flowing water in the plane of the section; in subarea_flows, in that subarea.",
    ),
    Column(
        "wetted_perimeter",
        float,
        "length",
        "Wetted perimeter",
        "Length of ground under water along the profile. A face of water between subareas does not count.",
    ),
    Column(
        "hydraulic_radius",
        float,
        "length",
        "Hydraulic radius",
        "Flow area divided by wetted perimeter, of the whole section.",
    ),
    Column(
        "top_width",
        float,
        "length",
        "Top width",
        "Width of the water surface along the section, dry ground left out.",
    ),
    Column("mean_velocity", float, "velocity", "Mean velocity", "Discharge divided by flow area."),
    Column(
        "froude",
        float,
        "ratio",
        "Froude number",
        "Mean velocity over the speed of a small wave, from the hydraulic depth (flow area over top "
        "width) and alpha. Above 1 flow is supercritical.",
    ),
    Column(
        "conveyance",
        float,
        "flow",
        "Conveyance",
        "Discharge over the square root of the slope; the sum over subareas. In subarea_flows, of that "
        "subarea.",
    ),
    Column(
        "alpha",
        float,
        "ratio",
        "Velocity-head coefficient (alpha)",
        "True flux of kinetic energy over that of the mean velocity; 1 where the velocity is even.",
    ),
    Column(
        "beta",
        float,
        "ratio",
        "Momentum coefficient (beta)",
        "True flux of momentum over that of the mean velocity; 1 where the velocity is even.",
    ),
    Column(
        "critical_stage",
        float,
        "length",
        "Critical stage",
        "Stage at which this discharge has the least specific energy, alpha included.",
    ),
    Column(
        "channel_share",
        float,
        "ratio",
        "Share in channel",
        "Part of the discharge that flows in the zone channel, from 0 to 1.",
    ),
    Column(
        "share",
        float,
        "ratio",
        "Share",
        "Part of the section's discharge that flows in this subarea, from 0 to 1.",
    ),
    # --- a crossing --------------------------------------------------------------------------------
    Column(
        "crossing_id",
        str,
        "text",
        "Crossing",
        "Id of the crossing, as its layer gives it, else road and stream.",
    ),
    Column("road", str, "text", "Road", "Name of the road; empty where none is known."),
    Column(
        "crest",
        float,
        "length",
        "Crest",
        "Elevation of the lowest point of the road over which water would first pass, surveyed or found in "
        "the ground.",
    ),
    Column(
        "freeboard",
        float,
        "length",
        "Freeboard",
        "Crest minus stage at the road; below 0 where the stage is above the crest.",
    ),
    Column(
        "crest_discharge",
        float,
        "flow",
        "Discharge at crest",
        "Discharge at which the stage at the road is the crest.",
    ),
    Column(
        "first_event_over",
        str,
        "text",
        "First event over",
        "Smallest event whose stage is at or above the crest; empty where none is.",
    ),
    Column(
        "required_opening",
        float,
        "length",
        "Required opening",
        "Least clear width about the channel that passes the event with the stage at the crest less the "
        "freeboard asked for; empty where no width does.",
    ),
    Column(
        "verdict",
        str,
        "text",
        "Verdict",
        "crest not reached, within freeboard or over the crest; empty where status is failed.",
    ),
    Column("rank", int, "count", "Rank", "Place of the crossing among all, 1 for the first to look at."),
    Column(
        "probability",
        float,
        "probability",
        "Probability at crest",
        "Annual exceedance probability of the discharge at the crest, between events; empty beyond them and "
        "where no probabilities are given.",
    ),
    Column(
        "station",
        float,
        "length",
        "Station along the road",
        "Distance along the road from the crossing, positive to the right looking downstream.",
    ),
    Column("road_elevation", float, "length", "Road", "Elevation of the road's surface."),
    Column(
        "event_probability",
        float,
        "probability",
        "Probability of the event",
        "Annual exceedance probability of the event, as the flows give it; empty where they do not.",
    ),
    Column(
        "weir_coefficient",
        float,
        "weir_coefficient",
        "Weir coefficient",
        "C of the flow over the road, C L H^1.5.",
    ),
    Column(
        "tailwater_distance",
        float,
        "length",
        "Tailwater section below the road",
        "Distance along the stream from the road's downstream edge to the tailwater section; empty where "
        "there is none.",
    ),
    Column(
        "allowed_stage",
        float,
        "length",
        "Allowed stage",
        "Stage at the approach section that leaves the freeboard at the road.",
    ),
    Column(
        "opening_start",
        float,
        "length",
        "Left wall of the opening",
        "Station of its left wall in the approach section; empty where no opening passes the flow.",
    ),
    Column(
        "opening_end",
        float,
        "length",
        "Right wall of the opening",
        "Station of its right wall in the approach section; empty where no opening passes the flow.",
    ),
    Column(
        "opening_narrower",
        float,
        "flow",
        "Flow of a narrower opening",
        "Flow at the allowed stage through an opening a thousandth narrower than the required one; empty "
        "where no opening passes the event.",
    ),
    Column(
        "opening_most",
        float,
        "flow",
        "Most of any opening",
        "Most that an opening of any width passes at the allowed stage, where none passes the event; else "
        "empty.",
    ),
    Column(
        "opening_width",
        float,
        "length",
        "Existing opening",
        "Clear width of the opening that is there, as its field gives it; empty where it does not.",
    ),
    Column(
        "opening_share",
        float,
        "ratio",
        "Share of required opening",
        "Width of the existing opening over the required one.",
    ),
    Column(
        "road_width_under_water",
        float,
        "length",
        "Road under water",
        "Length of the road, within the reach that was searched, below the stage at the road.",
    ),
    Column("largest_depth_on_road", float, "length", "Depth on road", "Greatest depth of water on the road."),
    Column(
        "weir_discharge",
        float,
        "flow",
        "Flow over road",
        "Flow over the road as over a broad-crested weir under the stage at the road: a first estimate, too "
        "high where the tailwater stands above the crest.",
    ),
    Column(
        "tailwater_stage",
        float,
        "length",
        "Tailwater stage",
        "Stage of uniform flow below the road, carried up to the road's downstream edge.",
    ),
    Column(
        "overflow_station",
        float,
        "length",
        "Station of crest",
        "Where the crest is, along the road from the stream; positive to the right looking downstream.",
    ),
    Column(
        "approach_distance",
        float,
        "length",
        "Distance to approach section",
        "Along the stream from the approach section to the road's upstream edge.",
    ),
    # --- on the map --------------------------------------------------------------------------------
    Column(
        "area",
        float,
        "area",
        "Area",
        "Area of the polygons on the ellipsoid; in low_not_joined, of the ground that stays dry.",
    ),
    Column(
        "largest_depth",
        float,
        "length",
        "Largest depth",
        "Largest height of the water's level above a cell of the ground.",
    ),
    Column(
        "boundary_points",
        int,
        "count",
        "Boundary points",
        "Number of points along the boundary, about a cell apart, at which the ground was compared with the "
        "water's level. Where the mapped ground itself ends none are counted.",
    ),
    Column(
        "boundary_within_tolerance",
        float,
        "ratio",
        "Boundary within tolerance",
        "Part of these points, from 0 to 1, where ground and water differ by no more than 1 foot "
        "(0.3048 m): the tolerance of FEMA's Procedure Memorandum 38 (2007), Table 1, from memory.",
    ),
    # --- a bench -----------------------------------------------------------------------------------
    Column(
        "side",
        str,
        "text",
        "Side",
        "Side of the channel on which the bench is cut: left or right, looking downstream.",
    ),
    Column(
        "width",
        float,
        "length",
        "Width",
        "Width of the bench's level floor on this side; 0 where the section passes the flow as it is.",
    ),
    Column(
        "discharge_before",
        float,
        "flow",
        "Discharge before",
        "Flow that passes at the allowed stage without the bench.",
    ),
    # --- findings ----------------------------------------------------------------------------------
    Column("code", str, "text", "Code", "Code of the finding; each has its heading on the page of findings."),
    Column(
        "severity",
        str,
        "text",
        "Severity",
        "failed: no answer here; doubtful: an answer to check before use; note: good to know.",
    ),
    Column("layer", str, "text", "Layer", "Layer of the inputs or results that the finding is about."),
    Column("feature_id", str, "text", "Feature", "Id of the feature in that layer."),
    Column("message", str, "text", "Message", "What was found at this place, with the numbers."),
    Column("remedy", str, "text", "Remedy", "What to do about it."),
)
"""Every column by its name."""

FID = Column("fid", int, "count", "Row", "Number of the row in its layer; it may change from run to run.")
"""The row number that every layer of a GeoPackage has."""


def column_title(column: Column | str, units: UnitSystem) -> str:
    """Return a column's title with its unit, as a heading shows it.

    Parameters
    ----------
    column : Column or str
        A column, or its name.
    units : UnitSystem
        The system the numbers are in.

    Examples
    --------
    >>> column_title("flow_area", US)
    'Flow area [ft²]'
    >>> column_title("event", US)
    'Event'
    """
    column = COLUMNS[column] if isinstance(column, str) else column
    symbol = units.symbol(column.quantity)
    return f"{column.title} [{symbol}]" if symbol else column.title


def column_description(column: Column | str, units: UnitSystem) -> str:
    """Return a column's meaning and its unit in one text.

    Examples
    --------
    >>> column_description("depth", SI)
    'Stage minus the lowest ground of the channel. Unit: m.'
    """
    column = COLUMNS[column] if isinstance(column, str) else column
    symbol = units.symbol(column.quantity)
    if symbol == "1":
        return f"{column.meaning} A plain number, without unit."
    return f"{column.meaning} Unit: {symbol}." if symbol else column.meaning


def _unit_cell(column: Column) -> str:
    si, us = SI.symbol(column.quantity), US.symbol(column.quantity)
    if not si:
        return "text" if column.dtype is str else "count"
    return si if si == us else f"{si} or {us}"


def layers_page() -> str:
    """Return the page ``docs/layers.md``: every layer and every column."""
    lines = [
        "# Layers and columns",
        "",
        "What `results.gpkg` holds, layer by layer. Numbers are in the study's units: the first unit",
        'named with `units = "si"`, the second with `units = "us"`; a plain number has the unit 1. Each',
        "layer also has `fid`, the number of the row, and each with a geometry has it in `geom`. The same",
        "titles, units and meanings are in the file's own table `gpkg_data_columns`.",
        "",
        CAUTION,
        "",
        "This page is written by `python -m terrain2q.columns > docs/layers.md`.",
    ]
    for layer in LAYERS.values():
        lines += ["", f"## {layer.name}", "", layer.meaning, ""]
        lines += [
            f"Geometry: {layer.geometry}. {layer.shape}" if layer.geometry else "No geometry: a table.",
            "",
        ]
        lines += ["| column | title | unit | meaning |", "|---|---|---|---|"]
        for name in layer.columns:
            column = COLUMNS[name]
            lines.append(f"| `{name}` | {column.title} | {_unit_cell(column)} | {column.meaning} |")
    return "\n".join(lines) + "\n"


if __name__ == "__main__":
    print(layers_page(), end="")
