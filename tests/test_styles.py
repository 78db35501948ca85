"""Styles of the layers: XML that names real columns and values, symbols that can be told apart in grey."""

from __future__ import annotations

import re
import sqlite3
import xml.etree.ElementTree as ET
from contextlib import closing
from itertools import pairwise

import geopandas
import pandas as pd
import pytest
from test_geopackage import CRS, DATE, make_layers, query, write

from terrain2q.columns import COLUMNS, LAYERS, column_title
from terrain2q.errors import SEVERITIES
from terrain2q.jobs.crossings import NOT_REACHED, OVER, WITHIN
from terrain2q.output.styles import event_tones, layer_style
from terrain2q.units import SI, US

WITH_SHAPE = [name for name, layer in LAYERS.items() if layer.geometry]
EVENTS = ["10-year", "a <&> \"b\" 'c'", "500-year"]
NAMESPACES = {
    "sld": "http://www.opengis.net/sld",
    "se": "http://www.opengis.net/se",
    "ogc": "http://www.opengis.net/ogc",
}


def with_events():
    """Return every layer, with three events of which the first in the table brings most water."""
    layers = make_layers()
    for table in layers.values():
        if "event" in table:
            table["event"] = EVENTS[::-1]
        for measure in ("discharge", "area"):
            if measure in table:
                table[measure] = [900.0, 20.0, 1.0]
    return layers


@pytest.fixture(scope="module")
def styles(tmp_path_factory):
    path = tmp_path_factory.mktemp("styled") / "results.gpkg"
    write(path, with_events())
    with closing(sqlite3.connect(path)) as database:
        return pd.read_sql("SELECT * FROM layer_styles", database).set_index("f_table_name")


def test_table_is_the_one_that_a_desktop_gis_reads(styles):
    assert list(styles.reset_index().columns[:1]) == ["f_table_name"]
    assert set(styles.columns) == {
        "id", "f_table_catalog", "f_table_schema", "f_geometry_column", "styleName", "styleQML", "styleSLD",
        "useAsDefault", "description", "owner", "ui", "update_time",
    }  # fmt: skip
    assert list(styles.index) == WITH_SHAPE
    assert set(styles["f_geometry_column"]) == {"geom"}
    assert set(styles["useAsDefault"]) == {1}
    assert set(styles["update_time"]) == {DATE}


@pytest.mark.parametrize("name", WITH_SHAPE)
def test_styles_are_xml_that_names_real_columns(styles, name):
    known = {*LAYERS[name].columns}
    root = ET.fromstring(styles.loc[name, "styleQML"])
    assert root.tag == "qgis"
    named = {r.get("attr") for r in root.iter("renderer-v2") if r.get("attr")}
    named |= {a.get("field") for a in root.iter("alias")}
    named |= {t.get("fieldName") for t in root.iter("text-style")}
    named |= {c.text.strip('"') for c in root.iter("orderByClause")}
    assert named <= known
    assert {a.get("field") for a in root.iter("alias")} == known
    descriptor = ET.fromstring(styles.loc[name, "styleSLD"].split("\n", 1)[1])
    assert descriptor.tag == "{http://www.opengis.net/sld}StyledLayerDescriptor"
    assert descriptor.find(".//se:Name", NAMESPACES).text == name
    assert {p.text for p in descriptor.iterfind(".//ogc:PropertyName", NAMESPACES)} <= known


@pytest.mark.parametrize("name", WITH_SHAPE)
def test_every_category_has_its_symbol(styles, name):
    root = ET.fromstring(styles.loc[name, "styleQML"])
    symbols = {s.get("name"): s for s in root.iterfind("renderer-v2/symbols/symbol")}
    kind = LAYERS[name].geometry
    wanted = "marker" if kind == "Point" else "fill" if "Polygon" in kind else "line"
    assert {s.get("type") for s in symbols.values()} == {wanted}
    categories = list(root.iter("category"))
    assert {c.get("symbol") for c in categories} == (set(symbols) if categories else set())
    rules = ET.fromstring(styles.loc[name, "styleSLD"].split("\n", 1)[1]).iterfind(".//se:Rule", NAMESPACES)
    drawn = [r for r in rules if r.find("se:TextSymbolizer", NAMESPACES) is None]
    assert len(drawn) == len(symbols)


@pytest.mark.parametrize(
    ("layer", "column", "values"),
    [
        ("crossings", "verdict", {OVER, WITHIN, NOT_REACHED, ""}),
        ("design_stages", "status", {"ok", "doubtful", "failed"}),
        ("subareas", "zone", {"left floodplain", "channel", "right floodplain", ""}),
        ("findings", "severity", set(SEVERITIES)),
        ("flood_extent", "event", set(EVENTS)),
        ("low_not_joined", "event", set(EVENTS)),
    ],
)
def test_categories_are_all_the_values_there_are(styles, layer, column, values):
    root = ET.fromstring(styles.loc[layer, "styleQML"])
    assert root.find("renderer-v2").get("attr") == column
    assert {c.get("value") for c in root.iter("category")} == values
    descriptor = ET.fromstring(styles.loc[layer, "styleSLD"].split("\n", 1)[1])
    assert {p.text or "" for p in descriptor.iterfind(".//ogc:Literal", NAMESPACES)} == values


@pytest.mark.parametrize("units", [SI, US], ids=lambda units: units.name)
def test_columns_are_titled_with_their_units(tmp_path, units):
    path = tmp_path / "results.gpkg"
    write(path, make_layers(), units=units)
    for name, text in query(path, "SELECT f_table_name, styleQML FROM layer_styles"):
        aliases = {a.get("field"): a.get("name") for a in ET.fromstring(text).iter("alias")}
        assert aliases == {c: column_title(c, units) for c in LAYERS[name].columns}


def lightness(colour: str) -> float:
    """Return the luma of a colour, which grey print keeps (ITU-R BT.601)."""
    red, green, blue = (int(colour[i : i + 2], 16) for i in (1, 3, 5))
    return (0.299 * red + 0.587 * green + 0.114 * blue) / 255


def test_more_water_is_darker():
    tones = event_tones(with_events())
    assert list(tones) == EVENTS
    light = [lightness(tone) for tone in tones.values()]
    assert light == sorted(light, reverse=True)
    assert min(a - b for a, b in pairwise(light)) > 0.15


def test_events_without_a_number_have_a_tone_too():
    layers = with_events()
    layers["design_stages"]["discharge"] = [float("nan"), 20.0, 1.0]
    assert set(event_tones(layers)) == set(EVENTS)
    assert event_tones({}) == {}


@pytest.mark.parametrize("layer", ["crossings", "design_stages", "findings", "subareas"])
def test_nothing_is_told_by_hue_alone(layer):
    """In grey, and to eyes that see no red or no green, every symbol differs in mark, stroke or lightness."""
    symbols = list(layer_style(layer, {}).symbols.values())
    for i, one in enumerate(symbols):
        for other in symbols[i + 1 :]:
            same = one.mark == other.mark and one.dash == other.dash
            assert not same or abs(lightness(one.colour) - lightness(other.colour)) > 0.15, (one, other)


def test_a_layer_without_events_is_styled_too(tmp_path):
    path = tmp_path / "results.gpkg"
    columns = {c: [] for c in LAYERS["flood_extent"].columns}
    empty = geopandas.GeoDataFrame(pd.DataFrame(columns), geometry=[], crs=CRS)
    write(path, {"flood_extent": empty})
    ((text,),) = query(path, "SELECT styleQML FROM layer_styles")
    assert ET.fromstring(text).find("renderer-v2").get("type") == "singleSymbol"


def test_every_layer_with_a_shape_has_a_style():
    for name in WITH_SHAPE:
        style = layer_style(name, {})
        assert not style.by or style.by in LAYERS[name].columns
        for column in filter(None, (style.by, style.order, style.label)):
            assert column in COLUMNS
    with pytest.raises(ValueError, match="has no style"):
        layer_style("ratings", {})


def test_colours_are_colours():
    for name in WITH_SHAPE:
        for symbol in layer_style(name, {"a": "#123a56"}).symbols.values():
            for colour in filter(None, (symbol.colour, symbol.edge)):
                assert re.fullmatch(r"#[0-9a-f]{6}", colour)
