"""The long profile: its numbers are those of the layers, and it can be drawn."""

import matplotlib
import numpy as np
import pytest
from _stream_ground import CRS, Valley
from shapely import LineString

from terrain2q.flows import Flow
from terrain2q.ground.cover import UniformCover
from terrain2q.ground.cut_lines import orient_cut_lines
from terrain2q.ground.low_line import LowLines
from terrain2q.ground.streams import StreamNetwork
from terrain2q.ground.terrain import Terrain
from terrain2q.jobs.design_flows import answer_sections
from terrain2q.jobs.sections import SectionInputs, build_sections
from terrain2q.jobs.slopes import OneSlope, StreamSlopes
from terrain2q.output.long_profile import long_profiles, plot_long_profile
from terrain2q.units import SI, US

matplotlib.use("Agg")


@pytest.fixture(scope="module")
def worked(tmp_path_factory):
    """A stream with a side stream of the same name, a fill, three sections and one that has no slope."""
    valley = Valley(90.0, size=500.0, fill=(60.0, 10.0, 3.0))
    terrain = Terrain(valley.write(tmp_path_factory.mktemp("profile") / "v.tif"))
    side = LineString([valley.place(-60.0, -100.0), valley.place(0.0, 0.0)])
    streams = valley.streams(valley.line((-220.0,), (0.0,)), valley.line((0.0,), (220.0,)), side)
    lines, _ = orient_cut_lines(valley.cut_lines((-120.0, 30.0, 120.0)), streams, CRS)
    low_lines = LowLines(StreamNetwork(streams, CRS), terrain, units=US)
    slopes = StreamSlopes(lines, low_lines, 200.0, 1.0, US)
    inputs = SectionInputs(terrain, UniformCover(0.04), None, "auto", None, slopes, None, US)
    flows = [Flow("10-year", 12.0), Flow("2-year", 5.0)]
    answers = answer_sections(build_sections(lines, inputs), flows, 10, None, US)
    return answers, low_lines, slopes


def test_the_profile_has_the_numbers_of_the_answers(worked):
    answers, low_lines, slopes = worked
    profiles = long_profiles(answers, low_lines, US, slopes, [("Mill Road", "creek", 280.0, 101.0)])
    assert [p.stream for p in profiles] == ["creek"]
    profile = profiles[0]
    assert profile.section_id == ("s0", "s1", "s2")
    # on the ground, 1/0.9996 of the map's metres at the zone's middle
    assert profile.section_distance * 0.3048 * 0.9996 == pytest.approx([100.0, 250.0, 340.0], abs=0.01)
    assert list(profile.waters) == ["2-year", "10-year"], "from the lowest water to the highest"
    stages = {e.event: e.row["stage"] for e in answers[1].events}
    assert {name: water[1] * 0.3048 for name, water in profile.waters.items()} == pytest.approx(stages)
    np.testing.assert_allclose(profile.slope, 0.005, rtol=0.02)
    assert (profile.slope_low <= profile.slope).all()
    assert (profile.slope <= profile.slope_high).all()
    assert len(profile.fitted) == 3
    # the fitted lines lie on the bed, in feet
    for at, height in profile.fitted:
        truth = (100.0 - 0.005 * (at * 0.3048 - 220.0)) / 0.3048
        assert height == pytest.approx(truth, abs=0.1)
    assert len(profile.taken_out) == 1
    assert profile.taken_out[0][2] * 0.3048 == pytest.approx(3.0, abs=0.1)
    name, at, crest = profile.crossings[0]
    assert (name, at * 0.3048, crest * 0.3048) == ("Mill Road", pytest.approx(280.0), pytest.approx(101.0))
    # both parts of the main stem, and not the side stream
    assert np.nanmax(profile.distance) * 0.3048 == pytest.approx(440.0, abs=0.5)
    assert np.isnan(profile.distance).sum() == 1


def test_it_does_without_slopes_from_the_stream_and_with_failed_sections(worked):
    answers, low_lines, _ = worked
    bare = long_profiles([*answers[:1]], low_lines, SI)
    assert bare[0].fitted == ()
    assert np.isnan(bare[0].slope_low).all()
    assert OneSlope(0.01).of(answers[0].built.line).slope == 0.01
    assert long_profiles([], low_lines, SI) == []


def test_it_can_be_drawn(worked):
    answers, low_lines, slopes = worked
    for profile in long_profiles(answers, low_lines, US, slopes, [("Mill Road", "creek", 280.0, np.nan)]):
        ax = plot_long_profile(profile)
        labels = [text.get_text() for text in ax.get_legend().get_texts()]
        assert {"2-year", "10-year", "low line", "crossing", "fill or pit taken out"} <= set(labels)
        assert "[ft]" in ax.get_xlabel()
        # water is told apart by its line and mark too, not by tone alone
        water = [line for line in ax.get_lines() if line.get_label() in profile.waters]
        assert len({(line.get_linestyle(), line.get_marker()) for line in water}) == len(water)
        ax.figure.canvas.draw()
        matplotlib.pyplot.close(ax.figure)
