"""The whole job on the real DEM that matplotlib ships, and one terrain in four CRSs."""

import geopandas
import matplotlib.cbook
import numpy as np
import pyproj
import pytest
import rasterio
import shapely
from rasterio.transform import from_bounds
from shapely import LineString

from terrain2q import run

Q = {"small": 30.0, "middle": 200.0, "large": 1500.0}


def study(folder, dem, lines, **more):
    tables = {
        "study": 'name = "test"\nunits = "si"',
        "terrain": f'dem = "{dem}"',
        "cut_lines": f'path = "{lines}|layer=cut_lines"\nid_field = "id"',
        "streams": f'path = "{lines}|layer=streams"\nid_field = "id"',
        "land_cover": "default_n = 0.06",
        "channel": "n = 0.04",
        "slope": "value = 0.003",
        "flows": "events = { " + ", ".join(f"{k} = {v}" for k, v in Q.items()) + " }",
        **more,
    }
    path = folder / "study.toml"
    path.write_text("\n".join(f"[{name}]\n{text}" for name, text in tables.items()))
    return path


# --- Jacksboro fault, Tennessee: about 90 m cells in degrees ------------------------------------------


@pytest.fixture(scope="module")
def jacksboro(tmp_path_factory):
    """The DEM as a GeoTIFF, a stream down its deepest valley, and cut lines across it."""
    folder = tmp_path_factory.mktemp("jacksboro")
    with matplotlib.cbook.get_sample_data("jacksboro_fault_dem.npz") as dem:
        z = dem["elevation"].astype("float64")
        west, east, south, north = (float(dem[k]) for k in ("xmin", "xmax", "ymin", "ymax"))
    rows, columns = z.shape
    transform = from_bounds(west, south, east, north, columns, rows)
    with rasterio.open(
        folder / "dem.tif", "w", driver="GTiff", width=columns, height=rows, count=1, dtype="float64",
        crs="EPSG:4326", transform=transform,
    ) as out:  # fmt: skip
        out.write(z, 1)
        out.units = ("m",)

    def place(row, column):
        return transform.c + (column + 0.5) * transform.a, transform.f + (row + 0.5) * transform.e

    # downhill from a high cell to its lowest neighbour, until no neighbour is lower
    path = _descend(z)
    stream = LineString([place(r, c) for r, c in path])
    cuts, ids = [], []
    for k in np.linspace(0.15, 0.85, 8):
        i = int(k * (len(path) - 1))
        (r, c), ahead, behind = path[i], path[min(i + 3, len(path) - 1)], path[max(i - 3, 0)]
        dr, dc = ahead[0] - behind[0], ahead[1] - behind[1]
        span = 14 / max(np.hypot(dr, dc), 1e-9)
        a, b = (r + dc * span, c - dr * span), (r - dc * span, c + dr * span)
        cuts.append(LineString([place(*a), place(*b)]))
        ids.append(f"j-{len(ids) + 1}")
    crs = "EPSG:4326"
    geopandas.GeoDataFrame({"id": ["creek"]}, geometry=[stream], crs=crs).to_file(
        folder / "lines.gpkg", layer="streams"
    )
    geopandas.GeoDataFrame({"id": ids}, geometry=cuts, crs=crs).to_file(
        folder / "lines.gpkg", layer="cut_lines"
    )
    return folder, run(study(folder, "dem.tif", "lines.gpkg"))


def _descend(z):
    """Cells of the longest way downhill from any of a lattice of starts, by steepest descent."""
    best = []
    for row in range(20, z.shape[0] - 20, 12):
        for column in range(20, z.shape[1] - 20, 12):
            path = [(row, column)]
            while True:
                r, c = path[-1]
                around = [
                    (z[i, j], i, j)
                    for i in range(r - 1, r + 2)
                    for j in range(c - 1, c + 2)
                    if 16 <= i < z.shape[0] - 16 and 16 <= j < z.shape[1] - 16
                ]
                low = min(around)
                if not low[0] < z[r, c]:
                    break
                path.append(low[1:])
            if len(path) > len(best):
                best = path
    return best


def test_jacksboro_is_answered(jacksboro):
    _, results = jacksboro
    stages = results.design_stages
    good = stages[stages["status"] != "failed"]
    assert good["section_id"].nunique() >= 6
    for _, rows in good.groupby("section_id"):
        assert (np.diff(rows["stage"]) >= 0).all()
        assert (np.diff(rows["flow_area"]) > 0).all()
    assert (good["depth"] > 0).all()
    assert (good["alpha"] >= good["beta"] - 1e-12).all()
    assert (good["beta"] >= 1 - 1e-12).all()


def test_jacksboro_sections_are_measured_on_the_ground(jacksboro):
    folder, results = jacksboro
    geod = pyproj.Geod(ellps="WGS84")
    drawn = geopandas.read_file(folder / "lines.gpkg", layer="cut_lines").set_index("id").geometry
    for row in results.sections.itertuples():
        xy = shapely.get_coordinates(drawn[row.section_id])
        lon, lat = np.linspace(xy[0, 0], xy[-1, 0], 400), np.linspace(xy[0, 1], xy[-1, 1], 400)
        assert row.length == pytest.approx(geod.line_length(lon, lat), rel=1e-7)


def test_jacksboro_discharge_by_hand(jacksboro):
    """Every answered row again, from the stored profile by an independent way: shapely's polygons."""
    _, results = jacksboro
    checked = 0
    for row in results.design_stages.itertuples():
        if row.status == "failed":
            continue
        zm = shapely.get_coordinates(
            results.sections.set_index("section_id").geometry[row.section_id], include_z=True, include_m=True
        )
        parts = results.subarea_flows
        parts = parts[(parts["section_id"] == row.section_id) & (parts["event"] == row.event)]
        subareas = results.subareas[results.subareas["section_id"] == row.section_id].set_index("subarea")
        if parts["stage"].nunique() > 1:
            continue
        station, ground = zm[:, 3], zm[:, 2]
        deep = ground.min() - 10
        earth = shapely.Polygon([(station[0], deep), *zip(station, ground, strict=True), (station[-1], deep)])
        total = 0.0
        for part in parts.itertuples():
            strip = subareas.loc[part.subarea]
            box = shapely.box(strip.start_station, deep, strip.end_station, row.stage)
            water = [p for p in shapely.get_parts(box.difference(earth)) if p.area > 0]
            area = sum(p.area for p in water)
            if abs(area - part.flow_area) > 1e-6 * area:
                continue  # a dry hollow lies beside the water: told apart elsewhere
            total += part.discharge
            by_hand = area ** (5 / 3) / part.wetted_perimeter ** (2 / 3) / strip.n * row.slope**0.5
            assert part.discharge == pytest.approx(by_hand, rel=1e-9)
            checked += 1
        assert total <= row.discharge * (1 + 1e-9)
    assert checked > 20


# --- one terrain in four CRSs ------------------------------------------------------------------------

CRSS = ["EPSG:32615", "EPSG:4326", "EPSG:2277", "EPSG:3857"]
HOME = pyproj.CRS("EPSG:32615")
MIDDLE = (505_000.0, 3_350_000.0)  # near 30.3° N, where a metre of the Mercator map is 0.86 m of ground


def ground(x, y):
    """A smooth valley in the home zone's metres, m."""
    along, across = y - MIDDLE[1], x - MIDDLE[0]
    return 50.0 - 0.003 * along + 4.0 * (1 - np.exp(-((across / 25.0) ** 2))) + 0.0008 * across**2


@pytest.mark.parametrize("crs", CRSS)
def test_one_terrain_in_four_crs(tmp_path, crs):
    # EPSG:2277 is NAD83 in US survey feet; the ballpark transformation shifts nothing
    to = pyproj.Transformer.from_crs(HOME, crs, always_xy=True)
    back = pyproj.Transformer.from_crs(crs, HOME, always_xy=True)
    corners = [(MIDDLE[0] + a, MIDDLE[1] + b) for a in (-130, 130) for b in (-60, 60)]
    x, y = to.transform(*np.array(corners).T)
    count_x, count_y = 520, 240
    transform = from_bounds(x.min(), y.min(), x.max(), y.max(), count_x, count_y)
    column, row = np.meshgrid(np.arange(count_x) + 0.5, np.arange(count_y) + 0.5)
    z = ground(*back.transform(transform.c + column * transform.a, transform.f + row * transform.e))
    with rasterio.open(
        tmp_path / "dem.tif", "w", driver="GTiff", width=count_x, height=count_y, count=1, dtype="float64",
        crs=crs, transform=transform,
    ) as out:  # fmt: skip
        out.write(z, 1)
        out.units = ("m",)
    lines = {
        "cut_lines": [
            LineString([(MIDDLE[0] - 100, MIDDLE[1] + s), (MIDDLE[0] + 100, MIDDLE[1] + s)])
            for s in (-20, 20)
        ],
        "streams": [LineString([(MIDDLE[0], MIDDLE[1] - 50), (MIDDLE[0], MIDDLE[1] + 50)])],
    }
    for layer, shapes in lines.items():
        frame = geopandas.GeoDataFrame(
            {"id": [f"{layer[0]}{i}" for i in range(len(shapes))]}, geometry=shapes, crs=HOME
        )
        frame.to_file(tmp_path / "lines.gpkg", layer=layer)
    more = {"channel": 'banks = "none"', "flows": "events = { one = 60.0, two = 300.0 }"}
    stages = run(study(tmp_path, "dem.tif", "lines.gpkg", **more)).design_stages
    # truth by dense integration along the line on the ground; the zone's scale there is 0.9996
    geod = HOME.get_geod()
    lon_lat = pyproj.Transformer.from_crs(HOME, HOME.geodetic_crs, always_xy=True)
    for row in stages.itertuples():
        y0 = MIDDLE[1] + {"c0": -20, "c1": 20}[row.section_id]
        across = np.linspace(MIDDLE[0] - 100, MIDDLE[0] + 100, 20001)
        lon, lat = lon_lat.transform(across[[0, -1]], [y0, y0])
        length = geod.inv(lon[0], lat[0], lon[1], lat[1])[2]
        station = np.linspace(0, length, across.size)
        depth = np.maximum(row.stage - ground(across, y0), 0)
        area = np.trapezoid(depth, station)
        wet = depth[:-1] + depth[1:] > 0
        perimeter = np.hypot(np.diff(station), np.diff(ground(across, y0)))[wet].sum()
        truth = area ** (5 / 3) / perimeter ** (2 / 3) / 0.06 * 0.003**0.5
        assert row.discharge == pytest.approx(truth, rel=1e-3), crs
