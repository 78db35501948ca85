"""Sections answered as arrays are those that are answered one by one: rows, shapes and findings."""

from __future__ import annotations

from itertools import chain, pairwise

import geopandas
import numpy as np
import pytest
import rasterio
import shapely
from pyproj import CRS
from rasterio.transform import from_origin

from terrain2q.flows import Flow
from terrain2q.ground.cover import ChannelPolygons, Cover, Roughness, RoughnessTable, UniformCover
from terrain2q.ground.cut_lines import CutLine
from terrain2q.ground.terrain import Terrain
from terrain2q.hydraulics.compiled_shelf import most_gained
from terrain2q.hydraulics.review import lowest_n_for_slope, n_low_for_slope, undivided_shelves
from terrain2q.jobs.design_flows import answer_sections
from terrain2q.jobs.plain_sections import answer_plain_sections
from terrain2q.jobs.remarks import division_gain
from terrain2q.jobs.sections import SectionInputs, build_sections
from terrain2q.jobs.slopes import FieldSlopes, OneSlope
from terrain2q.output.arrow_tables import GEOMETRY, table_of_frame
from terrain2q.output.layers import make_layers
from terrain2q.output.plain_layers import plain_layers
from terrain2q.units import SI, US

UTM, LINES, SIDE = CRS.from_epsg(26915), 90, 600
EAST, NORTH = 500000.0, 4500000.0


@pytest.fixture(scope="module")
def dem(tmp_path_factory):
    """A valley that winds from north to south, with levees, hollows behind them, terraces, noise and gaps."""
    path = tmp_path_factory.mktemp("winding") / "dem.tif"
    random = np.random.default_rng(3)
    rows, columns = np.mgrid[0:SIDE, 0:SIDE] + 0.5
    off = np.abs(columns - SIDE / 2 - 40 * np.sin(rows / 60))
    z = np.interp(off, [0, 6, 10, 16, 24, 60, 90, 300], [0, 0, 2, 3 + 0.8, 2, 1.6, 5, 30])
    z += np.where(rows % 200 < 60, 0.5 * (off < 4), 0.0) + 0.004 * (SIDE - rows) + 100
    z += random.normal(0, 0.04, z.shape) * (rows > 150)
    z[220:224, 300:420] = np.nan
    with rasterio.open(
        path, "w", driver="GTiff", width=SIDE, height=SIDE, count=1, dtype="float32", crs=UTM, nodata=-9999,
        transform=from_origin(EAST, NORTH, 1, 1), tiled=True, blockxsize=128, blockysize=128,
    ) as out:  # fmt: skip
        out.write(np.nan_to_num(z.round(2), nan=-9999).astype("float32"), 1)
        out.units = ("m",)
    return path


def cut_lines():
    """Lines across the valley: long, short, bent, one off the ground, one that cannot be sampled."""
    random = np.random.default_rng(4)
    lines = []
    for i, row in enumerate(np.linspace(8, SIDE - 8, LINES)):
        middle = EAST + SIDE / 2 + 40 * np.sin(row / 60)
        reach = random.choice([30.0, 80.0, 190.0])
        x = middle + np.array([reach, *([0.0] if i % 3 else []), -reach])
        y = NORTH - row + np.array([random.uniform(-8, 8), *([0.0] if i % 3 else []), 0.0])
        if i == 20:
            y -= 5000.0
        crossing = float(np.hypot(x[1] - x[0], y[1] - y[0])) if i % 3 and i % 7 else np.nan
        about = {"slope": [0.002, 0.0005, 0.03, 0.06, None][i % 5]}
        lines.append(CutLine(f"s{i}", x, y, "main", float(row), crossing, False, i != 50, about))
    return lines


def cover(overlaps: bool) -> Cover:
    edges = [0, 150, 230, 270, 281, 283, 330, 420, SIDE]
    names = ["wood", "crops", "meadow", "bed", "meadow", "wood", "crops", "wood"]
    boxes = [shapely.box(EAST + a, NORTH - SIDE, EAST + b, NORTH) for a, b in pairwise(edges)]
    if overlaps:
        boxes[6] = shapely.box(EAST + 330, NORTH - 300, EAST + 460, NORTH)  # over the wood, and a gap below
    frame = geopandas.GeoDataFrame(
        {"class": names, "feature_id": [str(i) for i in range(len(names))]}, geometry=boxes, crs=UTM
    )
    rows = {
        "wood": Roughness(0.1, 0.08, 0.12, "a table"),
        "crops": Roughness(0.04, 0.03, 0.05, "a table"),
        "meadow": Roughness(0.04, 0.02, 0.045, "another"),
        "bed": Roughness(0.03, 0.025, 0.04, "another"),
    }
    return Cover(frame, "class", RoughnessTable(rows), 0.06)


def channel() -> ChannelPolygons:
    rows = np.arange(0, SIDE + 1, 5.0)
    middle = EAST + SIDE / 2 + 40 * np.sin(rows / 60)
    course = shapely.LineString(np.stack([middle, NORTH - rows], 1)[: SIDE // 5 - 20])
    frame = geopandas.GeoDataFrame({"feature_id": ["c"]}, geometry=[course.buffer(14.0)], crs=UTM)
    return ChannelPolygons(frame)


CASES = {
    "auto banks": {"n": 0.035},
    "cover with overlaps": {"n": None, "overlaps": True},
    "no division": {"banks": "none"},
    "uniform": {"uniform": True, "n": 0.035, "top": 6.0},
    "polygons": {"polygons": True, "n": 0.08},
    "feet": {"units": US, "n": 0.06, "slopes": FieldSlopes("slope")},
}


@pytest.mark.parametrize("case", CASES.values(), ids=CASES)
def test_rows_and_findings_are_those_of_the_sections(dem, case):
    terrain, lines = Terrain(dem), cut_lines()
    inputs = SectionInputs(
        terrain,
        UniformCover(0.05) if case.get("uniform") else cover(case.get("overlaps", False)),
        channel() if case.get("polygons") else None,
        case.get("banks", "auto"),
        case.get("n"),
        case.get("slopes", OneSlope(0.003)),
        None,
        case.get("units", SI),
    )
    flows = (
        Flow("small", 4.0), Flow("middle", 60.0), Flow("large", 400.0), Flow("large", 900.0, stream="main",
        distance=300.0),
    )  # fmt: skip
    top, crs = case.get("top"), CRS.from_epsg(32615)
    plain = answer_plain_sections(lines, inputs, flows, 20, top)
    answered = plain.answered
    assert answered.sum() >= 10
    assert not answered[20]
    assert not answered[50]
    made, places = plain_layers(plain, inputs.units, terrain.crs, crs)

    built = build_sections(lines, inputs, compiled=False)
    answers = answer_sections(built, flows, 20, top, inputs.units, compiled=False)
    mine = [a for a, yes in zip(answers, answered, strict=True) if yes]
    findings = [f for a in mine for f in (*a.built.findings, *a.findings)]
    wanted = make_layers(mine, findings, inputs.units, terrain.crs, crs)
    wanted.pop("findings")
    number = {line.section_id: i for i, line in enumerate(lines)}
    for name, frame in wanted.items():
        expected, got = table_of_frame(name, frame), made[name]
        assert got.schema.names == expected.schema.names
        assert got.num_rows == expected.num_rows
        assert places[name].tolist() == [number[i] for i in expected["section_id"].to_pylist()]
        for column in expected.column_names:
            one, other = expected[column].to_pylist(), got[column].to_pylist()
            if column == GEOMETRY:
                one, other = (shapely.from_wkb(np.array(w, dtype=object)) for w in (one, other))
                assert shapely.equals_exact(one, other, 1e-6).all()
                assert (shapely.get_type_id(one) == shapely.get_type_id(other)).all()
                one, other = (
                    shapely.get_coordinates(s, include_z=True, include_m=True) for s in (one, other)
                )
            if column == GEOMETRY or isinstance(one[0], float):
                np.testing.assert_allclose(other, one, rtol=1e-9, atol=1e-9, err_msg=f"{name}.{column}")
            else:
                assert one == other, f"{name}.{column}"
    for attribute, of_plain in (
        (lambda a: a.built.findings, plain.built_findings),
        (lambda a: a.findings, plain.answer_findings),
    ):
        told = [f for i, f in zip(plain.places, of_plain, strict=True) if answered[i]]
        assert list(chain.from_iterable(told)) == [f for a in mine for f in attribute(a)]


def test_all_findings_that_numbers_make_occur(dem):
    """What the comparison above is about does occur in it."""
    inputs = SectionInputs(Terrain(dem), cover(False), None, "auto", 0.06, FieldSlopes("slope"), None, SI)
    plain = answer_plain_sections(cut_lines(), inputs, (Flow("small", 4.0), Flow("large", 900.0)), 20, None)
    codes = {
        f.code
        for i, place in enumerate(plain.places) if plain.answered[place]
        for f in (*plain.built_findings[i], *plain.answer_findings[i])
    }  # fmt: skip
    assert {"above-section-ends", "bank-passed", "slope-steep", "supercritical", "velocity-high"} <= codes
    assert {"water-in-channel"} <= codes


def test_the_most_a_shelf_adds_is_that_of_the_arrays():
    random = np.random.default_rng(8)
    shelves = 0
    for _ in range(400):
        points = int(random.integers(5, 60))
        x = np.cumsum(random.uniform(0.2, 3.0, points))
        away = np.abs(x - random.choice(x))
        z = np.interp(away, [0, 4, 6, 25, 40], [0, 0, 3, 3.2, 8]) + random.normal(0, 0.02, points)
        stage = float(z.min() + random.uniform(0.2, 6.0))
        found = [division_gain(x, z, stage, shelf) for shelf in undivided_shelves(x, z, stage)]
        shelves += bool(found)
        got = most_gained(x, z, stage, float(x[0]), float(x[-1]))
        assert got == pytest.approx(max([0.0, *found]), rel=1e-9, abs=1e-12)
    assert shelves > 100


def test_the_least_n_for_a_slope_is_that_of_the_remark():
    for slope in (0.0019, 0.002, 0.01, 0.04, 0.2):
        for radius in (0.05, 0.5, 2.0, 5.0):
            limit = float(lowest_n_for_slope(slope, radius))
            remark = n_low_for_slope(1e-9, slope, radius)
            assert np.isnan(limit) if remark is None else limit == remark.limit
