from __future__ import annotations

import dataclasses
import math
import pickle
import re
import tomllib
from pathlib import Path

import pytest
from hypothesis import given
from hypothesis import strategies as st

from terrain2q.errors import CATALOGUE, InputError, InputErrors
from terrain2q.flows import Flow, event_names, flow_for, read_flows
from terrain2q.roughness_tables import table_path
from terrain2q.study import (
    DEFAULTED,
    KINDS,
    TABLES,
    ChannelTable,
    OutputTable,
    RatingTable,
    SlopeTable,
    StudyTable,
    TerrainTable,
    default_of,
    keys_of,
    keys_page,
    load_study,
    split_layer,
)

GOOD = """
[study]
name = "Mill Creek"
units = "us"

[terrain]
dem = "dem.tif"
spacing = 10

[cut_lines]
path = "data.gpkg|layer=cut lines"

[land_cover]
default_n = 0.05

[slope]
value = 0.002

[flows]
events = { "10-year" = 850, "100-year" = 2400.5 }
"""


@pytest.fixture
def folder(tmp_path):
    for name in ("dem.tif", "east.tif", "data.gpkg", "cover.gpkg", "n.csv", "flows.csv"):
        (tmp_path / name).write_text("", encoding="utf-8")
    return tmp_path


@pytest.fixture
def study_file(folder):
    def write(text=GOOD, **replaced):
        for old, new in replaced.items():
            text = text.replace(old, new)
        path = folder / "study.toml"
        path.write_text(text, encoding="utf-8")
        return path

    return write


def problems_of(path, options=None, **more):
    with pytest.raises(InputError) as caught:
        load_study(path, options, **more)
    return list(caught.value.problems) if isinstance(caught.value, InputErrors) else [caught.value]


def only_problem(path, options=None, **more):
    (problem,) = problems_of(path, options, **more)
    return problem


# --- a good study -----------------------------------------------------------------------------------


def test_a_study_is_read_with_paths_made_absolute(study_file, folder):
    study = load_study(study_file())
    assert study.study.name == "Mill Creek"
    assert study.system.name == "us"
    assert study.terrain == TerrainTable(dem=str(folder / "dem.tif"), spacing=10.0)
    assert study.terrain.dem == (str(folder / "dem.tif"),)
    assert study.cut_lines.path == f"{folder / 'data.gpkg'}|layer=cut lines"
    assert study.flows.events == {"10-year": 850.0, "100-year": 2400.5}
    assert (study.path, study.folder) == (folder / "study.toml", folder)
    assert study.output.folder == folder / "output"


def test_absent_tables_are_none_or_defaults(study_file):
    study = load_study(study_file())
    assert study.streams is None
    assert study.channel == ChannelTable() == ChannelTable(banks="auto", n=None, path=None)
    assert study.rating == RatingTable(stages=30, top=None)
    assert study.output.overwrite is False


def test_a_study_file_named_from_another_folder_keeps_its_own_base(study_file, folder, monkeypatch):
    study_file()
    (folder / "elsewhere").mkdir()
    monkeypatch.chdir(folder / "elsewhere")
    study = load_study("../study.toml")
    assert Path(study.terrain.dem[0]).samefile(folder / "dem.tif")


def test_tiles_are_a_list(study_file, folder):
    study = load_study(study_file(**{'"dem.tif"': '["dem.tif", "east.tif"]'}))
    assert study.terrain.dem == (str(folder / "dem.tif"), str(folder / "east.tif"))
    assert study.inputs()["terrain.dem"] == study.terrain.dem


def test_a_byte_order_mark_and_windows_line_ends_are_read(folder):
    path = folder / "study.toml"
    path.write_bytes(b"\xef\xbb\xbf" + GOOD.replace("\n", "\r\n").encode())
    assert load_study(path).study.name == "Mill Creek"


def test_values_in_si(study_file):
    study = load_study(study_file())
    assert study.in_si("terrain.spacing") == pytest.approx(3.048, rel=1e-15)
    assert study.in_si("rating.top") is None
    assert study.in_si("streams.path") is None
    assert study.in_si("slope.value") == 0.002
    assert load_study(study_file(us="si")).in_si("terrain.spacing") == 10.0


def test_a_study_can_be_sent_to_another_process_and_not_changed(study_file):
    study = load_study(study_file())
    assert pickle.loads(pickle.dumps(study)) == study
    with pytest.raises(dataclasses.FrozenInstanceError):
        study.slope.value = 1.0


def test_as_dict_holds_what_a_study_file_holds(study_file, folder):
    plain = load_study(study_file()).as_dict()
    assert plain["terrain"] == {"dem": [str(folder / "dem.tif")], "sampling": "bilinear", "spacing": 10.0}
    assert plain["flows"] == {"events": {"10-year": 850.0, "100-year": 2400.5}}
    assert "streams" not in plain


def test_names_only_the_libraries_know_are_left_alone(study_file):
    path = study_file(**{'"dem.tif"': '["/vsizip/tiles.zip/a.tif", "NETCDF:ground.nc:z"]'})
    assert load_study(path).terrain.dem == ("/vsizip/tiles.zip/a.tif", "NETCDF:ground.nc:z")


def test_other_jobs_need_other_tables(study_file):
    path = study_file('[study]\nunits = "si"\n[terrain]\ndem = "dem.tif"\n')
    assert load_study(path, needs=("terrain",)).slope is None
    assert {p.what for p in problems_of(path)} == {
        "[cut_lines] has no path and no every",
        "[land_cover] has no path and no default_n",
        "[slope] has no value and no field and no from",
    }


# --- errors -----------------------------------------------------------------------------------------


def test_the_study_file_is_missing(tmp_path):
    problem = only_problem(tmp_path / "none.toml")
    assert problem.code == "file-missing"
    assert str(tmp_path / "none.toml") in str(problem)


def test_the_study_file_is_a_folder(tmp_path):
    assert only_problem(tmp_path).code == "file-unreadable"


def test_not_toml_names_the_line(study_file):
    path = study_file(**{'units = "us"': "units = us"})
    problem = only_problem(path)
    assert str(problem) == (
        f"Invalid value: units = us  [study-not-toml]\n"
        f"  where: {path}, line 4\n"
        f"  fix:   {CATALOGUE['study-not-toml'].remedy}"
    )


def test_backslashes_in_a_path_get_a_remedy_of_their_own(study_file):
    problem = only_problem(study_file(**{'"dem.tif"': r'"C:\data\dem.tif"'}))
    assert problem.code == "study-not-toml"
    assert "single quotes" in problem.fix


def test_text_that_ends_too_soon_is_the_last_line(study_file):
    problem = only_problem(study_file('[study]\nname = """never'))
    assert problem.code == "study-not-toml"
    assert problem.where.endswith("line 2")


def test_bytes_that_are_not_utf8(folder):
    (folder / "study.toml").write_bytes(b'[study]\nname = "B\xe4ke"\n')
    problem = only_problem(folder / "study.toml")
    assert (problem.code, problem.where) == ("study-not-toml", f"{folder / 'study.toml'}, line 2")


def test_an_unknown_key_names_the_nearest(study_file):
    path = study_file(spacing="spacng")
    assert str(only_problem(path)) == (
        'unknown key "spacng" in [terrain]; the nearest known is spacing  [key-unknown]\n'
        f"  where: {path}, line 8, [terrain]\n"
        "  fix:   [terrain] takes dem, elevation_unit, sampling, spacing"
    )


def test_a_key_of_another_table_is_sent_there(study_file):
    problem = only_problem(study_file(**{"spacing = 10": "overwrite = true"}))
    assert problem.what.endswith("the nearest known is output.overwrite")


def test_a_misspelt_needed_key_is_one_problem(study_file):
    assert only_problem(study_file(**{"units =": "unit ="})).code == "key-unknown"


def test_an_unknown_table_names_the_nearest(study_file):
    problem = only_problem(study_file(**{"[cut_lines]": "[cutlines]"}))
    assert problem.code == "key-unknown"
    assert problem.what == "unknown table [cutlines]; the nearest known is [cut_lines]"


def test_a_key_before_any_table(study_file):
    problem = only_problem(study_file('crs = "EPSG:26915"\n' + GOOD))
    assert problem.what == 'key "crs" stands before any table; the nearest known is study.crs'


def test_a_table_that_is_a_value(study_file):
    problem = problems_of(study_file("terrain = 'dem.tif'\n" + GOOD.replace("[terrain]", "[output]")))[0]
    assert (problem.code, problem.what) == ("value-not-allowed", "terrain is not a table of keys")


@pytest.mark.parametrize("name", ["rmse"])
def test_what_is_not_built_is_not_offered(name):
    assert not any(name in keys_of(cls) for cls in TABLES.values())


def test_a_needed_key_is_missing(study_file):
    path = study_file(**{'dem = "dem.tif"\n': ""})
    assert str(only_problem(path)) == (
        "[terrain] has no dem  [key-missing]\n"
        f"  where: {path}, line 6, [terrain]\n"
        '  fix:   add dem = "dem.tif" under [terrain], or give --terrain.dem'
    )


@pytest.mark.parametrize(
    ("table", "keys", "missing"),
    [
        ("slope", "", "no value and no field and no from"),
        ("land_cover", "", "no path and no default_n"),
        ("land_cover", 'path = "cover.gpkg"\ntable = "n.csv"', "no class_field"),
        ("land_cover", 'path = "cover.gpkg"\nclass_field = "c"\ndefault_n = 0.1', "no table"),
        ("land_cover", 'class_field = "c"\ntable = "n.csv"', "no path"),
        ("flows", "", "no path and no events"),
        ("streams", 'id_field = "name"', "no path"),
    ],
)
def test_keys_that_go_together(study_file, table, keys, missing):
    text = re.sub(rf"\[{table}\][^\[]*", "", GOOD) + f"[{table}]\n{keys}\n"
    problem = only_problem(study_file(text))
    assert (problem.code, problem.what) == ("key-missing", f"[{table}] has {missing}")


@pytest.mark.parametrize(
    ("old", "new", "pair"),
    [
        ("value = 0.002", 'value = 0.002\nfield = "s"', ("slope.value", "slope.field")),
        ("[flows]", '[flows]\npath = "flows.csv"', ("flows.path", "flows.events")),
        (
            "[slope]",
            '[channel]\nbanks = "auto"\npath = "data.gpkg"\n[slope]',
            ("channel.path", "channel.banks"),
        ),
    ],
)
def test_keys_that_contradict_each_other(study_file, old, new, pair):
    problem = only_problem(study_file(**{old: new}))
    assert problem.code == "key-conflict"
    assert problem.what == f"{pair[0]} and {pair[1]} are both given"


@pytest.mark.parametrize(
    ("old", "new", "code", "said"),
    [
        ('"us"', '"metric"', "value-not-allowed", 'study.units is "metric"; needed is "us" or "si"'),
        ('"us"', "1", "value-not-allowed", "study.units is 1;"),
        (
            "spacing = 10",
            'spacing = "10"',
            "value-not-allowed",
            'terrain.spacing is "10"; needed is a number',
        ),
        ("spacing = 10", "spacing = true", "value-not-allowed", "terrain.spacing is true;"),
        ("spacing = 10", "spacing = 0", "number-not-positive", "terrain.spacing is 0;"),
        ("spacing = 10", "spacing = nan", "value-not-allowed", "a finite number"),
        ("spacing = 10", 'sampling = "cubic"', "value-not-allowed", 'needed is "bilinear" or "nearest"'),
        ("spacing = 10", 'elevation_unit = "feet"', "value-not-allowed", '"m" or "ft" or "us-ft"'),
        ("0.05", "-0.05", "number-not-positive", "land_cover.default_n is -0.05;"),
        ("0.05", "1" + "0" * 400, "value-not-allowed", "a finite number"),
        ("0.002", "0.0", "number-not-positive", "slope.value is 0.0;"),
        ("0.002", "inf", "value-not-allowed", "slope.value is inf;"),
        ("850", "0", "number-not-positive", 'above zero for "10-year"'),
        ("850", '"850"', "value-not-allowed", 'for "10-year"'),
        ("{", "{ '' = 1, ", "value-not-allowed", "a name for each event"),
        ('{ "10-year" = 850, "100-year" = 2400.5 }', "{}", "value-not-allowed", "a table of events"),
        ('dem = "dem.tif"', "dem = []", "value-not-allowed", "a path, or a list of paths"),
        ('dem = "dem.tif"', 'dem = ""', "value-not-allowed", "a path in quotes"),
        ("|layer=cut lines", "|layer=", "value-not-allowed", "a path, or a path and a layer"),
        ("|layer=cut lines", "|cut lines", "value-not-allowed", "a path, or a path and a layer"),
        ("[slope]", "[rating]\nstages = 1\n[slope]", "value-not-allowed", "a whole number, 2 or more"),
        ("[slope]", "[rating]\nstages = 2.5\n[slope]", "value-not-allowed", "a whole number, 2 or more"),
        ("[slope]", "[rating]\nstages = true\n[slope]", "value-not-allowed", "rating.stages is true;"),
        ("[slope]", "[rating]\ntop = -1\n[slope]", "number-not-positive", "rating.top is -1;"),
        ("[slope]", "[channel]\nn = 0\n[slope]", "number-not-positive", "channel.n is 0;"),
        ("[slope]", "[output]\noverwrite = 1\n[slope]", "value-not-allowed", "needed is true or false"),
        ('name = "Mill Creek"', "name = 2020-01-01", "value-not-allowed", "needed is text in quotes"),
    ],
)
def test_values_that_are_not_allowed(study_file, old, new, code, said):
    problem = only_problem(study_file(**{old: new}))
    assert problem.code == code
    assert said in problem.what


def test_a_built_in_table_by_its_name(study_file, folder):
    cover = 'path = "cover.gpkg"\nclass_field = "c"\ntable = "chow1959"'
    study = load_study(study_file(**{"default_n = 0.05": cover}))
    assert study.land_cover.table == table_path("chow1959")
    assert str(table_path("chow1959")) in study.inputs()["land_cover.table"]
    named = load_study(study_file(**{"default_n = 0.05": cover}), {"land_cover.table": "kalyanapu2009"})
    assert named.land_cover.table == table_path("kalyanapu2009")
    # a file of that name is the user's own
    (folder / "chow1959").write_text("class,n\n", encoding="utf-8")
    assert load_study(study_file(**{"default_n = 0.05": cover})).land_cover.table == folder / "chow1959"


def test_a_table_that_is_neither_file_nor_built_in(study_file):
    cover = 'path = "cover.gpkg"\nclass_field = "c"\ntable = "chow"'
    problem = only_problem(study_file(**{"default_n = 0.05": cover}))
    assert problem.code == "file-missing"
    assert "chow1959" in problem.fix


@pytest.mark.parametrize(
    ("old", "new", "key"),
    [
        ('"dem.tif"', '["dem.tif", "west.tif"]', "terrain.dem"),
        ("data.gpkg", "date.gpkg", "cut_lines.path"),
        ("[slope]", '[streams]\npath = "s.shp"\n[slope]', "streams.path"),
        ("[slope]", '[channel]\npath = "c.shp"\n[slope]', "channel.path"),
        ("default_n = 0.05", 'path = "c.shp"\nclass_field = "c"\ntable = "n.csv"', "land_cover.path"),
        ("default_n = 0.05", 'path = "cover.gpkg"\nclass_field = "c"\ntable = "m.csv"', "land_cover.table"),
        ('events = { "10-year" = 850, "100-year" = 2400.5 }', 'path = "f.csv"', "flows.path"),
    ],
)
def test_every_path_named_must_be_there(study_file, old, new, key):
    problem = only_problem(study_file(**{old: new}))
    assert problem.code == "file-missing"
    assert problem.what.startswith(f"{key}: no file ")


def test_all_problems_are_reported_together(study_file):
    text = (
        GOOD.replace('"us"', '"uk"').replace("spacing", "spacng").replace("0.002", "-1").replace("850", "0")
    )
    path = study_file(text)
    with pytest.raises(InputErrors) as caught:
        load_study(path)
    codes = [p.code for p in caught.value.problems]
    assert codes == ["value-not-allowed", "key-unknown", "number-not-positive", "number-not-positive"]
    assert str(caught.value).startswith("4 problems\n")
    assert [each["code"] for each in caught.value.as_dict()["problems"]] == codes
    assert str(pickle.loads(pickle.dumps(caught.value))) == str(caught.value)


# --- options ----------------------------------------------------------------------------------------


def test_options_go_before_the_file(study_file, folder, monkeypatch):
    monkeypatch.chdir(folder)
    study = load_study(
        study_file(),
        {"terrain.spacing": "2.5", "rating.stages": "12", "output.overwrite": "true", "study.name": "Other"},
    )
    assert (study.terrain.spacing, study.rating.stages) == (2.5, 12)
    assert (study.output.overwrite, study.study.name) == (True, "Other")
    assert study.slope.value == 0.002


def test_a_study_from_options_alone(folder, monkeypatch):
    monkeypatch.chdir(folder)
    study = load_study(
        None,
        {
            "study.units": "si",
            "terrain.dem": ("dem.tif", "east.tif"),
            "cut_lines.path": "data.gpkg|layer=lines",
            "land_cover.default_n": ".05",
            "slope.value": "2e-3",
            "flows.events": ("10-year=850", "a=b=3"),
        },
    )
    assert (study.path, study.folder) == (None, folder)
    assert study.terrain.dem == (str(folder / "dem.tif"), str(folder / "east.tif"))
    assert (study.land_cover.default_n, study.slope.value) == (0.05, 0.002)
    assert study.flows.events == {"10-year": 850.0, "a=b": 3.0}
    assert study.output.folder == folder / "output"


@pytest.mark.parametrize(
    "given",
    [
        "10-year=850,100-year=2400.5",
        '{ "10-year" = 850, "100-year" = 2400.5 }',
        {"10-year": 850, "100-year": 2400.5},
    ],
)
def test_events_as_an_option(study_file, given):
    study = load_study(study_file(), {"flows.events": given})
    assert study.flows.events == {"10-year": 850.0, "100-year": 2400.5}


def test_tiles_as_toml_in_an_option(study_file, folder, monkeypatch):
    monkeypatch.chdir(folder)
    study = load_study(study_file(), {"terrain.dem": '["dem.tif", "east.tif"]'})
    assert len(study.terrain.dem) == 2


def test_an_option_takes_the_place_of_the_key_it_excludes(study_file, folder, monkeypatch):
    monkeypatch.chdir(folder)
    study = load_study(study_file(), {"slope.field": "s", "flows.path": "flows.csv"})
    assert study.slope == SlopeTable(field="s")
    assert study.flows.events is None
    problem = only_problem(study_file(), {"slope.field": "s", "slope.value": "0.1"})
    assert problem.code == "key-conflict"


def test_paths_in_options_start_at_the_current_folder(study_file, folder, monkeypatch):
    path = study_file()
    (folder / "here").mkdir()
    monkeypatch.chdir(folder / "here")
    problem = only_problem(path, {"terrain.dem": "dem.tif"})
    assert problem.where == "--terrain.dem"
    assert problem.fix == "correct the path; it starts at the current folder"
    study = load_study(path, {"terrain.dem": "../dem.tif", "output.folder": "results"})
    assert study.terrain.dem == (str(folder / "dem.tif"),)
    assert study.output.folder == folder / "here" / "results"


@pytest.mark.parametrize(
    ("option", "value", "code"),
    [
        ("terrain.spacng", "1", "key-unknown"),
        ("terrain", "1", "key-unknown"),
        ("terrain.spacing", "ten", "value-not-allowed"),
        ("terrain.spacing", "nan", "value-not-allowed"),
        ("terrain.spacing", "-1", "number-not-positive"),
        ("rating.stages", "2.0", "value-not-allowed"),
        ("output.overwrite", "maybe", "value-not-allowed"),
        ("flows.events", "10-year", "value-not-allowed"),
        ("flows.events", "{ broken", "value-not-allowed"),
    ],
)
def test_options_are_checked_like_the_file(study_file, option, value, code):
    problem = only_problem(study_file(), {option: value})
    assert problem.code == code
    assert problem.where == f"--{option}"


def test_an_unknown_option_names_the_nearest(study_file):
    assert "the nearest known is terrain.spacing" in only_problem(study_file(), {"terrain.spacng": "1"}).what


# --- the tables themselves --------------------------------------------------------------------------


def test_tables_made_in_python_are_checked_too():
    with pytest.raises(InputError, match=r"slope\.value is -1"):
        SlopeTable(value=-1)
    with pytest.raises(InputError, match="has no units"):
        StudyTable(name="x")
    with pytest.raises(InputError, match="both given"):
        SlopeTable(value=0.1, field="s")
    assert SlopeTable(value=1).value == 1.0
    assert OutputTable(folder="x").folder == Path("x")


@pytest.mark.parametrize("table", TABLES)
def test_every_key_has_what_help_and_docs_need(table):
    assert TABLES[table].__doc__
    for name, about in keys_of(TABLES[table]).items():
        assert about.kind in KINDS
        assert about.help == about.help.strip()
        assert "\n" not in about.help
        example = tomllib.loads(f"x = {about.example}")["x"]
        KINDS[about.kind](about, example)  # the example is itself allowed
        default = default_of(TABLES[table], name)
        if default is not None:
            KINDS[about.kind](about, default)


def test_tables_with_defaults_can_be_made_of_nothing():
    assert DEFAULTED == {"channel", "rating", "output"}
    for table in DEFAULTED:
        TABLES[table]()


def test_the_page_of_keys_has_every_key():
    page = keys_page()
    for table, cls in TABLES.items():
        section = page.split(f"## [{table}]\n")[1].split("\n## ")[0]
        for name, about in keys_of(cls).items():
            assert f"| `{name}` | {about.help} |" in section


def test_the_page_in_the_docs_is_current():
    page = Path(__file__).parents[1] / "docs" / "study_file.md"
    assert page.read_text(encoding="utf-8") == keys_page()


def test_both_names_of_a_layer_are_read():
    assert split_layer("a.gpkg|layername=b") == ("a.gpkg", "b")


@given(st.floats(min_value=1e-12, max_value=1e12))
def test_a_number_as_text_is_the_number(number):
    study = load_study(None, {"study.units": "si", "slope.value": repr(number)}, needs=())
    assert study.slope.value == number


# --- flows ------------------------------------------------------------------------------------------


@pytest.fixture
def flows_of(study_file, folder):
    def read(text, units="si"):
        (folder / "flows.csv").write_text(text, encoding="utf-8")
        toml = re.sub(r"events = .*", 'path = "flows.csv"', GOOD).replace('"us"', f'"{units}"')
        return read_flows(load_study(study_file(toml)))

    return read


def flow_problem(flows_of, text):
    with pytest.raises(InputError) as caught:
        flows_of(text)
    assert not isinstance(caught.value, InputErrors)
    return caught.value


def test_flows_in_the_study_file(study_file):
    flows = read_flows(load_study(study_file()))
    # One cubic foot is 0.3048³ m³ exactly.
    assert [(f.event, f.discharge) for f in flows] == [
        ("10-year", pytest.approx(850 * 0.3048**3, rel=1e-14)),
        ("100-year", pytest.approx(2400.5 * 0.3048**3, rel=1e-14)),
    ]


def test_no_flows(study_file):
    assert read_flows(load_study(study_file(re.sub(r"\[flows\][^\[]*", "", GOOD)))) == []


def test_flows_from_a_table(flows_of):
    text = "Event, Discharge,probability,stream,section,distance\nb,3,0.1,,,\n\na,4,,north,,100\na,5,,,s1,\n"
    flows = flows_of(text, units="us")
    assert [f.event for f in flows] == ["b", "a", "a"]
    assert event_names(flows) == ["b", "a"]
    assert flows[0] == Flow("b", pytest.approx(3 * 0.3048**3, rel=1e-14), 0.1)
    assert flows[1].distance == pytest.approx(30.48, rel=1e-14)
    assert (flows[1].stream, flows[2].section, flows[2].distance) == ("north", "s1", None)


@pytest.mark.parametrize(
    ("text", "code", "line", "said"),
    [
        ("event,discharge\na,0\n", "number-not-positive", 2, 'discharge of "a" is 0'),
        ("event,discharge\nb,1\n\na,-3\n", "number-not-positive", 4, 'discharge of "a" is -3'),
        ("event,discharge\na,many\n", "value-not-allowed", 2, 'discharge is "many"'),
        ("event,discharge\na\n", "value-not-allowed", 2, "discharge is empty"),
        ("event,discharge\na,nan\n", "value-not-allowed", 2, "needed is a number"),
        ("event,discharge\na,1,200\n", "value-not-allowed", 2, "3 values under 2 columns"),
        ("event,discharge\n,1\n", "value-not-allowed", 2, "the event has no name"),
        ("event,discharge\na,1\na,2\n", "id-duplicate", 3, 'event "a" is given twice'),
        ("event,discharge,section\na,1,s\na,2,s\n", "id-duplicate", 3, "first in line 2"),
        ("event,dischrge\na,1\n", "key-unknown", 1, "the nearest known is discharge"),
        ("event;discharge\na;1\n", "key-unknown", 1, "unknown column"),
        ("event,discharge,log_error\na,1,0.1\n", "key-unknown", 1, 'unknown column "log_error"'),
        ("event,discharge,crossing,section\na,1,c,s\n", "key-conflict", 2, "a section and a crossing"),
        ("event,discharge,volume\na,1,0\n", "number-not-positive", 2, 'volume of "a" is 0'),
        ("event,section\na,1\n", "field-missing", 1, 'no column "discharge"'),
        ("event,discharge,event\na,1,b\n", "key-conflict", 1, 'two columns are called "event"'),
        ("event,discharge,probability\na,1,10\n", "value-not-allowed", 2, "annual exceedance probability"),
        ("event,discharge,probability\na,1,0\n", "value-not-allowed", 2, "probability is 0"),
        ("event,discharge,distance\na,1,5\n", "key-missing", 2, "a distance without a stream"),
        ("event,discharge,stream,section,distance\na,1,n,s,5\n", "key-conflict", 2, "both given"),
        ("event,discharge,stream,distance\na,1,n,-5\n", "value-not-allowed", 2, "distance is -5"),
    ],
)
def test_wrong_flows_name_file_and_line(flows_of, folder, text, code, line, said):
    problem = flow_problem(flows_of, text)
    assert problem.code == code
    assert problem.where == f"{folder / 'flows.csv'}, line {line}"
    assert said in problem.what


@pytest.mark.parametrize("text", ["", "event,discharge\n"])
def test_flows_without_rows(flows_of, text):
    assert flow_problem(flows_of, text).code == "layer-empty"


def test_one_event_has_one_probability(flows_of):
    problem = flow_problem(flows_of, "event,discharge,probability,section\na,1,0.1,\na,2,0.2,s\n")
    assert (problem.code, problem.what) == ("key-conflict", 'the event "a" has the probabilities 0.1, 0.2')


def test_all_wrong_flows_are_reported_together(flows_of):
    with pytest.raises(InputErrors) as caught:
        flows_of("event,discharge\na,0\nb,x\nc,1\nc,1\n")
    assert [p.code for p in caught.value.problems] == [
        "number-not-positive",
        "value-not-allowed",
        "id-duplicate",
    ]


def test_flows_that_are_not_text(study_file, folder):
    (folder / "flows.csv").write_bytes(b"event,discharge\n\xff\xfe,1\n")
    path = study_file(re.sub(r"events = .*", 'path = "flows.csv"', GOOD))
    with pytest.raises(InputError) as caught:
        read_flows(load_study(path))
    assert caught.value.code == "file-unreadable"


FLOWS = [
    Flow("e", 5.0, section="s5"),
    Flow("e", 3.0, stream="n", distance=100.0),
    Flow("e", 1.0),
    Flow("e", 4.0, stream="n", distance=200.0),
    Flow("e", 2.0, stream="n"),
    Flow("e", 6.0, stream="m", distance=50.0),
    Flow("other", 9.0),
]


@pytest.mark.parametrize(
    ("section", "stream", "distance", "discharge"),
    [
        ("s5", "n", 250.0, 5.0),  # the section's own row goes first
        ("s1", "n", 250.0, 4.0),
        ("s1", "n", 200.0, 4.0),  # a change takes effect at its distance
        ("s1", "n", 199.9, 3.0),
        ("s1", "n", 99.9, 2.0),
        ("s1", "n", math.nan, 2.0),
        ("s1", "m", 49.0, 1.0),
        ("s1", "", math.nan, 1.0),
    ],
)
def test_the_most_specific_flow_applies(section, stream, distance, discharge):
    for rows in (FLOWS, FLOWS[::-1]):
        assert flow_for(rows, "e", section, stream, distance).discharge == discharge


def test_a_row_for_a_section_and_its_stream_goes_before_one_for_the_section():
    rows = [Flow("e", 1.0, section="s"), Flow("e", 2.0, section="s", stream="n")]
    for each in (rows, rows[::-1]):
        assert flow_for(each, "e", "s", "n", 0.0).discharge == 2.0
        assert flow_for(each, "e", "s", "m", 0.0).discharge == 1.0


def test_no_flow_applies():
    assert flow_for([Flow("e", 1.0, stream="n")], "e", "s", "m", 10.0) is None
    assert flow_for([Flow("e", 1.0, section="s", stream="n")], "e", "s", "m", 10.0) is None
    assert flow_for([Flow("e", 1.0)], "f", "s") is None
