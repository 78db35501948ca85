"""Required benches: the job, its layer, its pictures and the command."""

import json
import sqlite3
from contextlib import closing
from pathlib import Path

import numpy as np
import pytest
import shapely
from scipy.optimize import brentq

from terrain2q import Profile, Section, Subarea
from terrain2q.commands import main
from terrain2q.errors import InputError
from terrain2q.flows import Flow
from terrain2q.ground.cover import SubareaSpec
from terrain2q.ground.cut_lines import CutLine
from terrain2q.jobs.design_flows import answer_sections
from terrain2q.jobs.sections import BuiltSection
from terrain2q.jobs.sizing import BenchWish, allowed_stage, size_sections
from terrain2q.output.benches import bench_figure, in_units, required_widths_layer, widths_text, write_benches
from terrain2q.units import FOOT, SI, US

SAMPLE = Path(__file__).parents[1] / "sample_dem"
CRS = "EPSG:26915"
# a channel 10 m wide and 3 m deep between upright banks, in level ground of 200 m up to walls
X = np.array([0.0, 0, 95, 95, 105, 105, 200, 200])
Z = np.array([9.0, 3, 3, 0, 0, 3, 3, 9])
SLOPE = 0.002


def built(name="A", x=X, z=Z, slope=SLOPE, zones=True):
    limits = [(0, 95, "left floodplain"), (95, 105, "channel"), (105, 200, "right floodplain")]
    parts = [Subarea(a, b, 0.03 if "c" in zone else 0.06, zone=zone) for a, b, zone in limits]
    if not zones:
        parts = [Subarea(0, 200, 0.03)]
    profile = Profile(x, z, x + 500000.0, np.full(x.size, 4600000.0), np.ones(x.size, dtype=bool))
    line = CutLine(name, profile.x, profile.y, "", np.nan, np.nan, False, True, {})
    specs = tuple(SubareaSpec(s.start, s.end, s.n, np.nan, np.nan, "", "", s.zone) for s in parts)
    return BuiltSection(line, profile, Section(x, z, parts, section_id=name), specs, slope, "value")


FLOWS = (Flow("low", 5.0), Flow("high", 120.0))


def sized(wish, flows=FLOWS, units=SI, **more):
    answers = answer_sections([built(**more)], flows, 5, None, units)
    return size_sections(answers, wish, units)[0]


@pytest.mark.parametrize(("sides", "count"), [("both", 2), ("left", 1), ("right", 1)])
def test_width_solves_the_closed_equation_of_a_two_stage_channel(sides, count):
    one = sized(BenchWish(1.0, 0.05, sides, 0.0, None, 2.5))
    event = one.events[1]

    def passes(width):
        # channel: bed and the two faces up to the bench; bench: floor and outer face; where none is cut the
        # channel's face goes up to the water
        faces = 1.0 * count + 2.5 * (2 - count)
        channel = 25.0 ** (5 / 3) / (10 + faces) ** (2 / 3) / 0.03
        bench = (1.5 * width) ** (5 / 3) / (width + 1.5) ** (2 / 3) / 0.05
        return np.sqrt(SLOPE) * (channel + count * bench)

    expected = brentq(lambda w: passes(w) - 120.0, 0.0, 90.0, xtol=1e-13)
    assert event.bench.width == pytest.approx(expected, rel=1e-9)
    assert event.status == "ok"
    assert event.discharge_before == pytest.approx(
        np.sqrt(SLOPE) * 25.0 ** (5 / 3) / 15 ** (2 / 3) / 0.03, rel=1e-12
    )
    assert one.events[0].bench.width == 0.0


def test_top_of_bank_is_the_allowed_stage_where_none_is_given():
    one = sized(BenchWish(1.0, 0.05))
    assert one.events[1].stage == 3.0
    assert one.base == 1.0
    tilted = Section([0, 10, 20, 30, 40], [5, 2, 0, 2.5, 6], [
        Subarea(0, 10, 0.05, zone="left floodplain"), Subarea(10, 30, 0.03, zone="channel"),
        Subarea(30, 40, 0.05, zone="right floodplain"),
    ])  # fmt: skip
    assert allowed_stage(tilted, BenchWish(1.0, 0.05)) == 2.0
    assert allowed_stage(tilted, BenchWish(1.0, 0.05, stage=1.5)) == 1.5


def test_bench_that_cannot_be_is_a_finding_that_says_why():
    one = sized(BenchWish(3.5, 0.05))
    assert [e.status for e in one.events] == ["failed", "failed"]
    assert [f.code for f in one.findings] == ["bench-not-possible"]
    assert "3.5 m above the lowest ground" in one.findings[0].message
    one = sized(BenchWish(1.0, 0.05), zones=False)
    assert "no top of bank" in one.findings[0].message


def test_where_no_width_suffices_the_most_that_can_pass_is_told():
    one = sized(BenchWish(2.0, 0.05, "both", 0.0, None, 2.5), flows=[Flow("high", 500.0)])
    event = one.events[0]
    assert (event.status, event.bench) == ("failed", None)
    assert [f.code for f in one.findings] == ["width-not-enough"]
    # nothing wider than the section: the whole of it as a bench
    section = one.answer.built.section
    with_floor = section.required_bench(event.most * (1 - 1e-9), 2.5, SLOPE, 2.0, 0.05)
    assert with_floor.width == pytest.approx(95.0, rel=1e-3)
    assert f"the most is {event.most:.4g} m³/s" in one.findings[0].message


def test_one_event_alone_and_one_that_is_not_there():
    one = sized(BenchWish(1.0, 0.05, event="high", stage=2.5))
    assert [e.event for e in one.events] == ["high"]
    with pytest.raises(InputError) as caught:
        sized(BenchWish(1.0, 0.05, event="hgih"))
    assert caught.value.code == "value-not-allowed"
    assert "'low', 'high'" in caught.value.fix


def test_stage_above_the_ends_is_doubtful():
    x, z = X[1:-1], Z[1:-1]
    one = sized(BenchWish(1.0, 0.05, stage=3.5), x=x, z=z)
    assert one.events[1].status == "doubtful"
    assert [f.code for f in one.findings] == ["above-section-ends"]


def test_section_that_failed_keeps_its_rows():
    wish = BenchWish(1.0, 0.05, stage=2.5)
    bad = BuiltSection(CutLine("B", np.zeros(0), np.zeros(0), "", np.nan, np.nan, False, False, {}))
    answers = answer_sections([bad, built()], [Flow("high", 120.0)], 5, None, SI)
    both = size_sections(answers, wish, SI)
    layer = required_widths_layer(both, US, CRS, CRS)
    assert list(layer["section_id"]) == ["B", "B", "A", "A"]
    assert list(layer["status"]) == ["failed", "failed", "ok", "ok"]
    assert layer["width"].isna().tolist() == [True, True, False, False]
    assert layer.geometry.isna().tolist() == [True, True, False, False]
    assert "B" in widths_text(layer, US)


def test_layer_has_the_bench_in_plan_in_the_studys_units():
    one = sized(BenchWish(1.0, 0.05, "both", 2.0, None, 2.5))
    layer = required_widths_layer([one], US, CRS, CRS)
    high = layer[layer["event"] == "high"].set_index("side")
    bench = one.events[1].bench
    assert high.loc["left", "width"] == pytest.approx(bench.width / FOOT)
    assert high.loc["left", "discharge"] == pytest.approx(120.0 / FOOT**3)
    assert high.loc["left", "stage"] == pytest.approx(2.5 / FOOT)
    # the floor and the slope of 2 to 1 up to the ground 2 m above it
    for side, bank in (("left", 95.0), ("right", 105.0)):
        x = shapely.get_coordinates(high.loc[side, "geometry"])[:, 0] - 500000.0
        assert np.ptp(x) == pytest.approx(bench.width + 4.0)
        assert np.abs(x - bank).min() == pytest.approx(0.0, abs=1e-6)
    low = layer[layer["event"] == "low"]
    assert (low["width"] == 0).all()
    assert low.geometry.isna().all()


@pytest.mark.parametrize("units", [SI, US])
def test_section_in_other_units_is_the_same_section(units):
    section = built().section
    other = in_units(section, units)
    k = units.per_si("length")
    assert other.units == units.name
    assert other.discharge(4.0 * k, SLOPE) == pytest.approx(section.discharge(4.0, SLOPE) * k**3, rel=1e-12)


@pytest.mark.parametrize("units", [SI, US])
def test_page_shows_before_and_after_and_the_curve(units, tmp_path):
    one = sized(BenchWish(1.0, 0.05, "both", 2.0, None, 2.5), units=units)
    figure = bench_figure(one, units)
    above, curve, _ = figure.axes
    assert above.get_title(loc="left") == "A: before and after, high"
    named = [t.get_text() for t in above.get_legend().get_texts()]
    assert "ground before" in named
    assert "ground cut away" in named
    k, flow = units.per_si("length"), units.per_si("flow")
    marks = {line.get_ydata()[0]: line.get_xdata()[0] for line in curve.lines if line.get_marker() in "osD^v"}
    assert marks[120.0 * flow] == pytest.approx(one.events[1].bench.width * k)
    width, discharge = curve.lines[0].get_data()
    assert np.interp(marks[120.0 * flow], width, discharge) == pytest.approx(120.0 * flow, rel=1e-3)
    assert units.symbol("length") in curve.get_xlabel()
    cut = next(p for p in above.patches if p.get_hatch() == "|||")
    x, z = cut.get_xy().T
    area = 0.5 * abs(np.dot(x, np.roll(z, 1)) - np.dot(z, np.roll(x, 1)))
    assert 2 * area == pytest.approx(one.events[1].bench.excavation * k**2, rel=1e-9)
    (path,) = write_benches(tmp_path / "benches.pdf", [one, one], units)
    assert path.read_bytes()[:5] == b"%PDF-"
    assert write_benches(tmp_path / "none.pdf", [], units) == []


def test_pages_where_nothing_is_cut_and_where_nothing_suffices():
    one = sized(BenchWish(1.0, 0.05, stage=2.5), flows=[Flow("low", 5.0)])
    assert "passes every flow as it is" in bench_figure(one, SI).axes[0].get_title(loc="left")
    one = sized(BenchWish(1.0, 0.05, stage=2.5), flows=[Flow("high", 5000.0)])
    figure = bench_figure(one, SI)
    assert "no bench within the section" in figure.axes[0].get_title(loc="left")
    assert "the most is" in figure.axes[2].texts[0].get_text()


# --- the command ----------------------------------------------------------------------------------


def size(arguments, capsys):
    with pytest.raises(SystemExit) as stopped:
        main(["size", *map(str, arguments)])
    return stopped.value.code, capsys.readouterr()


def test_size_gives_widths_for_every_section_and_event_of_the_sample(tmp_path, capsys):
    # the pages that a run writes too are tested where they are made
    options = ["--output.folder", tmp_path, "--output.report", "false", "--output.sheets", "none"]
    code, out = size([SAMPLE / "study.toml", "--json", *options], capsys)
    told = json.loads(out.out)
    rows = told["required_widths"]
    assert code == 0
    events = {r["event"] for r in rows}
    assert len(events) == 3
    assert len(rows) == told["sections"] * len(events) * 2
    assert all(r["width"] is not None and r["width"] >= 0 for r in rows)
    assert sum(r["width"] > 0 for r in rows) > 20
    assert (tmp_path / "benches.pdf").read_bytes()[:5] == b"%PDF-"
    with closing(sqlite3.connect(tmp_path / "results.gpkg")) as database:
        names = "SELECT geometry_type_name FROM gpkg_geometry_columns WHERE table_name = 'required_widths'"
        assert database.execute(names).fetchall() == [("LINESTRING",)]


def test_run_finds_the_benches_that_a_study_asks_for(tmp_path, capsys):
    options = ["--output.folder", tmp_path, "--output.report", "false", "--output.sheets", "none"]
    options += ["--bench.event", "10-year", "--strict"]
    with pytest.raises(SystemExit) as stopped:
        main(["run", str(SAMPLE / "study.toml"), "--json", *map(str, options)])
    told = json.loads(capsys.readouterr().out)
    assert stopped.value.code == 0
    assert told["rows"]["required_widths"] == 2 * told["sections"]
    assert (tmp_path / "benches.pdf").exists()
    # a flow that no bench passes is a feature without an answer
    options += ["--flows.events", "10-year=3000000", "--output.overwrite", "true"]
    with pytest.raises(SystemExit) as stopped:
        main(["run", str(SAMPLE / "study.toml"), "--json", *map(str, options)])
    assert stopped.value.code == 3


@pytest.mark.parametrize("command", ["check", "run", "size"])
def test_a_bench_for_an_event_that_no_flow_has_is_refused(tmp_path, capsys, command):
    with pytest.raises(SystemExit) as stopped:
        main(
            [
                command,
                str(SAMPLE / "study.toml"),
                "--bench.event",
                "5-year",
                "--output.folder",
                str(tmp_path / "o"),
            ]
        )
    assert stopped.value.code == 2
    assert "no flow has the event '5-year'" in capsys.readouterr().err
    assert not (tmp_path / "o").exists()


def test_size_needs_a_bench_and_flows(tmp_path, capsys):
    text = (SAMPLE / "study.toml").read_text(encoding="utf-8")
    for name in ("valley.tif", "valley.gpkg", "roughness.csv", "flows.csv"):
        text = text.replace(f'"{name}', f'"{(SAMPLE / name).as_posix()}')
    study = tmp_path / "study.toml"
    start, end = text.index("[bench]"), text.find("\n[", text.index("[bench]"))
    study.write_text(text[:start] + text[end + 1 :], encoding="utf-8")
    code, out = size([study], capsys)
    assert code == 2
    assert "[bench] has no" in out.err
    assert not (tmp_path / "output").exists()
