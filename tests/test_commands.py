from __future__ import annotations

import json
import os
import re
import signal
import subprocess
import sys
import types
from pathlib import Path

import pytest

import terrain2q
from terrain2q import __version__
from terrain2q.columns import CAUTION
from terrain2q.commands import commands_page, main
from terrain2q.errors import Finding, InputError, NoAnswerError, OutputError
from terrain2q.study import TABLES, keys_of

# A process of its own finds the package wherever the tests do.
ENVIRONMENT = os.environ | {"PYTHONPATH": str(Path(terrain2q.__file__).parents[1])}

STUDY = """
[study]
units = "si"
[terrain]
dem = "dem.tif"
[cut_lines]
path = "lines.gpkg"
[land_cover]
default_n = 0.05
[slope]
value = 0.002
"""


@pytest.fixture
def folder(tmp_path, monkeypatch):
    for name in ("dem.tif", "lines.gpkg"):
        (tmp_path / name).write_text("", encoding="utf-8")
    (tmp_path / "study.toml").write_text(STUDY, encoding="utf-8")
    monkeypatch.chdir(tmp_path)
    return tmp_path


class Outcome(types.SimpleNamespace):
    """Exit code, stdout and stderr."""


@pytest.fixture
def call(capsys):
    def call(*args):
        with pytest.raises(SystemExit) as left:
            main([str(a) for a in args])
        out, err = capsys.readouterr()
        return Outcome(code=left.value.code, out=out, err=err)

    return call


class Results(types.SimpleNamespace):
    """What a run hands back, as far as the commands look at it."""

    answered_crossings = failed_crossings = failed_widths = 0

    def summary(self):
        return {"sections": self.answered_sections, "seconds": float("nan")}

    def summary_text(self):
        return f"{self.answered_sections} sections"


@pytest.fixture
def jobs(monkeypatch):
    """Stand in for the jobs: `jobs.studies` are those asked for."""
    stand_in = types.ModuleType("terrain2q.process")
    stand_in.studies, stand_in.findings, stand_in.trouble = [], [], None
    stand_in.results = Results(answered_sections=3, failed_sections=0)

    def run_study(study, *, progress=None):
        stand_in.studies.append(study)
        if stand_in.trouble is not None:
            raise stand_in.trouble
        for done in range(3):
            progress(done, 2, "sections")
        progress(1, 1, "writing")
        return stand_in.results

    def check_study(study, *, progress=None):
        stand_in.studies.append(study)
        if stand_in.trouble is not None:
            raise stand_in.trouble
        return stand_in.findings

    stand_in.run_study, stand_in.check_study = run_study, check_study
    monkeypatch.setitem(sys.modules, "terrain2q.process", stand_in)
    return stand_in


# --- help -------------------------------------------------------------------------------------------


def test_help_says_what_where_and_the_caution(call):
    result = call("--help")
    assert (result.code, result.err) == (0, "")
    assert CAUTION in re.sub(r"\s+", " ", result.out)
    assert result.out.index("start") < result.out.index("check") < result.out.index("run")


@pytest.mark.parametrize("command", ["start", "check", "layout", "run", "size", "fit", "tables", "report"])
def test_every_command_has_help_with_an_example(call, command):
    result = call(command, "--help")
    assert result.code == 0
    assert re.search(rf"Examples?:\n +terrain2q {command} ", result.out)
    assert CAUTION in re.sub(r"\s+", " ", result.out)


@pytest.mark.parametrize("command", ["check", "run"])
def test_every_key_is_an_option_under_its_table(call, command):
    out = call(command, "--help").out
    for table, cls in TABLES.items():
        section = out.split(f"\n[{table}]:\n")[1].split("\n\n")[0]
        for name, about in keys_of(cls).items():
            assert f"--{table}.{name} " in section
            assert about.help.split()[-1] in section


def test_the_page_of_commands_is_the_help():
    # Lines are compared without their spaces: releases of click differ in columns.
    page = (Path(__file__).parents[1] / "docs" / "commands.md").read_text(encoding="utf-8")
    assert page.split() == commands_page().split()


def test_version(call):
    result = call("--version")
    assert (result.code, result.out) == (0, f"terrain2q, version {__version__}\n")


def test_only_what_is_built_is_offered():
    assert list(main.commands) == ["start", "check", "layout", "run", "size", "fit", "tables", "report"]


def test_help_imports_nothing_heavy():
    code = (
        "import sys\nfrom terrain2q.commands import main\n"
        "try:\n    main(['run', '--help'])\nexcept SystemExit:\n    pass\n"
        "heavy = {'numpy', 'scipy', 'rasterio', 'shapely', 'geopandas', 'pandas', 'pyproj', 'matplotlib'}\n"
        "sys.exit(' '.join(heavy & set(sys.modules)) or 0)\n"
    )
    done = subprocess.run(
        [sys.executable, "-c", code], capture_output=True, text=True, check=False, env=ENVIRONMENT
    )
    assert (done.returncode, done.stderr) == (0, "")


# --- run --------------------------------------------------------------------------------------------


def test_run_prints_the_summary_and_nothing_else_on_stdout(call, jobs, folder):
    result = call("run", "study.toml")
    assert (result.code, result.out) == (0, "3 sections\n")
    assert result.err == "sections\nwriting\n"
    assert jobs.studies[0].slope.value == 0.002


def test_json_is_the_only_thing_on_stdout(call, jobs, folder):
    result = call("run", "study.toml", "--json")
    assert result.code == 0
    # Numbers that are not finite are no JSON.
    assert json.loads(result.out, parse_constant=pytest.fail) == {"sections": 3, "seconds": None}


def test_options_go_before_the_file(call, jobs, folder):
    (folder / "a.tif").write_text("", encoding="utf-8")
    result = call(
        "run", "--slope.value", "0.01", "study.toml", "--terrain.dem", "a.tif", "--terrain.dem=dem.tif",
        "--flows.events", "10-year=3", "--flows.events", "100-year=9", "--output.folder", "out",
    )  # fmt: skip
    assert result.code == 0
    (study,) = jobs.studies
    assert study.slope.value == 0.01
    assert study.terrain.dem == (str(folder / "a.tif"), str(folder / "dem.tif"))
    assert study.flows.events == {"10-year": 3.0, "100-year": 9.0}
    assert study.output.folder == folder / "out"


@pytest.mark.parametrize(
    ("args", "overwrite"),
    [
        (["study.toml"], False),
        (["--output.overwrite", "study.toml"], True),
        (["study.toml", "--output.overwrite"], True),
        (["--output.overwrite", "true", "study.toml"], True),
        (["--output.overwrite", "false", "study.toml"], False),
        (["--output.overwrite=true", "study.toml"], True),
        (["--output.overwrite", "--slope.value", "1", "study.toml"], True),
    ],
)
def test_a_flag_alone_means_true(call, jobs, folder, args, overwrite):
    assert call("run", *args).code == 0
    assert jobs.studies[0].output.overwrite is overwrite


def test_options_alone_are_a_study(call, jobs, folder):
    result = call(
        "run", "--study.units", "us", "--terrain.dem", "dem.tif", "--cut_lines.path", "lines.gpkg",
        "--land_cover.default_n", "0.05", "--slope.value", "0.002",
    )  # fmt: skip
    assert result.code == 0
    assert (jobs.studies[0].path, jobs.studies[0].folder) == (None, folder)


@pytest.mark.parametrize(
    ("answered", "failed", "strict", "code"),
    [
        (3, 0, False, 0),
        (3, 1, False, 0),
        (3, 0, True, 0),
        (3, 1, True, 3),
        (0, 2, False, 3),
        (0, 0, False, 3),
    ],
)
def test_exit_codes_of_a_run(call, jobs, folder, answered, failed, strict, code):
    jobs.results = Results(answered_sections=answered, failed_sections=failed)
    result = call("run", "study.toml", *(["--strict"] if strict else []))
    assert (result.code, result.out) == (code, f"{answered} sections\n")


@pytest.mark.parametrize(
    ("trouble", "code"),
    [
        (InputError("crs-missing", "dem.tif has no CRS", where="[terrain] dem"), 2),
        (OutputError("output-exists", "results there", where="output"), 2),
        (NoAnswerError("no stage carries the flow"), 3),
    ],
)
def test_our_errors_are_printed_with_their_remedy(call, jobs, folder, trouble, code):
    jobs.trouble = trouble
    result = call("run", "study.toml")
    assert (result.code, result.out, result.err) == (code, "", f"Error: {trouble}\n")
    result = call("run", "study.toml", "--json")
    assert result.code == code
    assert json.loads(result.out) == {"errors": [trouble.as_dict()]}
    assert result.err == f"Error: {trouble}\n"


def test_our_own_bugs_keep_their_traceback(jobs, folder):
    jobs.trouble = ZeroDivisionError("a bug")
    with pytest.raises(ZeroDivisionError, match="a bug"):
        main(["run", "study.toml"])


def test_interrupted(call, jobs, folder):
    jobs.trouble = KeyboardInterrupt()
    result = call("run", "study.toml")
    assert (result.code, result.out) == (130, "")
    assert result.err.strip() == "Interrupted; nothing is half-written."


def test_interrupted_by_a_signal(folder):
    # The handler is set because a shell's background job starts with the signal ignored.
    code = (
        "import signal, sys, time, types\n"
        "signal.signal(signal.SIGINT, signal.default_int_handler)\n"
        "jobs = types.ModuleType('terrain2q.process')\n"
        "def run_study(study, *, progress):\n"
        "    progress(0, 1, 'started')\n"
        "    time.sleep(30)\n"
        "jobs.run_study = run_study\n"
        "sys.modules['terrain2q.process'] = jobs\n"
        "from terrain2q.commands import main\n"
        "main(['run', 'study.toml'])\n"
    )
    with subprocess.Popen(
        [sys.executable, "-c", code],
        stdout=subprocess.PIPE,
        stderr=subprocess.PIPE,
        text=True,
        env=ENVIRONMENT,
    ) as process:
        assert process.stderr.readline() == "started\n"
        process.send_signal(signal.SIGINT)
        out, err = process.communicate(timeout=20)
    assert (process.returncode, out) == (130, "")
    assert err.strip() == "Interrupted; nothing is half-written."


@pytest.mark.skipif(os.name != "posix", reason="the signal ends a process in POSIX alone")
def test_interrupted_while_text_is_run_as_code(folder):
    # a module that is run by its name would end by the signal then: 130 to a shell, -2 to other callers
    code = (
        "import sys, types\n"
        "jobs = types.ModuleType('terrain2q.process')\n"
        "def run_study(study, *, progress):\n"
        "    exec('raise KeyboardInterrupt')\n"
        "jobs.run_study = run_study\n"
        "sys.modules['terrain2q.process'] = jobs\n"
        "from terrain2q.commands import main\n"
        "main(['run', 'study.toml'])\n"
    )
    (folder / "stopped.py").write_text(code, encoding="utf-8")
    command = [sys.executable, "-m", "stopped"]
    ended = subprocess.run(command, capture_output=True, text=True, env=ENVIRONMENT, cwd=folder)
    assert (ended.returncode, ended.stdout) == (130, "")
    assert ended.stderr.strip() == "Interrupted; nothing is half-written."


# --- wrong inputs -----------------------------------------------------------------------------------


@pytest.mark.parametrize("command", ["check", "run"])
def test_wrong_study_files_exit_with_2_and_exact_text(call, jobs, folder, command):
    (folder / "study.toml").write_text(STUDY.replace("dem =", "dme ="), encoding="utf-8")
    result = call(command, "study.toml")
    assert (result.code, result.out, jobs.studies) == (2, "", [])
    assert result.err == (
        'Error: unknown key "dme" in [terrain]; the nearest known is dem  [key-unknown]\n'
        "  where: study.toml, line 5, [terrain]\n"
        "  fix:   [terrain] takes dem, elevation_unit, sampling, spacing\n"
    )


def test_several_errors_are_each_in_the_json(call, jobs, folder):
    text = STUDY.replace("0.05", "0").replace("0.002", "-1")
    (folder / "study.toml").write_text(text, encoding="utf-8")
    result = call("run", "study.toml", "--json")
    assert result.code == 2
    errors = json.loads(result.out)["errors"]
    assert [e["code"] for e in errors] == ["number-not-positive", "number-not-positive"]
    assert all(set(e) == {"code", "what", "where", "fix"} for e in errors)
    assert result.err.startswith("Error: 2 problems\n")


@pytest.mark.parametrize(
    ("args", "code", "said"),
    [
        (["run"], "value-not-allowed", "give a study file, or its keys as options"),
        (["run", "study.toml", "--terrain.dme", "x"], "key-unknown", "--terrain.dem"),
        (["run", "a.toml", "b.toml"], "value-not-allowed", "b.toml"),
        (["run", "study.toml", "--terrain.dem"], "value-not-allowed", "requires an argument"),
        (["start"], "key-missing", "FOLDER"),
        (["walk"], "value-not-allowed", "walk"),
    ],
)
def test_wrong_usage_exits_with_2(call, jobs, folder, args, code, said):
    result = call(*args)
    assert (result.code, result.out) == (2, "")
    assert said in result.err
    result = call(args[0], "--json", *args[1:])
    assert result.code == 2
    (error,) = json.loads(result.out)["errors"]
    assert error["code"] == code
    assert said in error["what"]


def test_a_study_file_that_is_not_there(call, jobs, folder):
    result = call("run", "none.toml")
    assert (result.code, result.out) == (2, "")
    assert result.err.startswith("Error: no study file none.toml  [file-missing]\n")


# --- check ------------------------------------------------------------------------------------------

FINDINGS = [
    Finding("line-turned", "drawn right to left", layer="cut_lines", feature_id="7"),
    Finding("line-empty", "no length", layer="cut_lines", feature_id="3"),
    Finding("line-empty", "no geometry", layer="cut_lines", feature_id="4", x=1.0, y=2.0),
]


def test_check_groups_findings_by_severity(call, jobs, folder):
    jobs.findings = FINDINGS
    result = call("check", "study.toml")
    assert (result.code, result.err) == (0, "")
    assert result.out == (
        "failed (2)\n"
        "  A cut line has no geometry or no length  [line-empty]\n"
        "    cut_lines 3: no length\n"
        "    cut_lines 4: no geometry\n"
        "    fix: Draw the line again.\n"
        "\n"
        "note (1)\n"
        "  A cut line was drawn right to left and has been turned  [line-turned]\n"
        "    cut_lines 7: drawn right to left\n"
        "    fix: Nothing; stations now run left to right looking downstream.\n"
        "\n"
        "2 failed, 0 doubtful, 1 note\n"
    )


def test_check_as_json(call, jobs, folder):
    jobs.findings = FINDINGS
    told = json.loads(call("check", "study.toml", "--json").out, parse_constant=pytest.fail)
    assert told["counts"] == {"failed": 2, "doubtful": 0, "note": 1}
    assert told["findings"][2] == {
        "code": "line-empty", "severity": "failed", "layer": "cut_lines", "feature_id": "4",
        "message": "no geometry", "remedy": "Draw the line again.", "x": 1.0, "y": 2.0,
    }  # fmt: skip
    assert told["findings"][0]["x"] is None


def test_check_without_findings(call, jobs, folder):
    result = call("check", "study.toml", "--strict")
    assert (result.code, result.out) == (0, "No findings: every input can be used.\n")


def test_check_strict(call, jobs, folder):
    jobs.findings = FINDINGS[:1]
    assert call("check", "study.toml", "--strict").code == 0
    jobs.findings = FINDINGS
    assert call("check", "study.toml", "--strict").code == 3


def test_check_writes_nothing(call, jobs, folder):
    before = sorted(folder.rglob("*"))
    call("check", "study.toml")
    assert sorted(folder.rglob("*")) == before
