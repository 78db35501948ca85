"""What run.json and `run --json` hold is what their published schemas say, and a wrong one is told."""

from __future__ import annotations

import contextlib
import copy
import io
import json
from pathlib import Path

import jsonschema
import pytest

from terrain2q.commands import main
from terrain2q.jobs.crossings import NOT_REACHED, OVER, WITHIN

ROOT = Path(__file__).parents[1]


def schema(name: str) -> jsonschema.Draft202012Validator:
    read = json.loads((ROOT / "docs" / f"{name}.schema.json").read_text(encoding="utf-8"))
    jsonschema.Draft202012Validator.check_schema(read)
    return jsonschema.Draft202012Validator(read)


@pytest.fixture(scope="module")
def ran(tmp_path_factory):
    """The sample study's record and what the command prints."""
    folder = tmp_path_factory.mktemp("sample")
    said = io.StringIO()
    with contextlib.redirect_stdout(said), pytest.raises(SystemExit) as stop:
        main(["run", str(ROOT / "sample_dem" / "study.toml"), "--output.folder", str(folder), "--json"])
    assert stop.value.code == 0
    return json.loads((folder / "run.json").read_text(encoding="utf-8")), json.loads(said.getvalue())


def test_run_json_keeps_its_schema(ran):
    schema("run_record").validate(ran[0])


def test_what_is_printed_keeps_its_schema(ran):
    schema("run_summary").validate(ran[1])


def test_a_sheet_is_among_the_files(ran):
    names = {Path(f).name for f in ran[1]["files"]}
    assert {"results.gpkg", "run.json", "report.html", "calculation_sheets.pdf"} <= names


@pytest.mark.parametrize(
    ("which", "change"),
    [
        (0, lambda v: v.pop("caution")),
        (0, lambda v: v.update(more=1)),
        (0, lambda v: v["inputs"][0].update(sha256="x")),
        (0, lambda v: v["findings"]["by_severity"].pop("note")),
        (1, lambda v: v["design_stages"][0].update(status="fine")),
        (1, lambda v: v["design_stages"][0].update(stage="831.2")),
        (1, lambda v: v.update(units="imperial")),
        (1, lambda v: v.pop("rows")),
    ],
)
def test_what_is_wrong_is_told(ran, which, change):
    value = copy.deepcopy(ran[which])
    change(value)
    with pytest.raises(jsonschema.ValidationError):
        schema(("run_record", "run_summary")[which]).validate(value)


def test_verdicts_are_those_of_the_job():
    rows = schema("run_summary").schema["properties"]["crossings"]["items"]["properties"]
    assert set(rows["verdict"]["enum"]) == {OVER, WITHIN, NOT_REACHED, ""}
