"""What the pages say is run: commands, code and the output they promise."""

import contextlib
import io
import re
import shlex
import shutil
from pathlib import Path

import pytest

from terrain2q.commands import main

ROOT = Path(__file__).parents[1]


def _blocks(page: Path) -> list[tuple[str, str]]:
    return re.findall(r"^```(\w+)\n(.*?)^```", page.read_text(encoding="utf-8"), re.M | re.S)


def _promised(code: str) -> list[str]:
    return re.findall(r"^# > ?(.*)$", code, re.M)


@pytest.fixture
def sample(tmp_path, monkeypatch):
    """The sample study as a user has it, and its data alone in a folder of their own."""
    keep_out = shutil.ignore_patterns("output", "*.py", "__pycache__")
    shutil.copytree(ROOT / "sample_dem", tmp_path / "sample", ignore=keep_out)
    shutil.copytree(
        ROOT / "sample_dem",
        tmp_path / "sample" / "data",
        ignore=shutil.ignore_patterns("output", "*.py", "*.toml"),
    )
    monkeypatch.chdir(tmp_path / "sample")
    return tmp_path / "sample"


def test_tutorial_runs_and_prints_what_it_says(sample):
    names = {}
    ran = 0
    for kind, code in _blocks(ROOT / "docs" / "tutorial.md"):
        if kind == "sh":
            for line in code.strip().splitlines():
                program, *arguments = shlex.split(line)
                assert program == "terrain2q"
                with pytest.raises(SystemExit) as stop:
                    main(arguments)
                assert stop.value.code == 0, line
                ran += 1
        else:
            said = io.StringIO()
            with contextlib.redirect_stdout(said):
                exec(compile(code, "tutorial", "exec"), names)
            assert said.getvalue().splitlines() == _promised(code)
            ran += 1
    assert ran >= 6
    assert (sample / "steeper" / "results.gpkg").exists()


def test_readme_code_runs():
    for kind, code in _blocks(ROOT / "README.md"):
        if kind == "python":
            exec(compile(code, "README", "exec"), {})


def test_links_between_pages_lead_somewhere():
    for page in [ROOT / "README.md", ROOT / "DEVELOPERS.md", *(ROOT / "docs").glob("*.md")]:
        for target in re.findall(r"\]\(([^)#]+)(?:#[^)]*)?\)", page.read_text(encoding="utf-8")):
            if "://" not in target:
                assert (page.parent / target).exists(), f"{page.name} -> {target}"


@pytest.mark.parametrize("page", ["README.md", "docs/limits.md", "docs/tutorial.md"])
def test_caution_is_on_the_page(page):
    text = " ".join((ROOT / page).read_text(encoding="utf-8").replace("> ", " ").split())
    assert "no substitute for a study by a licensed engineer" in text
    assert "floodplain authority decide" in text
