"""The files of a run come into their folder together or not at all."""

import os
import signal
import subprocess
import sys

import pytest
from test_extent import contents, small_valley

from terrain2q.errors import OutputError
from terrain2q.output import whole_file as module
from terrain2q.output.whole_file import whole_folder


def write(place, **texts):
    for name, text in texts.items():
        (place / name).write_text(text, encoding="utf-8")


def stopped(place):
    write(place, a="new")
    raise KeyboardInterrupt


def test_files_replace_those_of_their_names_and_leave_the_rest(tmp_path):
    write(tmp_path, a="old", other="mine")
    with whole_folder(tmp_path) as place:
        write(place, a="new", b="new")
        assert (tmp_path / "a").read_text() == "old"
        assert not (tmp_path / "b").exists()
    assert {p.name: p.read_text() for p in tmp_path.iterdir()} == {"a": "new", "b": "new", "other": "mine"}


def test_a_folder_that_was_not_there_goes_again_where_the_block_raises(tmp_path):
    with pytest.raises(KeyboardInterrupt), whole_folder(tmp_path / "one" / "two") as place:
        stopped(place)
    assert list(tmp_path.iterdir()) == []


def test_the_first_goes_first_and_what_cannot_be_replaced_stops_the_rest(tmp_path):
    write(tmp_path, a="old", z="old")
    (tmp_path / "first").mkdir()  # a file cannot take the place of a folder
    with pytest.raises(OutputError) as refused, whole_folder(tmp_path, first=["first"]) as place:
        write(place, a="new", first="new", z="new")
    assert (refused.value.code, refused.value.where) == ("output-not-writable", str(tmp_path / "first"))
    assert (tmp_path / "a").read_text() == (tmp_path / "z").read_text() == "old"
    assert sorted(p.name for p in tmp_path.iterdir()) == ["a", "first", "z"]


def test_an_error_names_the_place_that_the_user_knows(tmp_path):
    with pytest.raises(OutputError) as refused, whole_folder(tmp_path) as place:
        raise OutputError("output-not-writable", "no room", where=str(place / "a.tif"))
    assert refused.value.where == str(tmp_path / "a.tif")


@pytest.mark.skipif(os.name != "posix", reason="signals to oneself")
def test_an_interruption_waits_until_all_files_are_in_their_places(tmp_path, monkeypatch):
    replace = module.Path.replace

    def interrupted(self, target):
        os.kill(os.getpid(), signal.SIGINT)
        return replace(self, target)

    monkeypatch.setattr(module.Path, "replace", interrupted)
    before = signal.signal(signal.SIGINT, signal.default_int_handler)
    try:
        with pytest.raises(KeyboardInterrupt), whole_folder(tmp_path) as place:
            write(place, a="new", b="new", c="new")
        assert signal.getsignal(signal.SIGINT) is signal.default_int_handler
    finally:
        signal.signal(signal.SIGINT, before)
    assert sorted(p.name for p in tmp_path.iterdir()) == ["a", "b", "c"]


@pytest.mark.skipif(os.name != "posix", reason="asks whether a process runs")
def test_what_a_killed_run_left_is_removed_by_the_next(tmp_path):
    gone = subprocess.Popen([sys.executable, "-c", ""])
    gone.wait()
    name = f".unfinished.partial-{module._host()}-{{}}-0123abcd"
    dead, living = tmp_path / name.format(gone.pid), tmp_path / name.format(os.getppid())
    dead.mkdir()
    living.mkdir()
    write(dead, a="x")
    with whole_folder(tmp_path):
        pass
    assert sorted(p.name for p in tmp_path.iterdir()) == [living.name]


@pytest.mark.parametrize("where", ["run_record", "write_run_record", "write_pages"])
def test_a_run_interrupted_late_changes_nothing(tmp_path, monkeypatch, where):
    valley = small_valley(tmp_path)

    def stop(*_args, **_more):
        raise KeyboardInterrupt

    with monkeypatch.context() as patch:
        patch.setattr(f"terrain2q.process.{where}", stop)
        with pytest.raises(KeyboardInterrupt):
            valley.run({"flood": 50.0})
    assert not (tmp_path / "output").exists()
    valley.run({"flood": 60.0})
    before = contents(tmp_path / "output")
    with monkeypatch.context() as patch:
        patch.setattr(f"terrain2q.process.{where}", stop)
        with pytest.raises(KeyboardInterrupt):
            valley.run({"flood": 50.0})
    assert contents(tmp_path / "output") == before
