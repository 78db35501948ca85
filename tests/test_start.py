from __future__ import annotations

import json
import tomllib
from pathlib import Path

import pytest
from _study_folder import COVER, CRS, CUT_LINES, SOUTH, STREAM, WEST, frame, line, write_folder, write_raster

from terrain2q.commands import main
from terrain2q.errors import InputError, OutputError
from terrain2q.start import look_at, start_study, study_text, toml_value
from terrain2q.study import TABLES, keys_of, load_study


def values_of(folder):
    return {name: one.value for name, one in look_at(folder).values.items()}


def test_a_whole_folder_becomes_a_study_that_loads(tmp_path):
    folder = write_folder(tmp_path / "mill creek")
    found = start_study(folder)
    assert found.missing == ()
    study = load_study(found.path)
    assert study.study.name == "mill creek"
    assert study.study.units == "si"
    assert study.terrain.dem == (str(folder / "dem.tif"),)
    assert study.streams.path == f"{folder / 'data.gpkg'}|layer=streams"
    assert study.streams.id_field == "name"
    assert study.cut_lines.path == f"{folder / 'data.gpkg'}|layer=cut_lines"
    assert study.cut_lines.id_field == "section_id"
    assert study.land_cover.path == f"{folder / 'data.gpkg'}|layer=land_cover"
    # Two fields hold text; the one whose values the table knows is the class.
    assert study.land_cover.class_field == "cover"
    assert study.land_cover.table == folder / "roughness.csv"
    assert study.channel.path == f"{folder / 'data.gpkg'}|layer=channel"
    assert study.slope.field == "bed_slope"
    assert study.flows.path == folder / "flows.csv"
    assert found.unused == (
        "data.gpkg|layer=roads: by its name roads; crossings.roads may take them",
        "data.gpkg|layer=wells: points; crossings.path or observed.path may take them",
    )


def test_the_demonstration_is_recognised_as_its_study_says():
    folder = Path(__file__).parents[1] / "sample_dem"
    study = tomllib.loads((folder / "study.toml").read_text(encoding="utf-8"))
    found = values_of(folder)
    for name in (
        "terrain.dem", "streams.path", "streams.id_field", "cut_lines.path", "cut_lines.id_field",
        "land_cover.path", "land_cover.class_field", "land_cover.table", "slope.field", "flows.path",
    ):  # fmt: skip
        table, _, key = name.partition(".")
        assert found[name] == study[table][key]


def test_the_file_written_holds_what_was_found_and_help_on_every_key(tmp_path):
    found = start_study(write_folder(tmp_path / "a"))
    text = found.path.read_text(encoding="utf-8")
    read = tomllib.loads(text)
    told = {f"{table}.{name}": value for table, keys in read.items() for name, value in keys.items()}
    assert told == {name: one.value for name, one in found.values.items()}
    for cls in TABLES.values():
        for name, about in keys_of(cls).items():
            assert f"# {about.help} (" in text
            assert f"\n{name} = " in text or f"\n# {name} = " in text
    assert "(a guess: the terrain's map unit is the metre; check: discharges are then m³/s)\nunits" in text


def test_every_commented_line_is_itself_toml(tmp_path):
    # With nothing found every key is a comment; taking the "# " away must give a file that parses.
    text = study_text({})
    keys = {name for cls in TABLES.values() for name in keys_of(cls)}
    live = []
    for row in text.splitlines():
        bare = row.removeprefix("# ")
        if bare.startswith("[") or bare.partition(" = ")[0] in keys:
            live.append(bare)
    read = tomllib.loads("\n".join(live))
    expected = {table: list(keys_of(cls)) for table, cls in TABLES.items()}
    assert {table: list(keys) for table, keys in read.items()} == expected


def test_an_empty_folder_gives_a_file_to_fill_in(tmp_path):
    found = start_study(tmp_path)
    assert list(found.values) == ["study.name"]
    assert [each.partition(":")[0] for each in found.missing] == [
        "study.units", "terrain.dem", "cut_lines.path", "land_cover.path", "slope.value",
        "flows.path or flows.events",
    ]  # fmt: skip
    with pytest.raises(InputError) as caught:
        load_study(found.path)
    assert {problem.code for problem in caught.value.problems} == {"key-missing"}


def test_an_existing_study_file_is_kept(tmp_path):
    (tmp_path / "study.toml").write_text("mine", encoding="utf-8")
    with pytest.raises(OutputError) as caught:
        start_study(tmp_path)
    assert caught.value.code == "output-exists"
    assert (tmp_path / "study.toml").read_text(encoding="utf-8") == "mine"


def test_a_folder_that_is_not_there(tmp_path):
    with pytest.raises(InputError, match="no folder") as caught:
        start_study(tmp_path / "none")
    assert caught.value.code == "file-missing"


def test_the_command_prints_what_was_found(tmp_path, capsys):
    folder = write_folder(tmp_path / "a")
    with pytest.raises(SystemExit) as left:
        main(["start", str(folder)])
    out, err = capsys.readouterr()
    assert (left.value.code, err) == (0, "")
    assert out.startswith(f"{folder / 'study.toml'} written\n")
    assert '  terrain.dem             "dem.tif"  (cells of 1 by 1, EPSG:26915)\n' in out
    assert '"si"  (a guess; the terrain\'s map unit is the metre; check: discharges are then m³/s)\n' in out

    with pytest.raises(SystemExit) as left:
        main(["start", str(folder), "--json"])
    out, err = capsys.readouterr()
    assert left.value.code == 2
    assert json.loads(out)["errors"][0]["code"] == "output-exists"
    assert err.startswith("Error: ")

    (folder / "study.toml").unlink()
    with pytest.raises(SystemExit) as left:
        main(["start", str(folder), "--json"])
    told = json.loads(capsys.readouterr().out)
    assert left.value.code == 0
    assert told["found"]["channel.path"] == {
        "value": "data.gpkg|layer=channel", "guess": True, "note": "polygons named like a channel",
    }  # fmt: skip


# --- terrain ----------------------------------------------------------------------------------------


def test_tiles_of_one_grid_are_a_list(tmp_path):
    write_raster(tmp_path / "dem_east.tif", west=WEST + 100)
    write_raster(tmp_path / "dem_west.tif")
    assert values_of(tmp_path)["terrain.dem"] == ["dem_east.tif", "dem_west.tif"]


def test_rasters_over_one_another_are_not_tiles(tmp_path):
    write_raster(tmp_path / "a_filled.tif")
    write_raster(tmp_path / "dem.tif")
    found = look_at(tmp_path)
    assert found.values["terrain.dem"].value == "dem.tif"
    assert found.unused == ("a_filled.tif: another raster that may be elevations",)


def test_rasters_on_other_grids_are_not_tiles(tmp_path):
    write_raster(tmp_path / "dem_a.tif")
    write_raster(tmp_path / "dem_b.tif", west=WEST + 100.5, shape=(60, 50))
    assert values_of(tmp_path)["terrain.dem"] == "dem_a.tif"


def test_pictures_classes_and_derived_rasters_are_not_elevations(tmp_path):
    write_raster(tmp_path / "photo.tif", dtype="uint8", bands=3)
    write_raster(tmp_path / "nlcd.tif", dtype="uint8")
    write_raster(tmp_path / "hillshade.tif")
    (tmp_path / "broken.tif").write_text("no raster", encoding="utf-8")
    found = look_at(tmp_path)
    assert "terrain.dem" not in found.values
    assert [each.partition(":")[0] for each in found.unused] == [
        "broken.tif", "hillshade.tif", "nlcd.tif", "photo.tif",
    ]  # fmt: skip


def test_a_raster_without_a_crs_is_said(tmp_path):
    write_raster(tmp_path / "dem.tif", crs=None)
    assert any(each.startswith("terrain.dem: ") and "CRS" in each for each in look_at(tmp_path).missing)


def test_a_raster_without_a_telling_name_is_a_guess(tmp_path):
    write_raster(tmp_path / "n44w093.tif")
    one = look_at(tmp_path).values["terrain.dem"]
    assert (one.value, one.guess) == ("n44w093.tif", True)


@pytest.mark.parametrize(
    ("crs", "units"), [("EPSG:26915", "si"), ("EPSG:2264", "us"), ("EPSG:4326", None), (None, None)]
)
def test_units_come_from_the_map_unit_or_not_at_all(tmp_path, crs, units):
    write_raster(tmp_path / "dem.tif", crs=crs, west=0.0, north=10.0)
    assert values_of(tmp_path).get("study.units") == units


@pytest.mark.parametrize(
    ("crs", "unit", "said"), [(CRS, "m", True), (CRS, "", False), ("EPSG:26915+5703", "", True)]
)
def test_an_elevation_unit_that_the_raster_does_not_say_is_never_filled_in(tmp_path, crs, unit, said):
    write_raster(tmp_path / "dem.tif", crs=crs, unit=unit)
    found = look_at(tmp_path)
    assert "terrain.elevation_unit" not in found.values
    assert any(each.startswith("terrain.elevation_unit") for each in found.missing) is not said


# --- layers -----------------------------------------------------------------------------------------


def test_lines_without_telling_names_are_told_by_how_they_cross(tmp_path):
    frame(CUT_LINES, code=[1, 2, 3]).to_file(tmp_path / "a.shp")
    frame(STREAM, code=[1]).to_crs("EPSG:4326").to_file(tmp_path / "b.geojson")
    values = look_at(tmp_path).values
    assert (values["cut_lines.path"].value, values["cut_lines.path"].guess) == ("a.shp", True)
    assert (values["streams.path"].value, values["streams.path"].guess) == ("b.geojson", True)


def test_lines_that_cross_nothing_are_not_guessed(tmp_path):
    frame([line((0, 5), (50, 5))], code=[1]).to_file(tmp_path / "a.shp")
    found = look_at(tmp_path)
    assert "cut_lines.path" not in found.values
    assert found.unused == ("a.shp: lines, not recognised",)


def test_polygons_with_a_class_field_only_are_a_guess(tmp_path):
    frame(COVER, descr=["x", "y"]).to_file(tmp_path / "polygons.gpkg")
    values = look_at(tmp_path).values
    assert (values["land_cover.path"].value, values["land_cover.path"].guess) == ("polygons.gpkg", True)
    assert (values["land_cover.class_field"].value, values["land_cover.class_field"].guess) == ("descr", True)


def test_classes_stored_as_numbers_are_matched(tmp_path):
    frame(COVER, other=[1, 2], value=[41.0, 82.0]).to_file(tmp_path / "p.gpkg")
    (tmp_path / "n.csv").write_text("class,n\n41,0.1\n82,0.04\n", encoding="utf-8")
    assert values_of(tmp_path)["land_cover.class_field"] == "value"


def test_ids_that_repeat_are_not_taken(tmp_path):
    frame(CUT_LINES, id=[1, 1, 2], name=["p", "q", "r"]).to_file(tmp_path / "cut_lines.gpkg")
    assert values_of(tmp_path)["cut_lines.id_field"] == "name"


@pytest.mark.parametrize(
    ("slopes", "guess", "said"),
    [
        ([0.001, 0.002, 0.003], False, "above zero on every line"),
        ([0.001, 0.0, None], True, "2 of 3 lines have none above zero"),
        ([1.0, 2.0, 3.0], True, "looks like per cent or degrees"),
    ],
)
def test_a_slope_field_is_recognised(tmp_path, slopes, guess, said):
    frame(CUT_LINES, gradient=slopes).to_file(tmp_path / "cut_lines.gpkg")
    one = look_at(tmp_path).values["slope.field"]
    assert (one.value, one.guess) == ("gradient", guess)
    assert said in one.note


def test_no_slope_is_ever_invented(tmp_path):
    folder = write_folder(tmp_path / "a", slope=False)
    found = look_at(folder)
    assert not any(name.startswith("slope.") for name in found.values)
    assert any(each.startswith("slope.value") for each in found.missing)


def test_hidden_files_and_earlier_results_are_left_out(tmp_path):
    write_raster(tmp_path / ".dem.tif")
    (tmp_path / "output").mkdir()
    (tmp_path / "output" / "run.json").write_text("{}", encoding="utf-8")
    frame(CUT_LINES, id=[1, 2, 3]).to_file(tmp_path / "output" / "cut_lines.gpkg")
    (tmp_path / "below").mkdir()
    write_raster(tmp_path / "below" / "dem.tif")
    assert values_of(tmp_path)["terrain.dem"] == "below/dem.tif"
    assert "cut_lines.path" not in values_of(tmp_path)


def test_empty_layers_and_odd_tables_are_said(tmp_path):
    frame([], id=[]).set_crs(CRS).to_file(tmp_path / "cut_lines.gpkg")
    (tmp_path / "notes.csv").write_text("a,b\n1,2\n", encoding="utf-8")
    (tmp_path / "empty.csv").write_text("", encoding="utf-8")
    assert sorted(look_at(tmp_path).unused) == [
        "cut_lines.gpkg: no features",
        "empty.csv: no columns event, discharge or class, n",
        "notes.csv: no columns event, discharge or class, n",
    ]


@pytest.mark.parametrize(
    "text", ['a "b" c', "back\\slash", "tab\there", "plain", "Bäke", "\U0001f30a", "\x7f"]
)
def test_text_survives_being_written_as_toml(text):
    assert tomllib.loads(f"x = {toml_value(text)}")["x"] == text


def test_the_fixture_is_where_the_tests_think():
    assert CUT_LINES[0].crosses(STREAM[0])
    assert STREAM[0].coords[0] == (WEST, SOUTH + 30)
