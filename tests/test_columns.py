"""The registry of layers and columns: the names users rely on, and the page made from it."""

from __future__ import annotations

import re
import subprocess
import sys
from pathlib import Path

import pytest

from terrain2q.columns import (
    COLUMNS,
    FID,
    LAYERS,
    Column,
    column_description,
    column_title,
    layers_page,
)
from terrain2q.units import SI, US

PAGE = Path(__file__).parents[1] / "docs" / "layers.md"

# Written out here a second time on purpose: a name that users have in their own scripts and maps must
# not change by a slip in the registry.
RATING = (
    "stage depth discharge flow_area wetted_perimeter hydraulic_radius top_width mean_velocity froude "
    "conveyance alpha beta"
)
PROMISED = {
    "sections": "section_id stream stream_distance lowest_ground slope slope_source length points findings",
    "subareas": "section_id subarea zone land_class n n_source start_station end_station",
    "ratings": f"section_id {RATING}",
    "design_stages": f"section_id event {RATING} slope critical_stage channel_share status",
    "subarea_flows": (
        "section_id event subarea stage flow_area wetted_perimeter conveyance discharge mean_velocity share"
    ),
    "crossings": (
        "crossing_id road stream event discharge stage crest freeboard crest_discharge first_event_over "
        "required_opening verdict rank status probability opening_share road_width_under_water "
        "largest_depth_on_road weir_discharge tailwater_stage overflow_station slope approach_distance"
    ),
    "flood_extent": "event area largest_depth boundary_points boundary_within_tolerance",
    "low_not_joined": "event area largest_depth",
    "required_widths": "section_id event discharge stage side width discharge_before status",
    "findings": "code severity layer feature_id message remedy",
}
GEOMETRY = {
    "sections": "LineString ZM",
    "subareas": "LineString",
    "ratings": "",
    "design_stages": "MultiLineString",
    "subarea_flows": "",
    "crossings": "Point",
    "flood_extent": "MultiPolygon",
    "low_not_joined": "MultiPolygon",
    "required_widths": "LineString",
    "findings": "Point",
}


BESIDE = {"road_profiles", "crossing_steps", "opening_parts"}
"""Tables of crossing_sections.gpkg, from which sheets are made."""


def test_layers_have_the_promised_columns_in_order():
    assert list(LAYERS)[: len(PROMISED)] == list(PROMISED)
    assert set(LAYERS) - set(PROMISED) == BESIDE
    assert all("crossing_sections.gpkg" in LAYERS[name].meaning for name in BESIDE)
    assert {name: layer.columns for name, layer in LAYERS.items() if name not in BESIDE} == {
        name: tuple(columns.split()) for name, columns in PROMISED.items()
    }


def test_layers_have_the_promised_geometry_and_say_what_it_is():
    assert {name: layer.geometry for name, layer in LAYERS.items() if name not in BESIDE} == GEOMETRY
    assert not any(LAYERS[name].geometry for name in BESIDE)
    assert all(bool(layer.shape) == bool(layer.geometry) for layer in LAYERS.values())


def test_every_column_used_is_registered_and_every_column_registered_is_used():
    used = {name for layer in LAYERS.values() for name in layer.columns}
    assert used == set(COLUMNS)


@pytest.mark.parametrize("column", [*COLUMNS.values(), FID], ids=lambda column: column.name)
def test_every_column_has_a_type_a_known_quantity_a_title_and_a_sentence(column):
    assert column.dtype in (str, float, int)
    assert SI.per_si(column.quantity) == 1.0  # a KeyError where units do not know the quantity
    assert (column.quantity == "text") == (column.dtype is str)
    assert (column.quantity == "count") == (column.dtype is int)
    assert column.title == column.title.strip() != ""
    assert column.meaning.endswith(".")


@pytest.mark.parametrize("units", [SI, US], ids=lambda units: units.name)
@pytest.mark.parametrize("layer", LAYERS.values(), ids=lambda layer: layer.name)
def test_no_two_columns_of_a_layer_have_the_same_title(layer, units):
    # The titles are the column's names in a GIS, which must be unique in a table.
    titles = ["Row", "Geometry", *(column_title(name, units) for name in layer.columns)]
    assert len(set(titles)) == len(titles)


def test_titles_carry_the_unit():
    assert column_title("flow_area", US) == "Flow area [ft²]"
    assert column_title("flow_area", SI) == "Flow area [m²]"
    assert column_title(COLUMNS["conveyance"], US) == "Conveyance [ft³/s]"
    assert column_title("mean_velocity", SI) == "Mean velocity [m/s]"
    assert column_title("n", US) == column_title("n", SI) == "Manning's n [s/m^(1/3)]"
    assert column_title("alpha", US) == "Velocity-head coefficient (alpha) [1]"
    assert column_title("points", US) == "Points"
    assert column_title("event", SI) == "Event"


def test_descriptions_end_with_the_unit_where_there_is_one():
    assert column_description("stage", US).endswith(" Unit: ft.")
    assert column_description("froude", US).endswith("without unit.")
    assert column_description("zone", US) == COLUMNS["zone"].meaning
    of_a_column = column_description(Column("x", float, "area", "X", "An area."), SI)
    assert of_a_column == "An area. Unit: m²."


def test_the_page_is_the_one_the_registry_makes():
    assert PAGE.read_text(encoding="utf-8") == layers_page(), "write it anew: python -m terrain2q.columns"


def test_the_page_has_every_layer_and_each_of_its_columns():
    parts = re.split(r"^## (\w+)$", layers_page(), flags=re.M)
    assert parts[1::2] == list(LAYERS)
    for name, part in zip(parts[1::2], parts[2::2], strict=True):
        assert tuple(re.findall(r"^\| `(\w+)` \|", part, flags=re.M)) == LAYERS[name].columns
        cells = {len(line.split("|")) for line in part.splitlines() if line.startswith("|")}
        assert cells == {6}, f"a meaning of {name} breaks the table"


def test_the_registry_needs_no_other_library():
    heavy = "numpy pandas scipy shapely geopandas pyogrio rasterio pyproj matplotlib"
    script = f"import sys, terrain2q.columns; print(sorted(set('{heavy}'.split()) & set(sys.modules)))"
    done = subprocess.run([sys.executable, "-c", script], capture_output=True, text=True, check=True)
    assert done.stdout.strip() == "[]"
