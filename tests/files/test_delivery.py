"""All files or none."""

import errno
import json
import os
import shutil
from collections import namedtuple

import pytest

from terrasol.errors import OutputError
from terrasol.files.delivery import Delivery, check_free, superseded_files


def listing(folder):
    return sorted(path.name for path in folder.iterdir())


def test_files_appear_at_commit_only(tmp_path):
    out = tmp_path / "a" / "b"
    with Delivery(out, ["one.bin", "two.json"]) as delivery:
        delivery.write_bytes("one.bin", b"1")
        delivery.write_json("two.json", {"ä": 1.5})
        assert not (out / "one.bin").exists()
        assert delivery.commit() == [out / "one.bin", out / "two.json"]
    assert listing(out) == ["one.bin", "two.json"]
    assert json.loads((out / "two.json").read_text("utf-8")) == {"ä": 1.5}


@pytest.mark.parametrize("end", [ValueError, KeyboardInterrupt, SystemExit])
def test_nothing_stays_after_a_failure(tmp_path, end):
    def fail():
        with Delivery(tmp_path / "a" / "b", ["one"]) as delivery:
            delivery.write_bytes("one", b"1")
            raise end

    with pytest.raises(end):
        fail()
    assert listing(tmp_path) == []


def test_folder_of_others_stays(tmp_path):
    (tmp_path / "theirs").write_text("keep")
    with Delivery(tmp_path, ["one"]) as delivery:
        delivery.write_bytes("one", b"1")
    assert listing(tmp_path) == ["theirs"]


def test_overwrite_replaces_and_drops_what_described_the_old_file(tmp_path):
    for name in ("one.tif", "one.tif.aux.xml", "one.tif.ovr", "other.tif.aux.xml"):
        (tmp_path / name).write_text("old")
    with Delivery(tmp_path, ["one.tif"], overwrite=True) as delivery:
        delivery.write_bytes("one.tif", b"new")
        delivery.commit()
    assert listing(tmp_path) == ["one.tif", "other.tif.aux.xml"]
    assert (tmp_path / "one.tif").read_bytes() == b"new"


def test_old_file_stays_whole_when_the_new_one_fails(tmp_path):
    (tmp_path / "one").write_text("old")
    with Delivery(tmp_path, ["one"], overwrite=True) as delivery:
        delivery.write_bytes("one", b"new")
    assert (tmp_path / "one").read_text() == "old"


def test_move_that_fails_puts_everything_back(tmp_path, monkeypatch):
    for name in ("gone.tif", "one", "one.ovr", "two"):
        (tmp_path / name).write_text(f"old {name}")
    before = {path.name: path.read_text() for path in tmp_path.iterdir()}
    replace = os.replace

    def fails_in_the_end(source, target):
        if target == tmp_path / "two" and source.read_bytes() == b"new":
            raise PermissionError(errno.EPERM, os.strerror(errno.EPERM))
        replace(source, target)

    monkeypatch.setattr(os, "replace", fails_in_the_end)

    def deliver():
        with Delivery(tmp_path, ["one", "two"], overwrite=True) as delivery:
            for name in delivery.names:
                delivery.write_bytes(name, b"new")
            delivery.commit(["gone.tif"])

    with pytest.raises(OutputError, match="two could not be written"):
        deliver()
    assert {path.name: path.read_text() for path in tmp_path.iterdir()} == before


def record_of(folder, files, **more):
    text = json.dumps({"versions": {"terrasol": "0"}, "files": files} | more)
    (folder / "run.json").write_text(text)


def test_superseded_files_are_those_that_the_record_lists(tmp_path):
    assert superseded_files(tmp_path, ["one.tif"]) == ([], [])
    for name in ("one.tif", "old.tif", "moved.tif", "mine.tif"):
        (tmp_path / name).touch()
    (tmp_path / "folder").mkdir()
    outside = tmp_path.parent / "outside.tif"
    listed = ["out/one.tif", "/elsewhere/old.tif", "moved.tif", "lost.tif", "folder", "..", ""]
    record_of(tmp_path, [*listed, str(outside), "run.json"])
    found = superseded_files(tmp_path, ["one.tif", "run.json"])
    assert found == (["moved.tif", "old.tif"], [])


@pytest.mark.parametrize(
    "text",
    ["", "{", "[]", "{}", "1", '{"files": ["old.tif"]}', '{"versions": {}, "files": ["old.tif"]}',
     '{"versions": {"terrasol": "0"}, "files": [1]}', '{"versions": {"terrasol": "0"}}'],
)  # fmt: skip
def test_record_of_something_else_supersedes_nothing(tmp_path, text):
    (tmp_path / "old.tif").touch()
    (tmp_path / "run.json").write_text(text)
    names, (warning,) = superseded_files(tmp_path, ["one.tif"])
    assert names == []
    assert "run.json was no readable record" in warning


def test_superseded_files_go_with_the_delivery_only(tmp_path):
    for name in ("old.tif", "old.tif.aux.xml"):
        (tmp_path / name).touch()
    with Delivery(tmp_path, ["one"], overwrite=True) as delivery:
        delivery.write_bytes("one", b"1")
    assert listing(tmp_path) == ["old.tif", "old.tif.aux.xml"]
    with Delivery(tmp_path, ["one"], overwrite=True) as delivery:
        delivery.write_bytes("one", b"1")
        delivery.commit(["old.tif"])
    assert listing(tmp_path) == ["one"]


def test_file_in_the_way(tmp_path):
    (tmp_path / "one").touch()
    (tmp_path / "two").touch()
    with pytest.raises(OutputError, match=r"one exists \(and 1 more\): pass --overwrite"):
        check_free(tmp_path, ["one", "two", "three"])
    check_free(tmp_path, ["one", "two"], overwrite=True)
    assert listing(tmp_path) == ["one", "two"]


def test_folder_in_the_way_is_not_replaced(tmp_path):
    (tmp_path / "one").mkdir()
    with pytest.raises(OutputError, match="in the way"):
        check_free(tmp_path, ["one"], overwrite=True)


def test_file_that_appears_meanwhile_is_not_replaced(tmp_path):
    with Delivery(tmp_path, ["one"]) as delivery:
        delivery.write_bytes("one", b"1")
        (tmp_path / "one").write_text("theirs")
        with pytest.raises(OutputError, match="exists"):
            delivery.commit()
    assert (tmp_path / "one").read_text() == "theirs"


@pytest.mark.parametrize("below", [False, True])
def test_folder_that_cannot_be(tmp_path, below):
    file = tmp_path / "file"
    file.touch()
    with pytest.raises(OutputError, match="file"), Delivery(file / "x" if below else file, ["one"]):
        pass
    assert listing(tmp_path) == ["file"]


def test_too_little_disk_is_seen_before_the_work(tmp_path, monkeypatch):
    usage = namedtuple("usage", "total used free")(10**9, 9 * 10**8, 10**8)
    monkeypatch.setattr(shutil, "disk_usage", lambda path: usage)
    with Delivery(tmp_path / "fits", [], need=10**8) as delivery:
        delivery.commit()
    with (
        pytest.raises(OutputError, match=r"may need 200 MB of disk and 100 MB are free"),
        Delivery(tmp_path / "not", [], need=2 * 10**8),
    ):
        pass
    assert listing(tmp_path) == ["fits"]


def test_full_disk_is_named(tmp_path, monkeypatch):
    def full(*_):
        raise OSError(errno.ENOSPC, os.strerror(errno.ENOSPC))

    with Delivery(tmp_path / "out", ["one"]) as delivery:
        monkeypatch.setattr("pathlib.Path.write_bytes", full)
        with pytest.raises(OutputError, match=r"out/one could not be written \(No space left"):
            delivery.write_bytes("one", b"1")
        usage = namedtuple("usage", "total used free")(10**9, 10**9, 0)
        monkeypatch.setattr(shutil, "disk_usage", lambda path: usage)
        with pytest.raises(OutputError, match="the disk is full"):
            delivery.write_bytes("one", b"1")
    assert listing(tmp_path) == []


def test_json_refuses_what_json_does_not_know(tmp_path):
    with Delivery(tmp_path, ["one"]) as delivery, pytest.raises(ValueError, match="JSON"):
        delivery.write_json("one", {"x": float("nan")})
