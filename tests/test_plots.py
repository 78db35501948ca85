"""Pictures of a section and its rating: what is drawn, where, and what is written beside it."""

from itertools import pairwise

import matplotlib as mpl

mpl.use("Agg")

import matplotlib.pyplot as plt
import numpy as np
import pytest
from matplotlib.colors import to_rgb
from matplotlib.patches import Polygon
from matplotlib.text import Text

from terrain2q import Section, Subarea
from terrain2q.errors import InputError
from terrain2q.hydraulics.section import DepthRoughness
from terrain2q.output.looks import EARTHS, HATCHES, WALL, WATERS
from terrain2q.output.plots import plot_rating

X = [0.0, 20, 60, 100, 110, 120, 130, 140, 150, 200, 260, 300]
Z = [12.0, 8, 5, 4.5, 7, 7.2, 2, 2.2, 7.1, 3.8, 5, 12]
PARTS = [
    Subarea(0, 110, 0.07, "brush", "left floodplain"),
    Subarea(110, 150, 0.035, "open water", "channel"),
    Subarea(150, 300, DepthRoughness(0.15, 0.5, 0.06, 3), "reeds", "right floodplain"),
]


@pytest.fixture(autouse=True)
def _closed():
    yield
    plt.close("all")


def section(**more):
    return Section(X, Z, PARTS, section_id="R-014", **more)


def waters(ax):
    """Return the outlines of the water that is drawn."""
    tones = {to_rgb(tone) for tone in WATERS}
    return [p.get_xy() for p in ax.patches if isinstance(p, Polygon) and p.get_facecolor()[:3] in tones]


def earths(ax):
    tones = {to_rgb(tone) for tone in EARTHS}
    return [p for p in ax.patches if isinstance(p, Polygon) and p.get_facecolor()[:3] in tones]


def area(outline):
    x, y = outline.T
    return 0.5 * abs(np.dot(x, np.roll(y, 1)) - np.dot(y, np.roll(x, 1)))


def texts(ax):
    return [t.get_text() for t in ax.texts]


def lines_of(ax, color):
    return [line for line in ax.lines if line.get_color() == color]


def test_n_stands_in_each_subarea_with_its_label():
    ax = section().plot()
    found = {t.get_text(): t.get_position()[0] for t in ax.texts}
    assert found["brush\nn 0.07"] == 55
    assert found["open water\nn 0.035"] == 130
    assert found["reeds\nn 0.15 to 0.06"] == 225


@pytest.mark.parametrize(("units", "unit"), [("si", "m"), ("us", "ft")])
def test_axes_say_what_they_are_in_which_unit(units, unit):
    ax = section(units=units).plot(stages={"10-year": 6.0})
    assert ax.get_xlabel() == f"Station [{unit}], from left to right looking downstream"
    assert ax.get_ylabel() == f"Elevation [{unit}]"
    assert ax.get_title(loc="left") == "R-014"
    assert [t.get_text() for t in ax.get_legend().get_texts()] == [f"10-year: 6.00 {unit}"]


def test_water_that_is_drawn_has_the_flow_area_of_each_event():
    one = section()
    flows = {"2-year": 20.0, "10-year": 150.0, "100-year": 900.0}
    ax = one.plot(slope=0.002, discharges=flows)
    drawn = sorted(round(area(outline), 6) for outline in waters(ax))
    expected = sorted(round(p.flow_area, 6) for q in flows.values() for p in one.flow_paths(q, 0.002))
    assert drawn == pytest.approx(expected, rel=1e-6)
    levels = [line.get_ydata()[0] for line in ax.lines if ":" in str(line.get_label())]
    assert sorted(levels) == pytest.approx([one.normal_stage(q, 0.002) for q in flows.values()])


def test_hollow_that_water_has_not_reached_is_dry():
    ax = section().plot(stages={"low": 6.0})
    (outline,) = waters(ax)
    assert outline[:, 0].min() > 110
    assert outline[:, 0].max() < 150
    assert len(waters(section().plot(stages={"high": 9.0}))) == 1


def test_upright_walls_are_drawn_upright():
    ax = Section([0, 0, 10, 10], [5, 0, 0, 5], n=0.03).plot(stages={"a": 2.0})
    assert area(waters(ax)[0]) == pytest.approx(20.0)
    (earth,) = earths(ax)
    floor = ax.get_ylim()[0]
    # below the bed alone: the walls are lines, and the inside is not filled
    assert area(earth.get_xy()) == pytest.approx(-10.0 * floor)
    step = Section([0, 0, 6, 6, 14, 14], [5, 0, 0, 3, 3, 5], [Subarea(0, 6, 0.03), Subarea(6, 14, 0.05)])
    ax = step.plot(stages={"a": 4.0})
    assert area(waters(ax)[0]) == pytest.approx(6 * 4 + 8 * 1)
    floor = ax.get_ylim()[0]
    assert [area(p.get_xy()) for p in earths(ax)] == pytest.approx([-6 * floor, 8 * (3 - floor)])


def test_imagined_walls_stand_only_where_water_is_above_an_end():
    ax = section().plot(stages={"below": 11.0})
    assert lines_of(ax, WALL) == []
    ax = section().plot(stages={"above": 14.0, "below": 6.0})
    walls = lines_of(ax, WALL)
    assert [tuple(w.get_xdata()) for w in walls] == [(0, 0), (300, 300)]
    assert [tuple(w.get_ydata()) for w in walls] == [(12, 14), (12, 14)]
    named = [t.get_text() for t in ax.get_legend().get_texts()]
    assert named.count("imagined wall at the end") == 1


@pytest.mark.parametrize("asked", [None, 1, 5, 25])
@pytest.mark.parametrize("scale", [0.05, 1, 30])
def test_exaggeration_that_is_written_is_that_of_the_picture(asked, scale):
    one = Section(np.array(X) * scale, Z, n=0.05)
    ax = one.plot(exaggeration=asked)
    ax.figure.canvas.draw()
    (left, bottom), (right, top) = ax.transData.transform([(0, 0), (1, 1)])
    true = (top - bottom) / (right - left)
    (written,) = [t for t in texts(ax) if t.startswith("vertical scale")]
    assert written == f"vertical scale {float(written.split()[2]):g} times the horizontal"
    assert float(written.split()[2]) == pytest.approx(true, rel=1e-6)
    assert asked is None or float(written.split()[2]) == asked


def test_subareas_are_told_apart_by_more_than_colour():
    limits = np.linspace(0, 300, 13)
    parts = [Subarea(a, b, 0.03 + 0.01 * i, f"class {i}") for i, (a, b) in enumerate(pairwise(limits))]
    ax = Section(X, Z, parts).plot()
    looks = [(p.get_facecolor(), p.get_hatch()) for p in earths(ax)]
    assert len(set(looks)) == len(parts)
    assert all(one[1] != other[1] for one, other in pairwise(looks))
    assert sum("n 0." in t for t in texts(ax)) == 12
    # the same cover on both sides looks the same
    ax = Section(X, Z, [Subarea(0, 110, 0.07), Subarea(110, 150, 0.03), Subarea(150, 300, 0.07)]).plot()
    looks = [(p.get_facecolor(), p.get_hatch()) for p in earths(ax)]
    assert looks[0] == looks[2] != looks[1]


def test_labels_of_slender_subareas_do_not_meet():
    limits = [0, 120, 124, 128, 130, 133, 140, 300]
    parts = [Subarea(a, b, 0.03 + 0.01 * i, f"class {i}") for i, (a, b) in enumerate(pairwise(limits))]
    ax = Section(X, Z, parts).plot()
    ax.figure.canvas.draw()
    upright = [t for t in ax.texts if t.get_rotation() == 90]
    assert len(upright) == 5
    boxes = sorted((b.x0, b.x1) for b in (Text.get_window_extent(t) for t in upright))
    assert all(right < left for (_, right), (left, _) in pairwise(boxes))


def test_water_and_earth_can_be_told_in_grey():
    def grey(color):
        return float(np.dot(to_rgb(color), [0.299, 0.587, 0.114]))

    tones = [grey(w) for w in WATERS]
    assert tones == sorted(tones, reverse=True)
    assert min(np.abs(np.diff(tones))) > 0.08
    assert len(set(HATCHES)) == len(HATCHES)


def test_discharges_need_a_slope():
    with pytest.raises(InputError) as caught:
        section().plot(discharges={"10-year": 100.0})
    assert caught.value.code == "key-missing"


# --- the rating ----------------------------------------------------------------------------------


def test_rating_is_drawn_level_where_a_hollow_fills():
    one = section()
    rating = one.rating(0.002)
    ax = plot_rating(rating)
    dashed = [line for line in ax.lines if line.get_linestyle() == "--"]
    stages = rating["stage"].to_numpy()
    assert len(dashed) == (stages[1:] == stages[:-1]).sum() > 0
    assert all(np.ptp(line.get_ydata()) == 0 and np.ptp(line.get_xdata()) > 0 for line in dashed)
    drawn = np.concatenate([line.get_xdata() for line in ax.lines if line.get_linestyle() == "-"])
    assert np.sort(drawn) == pytest.approx(np.sort(rating["discharge"]))


@pytest.mark.parametrize(("units", "flow", "length"), [("si", "m³/s", "m"), ("us", "ft³/s", "ft")])
def test_rating_marks_events_and_crests(units, flow, length):
    one = section(units=units)
    rating = one.rating(0.002, 60)
    ax = rating.plot(events={"10-year": 150.0, "far": 1e9}, marks={"crest": 9.0})
    assert ax.get_xlabel() == f"Discharge [{flow}]"
    assert ax.get_ylabel() == f"Stage [{length}]"
    assert "10-year" in texts(ax)
    assert "crest" in texts(ax)
    assert "far" not in texts(ax)
    (mark,) = [line for line in ax.lines if line.get_marker() == "o"]
    assert mark.get_xdata()[0] == 150.0
    assert mark.get_ydata()[0] == pytest.approx(one.normal_stage(150.0, 0.002), abs=0.15)
