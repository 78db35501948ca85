"""Roughness that reproduces observed stages: the job, the readers and the command."""

import csv
import json
from pathlib import Path

import geopandas
import numpy as np
import pytest
from scipy.optimize import minimize_scalar
from shapely import Point

from terrain2q import Profile, Section, Subarea
from terrain2q.commands import main
from terrain2q.errors import InputError, InputErrors
from terrain2q.ground.cover import SubareaSpec
from terrain2q.ground.cut_lines import CutLine
from terrain2q.ground.observed import Observation, read_observations
from terrain2q.hydraulics.section import DepthRoughness
from terrain2q.jobs.fitting import Best, fit_observations, fit_one, one_channel
from terrain2q.jobs.sections import BuiltSection
from terrain2q.units import FOOT, SI, US

SAMPLE = Path(__file__).parents[1] / "sample_dem"
X = np.array([0.0, 20, 40, 50, 55, 60, 65, 75, 100, 120])
Z = np.array([6.0, 3.2, 3, 3, 0.5, 0, 0.4, 3, 3.3, 6])
SLOPE = 0.002
NAN = float("nan")


def built(left=0.06, channel=(0.035,), right=0.09, composite="divide", ranges=(NAN, NAN), slope=SLOPE):
    edges = np.linspace(50, 75, len(channel) + 1)
    parts = [Subarea(0, 50, left, "pasture", "left floodplain")]
    parts += [
        Subarea(a, b, n, "bed", "channel") for a, b, n in zip(edges[:-1], edges[1:], channel, strict=True)
    ]
    parts += [Subarea(75, 120, right, "wood", "right floodplain")]
    specs = tuple(
        SubareaSpec(
            s.start, s.end, s.n if isinstance(s.n, float) else s.n.deep, *ranges, "a book", s.label, s.zone
        )
        for s in parts
    )
    section = Section(X, Z, parts, section_id="A", composite=composite)
    profile = Profile(X, Z, X + 500000.0, np.full(X.size, 4600000.0), np.ones(X.size, dtype=bool))
    line = CutLine("A", profile.x, profile.y, "", NAN, NAN, False, True, {})
    return BuiltSection(line, profile, section, specs, slope, "value")


def test_what_was_put_in_comes_out():
    """A flood with all n raised, and one with another n in the channel, each computed forward."""
    study = built()
    truth = built(0.06 * 1.3, (0.035 * 1.3,), 0.09 * 1.3).section
    for stage in (2.0, 3.6, 5.0):
        discharge = float(truth.discharge(stage, SLOPE))
        one, findings = fit_one(Observation("A", stage, discharge), study, SI)
        assert one.factor == pytest.approx(1.3, rel=1e-9)
        assert (one.status, findings) == ("ok", [])
        assert one.channel_n_used == pytest.approx(0.035, rel=1e-12)
        assert truth.normal_stage(discharge, SLOPE) == pytest.approx(stage, abs=1e-9)
        assert one.stage == pytest.approx(study.section.normal_stage(discharge, SLOPE))
    rougher = built(channel=(0.05,)).section
    discharge = float(rougher.discharge(4.0, SLOPE))
    one, _ = fit_one(Observation("A", 4.0, discharge), study, SI)
    assert one.channel_n == pytest.approx(0.05, rel=1e-9)


@pytest.mark.parametrize("composite", ["divide", "horton", "lotter", "pavlovskii"])
def test_channel_of_several_n_is_fitted_as_one(composite):
    study = built(channel=(0.05, 0.03, 0.05), composite=composite)
    merged, index = one_channel(study.section)
    assert [s.zone for s in merged.subareas] == ["left floodplain", "channel", "right floodplain"]
    assert merged.subareas[index].start == 50
    discharge = float(built(channel=(0.045,)).section.discharge(4.0, SLOPE))
    one, _ = fit_one(Observation("A", 4.0, discharge), study, SI)
    assert one.channel_n == pytest.approx(0.045, rel=1e-9)
    assert 0.03 < one.channel_n_used < 0.05
    # that one n carries what the several carry
    same = built(channel=(one.channel_n_used,)).section
    assert same.discharge(4.0, SLOPE) == pytest.approx(study.section.discharge(4.0, SLOPE), rel=1e-9)


def test_falling_n_is_scaled_as_a_whole():
    falling = DepthRoughness(0.2, 0.5, 0.08, 2.0)
    study = built(left=falling)
    truth = built(left=DepthRoughness(0.3, 0.5, 0.12, 2.0), channel=(0.0525,), right=0.135).section
    one, _ = fit_one(Observation("A", 4.5, float(truth.discharge(4.5, SLOPE))), study, SI)
    assert one.factor == pytest.approx(1.5, rel=1e-9)


def test_best_factor_is_that_of_least_squares_on_log_discharge():
    study = built()
    observations = [Observation("A", h, q) for h, q in ((2.0, 20.0), (3.0, 70.0), (4.0, 95.0), (5.0, 300.0))]
    fit = fit_observations(observations, {"A": study}, SI)
    computed = np.array([study.section.discharge(o.stage, SLOPE) for o in observations])
    observed = np.array([o.discharge for o in observations])

    def squares(log_factor):
        return float((np.log(observed * np.exp(log_factor) / computed) ** 2).sum())

    found = minimize_scalar(squares, bracket=(-1, 1), tol=1e-14)
    assert fit.factor.value == pytest.approx(np.exp(found.x), rel=1e-7)
    assert fit.factor.spread == pytest.approx(np.exp(np.sqrt(squares(found.x) / 3)), rel=1e-7)
    assert fit.factor.least <= fit.factor.median <= fit.factor.greatest
    assert fit.answered == 4


def test_best_of_few():
    assert Best.of([]) is None
    assert Best.of([NAN]) is None
    one = Best.of([1.2, NAN])
    assert (one.value, one.count) == (pytest.approx(1.2), 1)
    assert np.isnan(one.spread)


def test_floodplain_that_alone_carries_more_is_told_with_the_nearest_discharge():
    study = built()
    section = study.section
    one, findings = fit_one(Observation("A", 5.0, 10.0, "line 3"), study, SI)
    assert np.isnan(one.channel_n)
    assert one.factor > 1
    assert one.status == "doubtful"
    told = next(f for f in findings if f.code == "observation-no-answer")
    parts = section.flow_state(float(section.discharge(5.0, SLOPE)), SLOPE).parts
    others = float(np.delete(parts.conveyance[0], 1).sum()) * np.sqrt(SLOPE)
    assert f"{others:,.4g} m³/s" in told.message
    assert told.message.startswith("line 3: ")


def test_stage_below_the_ground_and_section_without_answer():
    one, findings = fit_one(Observation("A", -1.0, 10.0), built(), US)
    assert one.status == "failed"
    assert "3.3 ft below the lowest ground" in findings[0].message
    assert np.isfinite([findings[0].x, findings[0].y]).all()
    bad = BuiltSection(CutLine("A", np.zeros(0), np.zeros(0), "", NAN, NAN, False, False, {}))
    one, findings = fit_one(Observation("A", 1.0, 10.0), bad, US)
    assert (one.status, findings[0].code) == ("failed", "observation-no-answer")
    fit = fit_observations([Observation("A", 1.0, 10.0)], {"A": bad}, SI)
    assert (fit.answered, fit.factor, fit.channel_n) == (0, None, None)


def test_fitted_n_outside_the_published_range_is_told():
    study = built(ranges=(0.03, 0.1))
    discharge = float(study.section.discharge(4.0, SLOPE))
    one, findings = fit_one(Observation("A", 4.0, discharge / 1.2), study, SI)
    assert one.status == "doubtful"
    assert [f.code for f in findings] == ["n-outside-range"]
    assert "n of wood is 0.108, outside 0.03 to 0.1" in findings[0].message
    one, findings = fit_one(Observation("A", 4.0, discharge), study, SI)
    assert (one.status, findings) == ("ok", [])


# --- reading --------------------------------------------------------------------------------------


@pytest.mark.parametrize(("units", "metre"), [(SI, 1.0), (US, FOOT)])
def test_csv_is_read_in_the_studys_units(tmp_path, units, metre):
    path = tmp_path / "marks.csv"
    path.write_text("Section,Stage,Discharge,note\nA,12.5,100,on a tree\n7,-3,1e3,\n")
    found, findings = read_observations(str(path), units, ["A", "7"])
    assert [(o.section_id, o.place) for o in found] == [("A", "line 2"), ("7", "line 3")]
    assert [o.stage for o in found] == pytest.approx([12.5 * metre, -3 * metre])
    assert [o.discharge for o in found] == pytest.approx([100 * metre**3, 1000 * metre**3])
    assert findings == []


def test_every_wrong_row_is_told_with_its_line(tmp_path):
    path = tmp_path / "marks.csv"
    path.write_text(
        "section,stage,discharge\nR-14,1,1\nR-014,high,1\nR-014,1,0\nR-014,1,-2\n,1,inf\nR-014,nan,1\n"
    )
    with pytest.raises(InputErrors) as caught:
        read_observations(str(path), SI, ["R-014", "Q-1"])
    told = [(p.code, p.where.rpartition(", ")[2]) for p in caught.value.problems]
    assert told == [
        ("section-unknown", "line 2"), ("number-not-finite", "line 3"), ("number-not-positive", "line 4"),
        ("number-not-positive", "line 5"), ("value-not-allowed", "line 6"), ("number-not-positive", "line 6"),
        ("number-not-finite", "line 7"),
    ]  # fmt: skip
    assert caught.value.problems[0].fix == "the nearest id is 'R-014'"
    path.write_text("section,stage\nR-014,1\n")
    with pytest.raises(InputError) as caught:
        read_observations(str(path), SI, ["R-014"])
    assert caught.value.code == "field-missing"


def test_points_are_read_with_their_places(tmp_path):
    path = tmp_path / "marks.gpkg"
    table = {"section": ["A", "B"], "stage": [12.5, 13.0], "discharge": [100.0, 110.0]}
    points = [Point(500100.0, 4600010.0), Point(500200.0, 4600020.0)]
    geopandas.GeoDataFrame(table, geometry=points, crs="EPSG:26915").to_file(path, layer="marks")
    found, _ = read_observations(f"{path}|layer=marks", US, ["A", "B"], "EPSG:26915")
    assert [(o.x, o.y) for o in found] == [(500100.0, 4600010.0), (500200.0, 4600020.0)]
    assert found[1].stage == pytest.approx(13.0 * FOOT)
    geopandas.GeoDataFrame({"section": ["A"]}, geometry=points[:1], crs="EPSG:26915").to_file(
        path, layer="less"
    )
    with pytest.raises(InputError) as caught:
        read_observations(f"{path}|layer=less", US, ["A"])
    assert caught.value.code == "field-missing"


# --- the command ----------------------------------------------------------------------------------


def fit(arguments, capsys):
    with pytest.raises(SystemExit) as stopped:
        main(["fit", *map(str, arguments)])
    return stopped.value.code, capsys.readouterr()


def read(path):
    return list(csv.DictReader(path.read_text(encoding="utf-8").splitlines()))


def test_fit_of_the_sample_and_its_table(tmp_path, capsys):
    study = [SAMPLE / "study.toml", "--output.folder", tmp_path, "--output.overwrite", "false"]
    code, out = fit([*study, "--json"], capsys)
    told = json.loads(out.out)
    assert code == 0
    marks = read(SAMPLE / "observed.csv")
    assert told["observations"] == told["answered"] == len(marks)
    assert 1.0 < told["factor"]["value"] < 1.3
    rows = read(tmp_path / "fitted_roughness.csv")
    assert [r["section"] for r in rows] == [m["section"] for m in marks]
    for row, mark in zip(rows, marks, strict=True):
        assert float(row["discharge"]) == pytest.approx(float(mark["discharge"]))
        # a rating goes with 1/n: the factor is the ratio of the two discharges
        ratio = float(row["discharge_computed"]) / float(row["discharge"])
        assert float(row["factor"]) == pytest.approx(ratio, rel=1e-8)
    code, out = fit(study, capsys)
    assert code == 2
    assert "output-exists" in out.err


def test_fit_in_words(tmp_path, capsys):
    marks = tmp_path / "marks.csv"
    marks.write_text("section,stage,discharge\nM-100,833.3,5200\nM-100,810,5200\n")
    study = [SAMPLE / "study.toml", "--output.folder", tmp_path / "out", "--observed.path", marks]
    code, out = fit(study, capsys)
    assert code == 0
    assert "Factor on every n: 1.1" in out.out
    assert "below the lowest ground of the channel  [observation-no-answer]" in out.out
    code, _ = fit([*study, "--strict"], capsys)
    assert code == 3
    marks.write_text("section,stage,discharge\nM-101,833.3,5200\n")
    code, out = fit(study, capsys)
    assert code == 2
    assert "there is no section 'M-101'" in out.err
    assert "line 2" in out.err
