"""Water in the channel: finding it, and putting a bed below it."""

import geopandas
import numpy as np
import pytest
import rasterio
from hypothesis import given, settings
from hypothesis import strategies as st
from rasterio.transform import from_origin
from shapely import LineString

from terrain2q import Section, Subarea, run
from terrain2q.errors import InputError, NoAnswerError
from terrain2q.ground.cover import FallingN, SubareaSpec
from terrain2q.ground.cut_lines import CutLine
from terrain2q.hydraulics.section import DepthRoughness
from terrain2q.hydraulics.submerged import (
    LEAST_POINTS,
    SHAPES,
    bed_below,
    deepened,
    depth_for_flow,
    discharge_below,
    find_water,
)
from terrain2q.jobs.submerged import Submerged
from terrain2q.study import load_study
from terrain2q.units import SI


def channel(noise=0.0, half=6.0, seed=1, tilt=0.0, spacing=1.0):
    """Water 12 m wide at 10 m between banks of 1 in 2, 2 m high, and a floodplain that rises outward."""
    x = np.arange(0.0, 100.0 + 0.5 * spacing, spacing)
    off = np.abs(x - 50.0)
    z = 10.0 + np.clip((off - half) / 2.0, 0.0, 2.0) + 0.02 * np.maximum(off - half - 4.0, 0.0)
    z += tilt * np.clip(x - 50.0, -half, half)
    return x, z + np.random.default_rng(seed).normal(0.0, noise, x.size)


# --- finding it --------------------------------------------------------------------------------------


@pytest.mark.parametrize("noise", [0.0, 0.02, 0.05])
def test_water_is_found_with_its_edges_and_level(noise):
    for seed in range(20):
        x, z = channel(noise, seed=seed)
        for limits in (None, (38.0, 62.0)):
            water = find_water(x, z, limits)
            assert water is not None
            assert water.start == pytest.approx(44.0, abs=1.0)
            assert water.end == pytest.approx(56.0, abs=1.0)
            # the median of 13 points has 1.25/sqrt(13) of their noise
            assert water.surface == pytest.approx(10.0, abs=3.5 * 0.35 * noise + 1e-12)
            assert water.width == water.end - water.start


def test_a_round_or_sloping_bed_is_no_water():
    x = np.arange(0.0, 101.0)
    off = np.abs(x - 50.0)
    v = 10.0 + 0.2 * off
    parabola = 10.0 + off**2 / 60.0
    rough = channel()[1] + np.where(off < 6.0, 0.3 * np.sin(x * 1.7), 0.0)
    for z in (v, parabola, rough, channel(tilt=0.03)[1]):
        assert find_water(x, z) is None


def test_few_level_points_and_ground_without_banks_are_no_water():
    x, z = channel(half=1.0)
    assert LEAST_POINTS == 4
    assert find_water(x, z) is None
    level = np.full(50, 3.0)
    assert find_water(np.arange(50.0), level) is None
    one_sided = np.concatenate([np.linspace(6.0, 3.0, 20), np.full(30, 3.0)])
    assert find_water(np.arange(50.0), one_sided) is None
    assert find_water([0.0, 1.0, 2.0], [1.0, 0.0, 1.0]) is None


def test_a_lower_hollow_on_the_floodplain_is_not_the_channels_water():
    x, z = channel()
    z = np.where((x > 75) & (x < 90), 9.0, z)
    assert find_water(x, z, (38.0, 62.0)).start == 44.0
    assert find_water(x, z).start > 75.0


# --- the bed -----------------------------------------------------------------------------------------

# areas in width times depth, from geometry; the parabola's 16 chords hold 1/256 less
AREAS = {"rectangle": 1.0, "triangle": 0.5, "parabola": 2.0 / 3.0 * (1.0 - 1.0 / 256.0)}


@pytest.mark.parametrize("shape", SHAPES)
def test_beds_have_their_depth_and_area(shape):
    x, z = bed_below(44.0, 56.0, 10.0, 1.5, shape)
    assert (x[0], x[-1], z[0], z[-1]) == (44.0, 56.0, 10.0, 10.0)
    assert z.min() == 8.5
    assert np.trapezoid(10.0 - z, x) == pytest.approx(AREAS[shape] * 12.0 * 1.5)
    np.testing.assert_allclose(x + x[::-1], 100.0)


def test_wrong_beds_are_refused():
    with pytest.raises(InputError) as wrong:
        bed_below(0.0, 1.0, 0.0, 1.0, "oval")
    assert wrong.value.code == "value-not-allowed"
    with pytest.raises(InputError) as wrong:
        bed_below(0.0, 1.0, 0.0, 0.0, "triangle")
    assert wrong.value.code == "number-not-positive"


@pytest.mark.parametrize("shape", SHAPES)
def test_only_the_water_is_deepened(shape):
    x, z = channel(0.03)
    water = find_water(x, z)
    new_x, new_z = deepened(x, z, water, 2.0, shape)
    assert (np.diff(new_x) >= 0.0).all()
    outside = (x < water.start) | (x > water.end)
    kept = (new_x < water.start) | (new_x > water.end)
    np.testing.assert_array_equal(new_x[kept], x[outside])
    np.testing.assert_array_equal(new_z[kept], z[outside])
    assert new_z.min() == pytest.approx(water.surface - 2.0)


@given(
    st.sampled_from(SHAPES), st.floats(2.0, 80.0), st.floats(0.02, 0.45), st.floats(0.02, 0.1),
    st.floats(1e-4, 0.02),
)  # fmt: skip
@settings(max_examples=60, deadline=None)
def test_depth_for_a_flow_undoes_the_flow_of_a_depth(shape, width, share, n, slope):
    depth = share * width
    flow = discharge_below(width, depth, n, slope, shape)
    assert depth_for_flow(width, flow, n, slope, shape) == pytest.approx(depth, rel=1e-6)


def test_rectangle_carries_what_the_hand_works_out():
    # A = 4, P = 6.6, R^(2/3) = (4/6.6)^(2/3); Q = 4 R^(2/3) sqrt(0.0025) / 0.015
    assert discharge_below(5.0, 0.8, 0.015, 0.0025, "rectangle") == pytest.approx(
        4.0 * (4.0 / 6.6) ** (2.0 / 3.0) * 0.05 / 0.015
    )


def test_a_flow_too_large_for_the_water_has_no_depth():
    most = discharge_below(10.0, 5.0, 0.04, 0.001, "parabola")
    with pytest.raises(NoAnswerError) as none:
        depth_for_flow(10.0, 1.01 * most, 0.04, 0.001, "parabola")
    assert none.value.nearest == pytest.approx(most)
    assert depth_for_flow(10.0, 1e-12, 0.04, 0.001, "parabola") == pytest.approx(1e-5)


@pytest.mark.parametrize("shape", SHAPES)
def test_the_section_carries_the_survey_flow_at_the_surveyed_surface(shape):
    x, z = channel()
    water = find_water(x, z)
    slope, n, flow = 0.002, 0.035, 9.0
    depth = depth_for_flow(water.width, flow, n, slope, shape)
    section = Section(*deepened(x, z, water, depth, shape), [Subarea(0.0, 100.0, n)])
    assert section.discharge(water.surface, slope) == pytest.approx(flow, rel=1e-6)
    assert section.normal_stage(flow, slope) == pytest.approx(water.surface, abs=1e-6)
    # the bare surface needs a higher stage for the same flow: the answer on the high side
    bare = Section(x, z, [Subarea(0.0, 100.0, n)])
    for discharge in (15.0, 60.0):
        high, right = bare.normal_stage(discharge, slope), section.normal_stage(discharge, slope)
        assert high > right
        # more than the survey flow passes below the surface, so it lies below the stage for the rest alone
        assert right < bare.normal_stage(discharge - flow, slope) + 1e-9 < high


def test_a_roughness_that_falls_with_depth_is_met_at_the_depth():
    x, z = channel()
    water, slope, flow = find_water(x, z), 0.002, 9.0
    # so steep that going to and fro between depth and n would never end
    falls = FallingN(0.08, 0.8, 0.03, 1.1)
    specs = [SubareaSpec(0.0, 100.0, 0.03, 0.03, 0.08, "table", "reeds", "", falls)]
    line = CutLine("a", x, x)
    depth, how, missing = Submerged("rectangle", survey_flow=flow).depth_at(line, water, specs, slope, SI)
    n = np.interp(depth, [0.8, 1.1], [0.08, 0.03])
    assert discharge_below(water.width, depth, n, slope, "rectangle") == pytest.approx(flow, rel=1e-6)
    assert f"n {n:.3g}" in how
    assert missing is None
    roughness = DepthRoughness(0.08, 0.8, 0.03, 1.1)
    section = Section(*deepened(x, z, water, depth, "rectangle"), [Subarea(0.0, 100.0, roughness)])
    assert section.discharge(water.surface, slope) == pytest.approx(flow, rel=1e-6)


# --- in a study --------------------------------------------------------------------------------------

WIDTH, N, SLOPE = 12.0, 0.04, 0.003


@pytest.fixture(scope="module")
def folder(tmp_path_factory):
    """A straight stream 12 m wide between banks, its cut lines with drainage areas."""
    path = tmp_path_factory.mktemp("water")
    count = 160
    y, x = np.mgrid[0:count, 0:count] + 0.5
    off = np.abs(y - 80.0)
    ground = 50.0 - SLOPE * x + np.clip((off - WIDTH / 2) / 2.0, 0.0, 2.0)
    ground += 0.02 * np.maximum(off - WIDTH / 2 - 4.0, 0.0)
    with rasterio.open(
        path / "dem.tif", "w", driver="GTiff", width=count, height=count, count=1, dtype="float64",
        crs="EPSG:26915", transform=from_origin(500_000.0, 4_500_000.0, 1.0, 1.0),
    ) as out:  # fmt: skip
        out.write(ground, 1)
        out.units = ("m",)

    def line(*points):
        return LineString([(500_000.0 + a, 4_500_000.0 - b) for a, b in points])

    lines = [line((a, 10.0), (a, 150.0)) for a in (40.0, 80.0, 120.0)]
    geopandas.GeoDataFrame(
        {"line": ["a", "b", "c"], "area": [16.0, 81.0, None]}, geometry=lines, crs="EPSG:26915"
    ).to_file(path / "data.gpkg", layer="cut_lines")
    geopandas.GeoDataFrame(
        {"name": ["brook"]}, geometry=[line((1.0, 80.0), (159.0, 80.0))], crs="EPSG:26915"
    ).to_file(path / "data.gpkg", layer="streams")
    (path / "study.toml").write_text(
        '[study]\nunits = "si"\n[terrain]\ndem = "dem.tif"\n'
        '[streams]\npath = "data.gpkg|layer=streams"\nid_field = "name"\n'
        '[cut_lines]\npath = "data.gpkg|layer=cut_lines"\nid_field = "line"\n'
        f"[land_cover]\ndefault_n = {N}\n[slope]\nvalue = {SLOPE}\n"
        '[flows]\nevents = { "low" = 12.0, "high" = 60.0 }\n[output]\noverwrite = true\n',
        encoding="utf-8",
    )
    return path


def answers(folder, **options):
    return run(folder / "study.toml", {"output.folder": str(folder / "output"), **options})


def codes(results, section):
    found = results.findings
    return set(found.loc[found["feature_id"] == section, "code"])


@pytest.fixture(scope="module")
def bare(folder):
    return answers(folder)


def test_water_without_a_word_about_it_is_a_note(bare):
    assert all("water-in-channel" in codes(bare, name) for name in "abc")
    rows = bare.findings[bare.findings["code"] == "water-in-channel"]
    assert set(rows["severity"]) == {"note"}
    assert rows["message"].str.contains("on the high side").all()
    assert rows.geometry.notna().all()
    assert set(bare.design_stages["status"]) == {"ok"}
    assert bare.sections["lowest_ground"].iloc[0] == pytest.approx(50.0 - SLOPE * 40.0, abs=0.01)


@pytest.mark.parametrize("shape", SHAPES)
def test_a_stated_depth_lowers_the_bed_and_the_stage(folder, bare, shape):
    results = answers(folder, **{"submerged.depth": "1.2", "submerged.shape": shape})
    surface = bare.sections["lowest_ground"].to_numpy()
    assert results.sections["lowest_ground"].to_numpy() == pytest.approx(surface - 1.2, abs=0.02)
    assert (results.design_stages["stage"] < bare.design_stages["stage"] - 0.2).all()
    assert "bed-below-water" in codes(results, "a")
    assert "water-in-channel" not in codes(results, "a")
    # z of the section is the bed that was used, so that a reviewer can work it out again
    z = np.array([point[2] for point in results.sections.geometry.iloc[0].coords])
    assert z.min() == pytest.approx(results.sections["lowest_ground"].iloc[0])
    stage = results.design_stages["stage"].iloc[0]
    assert results.design_stages["depth"].iloc[0] == pytest.approx(stage - z.min())


def test_depth_by_a_power_law_of_drainage_area(folder, bare):
    law = {"submerged.coefficient": "0.25", "submerged.exponent": "0.5", "submerged.area_field": "area"}
    results = answers(folder, **law)
    lowered = bare.sections["lowest_ground"].to_numpy() - results.sections["lowest_ground"].to_numpy()
    # 0.25 sqrt(16) = 1.0, 0.25 sqrt(81) = 2.25; the third has no area and stays as it is
    assert lowered == pytest.approx([1.0, 2.25, 0.0], abs=0.02)
    assert {"water-in-channel", "drainage-area-missing"} <= codes(results, "c")
    assert set(results.design_stages.groupby("section_id")["status"].first()) == {"ok", "doubtful"}


def test_the_law_gives_feet_from_feet(folder):
    law = {"submerged.coefficient": "0.82021", "submerged.exponent": "0.5", "submerged.area_field": "area"}
    us = answers(folder, **law, **{"study.units": "us"})
    si = answers(folder, **{**law, "submerged.coefficient": "0.25"})
    assert us.sections["lowest_ground"].to_numpy() * 0.3048 == pytest.approx(
        si.sections["lowest_ground"].to_numpy(), abs=1e-4
    )


def test_the_survey_days_flow_stands_at_the_surveyed_surface(folder, bare):
    results = answers(folder, **{"submerged.survey_flow": "12.0"})
    low = results.design_stages[results.design_stages["event"] == "low"]
    assert low["stage"].to_numpy() == pytest.approx(bare.sections["lowest_ground"].to_numpy(), abs=0.02)
    message = results.findings.loc[results.findings["code"] == "bed-below-water", "message"].iloc[0]
    assert "12 m³/s" in message
    assert "n 0.04" in message


def test_a_survey_flow_that_the_water_cannot_carry_leaves_the_surface(folder, bare):
    results = answers(folder, **{"submerged.survey_flow": "5000"})
    assert results.sections["lowest_ground"].equals(bare.sections["lowest_ground"])
    message = results.findings.loc[results.findings["code"] == "water-in-channel", "message"].iloc[0]
    assert "deeper than half its width" in message


@pytest.mark.parametrize(
    ("options", "code"),
    [
        ({"depth": "1", "survey_flow": "2"}, "key-conflict"),
        ({"depth": "1", "coefficient": "1", "exponent": "0.3", "area_field": "area"}, "key-conflict"),
        ({"coefficient": "1"}, "key-missing"),
        ({"shape": "triangle"}, "key-missing"),
        ({"depth": "1", "shape": "oval"}, "value-not-allowed"),
        ({"depth": "0"}, "number-not-positive"),
    ],
)
def test_keys_that_do_not_go_together(folder, options, code):
    with pytest.raises(InputError) as wrong:
        load_study(folder / "study.toml", {f"submerged.{k}": v for k, v in options.items()})
    assert wrong.value.code == code


def test_a_field_that_the_cut_lines_do_not_have(folder):
    with pytest.raises(InputError) as wrong:
        answers(
            folder,
            **{"submerged.coefficient": "1", "submerged.exponent": "0.3", "submerged.area_field": "basin"},
        )
    assert wrong.value.code == "field-missing"


def test_a_section_without_water_stays_and_says_so(folder):
    with rasterio.open(folder / "dem.tif") as source:
        ground, profile = source.read(1), source.profile
    # a V in place of the water
    rows = np.abs(np.arange(ground.shape[0]) + 0.5 - 80.0)
    with rasterio.open(folder / "dry.tif", "w", **profile) as out:
        out.write(ground + np.where(rows < WIDTH / 2, -0.2 * (WIDTH / 2 - rows), 0.0)[:, None], 1)
        out.units = ("m",)
    dry = {"terrain.dem": str(folder / "dry.tif")}
    left, stated = answers(folder, **dry), answers(folder, **dry, **{"submerged.depth": "1.0"})
    assert not {"water-in-channel", "water-not-found"} & codes(left, "a")
    assert "water-not-found" in codes(stated, "a")
    assert stated.design_stages["stage"].equals(left.design_stages["stage"])


# --- discharges by drainage area ---------------------------------------------------------------------


def with_flows(folder, text, **options):
    (folder / "flows.csv").write_text(text, encoding="utf-8")
    return answers(folder, **{"flows.path": str(folder / "flows.csv"), **options})


AREA = {"flows.area_field": "area", "flows.exponent": "0.5"}


def test_discharges_are_carried_over_by_drainage_area(folder):
    results = with_flows(folder, "event,discharge,area\n10-year,40,64\n", **AREA)
    rows = results.design_stages.set_index("section_id")
    # 40 sqrt(16 / 64) = 20, 40 sqrt(81 / 64) = 45; the third has no area and takes the flow as it is given
    assert rows["discharge"].to_dict() == pytest.approx({"a": 20.0, "b": 45.0, "c": 40.0})
    assert "drainage-area-far" in codes(results, "a")
    assert "drainage-area-far" not in codes(results, "b")
    assert "drainage-area-missing" in codes(results, "c")
    assert rows["status"].to_dict() == {"a": "doubtful", "b": "ok", "c": "doubtful"}


def test_rows_without_an_area_hold_as_they_are(folder):
    results = with_flows(folder, "event,discharge,section,area\n10-year,40,,64\n10-year,33,b,\n", **AREA)
    rows = results.design_stages.set_index("section_id")
    assert rows["discharge"].to_dict() == pytest.approx({"a": 20.0, "b": 33.0, "c": 40.0})


def test_a_change_takes_effect_at_its_distance_and_is_carried_over_from_there(folder):
    text = "event,discharge,stream,distance,area\n10-year,10,brook,,16\n10-year,45,brook,60,81\n"
    results = with_flows(folder, text, **AREA)
    rows = results.design_stages.set_index("section_id")
    assert rows["discharge"].to_dict() == pytest.approx({"a": 10.0, "b": 45.0, "c": 45.0})


@pytest.mark.parametrize(
    ("text", "options", "code"),
    [
        ("event,discharge\na,1\n", AREA, "field-missing"),
        ("event,discharge,area\na,1,0\n", AREA, "number-not-positive"),
        ("event,discharge,area\na,1,x\n", AREA, "value-not-allowed"),
        ("event,discharge,area\na,1,2\n", {"flows.area_field": "area"}, "key-missing"),
        ("event,discharge,area\na,1,2\n", {"flows.area_field": "no", "flows.exponent": "1"}, "field-missing"),
    ],
)
def test_wrong_areas_are_refused(folder, text, options, code):
    with pytest.raises(InputError) as wrong:
        with_flows(folder, text, **options)
    assert wrong.value.code == code


def test_an_area_in_the_table_alone_changes_nothing(folder):
    results = with_flows(folder, "event,discharge,area\n10-year,40,64\n")
    assert set(results.design_stages["discharge"]) == {40.0}
