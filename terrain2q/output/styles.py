"""How the layers look in a desktop GIS: one style a layer, kept in the GeoPackage's table ``layer_styles``.

The symbols are the project's own and go with the pictures: water from pale to deep by event, so that the
order can be told by lightness alone; what else must be told apart differs in its mark or its stroke as
well as in its colour. Each style is written twice: as QML, with the columns' titles, and as SLD
(OGC 05-078r4, Styled Layer Descriptor 1.1).
"""

from __future__ import annotations

import sqlite3
import xml.etree.ElementTree as ET
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field

import numpy as np
import pandas as pd

from terrain2q.columns import COLUMNS, LAYERS, Layer, column_title
from terrain2q.output.looks import EARTHS, INK, WALL, WATERS, water_tones
from terrain2q.units import UnitSystem

STYLES_TABLE = "layer_styles"

EVENT_MEASURES = {"design_stages": "discharge", "flood_extent": "area", "crossings": "discharge"}
"""Layers from which the tones of events are found, the first that has rows, and what is measured there."""

OCHRE = "#d99a1c"
QUIET = "#8a7f72"
WHITE = "#ffffff"


@dataclass(frozen=True)
class Symbol:
    """One symbol: a line, an area or a mark. Sizes are in millimetres on paper or screen.

    Attributes
    ----------
    colour : str
        Of the line, or the fill of an area or a mark.
    edge : str
        Of the outline; none where empty.
    width : float
        Of the line or the outline.
    size : float
        Of a mark.
    mark : str
        ``circle``, ``triangle``, ``diamond``, ``square`` or ``cross``.
    dash : tuple of float
        Stroke and gap of a line; even where empty.
    opacity : float
    hatched : bool
        An area of slanted lines instead of a fill.
    """

    colour: str
    edge: str = ""
    width: float = 0.5
    size: float = 3.0
    mark: str = "circle"
    dash: tuple[float, ...] = ()
    opacity: float = 1.0
    hatched: bool = False


@dataclass(frozen=True)
class Style:
    """How one layer looks.

    Attributes
    ----------
    symbols : dict of str to Symbol
        By value of `by`; one symbol under the empty value where all look alike.
    by : str
        The column that tells them apart; empty where all look alike.
    order : str
        The column by which features are drawn, the least first; empty where it does not matter.
    largest_first : bool
        Draw the greatest first instead; the symbols stand in the order of the least first.
    label : str
        The column that is written beside each feature; empty for none.
    words : dict of str to str
        By value, what the legend says where it is not the value itself.
    """

    symbols: dict[str, Symbol]
    by: str = ""
    order: str = ""
    largest_first: bool = False
    label: str = ""
    words: dict[str, str] = field(default_factory=dict)


def layer_style(layer: str, tones: Mapping[str, str]) -> Style:
    """Return the style of a layer with a geometry.

    Parameters
    ----------
    layer : str
    tones : mapping of str to str
        By event, its tone; see :func:`event_tones`.
    """
    deep, water = WATERS[4], WATERS[3]
    if layer == "sections":
        return Style({"": Symbol(INK, width=0.4)}, label="section_id")
    if layer == "subareas":
        return Style(
            {
                "left floodplain": Symbol(EARTHS[3], width=1.4),
                "channel": Symbol(water, width=1.8),
                "right floodplain": Symbol("#6f5a3c", width=1.4, dash=(3.0, 1.2)),
                "": Symbol(QUIET, width=1.0, dash=(1.0, 0.6)),
            },
            "zone",
            words={"": "not divided"},
        )
    if layer == "design_stages":
        return Style(
            {
                "ok": Symbol(water, width=1.1),
                "doubtful": Symbol(OCHRE, width=1.1, dash=(2.4, 1.0)),
                "failed": Symbol(WALL, width=1.1, dash=(0.8, 0.8)),
            },
            "status",
            order="discharge",
        )
    if layer == "required_widths":
        return Style(
            {
                "ok": Symbol("#5d7f3a", width=1.6),
                "doubtful": Symbol(OCHRE, width=1.6, dash=(2.4, 1.0)),
                "failed": Symbol(WALL, width=1.6, dash=(0.8, 0.8)),
            },
            "status",
        )
    if layer == "crossings":
        return Style(
            {
                "over the crest": Symbol(deep, WHITE, 0.4, 4.2, "triangle"),
                "within freeboard": Symbol(WATERS[2], INK, 0.3, 3.6, "diamond"),
                "crest not reached": Symbol(WHITE, INK, 0.4, 3.0, "circle"),
                "": Symbol(WALL, WALL, 0.8, 3.2, "cross"),
            },
            "verdict",
            order="discharge",
            label="crossing_id",
            words={"": "no answer"},
        )
    if layer == "flood_extent":
        areas = {event: Symbol(tone, deep, 0.2, opacity=0.75) for event, tone in tones.items()}
        return Style(areas or {"": Symbol(WATERS[2], deep, 0.2)}, "event" if areas else "", "area", True)
    if layer == "low_not_joined":
        areas = {event: Symbol(tone, QUIET, 0.3, hatched=True) for event, tone in tones.items()}
        return Style(areas or {"": Symbol(QUIET, QUIET, 0.3)}, "event" if areas else "", "area", True)
    if layer == "findings":
        return Style(
            {
                "failed": Symbol(WALL, WALL, 0.9, 3.4, "cross"),
                "doubtful": Symbol(OCHRE, INK, 0.3, 3.2, "triangle"),
                "note": Symbol(WHITE, INK, 0.3, 2.0, "circle"),
            },
            "severity",
        )
    raise ValueError(f"the layer {layer!r} has no style")


def event_tones(layers: Mapping[str, pd.DataFrame]) -> dict[str, str]:
    """Return the tone of each event: the more water it brings, the deeper."""
    for name, measure in EVENT_MEASURES.items():
        table = layers.get(name)
        if table is not None and len(table):
            measured = pd.to_numeric(table[measure], errors="coerce").astype(float)
            typical = measured.groupby(table["event"], sort=False).median()
            order = sorted(typical.index, key=lambda e: (not np.isfinite(typical[e]), typical[e]))
            return dict(zip(order, water_tones(len(order)), strict=True))
    return {}


# --------------------------------------------------------------------------------------------------
# Into the file


def write_styles(
    database: sqlite3.Connection, layers: Mapping[str, pd.DataFrame], units: UnitSystem, date: str
) -> int:
    """Write the table of styles into a GeoPackage and list it among its contents.

    Parameters
    ----------
    database : sqlite3.Connection
    layers : mapping of str to DataFrame
        The layers of the file, for the names of their events.
    units : UnitSystem
        For the titles of columns.
    date : str
        Of the styles.

    Returns
    -------
    int
        How many styles there are.
    """
    tones = event_tones(layers)
    rows = []
    for name, layer in LAYERS.items():
        if name not in layers or not layer.geometry:
            continue
        style = layer_style(name, tones)
        rows.append((
            "", "", name, "geom", layer.title, qml(layer, style, units), sld(layer, style), True,
            f"{layer.title}: {_told_apart(style)}", "", None, date,
        ))  # fmt: skip
    database.execute(
        f"CREATE TABLE {STYLES_TABLE} (id INTEGER PRIMARY KEY AUTOINCREMENT NOT NULL, "
        "f_table_catalog TEXT(256), f_table_schema TEXT(256), f_table_name TEXT(256), "
        "f_geometry_column TEXT(256), styleName TEXT(30), "
        "styleQML TEXT, styleSLD TEXT, useAsDefault BOOLEAN, description TEXT, owner TEXT(30), ui TEXT(30), "
        "update_time DATETIME DEFAULT CURRENT_TIMESTAMP)"
    )
    database.executemany(
        f"INSERT INTO {STYLES_TABLE} (f_table_catalog, f_table_schema, f_table_name, f_geometry_column, "
        "styleName, styleQML, styleSLD, useAsDefault, description, owner, ui, update_time) "
        "VALUES (?, ?, ?, ?, ?, ?, ?, ?, ?, ?, ?, ?)",
        rows,
    )
    database.execute(
        "INSERT INTO gpkg_contents (table_name, data_type, identifier, description, last_change) "
        "VALUES (?, 'attributes', ?, ?, ?)",
        (STYLES_TABLE, STYLES_TABLE, "How the layers look in a desktop GIS.", date),
    )
    return len(rows)


def _told_apart(style: Style) -> str:
    return f"by {COLUMNS[style.by].title.lower()}" if style.by else "one symbol"


# --------------------------------------------------------------------------------------------------
# QML


_GEOMETRY_TYPES = {"point": "0", "line": "1", "polygon": "2"}
_SYMBOL_TYPES = {"point": "marker", "line": "line", "polygon": "fill"}
_QML_MARKS = {"cross": "cross2"}


def _kind(layer: Layer) -> str:
    name = layer.geometry.lower()
    return "line" if "line" in name else "polygon" if "polygon" in name else "point"


def qml(layer: Layer, style: Style, units: UnitSystem) -> str:
    """Return a style as QML."""
    kind = _kind(layer)
    root = ET.Element("qgis", version="3.22.0", styleCategories="Symbology|Labeling|Fields")
    renderer = ET.SubElement(
        root, "renderer-v2", type="categorizedSymbol" if style.by else "singleSymbol", symbollevels="0",
        forceraster="0", referencescale="-1", enableorderby="1" if style.order else "0",
    )  # fmt: skip
    if style.by:
        renderer.set("attr", style.by)
        categories = ET.SubElement(renderer, "categories")
        for number, value in enumerate(style.symbols):
            ET.SubElement(
                categories, "category", symbol=str(number), value=value, type="string", render="true",
                label=style.words.get(value, value),
            )  # fmt: skip
    symbols = ET.SubElement(renderer, "symbols")
    for number, symbol in enumerate(style.symbols.values()):
        drawn = ET.SubElement(
            symbols, "symbol", type=_SYMBOL_TYPES[kind], name=str(number), alpha=f"{symbol.opacity:g}",
            clip_to_extent="1", force_rhr="0",
        )  # fmt: skip
        drawing, options = _QML_LAYERS[kind](symbol)
        part = ET.SubElement(drawn, "layer", {"class": drawing, "enabled": "1", "locked": "0", "pass": "0"})
        _options(part, options)
    if style.order:
        ordered = ET.SubElement(renderer, "orderby")
        clause = ET.SubElement(
            ordered, "orderByClause", asc="0" if style.largest_first else "1", nullsFirst="1"
        )
        clause.text = f'"{style.order}"'
    if style.label:
        _labels(root, style.label, kind)
    aliases = ET.SubElement(root, "aliases")
    for number, name in enumerate(layer.columns, 1):  # the first field is the number of the row
        ET.SubElement(aliases, "alias", field=name, index=str(number), name=column_title(name, units))
    ET.SubElement(root, "layerGeometryType").text = _GEOMETRY_TYPES[kind]
    return _text(root)


def _line(symbol: Symbol) -> tuple[str, dict[str, str]]:
    options = {
        "line_color": _rgba(symbol.colour),
        "line_style": "solid",
        "line_width": f"{symbol.width:g}",
        "line_width_unit": "MM",
        "capstyle": "flat",
        "joinstyle": "round",
    }
    if symbol.dash:
        options |= {
            "use_custom_dash": "1",
            "customdash": ";".join(f"{d:g}" for d in symbol.dash),
            "customdash_unit": "MM",
        }
    return "SimpleLine", options


def _fill(symbol: Symbol) -> tuple[str, dict[str, str]]:
    return "SimpleFill", {
        "color": _rgba(symbol.colour),
        "style": "b_diagonal" if symbol.hatched else "solid",
        "outline_color": _rgba(symbol.edge or symbol.colour),
        "outline_style": "solid" if symbol.edge else "no",
        "outline_width": f"{symbol.width:g}",
        "outline_width_unit": "MM",
        "joinstyle": "round",
    }


def _mark(symbol: Symbol) -> tuple[str, dict[str, str]]:
    return "SimpleMarker", {
        "name": _QML_MARKS.get(symbol.mark, symbol.mark),
        "color": _rgba(symbol.colour),
        "outline_color": _rgba(symbol.edge or symbol.colour),
        "outline_style": "solid",
        "outline_width": f"{symbol.width:g}",
        "outline_width_unit": "MM",
        "size": f"{symbol.size:g}",
        "size_unit": "MM",
    }


_QML_LAYERS = {"line": _line, "polygon": _fill, "point": _mark}


def _labels(root: ET.Element, column: str, kind: str) -> None:
    labeling = ET.SubElement(root, "labeling", type="simple")
    settings = ET.SubElement(labeling, "settings", calloutType="simple")
    style = ET.SubElement(
        settings, "text-style", fieldName=column, isExpression="0", fontFamily="Sans Serif", fontSize="8",
        fontSizeUnit="Point", textColor=_rgba(INK), textOpacity="1",
    )  # fmt: skip
    ET.SubElement(
        style, "text-buffer", bufferDraw="1", bufferSize="0.8", bufferSizeUnits="MM",
        bufferColor=_rgba(WHITE), bufferOpacity="0.9",
    )  # fmt: skip
    # a line is named at its end, outside of the water; a point beside it
    placement = {"placement": "2", "placementFlags": "10"} if kind == "line" else {"placement": "6"}
    ET.SubElement(settings, "placement", {**placement, "dist": "1", "distUnits": "MM"})
    ET.SubElement(settings, "rendering", drawLabels="1", obstacle="1")


def _options(parent: ET.Element, options: Mapping[str, str]) -> None:
    group = ET.SubElement(parent, "Option", type="Map")
    for name, value in options.items():
        ET.SubElement(group, "Option", name=name, type="QString", value=value)


def _rgba(colour: str) -> str:
    return ",".join(str(int(colour[i : i + 2], 16)) for i in (1, 3, 5)) + ",255"


# --------------------------------------------------------------------------------------------------
# SLD


_SLD = "http://www.opengis.net/sld"
_SE = "http://www.opengis.net/se"
_OGC = "http://www.opengis.net/ogc"
_PIXELS = 96 / 25.4  # in a millimetre on a screen of 96 dots an inch


def sld(layer: Layer, style: Style) -> str:
    """Return a style as Styled Layer Descriptor 1.1; sizes in pixels of a screen of 96 dots an inch."""
    kind = _kind(layer)
    # short prefixes are written out by hand, so that nothing global changes
    root = ET.Element(
        "StyledLayerDescriptor",
        {"version": "1.1.0", "xmlns": _SLD, "xmlns:se": _SE, "xmlns:ogc": _OGC},
    )
    named = ET.SubElement(root, "NamedLayer")
    ET.SubElement(named, "se:Name").text = layer.name
    user = ET.SubElement(named, "UserStyle")
    ET.SubElement(user, "se:Name").text = layer.title
    drawn = ET.SubElement(user, "se:FeatureTypeStyle")
    looks = list(style.symbols.items())
    for number, (value, symbol) in enumerate(reversed(looks) if style.largest_first else looks):
        if number and style.largest_first:  # each is painted over all of the one before
            drawn = ET.SubElement(user, "se:FeatureTypeStyle")
        rule = ET.SubElement(drawn, "se:Rule")
        ET.SubElement(rule, "se:Name").text = style.words.get(value, value) or layer.title
        if style.by:
            _equals(rule, style.by, value)
        {"line": _sld_line, "polygon": _sld_area, "point": _sld_mark}[kind](rule, symbol)
    if style.label:
        _sld_label(ET.SubElement(drawn, "se:Rule"), style.label, kind)
    return '<?xml version="1.0" encoding="UTF-8"?>\n' + _text(root)


def _equals(rule: ET.Element, column: str, value: str) -> None:
    condition = ET.SubElement(rule, "ogc:Filter")
    if not value:  # empty text and no value at all
        condition = ET.SubElement(condition, "ogc:Or")
        missing = ET.SubElement(condition, "ogc:PropertyIsNull")
        ET.SubElement(missing, "ogc:PropertyName").text = column
    equals = ET.SubElement(condition, "ogc:PropertyIsEqualTo")
    ET.SubElement(equals, "ogc:PropertyName").text = column
    ET.SubElement(equals, "ogc:Literal").text = value


def _stroke(parent: ET.Element, colour: str, width: float, dash: Sequence[float] = ()) -> None:
    stroke = ET.SubElement(parent, "se:Stroke")
    _parameter(stroke, "stroke", colour)
    _parameter(stroke, "stroke-width", f"{width * _PIXELS:.2g}")
    if dash:
        _parameter(stroke, "stroke-dasharray", " ".join(f"{d * _PIXELS:.3g}" for d in dash))


def _parameter(parent: ET.Element, name: str, value: str) -> None:
    ET.SubElement(parent, "se:SvgParameter", name=name).text = value


def _sld_line(rule: ET.Element, symbol: Symbol) -> None:
    _stroke(ET.SubElement(rule, "se:LineSymbolizer"), symbol.colour, symbol.width, symbol.dash)


def _sld_area(rule: ET.Element, symbol: Symbol) -> None:
    area = ET.SubElement(rule, "se:PolygonSymbolizer")
    fill = ET.SubElement(area, "se:Fill")
    if symbol.hatched:
        graphic = ET.SubElement(ET.SubElement(fill, "se:GraphicFill"), "se:Graphic")
        mark = ET.SubElement(graphic, "se:Mark")
        ET.SubElement(mark, "se:WellKnownName").text = "slash"
        _stroke(mark, symbol.colour, 0.3)
    else:
        _parameter(fill, "fill", symbol.colour)
        _parameter(fill, "fill-opacity", f"{symbol.opacity:g}")
    if symbol.edge:
        _stroke(area, symbol.edge, symbol.width)


def _sld_mark(rule: ET.Element, symbol: Symbol) -> None:
    graphic = ET.SubElement(ET.SubElement(rule, "se:PointSymbolizer"), "se:Graphic")
    mark = ET.SubElement(graphic, "se:Mark")
    # the standard has no diamond: a square on its corner
    standard = {"diamond": "square", "cross": "x"}.get(symbol.mark, symbol.mark)
    ET.SubElement(mark, "se:WellKnownName").text = standard
    _parameter(ET.SubElement(mark, "se:Fill"), "fill", symbol.colour)
    _stroke(mark, symbol.edge or symbol.colour, symbol.width)
    ET.SubElement(graphic, "se:Size").text = f"{symbol.size * _PIXELS:.3g}"
    if symbol.mark == "diamond":
        ET.SubElement(graphic, "se:Rotation").text = "45"


def _sld_label(rule: ET.Element, column: str, kind: str) -> None:
    text = ET.SubElement(rule, "se:TextSymbolizer")
    label = ET.SubElement(text, "se:Label")
    ET.SubElement(label, "ogc:PropertyName").text = column
    font = ET.SubElement(text, "se:Font")
    _parameter(font, "font-family", "sans-serif")
    _parameter(font, "font-size", "11")
    placement = ET.SubElement(text, "se:LabelPlacement")
    if kind == "line":
        ET.SubElement(placement, "se:LinePlacement")
    else:
        point = ET.SubElement(placement, "se:PointPlacement")
        moved = ET.SubElement(point, "se:Displacement")
        ET.SubElement(moved, "se:DisplacementX").text = "6"
        ET.SubElement(moved, "se:DisplacementY").text = "6"
    halo = ET.SubElement(text, "se:Halo")
    ET.SubElement(halo, "se:Radius").text = "2"
    _parameter(ET.SubElement(halo, "se:Fill"), "fill", WHITE)
    _parameter(ET.SubElement(text, "se:Fill"), "fill", INK)


def _text(root: ET.Element) -> str:
    ET.indent(root)
    return ET.tostring(root, encoding="unicode") + "\n"
