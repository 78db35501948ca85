"""The record of a run: digests that can be checked by hand, valid JSON, whole or not there."""

from __future__ import annotations

import hashlib
import json
import math
import shutil
import subprocess
from collections.abc import Mapping
from dataclasses import dataclass
from datetime import date
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

import terrain2q
from terrain2q.columns import CAUTION
from terrain2q.errors import Finding, OutputError
from terrain2q.output.run_record import (
    findings_by_code,
    plain,
    run_record,
    sha256_of,
    size_of,
    versions,
    write_run_record,
)

# FIPS 180-2, appendix B.1 (one-block message "abc"); from memory.
ABC = "ba7816bf8f01cfea414140de5dae2223b00361a396177a9cb410ff61f20015ad"


def digest(data: bytes) -> str:
    return hashlib.sha256(data).hexdigest()


def test_a_file_has_the_published_digest(tmp_path):
    file = tmp_path / "abc.csv"
    file.write_bytes(b"abc")
    assert sha256_of(file) == ABC
    assert sha256_of(str(file)) == ABC
    assert size_of(file) == 3


@pytest.mark.skipif(shutil.which("sha256sum") is None, reason="no sha256sum on this machine")
def test_a_large_file_has_the_digest_that_sha256sum_prints(tmp_path):
    file = tmp_path / "dem.tif"
    file.write_bytes(np.random.default_rng(3).bytes(3_000_001))
    done = subprocess.run(["sha256sum", str(file)], capture_output=True, text=True, check=True)
    assert sha256_of(file) == done.stdout.split()[0]


@pytest.fixture
def shapefile(tmp_path) -> Path:
    for ending in (".shp", ".shx", ".dbf", ".prj"):
        (tmp_path / f"lines{ending}").write_bytes(ending.encode())
    (tmp_path / "lines_2.dbf").write_bytes(b"of another layer")
    return tmp_path / "lines.shp"


def test_a_shapefile_is_all_its_files(shapefile):
    names = ["lines.dbf", "lines.prj", "lines.shp", "lines.shx"]
    lines = "".join(f"{digest(name[5:].encode())}  {name}\n" for name in names)
    assert sha256_of(shapefile) == digest(lines.encode())
    assert size_of(shapefile) == 16


@pytest.mark.parametrize("ending", [".shp", ".shx", ".dbf", ".prj", ".cpg"])
def test_a_change_in_any_file_of_a_shapefile_shows(shapefile, ending):
    before = sha256_of(shapefile)
    shapefile.with_suffix(ending).write_bytes(b"changed")
    assert sha256_of(shapefile) != before


def test_an_index_or_another_layer_beside_a_shapefile_does_not_show(shapefile):
    before = sha256_of(shapefile)
    shapefile.with_suffix(".qix").write_bytes(b"index")
    shapefile.with_name("lines_3.shp").write_bytes(b"other")
    assert sha256_of(shapefile) == before


def test_a_folder_is_every_file_in_it(tmp_path):
    folder = tmp_path / "data.gdb"
    (folder / "deeper").mkdir(parents=True)
    (folder / "b").write_bytes(b"abc")
    (folder / "deeper" / "a").write_bytes(b"")
    lines = f"{ABC}  b\n{digest(b'')}  deeper/a\n"
    assert sha256_of(folder) == digest(lines.encode())
    assert size_of(folder) == 3


def test_a_missing_file_is_said(tmp_path):
    with pytest.raises(FileNotFoundError):
        sha256_of(tmp_path / "dem.tif")


def test_versions_name_what_decides_the_numbers():
    found = versions()
    assert found["terrain2q"] == terrain2q.__version__
    assert found["numpy"] == np.__version__
    assert {"python", "scipy", "shapely", "pyproj", "rasterio", "pyogrio"} <= set(found)


def test_findings_are_counted_by_severity_and_code():
    findings = [
        Finding("line-turned", "one"),
        Finding("line-turned", "another"),
        Finding("gap-bridged", "a gap"),
        Finding("gap-bridged", "a small gap", severity="note"),
    ]
    assert findings_by_code(findings) == {
        "by_severity": {"failed": 0, "doubtful": 1, "note": 3},
        "by_code": {"gap-bridged": 2, "line-turned": 2},
    }
    assert list(findings_by_code([])["by_severity"]) == ["failed", "doubtful", "note"]


def test_a_record_holds_what_is_needed_to_repeat_the_run(tmp_path, shapefile):
    tiles = [tmp_path / "a.tif", tmp_path / "b.tif"]
    for tile in tiles:
        tile.write_bytes(b"abc")
    record = run_record(
        inputs={"terrain.dem": tiles, "cut_lines.path": shapefile},
        settings={"rating": {"stages": 30, "top": math.nan}},
        units="us",
        crs="EPSG:26915",
        counts={"sections": 3},
        findings=[Finding("line-turned", "turned")],
        seconds=1.23456,
        outputs=[tiles[0]],
        finished="2026-01-01T00:00:00+00:00",
    )
    path = tmp_path / "output" / "run.json"
    write_run_record(path, record)
    back = json.loads(path.read_text(encoding="utf-8"))
    assert back["inputs"] == [
        {"key": "terrain.dem", "path": str(tiles[0]), "bytes": 3, "sha256": ABC},
        {"key": "terrain.dem", "path": str(tiles[1]), "bytes": 3, "sha256": ABC},
        {"key": "cut_lines.path", "path": str(shapefile), "bytes": 16, "sha256": sha256_of(shapefile)},
    ]
    assert back["outputs"] == [{"path": str(tiles[0]), "bytes": 3, "sha256": ABC}]
    assert back["settings"] == {"rating": {"stages": 30, "top": None}}
    assert back["findings"]["by_severity"]["note"] == 1
    assert (back["units"], back["crs"], back["counts"]) == ("us", "EPSG:26915", {"sections": 3})
    assert (back["seconds"], back["finished"]) == (1.235, "2026-01-01T00:00:00+00:00")
    assert back["caution"] == CAUTION
    assert back["versions"]["terrain2q"] == terrain2q.__version__


def test_numbers_of_numpy_dates_paths_and_dataclasses_have_a_plain_form():
    @dataclass(frozen=True)
    class Slope:
        value: float | None
        source: Path

    value = {
        "slope": Slope(np.float64("nan"), Path("lines.gpkg")),
        "shape": (np.int64(2), np.bool_(True)),
        "levels": np.array([[1.5, np.inf], [np.nan, 2.0]]),
        "names": frozenset({"b", "a"}),
        "on": date(2026, 1, 1),
        "truth": True,
        3: None,
    }
    assert plain(value) == {
        "slope": {"value": None, "source": "lines.gpkg"},
        "shape": [2, True],
        "levels": [[1.5, None], [None, 2.0]],
        "names": ["a", "b"],
        "on": "2026-01-01",
        "truth": True,
        "3": None,
    }
    assert type(plain(np.float32(1.5))) is float
    assert plain(True) is True


def test_what_has_no_place_in_a_record_is_said():
    with pytest.raises(TypeError, match="object has no place in a run record"):
        plain({"a": [object()]})


ANYTHING = st.recursive(
    st.none()
    | st.booleans()
    | st.integers()
    | st.floats()
    | st.text(st.characters(exclude_categories=["Cs"])),
    lambda inner: st.lists(inner, max_size=3) | st.dictionaries(st.text(max_size=5), inner, max_size=3),
    max_leaves=10,
)


def without_nan(value):
    if isinstance(value, float):
        return value if math.isfinite(value) else None
    if isinstance(value, list):
        return [without_nan(item) for item in value]
    if isinstance(value, Mapping):
        return {key: without_nan(item) for key, item in value.items()}
    return value


def refuse(constant: str):
    raise AssertionError(f"{constant} is not JSON")


@given(ANYTHING)
def test_any_settings_become_valid_json_and_come_back(value):
    text = json.dumps(plain(value), allow_nan=False)
    assert json.loads(text, parse_constant=refuse) == without_nan(value)


def test_a_record_is_written_whole_or_not_at_all(tmp_path, monkeypatch):
    path = tmp_path / "run.json"
    write_run_record(path, {"run": 1})
    before = path.read_bytes()

    def half(self, text, **options):
        with self.open("w") as file:
            file.write(text[:3])
        raise OSError(28, "No space left on device")

    with monkeypatch.context() as patch:
        patch.setattr(Path, "write_text", half)
        with pytest.raises(OutputError) as caught:
            write_run_record(path, {"run": 2})
    assert caught.value.code == "output-not-writable"
    assert path.read_bytes() == before
    with pytest.raises(TypeError):
        write_run_record(path, {"run": object()})
    assert path.read_bytes() == before
    assert list(tmp_path.iterdir()) == [path]
    write_run_record(path, {"run": 3, "place": "Bad Gögging"})
    assert json.loads(path.read_text(encoding="utf-8")) == {"run": 3, "place": "Bad Gögging"}
    assert "Gögging" in path.read_text(encoding="utf-8")


def test_a_folder_that_cannot_be_written_is_said(tmp_path):
    (tmp_path / "file").write_text("not a folder")
    with pytest.raises(OutputError) as caught:
        write_run_record(tmp_path / "file" / "run.json", {})
    assert caught.value.code == "output-not-writable"
