"""Hidden working folders of the living and the dead."""

import os
import signal
import subprocess
import sys
from pathlib import Path

import pytest

import terrasol
from terrasol.files.delivery import Delivery
from terrasol.files.hidden import OWNER, HiddenFolder, clear_dead

pytest.importorskip("fcntl")

KILLED = """
import os, signal, sys
from pathlib import Path
from terrasol.files.hidden import HiddenFolder
hidden = HiddenFolder(Path(sys.argv[1]))
(hidden.path / "working.tif").write_text("half")
os.kill(os.getpid(), signal.SIGKILL)
"""


@pytest.fixture
def dead(tmp_path):
    """The hidden folder of a run that was killed."""
    environment = os.environ | {"PYTHONPATH": str(Path(terrasol.__file__).parents[1])}
    run = subprocess.run([sys.executable, "-c", KILLED, str(tmp_path)], env=environment)
    assert run.returncode == -signal.SIGKILL
    (folder,) = tmp_path.iterdir()
    return folder


def test_the_dead_are_cleared_by_the_next_run(tmp_path, dead):
    assert (dead / "working.tif").exists()
    with Delivery(tmp_path, ["one"]) as delivery:
        assert not dead.exists()
        delivery.write_bytes("one", b"1")
        delivery.commit()
    assert os.listdir(tmp_path) == ["one"]


def test_the_living_are_left_alone(tmp_path):
    with Delivery(tmp_path, ["one"]) as first, Delivery(tmp_path, ["two"]) as second:
        first.write_bytes("one", b"1")
        second.write_bytes("two", b"2")
        first.commit()
        second.commit()
    assert sorted(os.listdir(tmp_path)) == ["one", "two"]


def test_what_is_not_certainly_dead_is_left_alone(tmp_path, dead):
    (dead / OWNER).write_text("another machine")
    (tmp_path / ".terrasol-notes").mkdir()
    (tmp_path / ".terrasol-file").touch()
    (tmp_path / ".terrasol-link").symlink_to(dead)
    clear_dead(tmp_path)
    assert len(os.listdir(tmp_path)) == 4


def test_removal_of_the_own_folder(tmp_path):
    hidden = HiddenFolder(tmp_path)
    (hidden.path / "working.tif").touch()
    hidden.remove()
    assert os.listdir(tmp_path) == []
