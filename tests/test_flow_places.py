"""Rows of the flows that name a place the study does not have are told, never dropped in silence."""

from pathlib import Path

import pytest

from terrain2q.errors import InputError
from terrain2q.flows import Flow, flows_of_nowhere
from terrain2q.process import check_study
from terrain2q.study import load_study

SAMPLE = Path(__file__).parents[1] / "sample_dem"


def messages(tmp_path, rows, **options):
    table = tmp_path / "flows.csv"
    table.write_text("event,discharge,stream,section,crossing\nQ,100,,,\n" + rows, encoding="utf-8")
    study = load_study(SAMPLE / "study.toml", {"flows.path": str(table), **options})
    return [f.message for f in check_study(study) if f.code == "flow-place-unknown"]


def test_check_tells_of_each_kind_of_place(tmp_path):
    found = messages(tmp_path, "Q,200,,M-999,\nQ,200,,M-100,\nQ,300,Tansi,,\nQ,300,Tansy,,\nQ,4,,,C-3\n")
    assert found[0].startswith('1 row is for a section that is not there: "M-999" (the nearest is "M-')
    assert found[1] == '1 row is for a stream that is not there: "Tansi" (the nearest is "Tansy")'
    assert len(found) == 2


def test_a_table_without_strange_places_has_no_finding(tmp_path):
    assert messages(tmp_path, "Q,200,,M-100,\nQ,300,Tansy,,\nQ,400,,,C-3\n") == []


def test_check_tells_which_lines_lack_a_discharge(tmp_path):
    table = tmp_path / "flows.csv"
    table.write_text("event,discharge,section\nQ,1,M-100\nall,2,\n ,, \n", encoding="utf-8")
    study = load_study(SAMPLE / "study.toml", {"flows.path": str(table), "bench.event": "all"})
    found = [f for f in check_study(study) if f.code == "flow-missing"]
    assert {f.message for f in found} == {"Q: no discharge is given for it"}
    assert "M-200" in {f.feature_id for f in found}
    assert "M-100" not in {f.feature_id for f in found}


def test_check_reads_the_observed_stages(tmp_path):
    table = tmp_path / "observed.csv"
    table.write_text("section,stage,discharge\nM-1000,833,5200\n", encoding="utf-8")
    with pytest.raises(InputError) as refused:
        check_study(load_study(SAMPLE / "study.toml", {"observed.path": str(table)}))
    assert refused.value.code == "section-unknown"


@pytest.mark.parametrize("known", [["a"], []])
def test_many_names_are_shortened(known):
    flows = [Flow("Q", 1.0, section=f"s{k}") for k in range(7)] * 2
    (finding,) = flows_of_nowhere(flows, sections=known)
    assert finding.message.startswith("14 rows are for a section that is not there: ")
    assert finding.message.endswith(" and 2 more")
    assert (finding.severity, finding.layer) == ("doubtful", "flows")
    assert flows_of_nowhere(flows) == []
