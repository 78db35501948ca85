"""Cut lines up- and downstream of crossings: clear of every fill, and in the file that people edit."""

from __future__ import annotations

import json

import geopandas
import numpy as np
import pytest
import rasterio
import shapely
from _county import NORTH, ROAD_AT, WIDE, N, make_valleys, roads, streams, write_dem
from affine import Affine

from terrain2q import commands, run
from terrain2q.errors import InputError
from terrain2q.ground.layout import KeptLine
from terrain2q.ground.roads import Crossing
from terrain2q.ground.streams import StreamNetwork
from terrain2q.ground.terrain import Terrain
from terrain2q.jobs.crossings import Beside
from terrain2q.jobs.lines_at_crossings import FURTHER, STEPS, lines_at_crossings
from terrain2q.laying_out import CROSSINGS, SPACING, lay_out_study
from terrain2q.study import load_study

CRS = "EPSG:26915"
WEST = 500_000.0


@pytest.fixture(scope="module")
def county(tmp_path_factory):
    """Four valleys, whose roads cross square and at slants of 15, -25 and 35 degrees."""
    folder = tmp_path_factory.mktemp("county")
    valleys = make_valleys(4)
    write_dem(folder / "dem.tif", valleys, noise=0.0)
    streams(valleys).to_file(folder / "data.gpkg", layer="streams")
    roads(valleys).to_file(folder / "data.gpkg", layer="roads")
    (folder / "study.toml").write_text(
        f"""
[study]
units = "si"
[terrain]
dem = "dem.tif"
[streams]
path = "data.gpkg|layer=streams"
id_field = "stream_id"
[land_cover]
default_n = {N}
[channel]
banks = "none"
[flows]
events = {{ "10-year" = 20.0 }}
[crossings]
roads = "data.gpkg|layer=roads"
[output]
report = false
sheets = "none"
overwrite = true
""",
        encoding="utf-8",
    )
    return folder, valleys


@pytest.mark.parametrize("width", [None, 120.0])
def test_two_lines_a_crossing_clear_of_its_fill(county, tmp_path, width):
    folder, valleys = county
    options = {} if width is None else {"cut_lines.width": width}
    study = load_study(folder / "study.toml", options, needs=("terrain", "streams"))
    laid_out = lay_out_study(study, tmp_path / "lines.gpkg")
    assert laid_out.at == CROSSINGS
    assert len(laid_out.lines) == 2 * len(valleys)
    ids = set(laid_out.lines["section_id"])
    for v in valleys:
        mine = laid_out.lines[laid_out.lines["stream"] == f"S{v.number}"].set_index("section_id")
        (approach,), (tailwater,) = (
            [i for i in mine.index if i.endswith(end)] for end in ("approach", "tailwater")
        )
        assert approach.removesuffix(" approach") == tailwater.removesuffix(" tailwater")
        assert {approach, tailwater} <= ids
        up, down = mine.loc[[approach, tailwater], "stream_distance"]
        # the stream begins 2 m from the edge; a fill at a slant takes more of it, the wider the valley
        road = ROAD_AT - 2.0
        reach = 25.0 + 0.5 * WIDE * np.tan(np.radians(abs(v.slant)))
        assert road - reach < up < road - 4.5
        assert road + 4.5 < down < road + reach
        for line in mine.geometry:
            x, y = shapely.get_coordinates(line.segmentize(0.5)).T
            natural = v.bed + v.slope * (ROAD_AT - (NORTH - y))
            natural += np.maximum(np.abs(x - v.centre) - v.half_bed, 0.0) / v.side
            assert (v.ground(x, y) - natural).max() < 0.05
            assert line.length <= (600.0 if width is None else width) * 1.001
            # from left to right looking downstream, which is south
            assert x[0] > x[-1]


def test_command_lines_are_kept_and_run(county, tmp_path, capsys):
    folder, _ = county
    file = tmp_path / "lines.gpkg"

    def layout(*more):
        with pytest.raises(SystemExit) as stop:
            commands.main(
                ["layout", str(folder / "study.toml"), "--at", "crossings", "--to", str(file), *more]
            )
        assert stop.value.code == 0
        return capsys.readouterr().out

    assert "8 lines laid out up- and downstream of crossings" in layout()
    lines = geopandas.read_file(file, layer="cut_lines")
    xy = shapely.get_coordinates(lines.geometry[0])
    xy[0] += [-2.0, 3.0]
    lines.loc[0, "geometry"] = shapely.LineString(xy)
    lines.to_file(file, layer="cut_lines")
    told = json.loads(layout("--json"))
    assert (told["lines"], told["laid_out"], told["kept"]) == (8, 7, [lines["section_id"][0]])
    again = geopandas.read_file(file, layer="cut_lines").set_index("section_id")
    assert shapely.get_coordinates(again.geometry[lines["section_id"][0]]).tolist() == xy.tolist()
    options = {
        "cut_lines.path": f"{file}|layer=cut_lines",
        "cut_lines.id_field": "section_id",
        "slope.value": 0.004,
        "output.folder": str(tmp_path / "out"),
    }
    results = run(folder / "study.toml", options)
    assert set(results.sections["section_id"]) == set(again.index)
    assert results.failed_sections == 0


def test_where_lines_are_laid_out(county, tmp_path):
    folder, _ = county
    study, file = folder / "study.toml", tmp_path / "lines.gpkg"
    spaced = {"cut_lines.every": 200.0, "cut_lines.width": 150.0}
    needs = ("terrain", "streams")
    assert lay_out_study(load_study(study, spaced, needs=needs), file).at == SPACING
    assert lay_out_study(load_study(study, spaced, needs=needs), file, at=CROSSINGS).at == CROSSINGS
    with pytest.raises(InputError, match="has no every"):
        lay_out_study(load_study(study, needs=needs), file, at=SPACING)
    # a width is enough to lay out, but not to run
    with pytest.raises(InputError, match="has no path and no every"):
        run(study, {"cut_lines.width": 150.0, "slope.value": 0.004})
    text = study.read_text(encoding="utf-8").replace("[crossings]\nroads", "[extent]\n# roads")
    other = folder / "no_crossings.toml"
    other.write_text(text, encoding="utf-8")
    with pytest.raises(InputError, match="has no every"):
        load_study(other, {"cut_lines.width": 150.0}, needs=needs)
    with pytest.raises(InputError, match="there are none"):
        lay_out_study(load_study(other, spaced, needs=needs), file, at=CROSSINGS)


# --- moving off a fill, and ending at one -------------------------------------------------------------


@pytest.fixture
def plain(tmp_path):
    """A straight valley to the east; its stream's upstream end stands at `WEST`."""
    north, size = 4_600_000.0, (400, 1000)
    y = np.abs(np.arange(size[0]) + 0.5 - 200.0)[:, None]
    x = np.arange(size[1])[None, :] + 0.5
    z = 100.0 - 0.002 * x + 0.05 * np.maximum(y - 4.0, 0.0)
    with rasterio.open(
        tmp_path / "dem.tif", "w", driver="GTiff", width=size[1], height=size[0], count=1, dtype="float64",
        crs=CRS, transform=Affine(1.0, 0.0, WEST, 0.0, -1.0, north + 200.0),
    ) as target:  # fmt: skip
        target.write(z, 1)
        target.units = ["m"]
    stream = shapely.LineString([(WEST, north), (WEST + 1000.0, north)])
    frame = geopandas.GeoDataFrame({"feature_id": ["S"]}, geometry=[stream], crs=CRS)
    return StreamNetwork(frame, CRS), Terrain(tmp_path / "dem.tif"), north


def beside(closed, **distances):
    return Beside(Crossing("C", "", "S", 0.0, 0.0, 0, 0.0, 500.0, None), distances, closed, ())


def test_a_line_moves_away_from_a_fill_that_it_would_run_onto(plain):
    network, terrain, north = plain
    # a fill that comes near only north of the stream, 25 m further up
    closed = shapely.box(WEST + 455.0, north + 20.0, WEST + 545.0, north + 90.0)
    layout = lines_at_crossings(
        [beside(closed, approach=480.0, tailwater=520.0)], network, terrain, width=200.0
    )
    up, down = layout.lines
    assert (up.section_id, down.section_id) == ("C approach", "C tailwater")
    assert up.stream_distance == pytest.approx(480.0 - 3 * FURTHER, abs=0.01)
    assert down.stream_distance == pytest.approx(520.0 + 3 * FURTHER, abs=0.01)
    assert not any(line.geometry.intersects(closed) for line in layout.lines)
    assert not [f for f in layout.findings if f.code != "line-ends-low"]


def test_a_line_ends_at_a_fill_where_no_place_near_is_clear(plain):
    network, terrain, north = plain
    reach = FURTHER * STEPS + 5.0
    closed = shapely.box(WEST + 480.0 - reach, north + 20.0, WEST + 500.0, north + 90.0)
    layout = lines_at_crossings([beside(closed, approach=480.0)], network, terrain, width=200.0)
    (line,) = layout.lines
    assert line.stream_distance == pytest.approx(480.0, abs=0.01)
    y = shapely.get_coordinates(line.geometry)[:, 1] - north
    assert y.max() == pytest.approx(20.0, abs=0.01)
    assert y.min() == pytest.approx(-100.0, abs=0.5)
    # north is to the left, looking east
    assert line.crossing == pytest.approx(20.0, abs=0.05)
    assert line.geometry.intersection(closed).length == 0.0
    (cut,) = [f for f in layout.findings if f.code == "section-cut-by-road"]
    assert cut.feature_id == "C approach"
    assert "50.0 m" in cut.message


def test_a_stream_under_a_fill_has_no_line(plain):
    network, terrain, north = plain
    closed = shapely.box(WEST + 400.0, north - 90.0, WEST + 500.0, north + 90.0)
    layout = lines_at_crossings([beside(closed, approach=480.0)], network, terrain, width=200.0)
    assert layout.lines == []
    (left,) = [f for f in layout.findings if f.code == "line-left-out"]
    assert left.feature_id == "C approach"


def test_kept_lines_stay_and_two_crossings_may_share_a_place(plain):
    network, terrain, _ = plain
    none = shapely.Polygon()
    two = [beside(none, approach=480.0, tailwater=520.0)]
    other = Crossing("D", "", "S", 0.0, 0.0, 0, 0.0, 540.0, None)
    two.append(Beside(other, {"approach": 520.0, "tailwater": 560.0}, none, ()))
    layout = lines_at_crossings(two, network, terrain, width=200.0)
    assert {line.section_id for line in layout.lines} == {
        "C approach", "C tailwater", "D approach", "D tailwater",
    }  # fmt: skip
    shapes = [line.geometry for line in layout.lines]
    assert not any(a.intersects(b) for n, a in enumerate(shapes) for b in shapes[:n])
    kept = KeptLine("C approach", "S", 480.0, shapes[0])
    layout = lines_at_crossings(two[:1], network, terrain, width=200.0, kept=[kept])
    assert [line.section_id for line in layout.lines] == ["C tailwater"]
