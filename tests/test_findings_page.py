"""The page of findings and the catalogue say the same, and every code is one that can be met."""

from __future__ import annotations

import ast
import re
from pathlib import Path

import pytest

import terrain2q
from terrain2q import errors
from terrain2q.errors import CATALOGUE
from terrain2q.findings_page import WRITTEN, findings_page

PAGE = Path(__file__).parents[1] / "docs" / "findings.md"
SOURCES = [
    path
    for path in sorted(Path(terrain2q.__file__).parent.rglob("*.py"))
    if path.name not in ("errors.py", "findings_page.py")
]
MAKERS = {
    name
    for name, thing in vars(errors).items()
    if isinstance(thing, type) and (name == "Finding" or issubclass(thing, errors.Terrain2qError))
}


def called(node: ast.Call) -> str:
    return getattr(node.func, "id", getattr(node.func, "attr", ""))


def texts_and_codes() -> tuple[set[str], dict[str, str]]:
    """Return every text that could be a code, and the first argument of every error and finding made."""
    texts, first = set(), {}
    for path in SOURCES:
        for node in ast.walk(ast.parse(path.read_text(encoding="utf-8"))):
            if isinstance(node, ast.Constant) and isinstance(node.value, str):
                texts.add(node.value)
            if isinstance(node, ast.Call) and called(node) == "NoAnswerError":
                texts.add("no-answer")  # its only code, which it gives itself
            elif isinstance(node, ast.Call) and called(node) in MAKERS and node.args:
                if isinstance(node.args[0], ast.Constant):
                    first[node.args[0].value] = f"{path.name}:{node.lineno}"
    return texts, first


def test_the_page_is_the_one_the_catalogue_makes():
    assert PAGE.read_text(encoding="utf-8") == findings_page(), (
        "write it anew: python -m terrain2q.findings_page > docs/findings.md"
    )


def test_the_page_has_one_heading_for_each_code_in_the_order_of_the_catalogue():
    page = PAGE.read_text(encoding="utf-8")
    assert re.findall(r"^## (.+)$", page, flags=re.M) == list(CATALOGUE)


@pytest.mark.parametrize("code", CATALOGUE)
def test_each_code_says_what_it_means_why_it_matters_and_what_to_do(code):
    part = re.split(rf"^## {code}$", findings_page(), flags=re.M)[1].split("\n## ")[0]
    for heading in ("What it means", "Why it matters", "Example", "Do this"):
        assert f"**{heading}.** " in part, f"{code} needs an entry in findings_page.py"
    assert CATALOGUE[code].remedy in part


def test_nothing_is_written_about_a_code_that_is_gone():
    assert set(WRITTEN) <= set(CATALOGUE)
    assert all(text.endswith((".", "`.")) for entry in WRITTEN.values() for text in entry)


def test_every_code_in_the_catalogue_can_be_met():
    texts, _ = texts_and_codes()
    never = [code for code in CATALOGUE if code not in texts]
    assert never == [], "codes that nothing raises"


def test_every_error_and_finding_made_has_a_code_of_the_catalogue():
    _, first = texts_and_codes()
    assert len(first) > 10, "the search finds no errors at all: it looks for the wrong thing"
    unknown = {code: place for code, place in first.items() if code not in CATALOGUE}
    assert unknown == {}
