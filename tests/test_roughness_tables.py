"""The built-in roughness tables: what holds for all, and each against where it came from."""

import csv
import io
import json
import re
import subprocess
import sys

import pytest
from fluids.open_flow import n_excavated_dredged, n_natural

from terrain2q.commands import main
from terrain2q.errors import InputError
from terrain2q.ground.cover import RoughnessTable
from terrain2q.roughness_tables import describe, table_names, table_path, table_text

NAMES = ["chow1959", "nlcd-flood-depth", "worldcover-flood-depth", "kalyanapu2009"]


def rows(name):
    return list(csv.DictReader(io.StringIO(table_text(name))))


def number(text):
    return float(text) if text else None


def test_names():
    assert sorted(table_names()) == sorted(NAMES)


@pytest.mark.parametrize("name", NAMES)
def test_what_holds_for_every_table(name):
    found = rows(name)
    assert next(iter(found[0])) == "class"
    assert len({r["class"] for r in found}) == len(found) > 5
    assert len(describe(name)) < 110
    for row in found:
        assert None not in row
        assert row["source"].strip()
        assert row["description"].strip()
        n, low, high = number(row["n"]), number(row["n_low"]), number(row["n_high"])
        assert 0.008 <= n <= 0.5
        assert (low is None) == (high is None)
        if low is not None:
            assert 0.008 <= low <= n <= high <= 0.5
    # a study's land-cover table can be any of them
    table = RoughnessTable.from_csv(table_path(name))
    assert {str(c) for c in table.rows} == {r["class"] for r in found}
    assert not table.findings


def published(tree):
    """Every (least, normal, greatest) n of a nested table."""
    for value in tree.values():
        if isinstance(value, dict):
            yield from published(value)
        else:
            yield tuple(float(v) for v in value)


def test_chow_agrees_with_an_independent_copy():
    # Chow (1959), Table 5-6, as the fluids library gives it. Its normal value 0.07 of irregular major streams
    # is its own (Chow leaves it blank, from memory); the lined channels are not in our table.
    theirs = sorted([*published(n_natural), *published(n_excavated_dredged)])
    ours = sorted((float(r["n_low"]), float(r["n"]), float(r["n_high"])) for r in rows("chow1959"))
    assert ours == theirs


@pytest.mark.parametrize(
    ("name", "expected"),
    [
        # Chow (1959), Table 5-6, rows also read in a second copy
        ("stream-clean-straight", (0.025, 0.030, 0.033)),
        ("stream-winding-pools", (0.033, 0.040, 0.045)),
        ("stream-very-weedy", (0.075, 0.100, 0.150)),
        ("mountain-cobbles-boulders", (0.040, 0.050, 0.070)),
        ("pasture-short-grass", (0.025, 0.030, 0.035)),
        ("cultivated-row-crops", (0.025, 0.035, 0.045)),
        ("brush-dense-summer", (0.070, 0.100, 0.160)),
        ("timber-below-branches", (0.080, 0.100, 0.120)),
        ("timber-in-branches", (0.100, 0.120, 0.160)),
        ("earth-clean-weathered", (0.018, 0.022, 0.025)),
    ],
)
def test_chow_rows(name, expected):
    row = next(r for r in rows("chow1959") if r["class"] == name)
    assert (float(row["n_low"]), float(row["n"]), float(row["n_high"])) == expected


def test_chow_classes_can_be_typed():
    assert all(re.fullmatch(r"[a-z]+(-[a-z]+)*", r["class"]) for r in rows("chow1959"))


@pytest.mark.parametrize("name", ["nlcd-flood-depth", "worldcover-flood-depth"])
def test_mapped_rows_are_chow_rows_and_say_so(name):
    chow = {r["class"]: r for r in rows("chow1959")}
    for row in rows(name):
        assert row["source"].startswith("our mapping, not published")
        from_row = chow[re.search(r"row ([a-z-]+)", row["source"])[1]]
        assert all(row[k] == from_row[k] for k in ("n", "n_low", "n_high"))


def test_land_cover_codes():
    assert {r["class"] for r in rows("nlcd-flood-depth")} >= set(
        "11 21 22 23 24 31 41 42 43 52 71 81 82 90 95".split()
    )
    assert {r["class"] for r in rows("worldcover-flood-depth")} >= set("10 20 30 40 50 60 80 90 95".split())


def test_overland_values_carry_their_caution():
    # Kalyanapu et al. (2009), in ten-thousandths as read in a secondary copy; the last three from memory
    found = {r["class"]: r for r in rows("kalyanapu2009")}
    assert (found["41"]["n"], found["21"]["n"], found["31"]["n"]) == ("0.36", "0.0404", "0.0113")
    assert all("shallow overland flow" in r["source"] for r in found.values())
    assert {c for c, r in found.items() if "from memory" in r["source"]} == {"81", "90", "95"}
    assert "shallow" in describe("kalyanapu2009")


def test_unknown_name_says_the_nearest():
    for ask in (table_text, table_path, describe):
        with pytest.raises(InputError, match="chow1959") as caught:
            ask("chow")
        assert caught.value.code == "table-unknown"


def test_import_is_light():
    code = "import sys, terrain2q.roughness_tables; print({'numpy', 'pandas', 'click'} & set(sys.modules))"
    found = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    assert found.stdout.strip() == "set()"


def run(capsys, *args):
    with pytest.raises(SystemExit) as left:
        main(list(args))
    return left.value.code, capsys.readouterr()


def test_command_lists_the_tables(capsys):
    code, said = run(capsys, "tables")
    assert code == 0
    lines = said.out.splitlines()
    assert [line.split()[0] for line in lines] == table_names()
    assert said.err == ""


def test_command_prints_one_as_csv(capsys):
    code, said = run(capsys, "tables", "chow1959")
    assert code == 0
    assert said.out == table_text("chow1959")


def test_command_as_json(capsys):
    code, said = run(capsys, "tables", "--json")
    assert code == 0
    assert [t["name"] for t in json.loads(said.out)["tables"]] == table_names()
    code, said = run(capsys, "tables", "nlcd-flood-depth", "--json")
    shown = json.loads(said.out)
    assert code == 0
    assert shown["name"] == "nlcd-flood-depth"
    first = shown["rows"][0]
    assert (first["class"], first["n"], first["n_low"]) == ("11", 0.03, 0.025)
    assert json.loads(run(capsys, "tables", "kalyanapu2009", "--json")[1].out)["rows"][0]["n_low"] is None


def test_command_refuses_an_unknown_table(capsys):
    code, said = run(capsys, "tables", "nlcd")
    assert code == 2
    assert "table-unknown" in said.err
    assert "nlcd-flood-depth" in said.err
    assert said.out == ""
