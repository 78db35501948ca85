"""Reading layers and tables: what is accepted, and what each error says."""

from __future__ import annotations

import sqlite3
import struct

import geopandas
import numpy as np
import pandas
import pyogrio
import pytest
import shapely
from shapely.geometry import LineString, MultiLineString, MultiPoint, Point, Polygon

from terrain2q.errors import InputError
from terrain2q.ground import layers
from terrain2q.ground.layers import (
    clean_text,
    clean_texts,
    ignored_columns,
    in_plan,
    read_layer,
    read_table,
    reproject,
    split_spec,
)

UTM = "EPSG:26915"
LINES = [
    LineString([(500000, 4700000), (500100, 4700000)]),
    LineString([(500000, 4700050), (500100, 4700050)]),
]


def write(path, shapes=LINES, crs=UTM, layer=None, **fields):
    frame = geopandas.GeoDataFrame(fields, geometry=shapes, crs=crs)
    pyogrio.write_dataframe(frame, path, **({"layer": layer} if layer else {}))
    return path


def error_of(*args, **kwargs):
    with pytest.raises(InputError) as caught:
        read_layer(*args, **{"purpose": "cut lines", "geometry": "line", **kwargs})
    return caught.value


def ids_of(*args, **kwargs):
    return read_layer(*args, **{"purpose": "cut lines", "geometry": "line", **kwargs})["feature_id"].tolist()


# --- specs and words -----------------------------------------------------------------------------


def test_spec_is_split():
    assert [str(v) for v in split_spec("a/b.gpkg|layer=x=y")] == ["a/b.gpkg", "x=y"]
    assert split_spec("a.shp")[1] is None
    assert split_spec("a.gpkg|layername=roads")[1] == "roads"


@pytest.mark.parametrize("text", ["a.gpkg|roads", "a.gpkg|layer=", "a.gpkg|"])
def test_spec_that_names_no_layer(text):
    with pytest.raises(InputError) as caught:
        split_spec(text)
    assert caught.value.code == "value-not-allowed"


@pytest.mark.parametrize(
    ("value", "text"),
    [
        (12, "12"),
        (12.0, "12"),
        ("12.0", "12"),
        (np.float64(-3.0), "-3"),
        (12.5, "12.5"),
        (" a b ", "a b"),
        ("007", "007"),
        (None, ""),
        (np.nan, ""),
        (pandas.NA, ""),
        ("1.0.0", "1.0.0"),
    ],
)
def test_clean_text(value, text):
    assert clean_text(value) == text
    assert clean_texts([value, "x", value]) == [text, "x", text]


# --- layers --------------------------------------------------------------------------------------


def test_layer_is_read_with_its_columns(tmp_path):
    path = write(tmp_path / "lines.gpkg", section_id=[7.0, 8.0], slope=[0.001, 0.002])
    frame = read_layer(path, purpose="cut lines", geometry="line")
    assert frame["feature_id"].tolist() == ["7", "8"]
    assert frame["slope"].tolist() == [0.001, 0.002]
    assert frame.crs == UTM
    assert frame.attrs["source"] == str(path)


def test_layer_is_brought_to_the_crs_asked_for(tmp_path):
    path = write(tmp_path / "lines.gpkg", geopandas.GeoSeries(LINES, crs=UTM).to_crs(4269).tolist(), 4269)
    frame = read_layer(path, purpose="cut lines", geometry="line", crs=UTM)
    assert frame.crs == UTM
    assert shapely.get_coordinates(frame.geometry) == pytest.approx(shapely.get_coordinates(LINES), abs=1e-6)
    # Heights play no part, also where the CRS asked for has a vertical one.
    compound = read_layer(path, purpose="cut lines", geometry="line", crs="EPSG:26915+5703")
    assert compound.crs == "EPSG:26915+5703"
    assert shapely.get_coordinates(compound.geometry) == pytest.approx(
        shapely.get_coordinates(LINES), abs=1e-6
    )


def test_crs_without_a_way_between(tmp_path):
    local = (
        'ENGCRS["site",EDATUM["site"],CS[Cartesian,2],AXIS["x",east],AXIS["y",north],LENGTHUNIT["metre",1]]'
    )
    frame = geopandas.GeoDataFrame(geometry=LINES, crs=local)
    with pytest.raises(InputError) as caught:
        reproject(frame, UTM, "lines.gpkg")
    assert caught.value.code == "crs-unknown"
    assert caught.value.where == "lines.gpkg"


def test_one_layer_needs_no_name_and_several_do(tmp_path):
    path = write(tmp_path / "data.gpkg", layer="lines")
    assert ids_of(path) == ["1", "2"]
    write(path, [Point(0, 0)], layer="places")
    error = error_of(path)
    assert error.code == "layer-missing"
    assert "lines, places" in error.what
    assert ids_of(f"{path}|layer=lines") == ["1", "2"]
    error = error_of(f"{path}|layer=roads")
    assert error.code == "layer-missing"
    assert "lines, places" in error.what
    assert "cut lines" in error.where
    assert "|layer=roads" in error.where


def test_file_missing_and_file_that_is_something_else(tmp_path):
    error = error_of(tmp_path / "no.gpkg")
    assert error.code == "file-missing"
    assert "no.gpkg" in error.what
    (tmp_path / "text.gpkg").write_text("not a database")
    assert error_of(tmp_path / "text.gpkg").code == "file-unreadable"
    (tmp_path / "notes.txt").write_text("hello")
    assert error_of(tmp_path / "notes.txt").code == "file-unreadable"


def test_layer_without_features_or_without_geometry(tmp_path):
    empty = geopandas.GeoDataFrame({"id": []}, geometry=[], crs=UTM)
    pyogrio.write_dataframe(empty, tmp_path / "empty.gpkg", geometry_type="LineString")
    assert error_of(tmp_path / "empty.gpkg").code == "layer-empty"
    path = write(tmp_path / "null.geojson", [None, LineString()], 4326)
    error = error_of(path)
    assert error.code == "layer-empty"
    assert "2 features" in error.what
    pyogrio.write_dataframe(pandas.DataFrame({"id": [1]}), tmp_path / "table.gpkg")
    error = error_of(tmp_path / "table.gpkg")
    assert error.code == "geometry-kind"
    assert "table" in error.what


def test_rows_without_geometry_are_kept(tmp_path):
    path = write(tmp_path / "some.gpkg", [LINES[0], None], id=["a", "b"])
    frame = read_layer(path, purpose="cut lines", geometry="line")
    assert frame["feature_id"].tolist() == ["a", "b"]
    assert frame.geometry.isna().tolist() == [False, True]


@pytest.mark.parametrize(
    ("shape", "kind", "accepted"),
    [
        (LINES[0], "line", True),
        (MultiLineString(LINES), "line", True),
        (Polygon([(0, 0), (1, 0), (1, 1)]), "line", False),
        (Point(0, 0), "line", False),
        (Polygon([(0, 0), (1, 0), (1, 1)]), "polygon", True),
        (LINES[0], "polygon", False),
        (Point(0, 0), "point", True),
        (LINES[0], "point", False),
        (MultiPoint([(0, 0)]), "point", True),
        (MultiPoint([(0, 0), (1, 1)]), "point", False),
    ],
)
def test_kind_of_geometry(tmp_path, shape, kind, accepted):
    path = write(tmp_path / "layer.gpkg", [shape])
    if accepted:
        frame = read_layer(path, purpose="cut lines", geometry=kind)
        assert len(frame) == 1
        assert kind != "point" or frame.geometry[0].geom_type == "Point"
    else:
        error = error_of(path, geometry=kind)
        assert error.code == "geometry-kind"
        assert f"1 {shape.geom_type}" in error.what


def test_layer_without_crs(tmp_path):
    with pytest.warns(UserWarning, match="crs"):
        write(tmp_path / "bare.gpkg", crs=None)
    error = error_of(tmp_path / "bare.gpkg")
    assert error.code == "crs-missing"
    assert "bare" in error.what


def test_z_and_m_are_dropped_silently(tmp_path):
    points = np.array([(500000, 4700000, 5, 0), (500100, 4700000, 6, 100)], dtype="<f8")
    wkb = struct.pack("<BII", 1, 3002, 2) + points.tobytes()
    path = tmp_path / "zm.gpkg"
    pyogrio.raw.write(
        path,
        geometry=np.array([wkb], dtype=object),
        field_data=[np.array(["a"], dtype=object)],
        fields=["id"],
        geometry_type="Measured 3D LineString",
        crs=UTM,
        layer="zm",
        driver="GPKG",
    )
    frame = read_layer(path, purpose="cut lines", geometry="line")
    (line,) = frame.geometry
    assert not line.has_z
    assert not line.has_m
    assert list(line.coords) == [(500000, 4700000), (500100, 4700000)]


# --- ids -----------------------------------------------------------------------------------------


def test_id_field_is_checked(tmp_path):
    path = write(
        tmp_path / "lines.gpkg", LINES * 2, section=["a", "b", "a", "b"], code=[1.0, None, 3.0, None]
    )
    error = error_of(path, id_field="sektion")
    assert error.code == "field-missing"
    assert "section, code" in error.what
    assert "'section'" in error.fix
    error = error_of(path, id_field="section")
    assert error.code == "id-duplicate"
    assert "'a' (2 times), 'b' (2 times)" in error.what
    error = error_of(path, id_field="code")
    assert error.code == "id-missing"
    assert "feature 2, 4" in error.what
    assert ids_of(path, id_field="section", repeated_ids=True) == ["a", "b", "a", "b"]


def test_long_lists_of_ids_are_cut_short(tmp_path):
    names = [f"n{i}" for i in range(8)] * 2
    error = error_of(write(tmp_path / "lines.gpkg", LINES * 8, key=names), id_field="key")
    assert "n4" in error.what
    assert "n5" not in error.what
    assert "3 more" in error.what


def test_default_id_field_is_passed_over_where_it_does_not_serve(tmp_path):
    assert ids_of(write(tmp_path / "a.gpkg", ID=[5, 6], name=["x", "y"])) == ["5", "6"]
    assert ids_of(write(tmp_path / "b.gpkg", id=[5, 5], Name=["x", "y"])) == ["x", "y"]
    assert ids_of(write(tmp_path / "c.gpkg", id=[5, 5], name=["x", None])) == ["1", "2"]
    assert ids_of(write(tmp_path / "d.shp", name=["x", "x"])) == ["1", "2"]
    assert ids_of(write(tmp_path / "e.gpkg", name=["x", "x"]), repeated_ids=True) == ["x", "x"]
    assert ids_of(write(tmp_path / "f.gpkg", stream_id=[3, 4], id=[1, 2])) == ["1", "2"]
    assert ids_of(write(tmp_path / "g.gpkg", stream_id=[3, 4], id=[1, 2]), purpose="streams") == ["3", "4"]


def test_feature_number_of_a_geopackage_is_an_id(tmp_path):
    path = write(tmp_path / "lines.gpkg", LINES * 2, slope=[1.0, 2.0, 3.0, 4.0])
    with sqlite3.connect(path) as database:
        # Without the triggers that need a spatial library, as a GIS would delete the row.
        for (name,) in database.execute("select name from sqlite_master where type = 'trigger'").fetchall():
            database.execute(f'drop trigger "{name}"')
        database.execute("delete from lines where fid = 2")
    database.close()
    assert ids_of(path) == ["1", "3", "4"]
    assert ids_of(path, id_field="fid") == ["1", "3", "4"]


# --- tables --------------------------------------------------------------------------------------


def table_error(path, *columns):
    with pytest.raises(InputError) as caught:
        read_table(path, columns or ("class", "n"), "roughness table")
    return caught.value


def test_table_is_read_as_clean_text(tmp_path):
    path = tmp_path / "t.csv"
    path.write_bytes("\ufeff Class , N ,Källa\n 41 ,0.10, bok \n\nNA,0.2,\n,,\n".encode())
    table = read_table(path, ["class", "n"], "roughness table", ["source"])
    assert list(table.columns) == ["class", "n", "Källa"]
    assert table.to_numpy().tolist() == [["41", "0.10", "bok"], ["NA", "0.2", ""]]
    assert table.index.tolist() == [2, 4]
    assert table.attrs["source"] == str(path)


def test_tables_that_cannot_be_read(tmp_path):
    path = tmp_path / "t.csv"
    assert table_error(path).code == "file-missing"
    path.write_text("")
    assert table_error(path).code == "layer-empty"
    path.write_text("class,n\n")
    assert table_error(path).code == "layer-empty"
    path.write_text("class,n\n,\n")
    assert table_error(path).code == "layer-empty"
    path.write_text("class,rough\nwood,1\n")
    error = table_error(path)
    assert error.code == "field-missing"
    assert "'n'" in error.what
    assert "class, rough" in error.what
    path.write_text("class;n\nwood;1\n")
    assert "commas" in table_error(path).fix
    path.write_text("class,n\nwood,1,2\n")
    assert table_error(path).code == "file-unreadable"
    path.write_text("class,n,N\nwood,1,2\n")
    assert "twice" in table_error(path).what
    path.write_bytes(b"class,n\nw\xe4ld,1\n")
    assert table_error(path).code == "file-unreadable"


def test_short_rows_have_empty_cells(tmp_path):
    path = tmp_path / "t.csv"
    path.write_text("class,n,source\nwood,1\n")
    assert read_table(path, ["class", "n"], "roughness table")["source"].tolist() == [""]


def test_columns_that_look_misspelled_are_named():
    table = pandas.DataFrame({"class": ["a"], "n": ["1"], "sorce": ["x"], "colour": ["red"]})
    (finding,) = ignored_columns(table, ["class", "n", "n_low", "source"], "land_cover")
    assert finding.code == "column-ignored"
    assert "'sorce'" in finding.message
    assert "'source'" in finding.message


def test_only_shapes_with_heights_or_measures_are_made_anew():
    texts = [
        "LINESTRING (0 0, 1 1)", "LINESTRING Z (0 0 5, 1 1 6)", "POLYGON M ((0 0 1, 1 0 1, 1 1 1, 0 0 1))",
        "POLYGON ZM ((0 0 1 2, 1 0 1 2, 1 1 1 2, 0 0 1 2))", "LINESTRING EMPTY",
    ]  # fmt: skip
    shapes = np.array([*shapely.from_wkt(texts), None], dtype=object)
    flat = in_plan(shapes)
    assert flat is not shapes
    assert shapely.get_coordinate_dimension(flat).tolist() == [2, 2, 2, 2, 2, -1]
    assert shapely.equals_exact(flat[:5], shapely.force_2d(shapes[:5])).all()
    assert flat[0] is shapes[0]
    assert shapely.get_coordinate_dimension(shapes).tolist() == [2, 3, 3, 4, 2, -1]


@pytest.mark.parametrize("crs", [UTM, "EPSG:4326", "EPSG:3857"])
@pytest.mark.parametrize("kind", ["gpkg", "shp", "fgb"])
def test_of_a_large_layer_what_is_near_is_read(tmp_path, monkeypatch, crs, kind):
    squares = [shapely.box(500000 + 100 * i, 4700000 + 100 * j, 500100 + 100 * i, 4700100 + 100 * j)
               for j in range(40) for i in range(40)]  # fmt: skip
    frame = geopandas.GeoDataFrame({"c": np.arange(1600)}, geometry=squares, crs=UTM).to_crs(crs)
    pyogrio.write_dataframe(frame, tmp_path / f"a.{kind}")
    within = (501010.0, 4702010.0, 501290.0, 4702090.0)
    options = {"purpose": "land cover", "geometry": "polygon", "crs": UTM, "within": within}
    whole = read_layer(tmp_path / f"a.{kind}", **options)
    assert not whole.attrs["in_part"]
    assert len(whole) == 1600
    monkeypatch.setattr(layers, "LARGE_LAYER", 1000)
    part = read_layer(tmp_path / f"a.{kind}", **options)
    assert part.attrs["in_part"]
    # three squares are met; some beside them are within the margin, or about bounds that are turned
    assert 3 <= len(part) <= 30
    # the same features by the same names, whatever was left out
    named = dict(zip(whole["feature_id"], whole["c"], strict=True))
    assert [named[i] for i in part["feature_id"]] == part["c"].tolist()
    assert {int(c) for c in whole["c"][whole.intersects(shapely.box(*within))]} <= set(part["c"])
    # where nothing is near, the whole is there to tell
    far = read_layer(tmp_path / f"a.{kind}", **(options | {"within": (6e5, 4.8e6, 6.1e5, 4.81e6)}))
    assert len(far) == 1600


def test_semicolons_with_decimal_commas_are_named(tmp_path):
    path = tmp_path / "roughness.csv"
    path.write_text("class;n\npasture;0,035\nforest;0,1\n", encoding="utf-8-sig")
    with pytest.raises(InputError) as caught:
        read_table(path, ("class", "n"), "land-cover table")
    assert caught.value.code == "file-unreadable"
    assert "semicolons" in caught.value.what
    assert caught.value.fix == "separate the columns with commas, and write decimals with a point"
