"""CSV and Parquet beside the layers: the same numbers, with what they mean."""

from __future__ import annotations

import dataclasses

import geopandas
import numpy as np
import pandas as pd
import pyarrow.parquet
import pytest
from _results import CRS, THREE, US, VALLEY, built, folder_of

from terrain2q.columns import COLUMNS, LAYERS
from terrain2q.errors import Finding
from terrain2q.flows import Flow
from terrain2q.output import tables
from terrain2q.output.pages import write_pages
from terrain2q.output.tables import TABLE_CHOICES, write_tables
from terrain2q.study import OutputTable, keys_of


@pytest.fixture
def source(tmp_path):
    found = [
        Finding("line-turned", 'it says "no", é\nand goes on', "cut_lines", "A", x=500000.0, y=4600000.0),
        Finding("lines-not-used", "no place", "", ""),
    ]
    made = folder_of([built("A", VALLEY, THREE, findings=found)], [Flow("10-year", 40.0)], US)
    return dataclasses.replace(made, folder=tmp_path)


def test_csv_has_every_number_of_the_layers(source):
    files = write_tables(source, "csv")
    assert [f.name for f in files] == [*(f"results_{n}.csv" for n in source.layers), "results_columns.csv"]
    for name, table in source.layers.items():
        read = pd.read_csv(source.folder / f"results_{name}.csv", keep_default_na=False, na_values={"x": ""})
        columns = [c for c in table.columns if c != "geometry"]
        assert list(read.columns) == columns + (["x", "y"] if LAYERS[name].geometry == "Point" else [])
        for column in columns:
            if COLUMNS[column].dtype is str:
                assert list(read[column].astype(str)) == list(table[column])
            else:
                numbers = pd.to_numeric(read[column].replace("", np.nan))
                np.testing.assert_array_equal(numbers.astype(float), table[column].astype(float))
    places = pd.read_csv(source.folder / "results_findings.csv")
    assert places["x"].iloc[0] == 500000.0
    assert np.isnan(places["x"].iloc[1])


def test_a_second_file_says_what_the_columns_are(source):
    write_tables(source, "csv")
    about = pd.read_csv(source.folder / "results_columns.csv", keep_default_na=False)
    assert list(about.columns) == ["layer", "column", "title", "unit", "meaning"]
    rows = {(r.layer, r.column): r for r in about.itertuples()}
    for name, table in source.layers.items():
        header = pd.read_csv(source.folder / f"results_{name}.csv").columns
        assert [c for layer, c in rows if layer == name] == list(header)
        assert {*header} >= {*table.columns} - {"geometry"}
    assert rows["design_stages", "discharge"].unit == "ft³/s"
    assert rows["design_stages", "stage"].meaning == COLUMNS["stage"].meaning


def test_parquet_keeps_geometry_and_meaning(source):
    files = write_tables(source, "parquet")
    assert [f.name for f in files] == [f"results_{n}.parquet" for n in source.layers]
    stages = geopandas.read_parquet(source.folder / "results_design_stages.parquet")
    assert stages.crs == CRS
    assert stages.geometry.iloc[0].equals(source.layers["design_stages"]["geometry"].iloc[0])
    np.testing.assert_array_equal(stages["discharge"], source.layers["design_stages"]["discharge"])
    ratings = pd.read_parquet(source.folder / "results_ratings.parquet")
    pd.testing.assert_frame_equal(ratings, source.layers["ratings"])
    field = pyarrow.parquet.read_schema(source.folder / "results_ratings.parquet").field("stage")
    assert {k.decode(): v.decode() for k, v in field.metadata.items() if k != b"PARQUET:field_id"} == {
        "title": "Stage",
        "unit": "ft",
        "meaning": COLUMNS["stage"].meaning,
    }
    profile = geopandas.read_parquet(source.folder / "results_sections.parquet").geometry.iloc[0]
    assert profile.has_z
    assert profile.has_m


def test_both_and_none(source):
    assert len(write_tables(source, "both")) == 2 * len(source.layers) + 1
    assert write_tables(source, "none") == []


def test_choices_of_the_study_are_those_of_the_writer():
    assert keys_of(OutputTable)["tables"].choices == TABLE_CHOICES
    assert OutputTable().tables == "none"


def test_pages_write_tables_only_where_asked(source, monkeypatch):
    monkeypatch.setattr("terrain2q.output.pages.read_folder", lambda folder: source)
    written = write_pages(source.folder, {"report": False, "sheets": "none", "tables": "csv"})
    assert len(written) == len(source.layers) + 1
    assert tables.COLUMNS_NAME in {f.name for f in written}
    assert write_pages(source.folder, {"report": False, "sheets": "none", "tables": "none"}) == []
