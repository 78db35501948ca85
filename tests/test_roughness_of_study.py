"""Composite n, n by depth and n from parts go from the study to the answers; so do the remarks on them."""

from pathlib import Path

import numpy as np
import pytest

from terrain2q import process
from terrain2q.hydraulics.section import DepthRoughness
from terrain2q.jobs.sections import build_sections
from terrain2q.study import load_study
from terrain2q.units import FOOT

SAMPLE = Path(__file__).parents[1] / "sample_dem"
QUIET = {"output.report": "false", "output.sheets": "none"}


@pytest.fixture(scope="module")
def table(tmp_path_factory):
    """The sample's table with brush that lies down in deep water and forest from its parts."""
    path = tmp_path_factory.mktemp("table") / "roughness.csv"
    head = "class,n,n_shallow,depth_shallow,n_deep,depth_deep,base,vegetation,n_low,n_high,source\n"
    path.write_text(
        head + "open water,0.03,,,,,,,,,\npasture,0.035,,,,,,,0.03,0.05,\nrow crops,0.035,,,,,,,,,\n"
        "brush,,0.1,1,0.05,4,,,,,a survey\nforest,,,,,,0.03,0.07,,,a walk\nfarmstead,0.05,,,,,,,,,\n"
        "road,0.016,,,,,,,,,\n",
        encoding="utf-8",
    )
    return path


def sections(options):
    study = load_study(SAMPLE / "study.toml", options)
    inputs = process._read_inputs(study)
    return {b.section_id: b for b in build_sections(inputs.lines, inputs.sections)}


def test_falling_n_and_n_from_parts_reach_the_sections(table):
    built = sections({"land_cover.table": str(table)})
    falling, of_parts = [], []
    for one in built.values():
        for spec, subarea in zip(one.specs, one.section.subareas, strict=True):
            if spec.falling is not None:
                falling.append((spec, subarea))
            elif "n from parts" in spec.n_source:
                of_parts.append(subarea)
    assert len(falling) > 3
    assert len(of_parts) > 3
    for spec, subarea in falling:
        n = subarea.n
        assert isinstance(n, DepthRoughness)
        assert (n.shallow, n.deep) == (0.1, 0.05)
        assert (n.shallow_depth, n.deep_depth) == pytest.approx((1 * FOOT, 4 * FOOT))
        assert spec.n == 0.05
        assert "0.1 to a depth of 1 ft, 0.05 from 4 ft on" in spec.n_source
    assert [s.n for s in of_parts] == pytest.approx([0.1] * len(of_parts))


@pytest.mark.parametrize("rule", ["horton", "lotter", "pavlovskii"])
def test_composite_takes_the_place_of_the_channels_own_n(rule, table):
    built = sections({"channel.composite": rule, "land_cover.table": str(table)})
    divided = sections({"channel.composite": "divide", "land_cover.table": str(table)})
    several = 0
    for name, one in built.items():
        other = divided[name].section
        assert one.section.composite == rule
        assert [s.n for s in one.section.subareas] == [s.n for s in other.subareas]
        levels = one.section.lowest_ground + np.linspace(0.5, 3.0, 6)
        mine, apart = one.section.conveyance(levels), other.conveyance(levels)
        if rule == "lotter":
            assert mine == pytest.approx(apart, rel=1e-12)
        several += bool((np.abs(mine / apart - 1.0) > 1e-3).any())
    assert (several > 3) == (rule != "lotter")


def test_whole_run_with_all_of_them(table, tmp_path):
    options = {"channel.composite": "horton", "land_cover.table": str(table), "output.folder": str(tmp_path)}
    results = process.run(SAMPLE / "study.toml", options)
    assert results.failed_sections == 0
    for (_, _), parts in results.subarea_flows.groupby(["section_id", "event"]):
        assert parts["share"].sum() == pytest.approx(1.0)
    sources = results.subareas["n_source"]
    assert sources.str.contains("from 4 ft on").any()
    assert (tmp_path / "report.html").exists()
    assert (tmp_path / "calculation_sheets.pdf").exists()


def test_section_that_is_not_divided_is_remarked_on(tmp_path):
    options = {"channel.banks": "none", "output.folder": str(tmp_path), **QUIET}
    results = process.run(SAMPLE / "study.toml", options)
    told = [f for f in results.findings_list if f.code == "shelf-undivided"]
    assert len(told) >= 3
    assert all("divided there the section would carry" in f.message for f in told)
    stages = results.design_stages.set_index("section_id")
    assert all("doubtful" in set(stages.loc[f.feature_id, "status"]) for f in told)


def test_n_outside_the_range_of_its_class_is_told(tmp_path):
    text = (SAMPLE / "roughness.csv").read_text(encoding="utf-8")
    table = tmp_path / "roughness.csv"
    table.write_text(text.replace("pasture,0.035,", "pasture,0.06,"), encoding="utf-8")
    options = {"land_cover.table": str(table), "output.folder": str(tmp_path / "out"), **QUIET}
    results = process.run(SAMPLE / "study.toml", options | {"channel.n": "0.2"})
    told = [f.message for f in results.findings_list if f.code == "n-outside-range"]
    assert any("n 0.06 of pasture lies outside 0.03 to 0.05" in m for m in told)
    assert any("n 0.2 of natural and excavated channels" in m for m in told)
