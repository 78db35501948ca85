"""Layers read back from a file: the very ones that went in, and only those that are asked for."""

from __future__ import annotations

import shutil
import sqlite3
from contextlib import closing
from pathlib import Path

import geopandas
import numpy as np
import pandas as pd
import pytest
import shapely
from test_geopackage import DATE, make_layers, tables_of, write, writer

from terrain2q.columns import COLUMNS, LAYERS
from terrain2q.errors import InputError
from terrain2q.output import folder as folder_module
from terrain2q.output.folder import StoredLayers, read_folder
from terrain2q.process import run_study
from terrain2q.study import load_study

SAMPLE = Path(__file__).parents[1] / "sample_dem"


@pytest.fixture(scope="module")
def sample(tmp_path_factory):
    """The sample study with all that it can be asked for, benches too, so that every layer has rows."""
    options = {"output.folder": str(tmp_path_factory.mktemp("sample")), "output.report": "false"}
    return run_study(load_study(SAMPLE / "study.toml", options), widths=True)


def assert_same(read, given) -> None:
    """Columns, their types, every value, every shape with z and m, and the CRS."""
    assert type(read) is type(given)
    assert list(read.columns) == list(given.columns)
    assert list(read.dtypes) == list(given.dtypes)
    assert read.index.equals(given.index)
    plain = [pd.DataFrame(t).drop(columns="geometry", errors="ignore") for t in (read, given)]
    pd.testing.assert_frame_equal(*plain, check_exact=True)
    if isinstance(given, geopandas.GeoDataFrame):
        assert read.crs == given.crs
        assert read.active_geometry_name == given.active_geometry_name
        found, wanted = (bytes_of(t.geometry) for t in (read, given))
        assert [i for i, (a, b) in enumerate(zip(found, wanted, strict=True)) if a != b] == []


def bytes_of(shapes) -> list[bytes | None]:
    """Shapes with z and m; None where there is none or, as a file keeps it, an empty one."""
    shapes = np.array(list(shapes), dtype=object)
    shapes[shapely.is_empty(shapes)] = None
    return list(shapely.to_wkb(shapes, output_dimension=4, flavor="iso"))


def test_each_layer_of_the_sample_comes_back_as_it_was(sample):
    stored = StoredLayers(sample.folder / "results.gpkg")
    # but for those of crossing_sections.gpkg
    assert set(stored) == set(LAYERS) - {"road_profiles", "crossing_steps", "opening_parts"}
    for name in stored:
        assert_same(stored[name], sample.layers[name])
    line = stored["sections"].geometry.iloc[0]
    assert line.has_z
    assert line.has_m


def test_an_output_folder_is_read_as_its_layers(sample):
    """Plain tables, with empty text where the file has none."""
    read = read_folder(sample.folder).layers
    for name, given in sample.layers.items():
        given, found = pd.DataFrame(given), read[name]
        assert type(found) is pd.DataFrame
        for column in LAYERS[name].columns:
            wanted = given[column].fillna("") if COLUMNS[column].dtype is str else given[column]
            pd.testing.assert_series_equal(found[column], wanted, check_exact=True)
        if LAYERS[name].geometry:
            assert found["geometry"].dtype == object
            assert bytes_of(found["geometry"]) == bytes_of(given["geometry"])


def test_only_what_is_asked_for_is_read_and_once(tmp_path, monkeypatch):
    path = tmp_path / "results.gpkg"
    write(path, make_layers(5))
    original, asked = folder_module._read_layer, []
    monkeypatch.setattr(folder_module, "_read_layer", lambda path, n: asked.append(n) or original(path, n))
    stored = StoredLayers(path)
    assert list(stored) == list(LAYERS)
    assert len(stored) == len(LAYERS)
    assert "ratings" in stored
    assert "notes" not in stored
    assert stored.counts == dict.fromkeys(LAYERS, 5)
    assert asked == []
    assert stored["ratings"] is stored["ratings"]
    assert asked == ["ratings"]
    with pytest.raises(KeyError):
        stored["notes"]
    assert stored.get("notes") is None


def test_counts_of_the_writer_are_taken(tmp_path):
    path = tmp_path / "results.gpkg"
    with writer(path, ["findings", "ratings"]) as made:
        made.append("ratings", tables_of(make_layers(4))["ratings"])
    assert (
        StoredLayers(path, made.counts).counts == StoredLayers(path).counts == {"ratings": 4, "findings": 0}
    )


def test_gaps_and_layers_without_rows_keep_their_types(tmp_path):
    path = tmp_path / "results.gpkg"
    layers = {name: table.iloc[:0] for name, table in make_layers().items()}
    layers["sections"] = make_layers()["sections"]
    layers["sections"].loc[1, ["stream", "slope_source"]] = [None, ""]
    layers["sections"].loc[1, "slope"] = np.nan
    layers["sections"].loc[1, "geometry"] = None
    layers["crossings"] = make_layers()["crossings"].astype({"rank": "Int64"})
    layers["crossings"].loc[1, "rank"] = pd.NA
    write(path, layers)
    stored = StoredLayers(path)
    for name, layer in LAYERS.items():
        for column in layer.columns:
            kind = COLUMNS[column].dtype
            wanted = {str: pd.array(["a"], dtype="str").dtype, float: np.float64, int: np.int64}[kind]
            if (name, column) == ("crossings", "rank"):
                wanted = np.float64  # whole numbers with a gap
            assert stored[name][column].dtype == wanted, (name, column)
    assert list(stored["sections"]["stream"].isna()) == [False, True, False]
    assert list(stored["sections"]["slope_source"]) == ["slope_source 0", "", "slope_source 2"]
    assert list(stored["sections"].geometry.isna()) == [False, True, False]
    np.testing.assert_array_equal(stored["crossings"]["rank"], [0.0, np.nan, 2.0])
    read = read_folder(tmp_path).layers
    assert list(read["sections"]["stream"]) == ["stream 0", "", "stream 2"]
    assert list(read["subareas"].columns) == [*LAYERS["subareas"].columns, "geometry"]


def test_tables_alone_need_no_crs(tmp_path):
    path = tmp_path / "results.gpkg"
    write(path, {"ratings": make_layers()["ratings"]})
    assert list(StoredLayers(path)) == ["ratings"]
    assert StoredLayers(path)["ratings"].shape == (3, 13)


def test_what_was_read_can_be_changed(tmp_path):
    write(tmp_path / "results.gpkg", make_layers())
    table = StoredLayers(tmp_path / "results.gpkg")["ratings"]
    table.loc[0, "stage"] = 7.0
    table["stage"].to_numpy()
    assert table["stage"].iloc[0] == 7.0


@pytest.mark.filterwarnings("ignore:Table/view ratings is referenced")  # GDAL says so too
@pytest.mark.parametrize("harm", ["no file", "no database", "table gone", "file gone later"])
def test_a_file_that_cannot_be_read_is_said(tmp_path, harm):
    path = tmp_path / "results.gpkg"
    if harm == "no database":
        path.write_bytes(b"not a database, but long enough to be looked at as if it were one" * 20)
    elif harm != "no file":
        write(path, make_layers(), date=DATE)
    if harm == "table gone":
        with closing(sqlite3.connect(path)) as database:
            database.execute("DROP TABLE ratings")
            database.commit()

    def read():
        stored = StoredLayers(path)
        if harm == "file gone later":
            path.unlink()
        return stored["ratings"]

    with pytest.raises(InputError) as caught:
        read()
    assert caught.value.code == "file-unreadable"
    assert "results.gpkg" in caught.value.what
    if harm in ("no database", "table gone"):
        with pytest.raises(InputError) as caught:
            read_folder(tmp_path)
        assert caught.value.code == "file-unreadable"


def test_a_run_reads_back_without_a_warning_where_others_look_on(sample, tmp_path):
    """A file on a medium that cannot be written."""
    shutil.copy(sample.folder / "results.gpkg", tmp_path)
    (tmp_path / "results.gpkg").chmod(0o444)
    assert len(read_folder(tmp_path).layers["sections"]) == len(sample.sections)
    assert [file.name for file in tmp_path.iterdir()] == ["results.gpkg"]
