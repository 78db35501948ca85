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
from contextlib import closing
from pathlib import Path

import geopandas
import numpy as np
import pandas as pd
import pyogrio
import pytest
import shapely
from hypothesis import given, settings
from hypothesis import strategies as st

from terrain2q.columns import CAUTION, COLUMNS, LAYERS, column_description, column_title
from terrain2q.errors import OutputError
from terrain2q.output import geopackage, whole_file
from terrain2q.output.geopackage import check_output, linestring_zm, write_geopackage
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


# --- whole or not there --------------------------------------------------------------------------------


def fail_on_layer(number: int):
    def prepare(monkeypatch, error):
        original, calls = geopackage._write_layer, []

        def write_layer(*arguments):
            original(*arguments)
            calls.append(arguments)
            if len(calls) == number:
                raise error

        monkeypatch.setattr(geopackage, "_write_layer", write_layer)

    return prepare


def fail_at(owner, name: str):
    def prepare(monkeypatch, error):
        def fail(*arguments, **options):
            raise error

        monkeypatch.setattr(owner, name, fail)

    return prepare


MOMENTS = {
    "first layer": fail_on_layer(1),
    "third layer": fail_on_layer(3),
    "last layer": fail_on_layer(6),
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
