"""The GeoPackage: what is written, that it is described, and that it is whole or not there."""

from __future__ import annotations

import json
import os
import random
import re
import shutil
import signal
import sqlite3
import subprocess
import sys
import textwrap
import time
from contextlib import closing, suppress
from pathlib import Path

import geopandas
import numpy as np
import pandas as pd
import pyarrow as pa
import pyogrio
import pytest
import shapely
from hypothesis import given, settings
from hypothesis import strategies as st

from terrain2q.columns import CAUTION, COLUMNS, LAYERS, column_description, column_title
from terrain2q.errors import OutputError
from terrain2q.output import geopackage, spatial_index, whole_file
from terrain2q.output.geopackage import GeoPackageWriter, check_output, linestring_zm, write_geopackage
from terrain2q.units import SI, US

CRS = 26915
DATE = "2026-01-01T00:00:00.000Z"


def column_of(name: str, rows: int, start: int = 0) -> list:
    kind = COLUMNS[name].dtype
    return [f"{name} {row + start}" if kind is str else kind(row + start) for row in range(rows)]


def shape_of(layer, row: int):
    if layer.geometry == "LineString ZM":
        return linestring_zm(
            [[row, 0.0, 100.0 + row, 0.0], [row, 3.0, 99.5, 3.0], [row + 4.0, 3.0, 101.0, 7.0]]
        )
    if layer.geometry == "Point":
        return shapely.Point(row, 1.0)
    if layer.geometry == "MultiPolygon":
        # one with a hole; single polygons are made multiple
        return shapely.Point(row, 0.0).buffer(2.0).difference(shapely.Point(row, 0.0).buffer(1.0))
    return shapely.LineString([[row, 0.0], [row + 1.0, 2.0]])


def make_layers(rows: int = 3, start: int = 0) -> dict:
    """Return every registered layer, filled with numbers that tell row and version."""
    made = {}
    for name, layer in LAYERS.items():
        table = pd.DataFrame({column: column_of(column, rows, start) for column in layer.columns})
        if layer.geometry:
            table = geopandas.GeoDataFrame(
                table, geometry=[shape_of(layer, row) for row in range(rows)], crs=CRS
            )
        made[name] = table
    return made


def write(path, layers, **options):
    options = {"units": US, "crs": CRS, "description": "A test.", "date": DATE} | options
    write_geopackage(path, layers, **options)


def query(path, sql: str) -> list[tuple]:
    with closing(sqlite3.connect(f"file:{path}?mode=ro", uri=True)) as database:
        return database.execute(sql).fetchall()


def wkb_of(blob: bytes) -> bytes:
    """Take the header of a GeoPackage geometry off (OGC 12-128r17, clause 2.1.3.1.1)."""
    assert blob[:2] == b"GP"
    return blob[8 + {0: 0, 1: 32, 2: 48, 3: 48, 4: 64}[(blob[3] >> 1) & 7] :]


@pytest.fixture(scope="module")
def written(tmp_path_factory) -> Path:
    path = tmp_path_factory.mktemp("written") / "results.gpkg"
    write(path, make_layers(), metadata={"study": "Mill Creek", "seconds": float("nan")})
    return path


# --- what is there ------------------------------------------------------------------------------------


def test_every_layer_is_there_with_its_columns_in_order(written):
    for name, layer in LAYERS.items():
        columns = [row[1] for row in query(written, f"PRAGMA table_info({name})")]
        assert columns == ["fid", *(["geom"] if layer.geometry else []), *layer.columns]
        assert query(written, f"SELECT count(*) FROM {name}") == [(3,)]
    assert [name for (name,) in query(written, "SELECT table_name FROM gpkg_contents ORDER BY rowid")] == [
        *LAYERS,
        "layer_styles",
    ]


def test_columns_have_the_registered_types(written):
    types = {str: "TEXT", float: "REAL", int: "INTEGER"}
    for name, layer in LAYERS.items():
        declared = {row[1]: row[2] for row in query(written, f"PRAGMA table_info({name})")}
        for column in layer.columns:
            assert declared[column] == types[COLUMNS[column].dtype], (name, column)


def test_values_come_back_as_they_went_in(written):
    for name, layer in LAYERS.items():
        rows = query(written, f"SELECT {', '.join(layer.columns)} FROM {name} ORDER BY fid")
        expected = list(zip(*(column_of(column, 3) for column in layer.columns), strict=True))
        assert rows == expected


def test_geometry_is_declared_as_registered(written):
    declared = query(
        written, "SELECT table_name, column_name, geometry_type_name, srs_id, z, m FROM gpkg_geometry_columns"
    )
    assert declared == [
        ("sections", "geom", "LINESTRING", CRS, 1, 1),
        ("subareas", "geom", "LINESTRING", CRS, 0, 0),
        ("design_stages", "geom", "MULTILINESTRING", CRS, 0, 0),
        ("crossings", "geom", "POINT", CRS, 0, 0),
        ("flood_extent", "geom", "MULTIPOLYGON", CRS, 0, 0),
        ("low_not_joined", "geom", "MULTIPOLYGON", CRS, 0, 0),
        ("required_widths", "geom", "LINESTRING", CRS, 0, 0),
        ("findings", "geom", "POINT", CRS, 0, 0),
    ]
    kinds = dict(query(written, "SELECT table_name, data_type FROM gpkg_contents"))
    assert kinds == {
        **{name: "features" if layer.geometry else "attributes" for name, layer in LAYERS.items()},
        "layer_styles": "attributes",
    }


def test_each_feature_layer_has_a_spatial_index(written):
    indexed = query(
        written,
        "SELECT table_name FROM gpkg_extensions WHERE extension_name = 'gpkg_rtree_index' ORDER BY rowid",
    )
    assert [name for (name,) in indexed] == [name for name, layer in LAYERS.items() if layer.geometry]
    assert query(written, "SELECT count(*) FROM rtree_sections_geom") == [(3,)]


def test_layers_carry_title_meaning_and_units(written):
    for name, identifier, description in query(
        written,
        "SELECT table_name, identifier, description FROM gpkg_contents WHERE table_name <> 'layer_styles'",
    ):
        assert identifier == LAYERS[name].title
        assert description == f"{LAYERS[name].meaning} Lengths and elevations are in ft, flows in ft³/s."


@pytest.mark.parametrize("units", [SI, US], ids=lambda units: units.name)
def test_every_column_of_every_layer_is_described(tmp_path, units):
    path = tmp_path / "results.gpkg"
    write(path, make_layers(1), units=units)
    described = {}
    for table, column, name, title, text in query(
        path, "SELECT table_name, column_name, name, title, description FROM gpkg_data_columns"
    ):
        described[table, column] = (title, text)
        assert name == title
    present = {(name, row[1]) for name in LAYERS for row in query(path, f"PRAGMA table_info({name})")}
    assert set(described) == present
    for name, layer in LAYERS.items():
        for column in layer.columns:
            assert described[name, column] == (column_title(column, units), column_description(column, units))
    assert described["sections", "geom"][1].endswith(f"Unit of z and m: {units.symbol('length')}.")


def test_extensions_are_registered_with_their_definitions(written):
    rows = query(
        written,
        "SELECT table_name, column_name, extension_name, definition, scope FROM gpkg_extensions "
        "WHERE extension_name IN ('gpkg_schema', 'gpkg_metadata') ORDER BY table_name",
    )
    # OGC 12-128r17, annexes F.8 and F.9: the rows that these extensions require.
    schema, metadata = (
        f"http://www.geopackage.org/spec121/#extension_{name}" for name in ("schema", "metadata")
    )
    assert rows == [
        ("gpkg_data_column_constraints", None, "gpkg_schema", schema, "read-write"),
        ("gpkg_data_columns", None, "gpkg_schema", schema, "read-write"),
        ("gpkg_metadata", None, "gpkg_metadata", metadata, "read-write"),
        ("gpkg_metadata_reference", None, "gpkg_metadata", metadata, "read-write"),
    ]


def test_the_data_set_describes_itself_with_the_caution(written):
    ((kind, text, scope),) = query(
        written,
        "SELECT mime_type, metadata, reference_scope FROM gpkg_metadata "
        "JOIN gpkg_metadata_reference ON id = md_file_id",
    )
    assert (kind, scope) == ("application/json", "geopackage")
    about = json.loads(text)
    assert about == {
        "study": "Mill Creek",
        "seconds": None,
        "description": "A test.",
        "caution": CAUTION,
        "units": "us",
    }


def test_the_file_is_sound(written):
    assert query(written, "PRAGMA integrity_check") == [("ok",)]
    assert query(written, "PRAGMA foreign_key_check") == []
    assert query(written, "PRAGMA application_id") == [(0x47504B47,)]  # "GPKG"
    assert query(written, "PRAGMA user_version") == [(10300,)]


def test_geopandas_reads_it(written):
    stages = geopandas.read_file(written, layer="design_stages")
    assert stages.crs == CRS
    assert list(stages["discharge"]) == [0.0, 1.0, 2.0]
    assert set(stages.geom_type) == {"MultiLineString"}
    assert pyogrio.read_dataframe(written, layer="ratings", read_geometry=False).shape == (3, 13)


@pytest.mark.skipif(
    shutil.which("ogrinfo") is None and os.environ.get("CI") != "true", reason="no ogrinfo on this machine"
)
def test_an_independent_reader_has_nothing_to_warn_about(written):
    done = subprocess.run(["ogrinfo", "-ro", "-al", str(written)], capture_output=True, text=True, check=True)
    assert done.stderr == ""
    assert "3D Measured Line String" in done.stdout
    assert "LINESTRING ZM (0 0 100 0,0 3 99.5 3,4 3 101 7)" in done.stdout


def python_with_validator() -> str | None:
    """Return a Python that has GDAL's GeoPackage validator, which usually is the system's own."""
    for python in (sys.executable, "/usr/bin/python3"):
        command = [python, "-c", "import osgeo_utils.samples.validate_gpkg"]
        if (
            Path(python).exists()
            and subprocess.run(command, capture_output=True, check=False).returncode == 0
        ):
            return python
    return None


def test_the_file_keeps_the_rules_of_the_standard(written):
    python = python_with_validator()
    if python is None:
        pytest.skip("no GeoPackage validator on this machine")
    validator = [python, "-m", "osgeo_utils.samples.validate_gpkg", "-k", "--extra", "--warning-as-error"]
    done = subprocess.run([*validator, str(written)], capture_output=True, text=True, check=False)
    assert (done.returncode, done.stdout, done.stderr) == (0, "", "")


# --- profiles -----------------------------------------------------------------------------------------

PROFILE = np.random.default_rng(7).normal(scale=1e6, size=(200, 4))
PROFILE[5, 2] = np.nan  # a gap in the ground


@pytest.mark.parametrize("given_as", ["geometry", "xyzm"])
def test_profiles_keep_every_bit_of_z_and_m(tmp_path, given_as):
    lines = [PROFILE, PROFILE[:2], None]
    table = pd.DataFrame({name: column_of(name, 3) for name in LAYERS["sections"].columns})
    if given_as == "geometry":
        shapes = [None if line is None else linestring_zm(line) for line in lines]
        table = geopandas.GeoDataFrame(table, geometry=shapes, crs=CRS)
    else:
        table["xyzm"] = lines
    path = tmp_path / "results.gpkg"
    write(path, {"sections": table})
    blobs = [blob for (blob,) in query(path, "SELECT geom FROM sections ORDER BY fid")]
    assert blobs[2] is None
    for blob, line in zip(blobs[:2], lines[:2], strict=True):
        kind = np.frombuffer(wkb_of(blob)[1:5], "<u4")[0]
        assert kind == 3002  # LineString ZM in ISO WKB
        assert wkb_of(blob)[9:] == line.astype("<f8").tobytes()


def test_linestring_zm_holds_all_four_numbers():
    line = linestring_zm(PROFILE)
    np.testing.assert_array_equal(shapely.get_coordinates(line, include_z=True, include_m=True), PROFILE)
    assert linestring_zm(np.empty((0, 4))).is_empty


# --- what is missing -----------------------------------------------------------------------------------


def test_empty_layers_are_written(tmp_path):
    path = tmp_path / "results.gpkg"
    layers = {name: table.iloc[:0] for name, table in make_layers().items()}
    layers["subareas"] = pd.DataFrame({name: [] for name in [*LAYERS["subareas"].columns, "geometry"]})
    write(path, layers)
    for name, layer in LAYERS.items():
        assert query(path, f"SELECT count(*) FROM {name}") == [(0,)]
        columns = [row[1] for row in query(path, f"PRAGMA table_info({name})")]
        assert columns == ["fid", *(["geom"] if layer.geometry else []), *layer.columns]


def test_missing_values_and_geometries_become_null(tmp_path):
    path = tmp_path / "results.gpkg"
    layers = {}
    for name, layer in LAYERS.items():
        # Every way in which pandas says "nothing here".
        nothing = [None, np.nan, pd.NA]
        table = pd.DataFrame({column: pd.Series(nothing, dtype=object) for column in layer.columns})
        if layer.geometry:
            empty = {"Point": shapely.Point(), "MultiPolygon": shapely.MultiPolygon()}
            empty = empty.get(layer.geometry, shapely.LineString())
            table = geopandas.GeoDataFrame(table, geometry=[None, None, empty], crs=CRS)
        layers[name] = table
    write(path, layers)
    for name, layer in LAYERS.items():
        columns = [*layer.columns, *(["geom"] if layer.geometry else [])]
        for column in columns:
            kinds = query(path, f"SELECT DISTINCT typeof({column}) FROM {name}")
            assert kinds == [("null",)], (name, column)


@pytest.mark.parametrize(
    "values",
    [[4, None, 6], pd.array([4, None, 6], dtype="Int64"), [4.0, np.nan, 6.0]],
    ids=["objects", "nullable", "floats"],
)
def test_whole_numbers_with_gaps_stay_whole_numbers(tmp_path, values):
    path = tmp_path / "results.gpkg"
    table = make_layers()["sections"]
    table["points"] = values
    write(path, {"sections": table})
    rows = query(path, "SELECT points, typeof(points) FROM sections ORDER BY fid")
    assert rows == [(4, "integer"), (None, "null"), (6, "integer")]


@settings(max_examples=25, deadline=None)
@given(
    st.lists(
        st.tuples(
            st.one_of(st.none(), st.text(st.characters(exclude_categories=["Cs"], exclude_characters="\0"))),
            st.floats(allow_infinity=False),
        ),
        min_size=1,
        max_size=5,
    )
)
def test_any_text_and_any_number_comes_back(tmp_path_factory, rows):
    path = tmp_path_factory.mktemp("any") / "results.gpkg"
    texts, numbers = zip(*rows, strict=True)
    table = pd.DataFrame({name: column_of(name, len(rows)) for name in LAYERS["ratings"].columns})
    table["section_id"] = pd.Series(texts, dtype=object)
    table["stage"] = numbers
    write(path, {"ratings": table})
    back = query(path, "SELECT section_id, stage FROM ratings ORDER BY fid")
    assert back == [(text, None if np.isnan(number) else number) for text, number in rows]


# --- what is refused -----------------------------------------------------------------------------------


def without_message(layers):
    layers["findings"] = layers["findings"].drop(columns="message")


def with_another(layers):
    layers["ratings"]["velocity_head"] = 1.0


def with_xyzm_elsewhere(layers):
    layers["subareas"]["xyzm"] = None


def unknown_layer(layers):
    layers["notes"] = pd.DataFrame()


def number_for_text(layers):
    layers["sections"]["section_id"] = [1, 2, 3]


def text_for_number(layers):
    layers["ratings"]["stage"] = ["high", "low", "none"]


def truth_for_number(layers):
    layers["sections"]["points"] = [True, False, True]


def part_of_a_point(layers):
    layers["sections"]["points"] = [1.5, 2.0, 3.0]


def infinite(layers):
    layers["ratings"]["froude"] = [1.0, np.inf, 2.0]


def without_geometry(layers):
    layers["subareas"] = pd.DataFrame(layers["subareas"].drop(columns="geometry"))


def points_for_lines(layers):
    layers["subareas"] = layers["subareas"].set_geometry([shapely.Point(0, 0)] * 3, crs=CRS)


def lines_without_m(layers):
    layers["sections"] = layers["sections"].set_geometry(
        [shapely.LineString([[0, 0, 1], [1, 1, 1]])] * 3, crs=CRS
    )


def in_another_crs(layers):
    layers["subareas"] = layers["subareas"].set_crs(26916, allow_override=True)


@pytest.mark.parametrize(
    ("spoil", "said"),
    [
        (without_message, r"findings: missing \['message'\]"),
        (with_another, r"ratings.*unknown \['velocity_head'\]"),
        (with_xyzm_elsewhere, r"subareas.*unknown \['xyzm'\]"),
        (unknown_layer, "not registered: notes"),
        (number_for_text, "sections.section_id holds 1, which is not text"),
        (text_for_number, "ratings.stage holds what is not a number"),
        (truth_for_number, "sections.points holds true and false"),
        (part_of_a_point, "sections.points holds a number that is not whole"),
        (infinite, "ratings.froude holds an infinite number in row 1"),
        (without_geometry, "subareas has no geometry"),
        (points_for_lines, "subareas holds geometries other than LineString"),
        (lines_without_m, "sections holds lines without z and m"),
        (in_another_crs, "subareas is in NAD83 / UTM zone 16N"),
    ],
    ids=lambda value: getattr(value, "__name__", ""),
)
def test_what_is_not_as_registered_is_our_own_mistake(tmp_path, spoil, said):
    layers = make_layers()
    spoil(layers)
    with pytest.raises(ValueError, match=said) as caught:
        write(tmp_path / "results.gpkg", layers)
    assert not isinstance(caught.value, OutputError)
    assert list(tmp_path.iterdir()) == []


def test_an_earlier_file_is_kept_unless_told(tmp_path):
    path = tmp_path / "results.gpkg"
    write(path, make_layers())
    before = path.read_bytes()
    with pytest.raises(OutputError) as caught:
        write(path, make_layers(start=10))
    assert caught.value.code == "output-exists"
    assert str(tmp_path) in caught.value.where
    assert path.read_bytes() == before
    write(path, make_layers(start=10), overwrite=True)
    assert query(path, "SELECT min(discharge) FROM ratings") == [(10.0,)]
    assert list(tmp_path.iterdir()) == [path]


def test_check_output_says_no_before_any_work_and_makes_nothing(tmp_path):
    folder = tmp_path / "new" / "deeper"
    check_output(folder)
    assert list(tmp_path.iterdir()) == []
    folder.mkdir(parents=True)
    check_output(folder)
    assert list(folder.iterdir()) == []
    (folder / "results.gpkg").write_bytes(b"earlier")
    with pytest.raises(OutputError) as caught:
        check_output(folder)
    assert caught.value.code == "output-exists"
    check_output(folder, overwrite=True)
    assert (folder / "results.gpkg").read_bytes() == b"earlier"


@pytest.mark.parametrize("where", ["file", "file/below", "taken"])
def test_a_folder_that_cannot_be_written_is_said(tmp_path, where):
    (tmp_path / "file").write_text("not a folder")
    (tmp_path / "taken" / "results.gpkg").mkdir(parents=True)
    folder = tmp_path / where
    for attempt in (
        lambda: check_output(folder, overwrite=True),
        lambda: write(folder / "results.gpkg", make_layers(), overwrite=True),
    ):
        with pytest.raises(OutputError) as caught:
            attempt()
        assert caught.value.code == "output-not-writable"
        assert str(folder) in caught.value.where


@pytest.mark.skipif(
    not hasattr(os, "geteuid") or os.geteuid() == 0, reason="an administrator may write anywhere"
)
def test_a_folder_without_permission_is_said(tmp_path):
    folder = tmp_path / "closed"
    folder.mkdir(mode=0o500)
    with pytest.raises(OutputError) as caught:
        check_output(folder)
    assert caught.value.code == "output-not-writable"


# --- rows as they come ---------------------------------------------------------------------------------


def tables_of(layers) -> dict[str, pa.Table]:
    """Return layers as the tables that a writer takes."""
    return {
        name: geopackage._table(LAYERS[name], table, geopackage.CRS(CRS)) for name, table in layers.items()
    }


def writer(path, layers=LAYERS, **options) -> GeoPackageWriter:
    options = {"units": US, "crs": CRS, "description": "A test.", "date": DATE} | options
    return GeoPackageWriter(path, layers, **options)


def write_in_pieces(path, tables, size: int, **options) -> None:
    """Write tables in pieces of so many rows, last layer first, in turns."""
    with writer(path, tables, **options) as made:
        for start in range(0, max(table.num_rows for table in tables.values()), size):
            for name in reversed(tables):
                made.append(name, tables[name].slice(start, size))
        assert made.counts == {name: tables[name].num_rows for name in LAYERS}


def everything_in(path) -> dict:
    """Return every row of every table, and every statement that made one; the pages of indexes left out."""
    made = query(path, "SELECT type, name, tbl_name, sql FROM sqlite_master ORDER BY type, name")
    names = [name for kind, name, _, _ in made if kind == "table" and not name.startswith("rtree_")]
    return {"": made} | {name: query(path, f'SELECT * FROM "{name}" ORDER BY rowid') for name in names}


def boxes_in(path, name: str) -> dict[int, tuple]:
    rows = query(path, f"SELECT id, minx, maxx, miny, maxy FROM rtree_{name}_geom")
    assert query(path, f"SELECT rtreecheck('rtree_{name}_geom')") == [("ok",)]
    return {row[0]: row[1:] for row in rows}


@pytest.mark.parametrize("waiting", [64_000_000, 20_000, 1], ids=["all", "some", "none"])
def test_pieces_in_any_order_make_the_same_file(tmp_path, monkeypatch, waiting):
    whole, pieces, again = (tmp_path / f"{name}.gpkg" for name in ("whole", "pieces", "again"))
    tables = tables_of(make_layers(100))
    write(whole, make_layers(100))
    monkeypatch.setattr(geopackage, "_WAITING_BYTES", waiting)
    write_in_pieces(pieces, tables, 7)
    write_in_pieces(again, tables, 7)
    assert pieces.read_bytes() == again.read_bytes()
    assert everything_in(pieces) == everything_in(whole)
    for name in (name for name, layer in LAYERS.items() if layer.geometry):
        assert boxes_in(pieces, name) == boxes_in(whole, name)
    if waiting == 64_000_000:
        assert pieces.read_bytes() == whole.read_bytes()


def test_rows_that_wait_are_bounded_and_go_in_large_pieces(tmp_path, monkeypatch):
    monkeypatch.setattr(geopackage, "_WAITING_BYTES", 50_000)
    tables, sizes = tables_of(make_layers(100)), []
    original = geopackage._write_rows

    def write_rows(path, layer, table, *arguments, append):
        sizes.extend([table.nbytes] if append else [])
        original(path, layer, table, *arguments, append=append)

    monkeypatch.setattr(geopackage, "_write_rows", write_rows)
    with writer(tmp_path / "results.gpkg") as made:
        for _ in range(10):
            for name, table in tables.items():
                made.append(name, table)
                assert sum(t.nbytes for waiting in made._waiting.values() for t in waiting) <= 50_000
        pieces, written = len(sizes), sum(sizes)
    total = 10 * sum(table.nbytes for table in tables.values())
    assert written > total - 50_000
    # the fullest of ten layers is at least a tenth of what may wait
    assert pieces <= total / 5_000


def test_ogr_finds_no_index_out_of_step_while_rows_come(tmp_path, monkeypatch):
    """OGR holds the index of a large table without entries for a broken one; here from ten rows on."""
    monkeypatch.setattr(geopackage, "_WAITING_BYTES", 1)
    with geopackage._gdal_options(OGR_GPKG_THRESHOLD_DETECT_BROKEN_RTREE="10"):
        write_in_pieces(tmp_path / "results.gpkg", tables_of(make_layers(60)), 20)
        assert (
            len(pyogrio.read_dataframe(tmp_path / "results.gpkg", layer="subareas", bbox=(0, 0, 3, 1))) == 4
        )


def test_layers_without_rows_are_there_in_the_order_of_the_registry(tmp_path):
    path = tmp_path / "results.gpkg"
    wanted = ["findings", "ratings", "sections", "subarea_flows"]
    with writer(path, wanted) as made:
        made.append("ratings", tables_of(make_layers())["ratings"])
    listed = [name for (name,) in query(path, "SELECT table_name FROM gpkg_contents ORDER BY rowid")]
    assert listed == ["sections", "ratings", "subarea_flows", "findings", "layer_styles"]
    assert made.counts == {"sections": 0, "ratings": 3, "subarea_flows": 0, "findings": 0}
    for name in wanted:
        columns = [row[1] for row in query(path, f"PRAGMA table_info({name})")]
        assert columns[-len(LAYERS[name].columns) :] == list(LAYERS[name].columns)


def test_what_is_put_off_while_rows_are_written_is_as_ogr_makes_it(tmp_path):
    """An independent writer of the same rows: OGR, which keeps its index row by row."""
    ours, ogrs = tmp_path / "ours.gpkg", tmp_path / "ogrs.gpkg"
    table = make_layers(300)["subareas"]
    write_in_pieces(ours, tables_of(make_layers(1) | {"subareas": table}), 50)
    pyogrio.write_dataframe(
        table, ogrs, layer="subareas", SPATIAL_INDEX="YES", GEOMETRY_NAME="geom", VERSION="1.3"
    )
    made = "SELECT type, name, sql FROM sqlite_master WHERE tbl_name LIKE '%subareas%' ORDER BY type, name"
    assert query(ours, made) == query(ogrs, made)
    for asked in (
        "SELECT * FROM sqlite_sequence WHERE name = 'subareas'",
        "SELECT * FROM gpkg_extensions WHERE table_name = 'subareas'",
        "SELECT * FROM gpkg_ogr_contents WHERE table_name = 'subareas'",
        "SELECT min_x, min_y, max_x, max_y FROM gpkg_contents WHERE table_name = 'subareas'",
        "SELECT * FROM subareas ORDER BY fid",
    ):
        assert query(ours, asked) == query(ogrs, asked), asked
    assert boxes_in(ours, "subareas").keys() == boxes_in(ogrs, "subareas").keys()


REFUSED = {
    "nothing": [],
    "tables behind an index": [(spatial_index, "_pack")],
    "a schema written by hand": [(geopackage, "_write_schema")],
    "indexes": [(geopackage, "_take_indexes")],
}
"""What SQLite may be built to refuse."""


@pytest.mark.parametrize("refused", REFUSED)
def test_a_gis_goes_on_where_the_writer_ended(tmp_path, monkeypatch, refused):
    path = tmp_path / "results.gpkg"
    with monkeypatch.context() as patch:
        for owner, what in REFUSED[refused]:
            fail_at(owner, what)(patch, sqlite3.OperationalError("may not be modified"))
        write_in_pieces(path, tables_of(make_layers(200)), 50)
    more = make_layers(2, start=500)["subareas"].set_geometry(
        [shapely.LineString([[9000, 0], [9001, 1]])] * 2, crs=CRS
    )
    pyogrio.write_dataframe(more, path, layer="subareas", append=True)
    assert query(path, "SELECT max(fid), count(*) FROM subareas") == [(202, 202)]
    found = pyogrio.read_dataframe(path, layer="subareas", bbox=(8999, -1, 9002, 2))
    assert list(found["subarea"]) == [500, 501]
    assert len(boxes_in(path, "subareas")) == 202


@pytest.mark.parametrize("refused", REFUSED)
@pytest.mark.parametrize("rows", [0, 1, 51, 52, 3000])
def test_the_index_finds_what_a_look_at_every_row_finds(tmp_path, monkeypatch, rows, refused):
    monkeypatch.setattr(spatial_index, "_BLOCK", 1000)
    monkeypatch.setattr(spatial_index, "_FETCHED", 300)
    for owner, what in REFUSED[refused]:
        fail_at(owner, what)(monkeypatch, sqlite3.OperationalError("may not be modified"))
    random = np.random.default_rng(11)
    starts = random.uniform([-500_000.0, 4_000_000.0], [500_000.0, 5_000_000.0], (rows, 2))
    lines = np.array(
        [
            shapely.LineString([a, a + d])
            for a, d in zip(starts, random.normal(size=(rows, 2)) * 5e3, strict=True)
        ]
    )
    lines[5::10] = None
    path, name = tmp_path / "results.gpkg", "subareas"
    table = pd.DataFrame({column: column_of(column, rows) for column in LAYERS[name].columns})
    write(path, {name: geopandas.GeoDataFrame(table, geometry=lines, crs=CRS)})
    boxes = boxes_in(path, name)
    present = [row for row in range(rows) if lines[row] is not None]
    assert sorted(boxes) == [row + 1 for row in present]
    for row in present:
        x0, y0, x1, y1 = lines[row].bounds
        a, b, c, d = boxes[row + 1]
        assert a <= x0 <= x1 <= b
        assert c <= y0 <= y1 <= d
        # single precision, as SQLite keeps it
        assert max(x0 - a, b - x1, y0 - c, d - y1) <= 1.0
    for west, south in random.uniform([-500_000.0, 4_000_000.0], [400_000.0, 4_900_000.0], (20, 2)):
        window = shapely.box(west, south, west + 1e5, south + 1e5)
        found = pyogrio.read_dataframe(path, layer=name, bbox=window.bounds, fid_as_index=True)
        assert sorted(found.index) == [row + 1 for row in present if lines[row].intersects(window)]


def test_what_an_append_cannot_take_is_our_own_mistake(tmp_path):
    tables = tables_of(make_layers())
    ratings, subareas, findings = tables["ratings"], tables["subareas"], tables["findings"]
    froude = ratings.column_names.index("froude")

    def with_shapes(table, shapes):
        kind = pa.string() if isinstance(shapes[0], str) else pa.binary()
        return table.set_column(table.num_columns - 1, "geometry", pa.array(shapes, kind))

    def with_froude(values):
        return ratings.set_column(froude, "froude", values)

    line = shapely.LineString([[0, 0], [1, 1]])
    for name, table, said in [
        ("sections", tables["sections"], "was not made for the layer sections"),
        ("ratings", ratings.select(ratings.column_names[::-1]), "columns of ratings"),
        ("subareas", subareas.drop_columns(["geometry"]), "columns of subareas"),
        ("ratings", with_froude(pa.array([1, 2, 3])), "ratings.froude is int64, not double"),
        ("ratings", with_froude(pa.chunked_array([[0.0], [1.0, -np.inf]])), "infinite number in row 2"),
        ("subareas", with_shapes(subareas, ["a", "b", "c"]), "geometry is string, not binary"),
        ("subareas", with_shapes(subareas, [None, None, shapely.to_wkb(shapely.Point(0, 0))]), "of kind 1"),
        ("subareas", with_shapes(subareas, [None, None, shapely.to_wkb(line, byte_order=0)]), "other than"),
        ("subareas", with_shapes(subareas, [None, None, b"\1\2\0\0\0"]), "no WKB"),
        ("findings", with_shapes(findings, [None, None, shapely.to_wkb(line)]), "other than Point"),
    ]:  # fmt: skip
        wanted = ["ratings", "subareas", "findings"]
        with pytest.raises(ValueError, match=said), writer(tmp_path / "results.gpkg", wanted) as made:
            made.append(name, table)
    assert list(tmp_path.iterdir()) == []
    with pytest.raises(ValueError, match="no layer to write"):
        writer(tmp_path / "results.gpkg", [])


def test_nothing_in_a_table_becomes_null_and_empty_text_stays(tmp_path):
    path = tmp_path / "results.gpkg"
    findings, subareas, stages = LAYERS["findings"], LAYERS["subareas"], LAYERS["design_stages"]

    def rows(layer, values, shapes):
        made = {name: pa.array(values[COLUMNS[name].dtype], geopackage._ARROW_TYPES[COLUMNS[name].dtype][0])
                for name in layer.columns}  # fmt: skip
        return pa.table(made | {"geometry": pa.array(shapes, pa.binary())})

    values = {float: [np.nan, None, 1.0], int: [None, 2, 3], str: [None, "", "é"]}
    empty = {
        "Point": shapely.Point(), "LineString": shapely.LineString(),
        "MultiLineString": shapely.MultiLineString(),
    }  # fmt: skip
    with writer(path, ["findings", "subareas", "design_stages"]) as made:
        for layer in (findings, subareas, stages):
            shape = shape_of(layer, 1)
            shape = shapely.multilinestrings([shape]) if layer.geometry == "MultiLineString" else shape
            table = rows(layer, values, [None, *shapely.to_wkb([empty[layer.geometry], shape])])
            made.append(layer.name, table)
            made.append(layer.name, table.slice(1))  # a part, whose bytes begin elsewhere
    for layer in (findings, subareas, stages):
        expected = {float: [None, None, 1.0], int: [None, 2, 3], str: [None, "", "é"]}
        for name in layer.columns:
            wanted = expected[COLUMNS[name].dtype]
            found = [value for (value,) in query(path, f"SELECT {name} FROM {layer.name} ORDER BY fid")]
            assert found == wanted + wanted[1:], name
        kinds = query(path, f"SELECT typeof(geom) FROM {layer.name} ORDER BY fid")
        assert kinds == [("null",), ("null",), ("blob",), ("null",), ("blob",)]
        assert sorted(boxes_in(path, layer.name)) == [3, 5]


def test_an_exception_between_rows_leaves_nothing(tmp_path):
    path = tmp_path / "new" / "results.gpkg"
    tables = tables_of(make_layers())
    with suppress(KeyboardInterrupt), writer(path) as made:
        made.append("ratings", tables["ratings"])
        raise KeyboardInterrupt
    assert list(path.parent.iterdir()) == []
    write(path, make_layers())
    with pytest.raises(OutputError) as caught, writer(path):
        raise AssertionError("entered")
    assert caught.value.code == "output-exists"


def test_tones_of_events_are_those_of_all_rows(tmp_path):
    """Events that come in pieces: the styles are those of the layers at once."""
    layers = make_layers(60)
    for name in ("design_stages", "flood_extent", "crossings"):
        layers[name]["event"] = [f"{2 + row % 3}-year" for row in range(60)]
    whole, pieces = tmp_path / "whole.gpkg", tmp_path / "pieces.gpkg"
    write(whole, layers)
    write_in_pieces(pieces, tables_of(layers), 11)
    styles = query(pieces, "SELECT styleQML, styleSLD FROM layer_styles ORDER BY id")
    assert styles == query(whole, "SELECT styleQML, styleSLD FROM layer_styles ORDER BY id")
    assert any("3-year" in qml for qml, _ in styles)


# --- whole or not there --------------------------------------------------------------------------------


def fail_on_write(number: int):
    def prepare(monkeypatch, error):
        original, calls = geopackage._write_rows, []

        def write_rows(*arguments, **options):
            original(*arguments, **options)
            calls.append(arguments)
            if len(calls) == number:
                raise error

        monkeypatch.setattr(geopackage, "_write_rows", write_rows)

    return prepare


def fail_at(owner, name: str):
    def prepare(monkeypatch, error):
        def fail(*arguments, **options):
            raise error

        monkeypatch.setattr(owner, name, fail)

    return prepare


MOMENTS = {
    # layers are made first, then rows are written
    "first layer": fail_on_write(1),
    "last layer": fail_on_write(len(LAYERS)),
    "first rows": fail_on_write(len(LAYERS) + 1),
    "third rows": fail_on_write(len(LAYERS) + 3),
    "last rows": fail_on_write(2 * len(LAYERS)),
    "putting off": fail_at(geopackage, "_put_off"),
    "indexing": fail_at(geopackage, "fill_index"),
    "describing": fail_at(geopackage, "_describe"),
    "checking": fail_at(geopackage, "_check"),
    "settling": fail_at(geopackage, "_settle"),
    "flushing": fail_at(whole_file, "_flush_to_disk"),
    "renaming": fail_at(Path, "replace"),
}


@pytest.mark.parametrize(
    "error", [OSError(28, "No space left on device"), KeyboardInterrupt()], ids=["disk", "stop"]
)
@pytest.mark.parametrize("moment", MOMENTS)
@pytest.mark.parametrize("earlier", [True, False], ids=["earlier", "new"])
def test_a_failure_at_any_moment_leaves_the_folder_as_it_was(tmp_path, monkeypatch, moment, error, earlier):
    path = tmp_path / "results.gpkg"
    if earlier:
        write(path, make_layers())
    before = {file: file.read_bytes() for file in tmp_path.iterdir()}
    with monkeypatch.context() as patch:
        MOMENTS[moment](patch, error)
        with pytest.raises((OSError, KeyboardInterrupt)) as caught:
            write(path, make_layers(start=10), overwrite=True)
    if isinstance(error, OSError) and moment != "settling":
        assert caught.value.code == "output-not-writable"
        assert "No space left on device" in caught.value.what
    assert {file: file.read_bytes() for file in tmp_path.iterdir()} == before
    write(path, make_layers(start=20), overwrite=True)
    assert query(path, "SELECT min(discharge) FROM ratings") == [(20.0,)]


@pytest.mark.skipif(sys.platform != "linux", reason="needs a limit on the size of files")
@pytest.mark.parametrize("limit", [20_000, 150_000, 250_000])
def test_a_full_disk_is_said_and_the_earlier_file_stays(tmp_path, limit):
    import resource

    path = tmp_path / "results.gpkg"
    write(path, make_layers())
    before = path.read_bytes()
    layers = make_layers(1000)
    soft, hard = resource.getrlimit(resource.RLIMIT_FSIZE)
    resource.setrlimit(resource.RLIMIT_FSIZE, (limit, hard))
    try:
        with pytest.raises(OutputError) as caught:
            write(path, layers, overwrite=True)
    finally:
        resource.setrlimit(resource.RLIMIT_FSIZE, (soft, hard))
    assert caught.value.code == "output-not-writable"
    assert path.read_bytes() == before
    assert list(tmp_path.iterdir()) == [path]


def test_a_file_that_lost_a_row_is_not_put_in_place(tmp_path, monkeypatch):
    original = geopackage._describe

    def lose_a_row(path, *arguments):
        counts = original(path, *arguments)
        with closing(sqlite3.connect(path)) as database:
            database.execute("DELETE FROM subarea_flows WHERE fid = 2")
            database.commit()
        return counts

    monkeypatch.setattr(geopackage, "_describe", lose_a_row)
    with pytest.raises(OutputError, match="it holds the rows"):
        write(tmp_path / "results.gpkg", make_layers())
    assert list(tmp_path.iterdir()) == []


def test_the_same_layers_and_date_give_the_same_bytes(tmp_path):
    first, second, later = (tmp_path / f"{name}.gpkg" for name in ("first", "second", "later"))
    write(first, make_layers())
    write(second, make_layers())
    write(later, make_layers(), date="2026-01-02T00:00:00.000Z")
    assert first.read_bytes() == second.read_bytes() != later.read_bytes()
    assert pyogrio.get_gdal_config_option("OGR_CURRENT_DATE") is None


def test_changes_a_gis_kept_beside_the_earlier_file_do_not_reach_the_new_one(tmp_path):
    path = tmp_path / "results.gpkg"
    write(path, make_layers(200))
    with closing(sqlite3.connect(path)) as gis:
        gis.execute("PRAGMA journal_mode = WAL")
        gis.execute("PRAGMA wal_autocheckpoint = 0")
        gis.execute("UPDATE ratings SET section_id = 'edited'")
        gis.commit()
        assert path.with_name("results.gpkg-wal").stat().st_size > 0
        write(path, make_layers(200, start=10), overwrite=True)
        assert query(path, "PRAGMA integrity_check") == [("ok",)]
        assert query(path, "SELECT count(*) FROM ratings WHERE section_id = 'edited'") == [(0,)]
        assert list(tmp_path.iterdir()) == [path]


def test_what_a_dead_run_left_is_removed_and_a_living_runs_file_is_kept(tmp_path):
    host = whole_file._host()
    gone = subprocess.Popen([sys.executable, "-c", ""])
    gone.wait()
    dead = tmp_path / f".results.gpkg.partial-{host}-{gone.pid}-0123abcd.gpkg"
    journal = dead.with_name(dead.name + "-journal")
    living = tmp_path / f".results.gpkg.partial-{host}-{os.getppid()}-0123abcd.gpkg"
    elsewhere = tmp_path / f".results.gpkg.partial-{host}x-{gone.pid}-0123abcd.gpkg"
    long_ago = tmp_path / f".results.gpkg.partial-{host}x-{gone.pid}-99999999.gpkg"
    other = tmp_path / ".results.gpkg.partial-notes.txt"
    everything = [dead, journal, living, elsewhere, long_ago, other]
    for file in everything:
        file.write_bytes(b"part")
    os.utime(long_ago, (time.time() - 7200,) * 2)
    write(tmp_path / "results.gpkg", make_layers())
    assert {file for file in everything if file.exists()} == {living, elsewhere, other}


# A helper process holds the imports, so that each kill costs a fork and not a start. Its children write
# version after version; every number of a version says which one it is.
WRITER = """
import os, sys, time
sys.path[:0] = [{tests!r}, {root!r}]
from test_geopackage import make_layers, write
versions = [make_layers({rows}, start=1000 * version) for version in range(4)]
write({path!r}, versions[0])
start = time.perf_counter()
write({path!r}, versions[0], overwrite=True)
print(time.perf_counter() - start, flush=True)
for command in sys.stdin:
    child = os.fork()
    if child == 0:
        version = int(command)
        print(os.getpid(), flush=True)
        while True:
            version += 1
            write({path!r}, versions[version % 4], overwrite=True)
    os.waitpid(child, 0)
    print("ended", flush=True)
"""


@pytest.mark.skipif(not hasattr(os, "fork"), reason="needs fork and SIGKILL")
def test_killed_at_any_moment_the_earlier_file_is_whole(tmp_path):
    folder = tmp_path / "output"
    folder.mkdir()
    path, rows, kills = folder / "results.gpkg", 100, 25
    script = textwrap.dedent(WRITER).format(
        tests=str(Path(__file__).parent), root=str(Path(__file__).parents[1]), path=str(path), rows=rows
    )
    moments, seen, interrupted = random.Random(20260101), set(), 0
    with subprocess.Popen(
        [sys.executable, "-c", script], stdin=subprocess.PIPE, stdout=subprocess.PIPE, text=True, bufsize=1
    ) as helper:
        one_write = float(helper.stdout.readline())
        for kill in range(kills):
            print(kill, file=helper.stdin, flush=True)
            child = int(helper.stdout.readline())
            time.sleep(moments.uniform(0.0, 3.0 * one_write))
            os.kill(child, signal.SIGKILL)
            assert helper.stdout.readline() == "ended\n"
            interrupted += any(".partial-" in file.name for file in folder.iterdir())

            assert query(path, "PRAGMA integrity_check") == [("ok",)]
            versions = set()
            for name, layer in LAYERS.items():
                number = next(column for column in layer.columns if COLUMNS[column].dtype is str)
                values = [value for (value,) in query(path, f"SELECT {number} FROM {name} ORDER BY fid")]
                start = int(re.search(r"\d+$", values[0])[0])
                assert values == column_of(number, rows, start)
                versions.add(start)
            assert len(versions) == 1, "layers of two versions in one file"
            seen |= versions
        helper.stdin.close()
    assert interrupted >= kills // 2, "too few kills met a file being written"
    assert len(seen) > 1, "no version was ever finished"
    write(path, make_layers(), overwrite=True)
    assert list(folder.iterdir()) == [path]
