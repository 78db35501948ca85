"""Many sections in batches: one process, several and a cluster give the same rows, and a run goes on."""

from __future__ import annotations

import json
import os
import pickle
import random
import signal
import sqlite3
import subprocess
import sys
import time
from dataclasses import replace
from pathlib import Path

import geopandas
import numpy as np
import pyarrow as pa
import pytest
import rasterio
from rasterio.transform import from_origin
from shapely import linestrings

from terrain2q import process
from terrain2q.batches import engines, work
from terrain2q.batches.kept import KeptParts, study_hash
from terrain2q.errors import InputError
from terrain2q.flows import Flow
from terrain2q.ground.cover import UniformCover
from terrain2q.ground.cut_lines import CutLine, orient_cut_lines
from terrain2q.ground.layers import read_layer
from terrain2q.ground.terrain import Terrain
from terrain2q.jobs.sections import SectionInputs
from terrain2q.jobs.slopes import OneSlope
from terrain2q.process import run, run_study
from terrain2q.study import load_study
from terrain2q.units import SI

COUNT = 120
SIZE = 30
"""Lines, and lines in a batch: small, so that there are several batches."""

STUDY = """
[study]
units = "si"
[terrain]
dem = "dem.tif"
[streams]
path = "data.gpkg|layer=streams"
[cut_lines]
path = "data.gpkg|layer=cut_lines"
[land_cover]
default_n = 0.06
[channel]
n = 0.035
[slope]
value = 0.002
[flows]
events = { small = 5, large = 60 }
[output]
report = false
sheets = "none"
"""


@pytest.fixture(scope="module")
def folder(tmp_path_factory):
    """A noisy valley from north to south, and cut lines over it in no order; one lies off the ground."""
    made = tmp_path_factory.mktemp("valley")
    values = np.random.default_rng(1)
    away = np.abs(np.arange(400) - 199.5)
    z = np.interp(away, [0, 6, 10, 70, 200], [0, 0, 2, 2.6, 22]) - 0.002 * np.arange(1200)[:, None]
    z = (z + 100 + values.normal(0, 0.05, z.shape)).round(2)
    with rasterio.open(
        made / "dem.tif", "w", driver="GTiff", width=400, height=1200, count=1, dtype="float32",
        crs="EPSG:26915", transform=from_origin(500000, 4500000, 1, 1), tiled=True,
        blockxsize=128, blockysize=128,
    ) as out:  # fmt: skip
        out.write(z.astype("float32"), 1)
        out.units = ("m",)
    y = values.uniform(5, 1195, COUNT)
    y[17] = 5000.0
    lines = np.stack([np.stack([np.full(COUNT, x), 4500000 - y], 1) for x in (500300.0, 500100.0)], 1)
    geopandas.GeoDataFrame(
        {"id": [f"s{i}" for i in range(COUNT)]}, geometry=linestrings(lines), crs="EPSG:26915"
    ).to_file(made / "data.gpkg", layer="cut_lines")
    geopandas.GeoDataFrame(
        {"id": ["v"]},
        geometry=linestrings([[[500200.0, 4499999.0], [500200.0, 4498801.0]]]),
        crs="EPSG:26915",
    ).to_file(made / "data.gpkg", layer="streams")
    (made / "study.toml").write_text(STUDY, encoding="utf-8")
    return made


@pytest.fixture(autouse=True)
def _small_batches(monkeypatch):
    monkeypatch.setattr(work.plan_batches, "__defaults__", (SIZE,))


def tables(path: Path) -> dict[str, list]:
    with sqlite3.connect(path) as database:
        names = [n for (n,) in database.execute("SELECT table_name FROM gpkg_contents")]
        names.remove("layer_styles") if "layer_styles" in names else None  # it holds the time of writing
        return {name: database.execute(f'SELECT * FROM "{name}"').fetchall() for name in names}


def options(to: Path) -> dict:
    return {"output.folder": str(to)}


def run_in_batches(folder: Path, to: Path, size: int) -> dict[str, list]:
    with pytest.MonkeyPatch.context() as patch:
        patch.setattr(work.plan_batches, "__defaults__", (size,))
        run(folder / "study.toml", options(to), jobs=1)
    return tables(to / "results.gpkg")


@pytest.fixture(scope="module")
def undisturbed(folder, tmp_path_factory):
    """The tables of a run of one process that nothing interrupts."""
    return run_in_batches(folder, tmp_path_factory.mktemp("undisturbed") / "out", SIZE)


def without_order(found: dict[str, list]) -> dict[str, list]:
    return {name: sorted(repr(row[1:]) for row in rows) for name, rows in found.items()}


def test_one_process_and_several_give_the_same_rows(folder, tmp_path, undisturbed):
    for jobs in (1, 3):
        results = run(folder / "study.toml", options(tmp_path / str(jobs)), jobs=jobs)
        assert tables(tmp_path / str(jobs) / "results.gpkg") == undisturbed
        assert results.failed_sections == 1
        assert sorted(results.sections["section_id"]) == sorted(f"s{i}" for i in range(COUNT))
        assert not list((tmp_path / str(jobs)).glob(".*"))
    assert len(undisturbed["design_stages"]) == 2 * COUNT


def test_batches_give_the_rows_and_layers_of_a_run_without(folder, tmp_path, undisturbed):
    whole = run_in_batches(folder, tmp_path / "whole", COUNT)
    assert without_order(whole) == without_order(undisturbed)
    one = run(folder / "study.toml", options(tmp_path / "batches"))
    with pytest.MonkeyPatch.context() as patch:
        patch.setattr(work.plan_batches, "__defaults__", (COUNT,))
        other = run(folder / "study.toml", options(tmp_path / "whole2"))
    assert list(one.layers) == list(other.layers)
    for name, table in other.layers.items():
        got = one.layers[name]
        assert list(got.columns) == list(table.columns)
        assert got.dtypes.astype(str).tolist() == table.dtypes.astype(str).tolist()
        assert len(got) == len(table)
    assert one.summary()["findings"] == other.summary()["findings"]
    assert one.summary_text().splitlines()[0] == other.summary_text().splitlines()[0]


def test_lines_that_are_neighbours_keep_their_order(folder):
    terrain = Terrain(folder / "dem.tif")
    down = [
        CutLine(f"s{i}", np.array([500300.0, 500100.0]), np.full(2, 4499990.0 - 11 * i)) for i in range(100)
    ]
    assert np.concatenate(work.plan_batches(down, terrain, 20)).tolist() == list(range(100))
    mixed = [down[i] for i in np.random.default_rng(2).permutation(100)]
    batches = work.plan_batches(mixed, terrain, 20)
    assert np.concatenate(batches).tolist() != list(range(100))
    assert all((np.diff(places) > 0).all() for places in batches)


def test_compiled_code_gives_the_answers_of_the_arrays(folder, tmp_path, monkeypatch):
    plain = run(folder / "study.toml", options(tmp_path / "plain"), jobs=1)
    monkeypatch.setattr(process, "worth_compiling", lambda sections: True)
    fast = run(folder / "study.toml", options(tmp_path / "fast"), jobs=1)
    for name in ("sections", "subareas", "ratings", "design_stages", "subarea_flows"):
        one, other = plain.layers[name], fast.layers[name]
        numbers = one.select_dtypes("number").columns
        np.testing.assert_allclose(one[numbers], other[numbers], rtol=1e-9, atol=1e-9, err_msg=name)
        words = [c for c in one.columns if c not in numbers and c != "geometry"]
        assert one[words].equals(other[words])
    assert list(plain.findings["message"]) == list(fast.findings["message"])


def test_batches_are_neighbours_and_hold_every_line_once(folder):
    terrain = Terrain(folder / "dem.tif")
    frame = read_layer(f"{folder / 'data.gpkg'}|layer=cut_lines", purpose="cut lines", geometry="line")
    lines, _ = orient_cut_lines(frame, None, terrain.crs)
    batches = work.plan_batches(lines, terrain, 25)
    assert sorted(np.concatenate(batches).tolist()) == list(range(COUNT))
    assert [len(b) for b in batches] == [25, 25, 25, 25, 20]
    strips = [{int((4500000.0 - lines[i].y[0]) // work.STRIP) for i in b if i != 17} for b in batches]
    assert max(map(len, strips)) == 2


def test_a_run_goes_on_from_the_parts_that_are_there(folder, tmp_path, undisturbed, monkeypatch):
    made = []
    answer = work.answer_batch

    def stopping(job, lines, places):
        made.append(len(places))
        if len(made) == 3:
            raise KeyboardInterrupt
        return answer(job, lines, places)

    monkeypatch.setattr(work, "answer_batch", stopping)
    study = load_study(folder / "study.toml", options(tmp_path / "out"))
    with pytest.raises(KeyboardInterrupt):
        run_study(study, jobs=1)
    (left,) = (tmp_path / "out").iterdir()
    assert len(list(left.glob("*.part"))) == 2
    # one of them was cut off by a full disk
    last = sorted(left.glob("*.part"))[-1]
    last.write_bytes(last.read_bytes()[:1000])
    told = []
    run_study(study, lambda done, total, label: told.append((done, total, label)), jobs=1)
    assert len(made) == 3 + 3  # one part was taken up, three are made
    assert told[0][:2] == (SIZE, COUNT)
    assert any("findings" in label and "left" in label for _, _, label in told)
    assert tables(tmp_path / "out" / "results.gpkg") == undisturbed
    assert not list((tmp_path / "out").glob(".*"))


def test_parts_of_other_inputs_are_refused_and_removed(folder, tmp_path, undisturbed):
    out = tmp_path / "out"
    other = KeptParts(out, "another")
    other.keep(0, work.Part((0,), {}, ((),), ((),), ()))
    told = []
    study = load_study(folder / "study.toml", options(out))
    run_study(study, lambda done, total, label: told.append(label), jobs=1)
    assert any("not used" in label for label in told)
    assert tables(out / "results.gpkg") == undisturbed
    assert not list(out.glob(".*"))


def test_the_hash_tells_settings_and_files_apart(tmp_path):
    dem = tmp_path / "dem.tif"
    dem.write_bytes(b"one")
    first = study_hash({"slope": {"value": 0.1}, "output": {"report": True}}, {"dem": [str(dem)]}, 3)
    assert study_hash({"slope": {"value": 0.1}, "output": {"report": False}}, {"dem": [str(dem)]}, 3) == first
    assert study_hash({"slope": {"value": 0.2}}, {"dem": [str(dem)]}, 3) != first
    assert study_hash({"slope": {"value": 0.1}}, {"dem": [str(dem)]}, 4) != first
    dem.write_bytes(b"another")
    assert study_hash({"slope": {"value": 0.1}}, {"dem": [str(dem)]}, 3) != first


def test_a_part_is_data_and_never_code(tmp_path):
    class Evil:
        def __reduce__(self):
            return os.mkdir, (str(tmp_path / "made"),)

    parts = KeptParts(tmp_path / "out", "x")
    parts.keep(0, work.Part((0,), {"sections": pa.table({"n": np.arange(3)})}, ((),), ((),), ()))
    assert parts.load(0, [0]).layers["sections"]["n"].to_pylist() == [0, 1, 2]
    assert parts.load(0, [1]) is None
    parts._path(0).write_bytes(pickle.dumps(Evil()))
    assert parts.load(0, [0]) is None
    assert not (tmp_path / "made").exists()


def test_wrong_inputs_leave_nothing(folder, tmp_path, monkeypatch):
    def broken(job, lines, places):
        if len(tried) == 2:
            raise InputError("file-unreadable", "the raster is damaged", where="dem.tif")
        tried.append(1)
        return answer(job, lines, places)

    tried, answer = [], work.answer_batch
    monkeypatch.setattr(work, "answer_batch", broken)
    with pytest.raises(InputError):
        run(folder / "study.toml", options(tmp_path / "deep" / "out"), jobs=1)
    assert list(tmp_path.iterdir()) == []


def test_an_error_in_a_worker_is_the_same_error_here(folder, tmp_path):
    moved = tmp_path / "dem.tif"
    moved.write_bytes((folder / "dem.tif").read_bytes())
    terrain = Terrain(moved)
    inputs = SectionInputs(terrain, UniformCover(0.05), None, "none", None, OneSlope(0.001), None, SI)
    job = work.Work(inputs, (Flow("flood", 5.0),), 5, None, terrain.crs, False, True)
    line = CutLine(
        "a", np.array([500300.0, 500100.0]), np.full(2, 4499500.0), "", np.nan, np.nan, False, True, {}
    )
    batch = (0, [line], [0])
    ((number, part),) = engines.processes(job, [batch], 1)
    assert number == 0
    assert part.layers["sections"]["section_id"].to_pylist() == ["a"]
    worker = engines._Worker()
    try:
        worker.send(pickle.dumps((job, None)))
        there = worker.answer(batch)
        assert {n: work._to_bytes(t) for n, t in there.layers.items()} == {
            n: work._to_bytes(t) for n, t in part.layers.items()
        }
        moved.unlink()
        with pytest.raises(InputError) as raised:
            worker.answer((1, [replace(line, section_id="b")], [1]))
        assert raised.value.code == "file-unreadable"
    finally:
        worker.close()


KILLED = """
import sys
from terrain2q.batches import work
work.plan_batches.__defaults__ = (12,)
from terrain2q.process import run
run(sys.argv[1], {"output.folder": sys.argv[2], "output.overwrite": True}, jobs=int(sys.argv[3]))
"""


def test_killed_at_random_and_resumed(folder, tmp_path):
    """Killed ten times: what is there at last are the rows of an undisturbed run, and nothing else."""
    out = tmp_path / "out"
    chance = random.Random(6)
    command = [sys.executable, "-c", KILLED, str(folder / "study.toml"), str(out)]
    environment = {**os.environ, "PYTHONPATH": str(Path(__file__).parents[1])}
    killed, parts, progress = 0, [], 0
    while killed < 10:
        process = subprocess.Popen([*command, "2" if killed % 2 else "1"], env=environment)
        there = len(list(out.glob(".unfinished-*/*.part")))
        wait = time.monotonic() + 20
        # while it reads, in mid-work, while it writes: after a random number of further parts
        more = chance.randint(0, 2)
        while time.monotonic() < wait and process.poll() is None:
            now = len(list(out.glob(".unfinished-*/*.part")))
            if now >= min(there + more, 9) and (more or chance.random() < 0.02):
                break
            time.sleep(0.01)
        process.send_signal(signal.SIGKILL)
        process.wait()
        killed += 1
        now = len(list(out.glob(".unfinished-*/*.part")))
        progress += now > there
        parts.append(now)
    assert progress >= 2, parts
    subprocess.run([*command, "2"], check=True, env=environment)
    assert tables(out / "results.gpkg") == run_in_batches(folder, tmp_path / "undisturbed", 12)
    assert sorted(p.name for p in out.iterdir()) == ["results.gpkg", "run.json"]


def test_a_cluster_gives_the_same_rows_and_survives_a_worker(folder, tmp_path, undisturbed):
    distributed = pytest.importorskip("distributed")
    code = "import sys; from distributed.cli.{0} import main; sys.argv[0] = '{0}'; main()"
    environment = {**os.environ, "PYTHONPATH": str(Path(__file__).parents[1])}

    def start(name, *arguments):
        return subprocess.Popen(
            [sys.executable, "-c", code.format(name), *arguments],
            env=environment, stdout=subprocess.DEVNULL, stderr=subprocess.DEVNULL,
        )  # fmt: skip

    about = tmp_path / "scheduler.json"
    processes = [start("dask_scheduler", "--host", "127.0.0.1", "--port", "0", "--no-dashboard",
                       "--scheduler-file", str(about))]  # fmt: skip
    try:
        workers = [
            start(
                "dask_worker",
                "--scheduler-file",
                str(about),
                "--nthreads",
                "1",
                "--no-nanny",
                "--no-dashboard",
            )
            for _ in range(2)
        ]
        processes += workers
        address = _address(about)
        with distributed.Client(address, set_as_default=False) as client:
            client.wait_for_workers(2, timeout=60)
        seen = []

        def kill_one(done, total, label):
            if label.startswith("sections") and not seen:
                seen.append(done)
                workers[0].kill()

        study = load_study(folder / "study.toml", options(tmp_path / "out"))
        run_study(study, kill_one, scheduler=address)
        assert seen
        assert seen[0] < COUNT
        assert tables(tmp_path / "out" / "results.gpkg") == undisturbed
    finally:
        for process in processes:
            process.kill()
            process.wait()


def _address(about: Path) -> str:
    until = time.monotonic() + 60
    while time.monotonic() < until:
        try:
            return json.loads(about.read_text())["address"]
        except (OSError, ValueError):
            time.sleep(0.1)
    raise AssertionError("the scheduler did not start")


def test_a_scheduler_that_does_not_answer(folder, tmp_path, monkeypatch):
    pytest.importorskip("distributed")
    with pytest.raises(InputError) as raised:
        run(folder / "study.toml", options(tmp_path / "out"), scheduler="tcp://127.0.0.1:9")
    assert raised.value.code == "scheduler-unreachable"
    assert not (tmp_path / "out").exists()


def test_without_dask_a_cluster_is_refused(folder, tmp_path, monkeypatch):
    monkeypatch.setitem(sys.modules, "distributed", None)
    with pytest.raises(InputError) as raised:
        run(folder / "study.toml", options(tmp_path / "out"), scheduler="tcp://127.0.0.1:9")
    assert raised.value.code == "library-missing"
    assert "terrain2q[cluster]" in str(raised.value)
